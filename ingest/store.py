"""One file into the records: its row of the ledger, its rows and its rejects, together."""

from __future__ import annotations

from dataclasses import asdict, dataclass, field

from sqlalchemy import Connection, Engine

from ingest.drops import Content, Drop
from ingest.feeds import REQUIRED, Feeds
from ingest.log_rows import EventBatch, LogBatch, store_events, store_log
from ingest.prepare import Prepared, Rulebook, prepare
from ingest.readings import Batch
from ingest.report import Counts, FileReport, Kind, Reason
from ingest.store_readings import Stored, store_readings
from spc.records import ledger
from spc.records.interned import Vocabulary

_REASON_KEPT = 2000


@dataclass(frozen=True)
class Fetched:
    """A drop that was read; `prepared` unless the ledger knew its content already."""

    drop: Drop
    content: Content
    prepared: Prepared | None


@dataclass
class Store:
    """Writes fetched files to the database, one transaction each."""

    engine: Engine
    clock_us: int
    feeds: Feeds
    rulebook: Rulebook
    vocabulary: Vocabulary = field(default_factory=Vocabulary)

    def prepare(self, drop: Drop, content: Content) -> Prepared:
        """Read the bytes of a drop by its feed."""
        return prepare(content, self.feeds.of(drop.path), self.rulebook)

    def deserves_a_try(self, entry: ledger.LedgerEntry | None) -> bool:
        """Whether a content is new, or was quarantined under other settings."""
        return entry is None or (
            entry.outcome == "quarantined" and entry.read_with != self.feeds.digest
        )

    def store(self, fetched: Fetched) -> FileReport | None:
        """Store one file; None when its content was seen under this very path before."""
        try:
            with self.engine.begin() as connection:
                ledger.begin_storing(connection)
                report = self._store(connection, fetched)
        except BaseException:
            self.vocabulary.forget()
            raise
        self.vocabulary.keep()
        return report

    def _store(self, connection: Connection, fetched: Fetched) -> FileReport | None:
        drop, content = fetched.drop, fetched.content
        entry = ledger.entry_of(connection, content.digest)
        sighting = ledger.Sighting(drop.path, drop.size, drop.modified_ns, content.digest)
        if entry is not None and not self.deserves_a_try(entry):
            before = ledger.sighting_of(connection, drop.path)
            ledger.record_sighting(connection, sighting, self.clock_us)
            if drop.path == entry.path or (before and before.content_hash == content.digest):
                return None
            reason = Reason(None, None, None, f"the same content as {entry.path}")
            return FileReport(drop.path, "duplicate", _kind(entry.kind), reasons=(reason,))
        ledger.record_sighting(connection, sighting, self.clock_us)
        known = ledger.parameter_units(connection)
        prepared = fetched.prepared
        if prepared is None or prepared.contradicts(known):
            self.rulebook.stored_units.update(known)
            prepared = self.prepare(drop, content)
        report = self._write(connection, drop, content, prepared, entry)
        new_units = {p: u for p, u in prepared.units.items() if p not in known}
        ledger.record_units(connection, new_units)
        self.rulebook.stored_units.update(new_units)
        if entry is not None and report.outcome == "quarantined":
            return None  # refused before, and refused again
        return report

    def _write(
        self,
        connection: Connection,
        drop: Drop,
        content: Content,
        prepared: Prepared,
        stale: ledger.LedgerEntry | None,
    ) -> FileReport:
        """Write the row of the ledger, the rows of the file and its rejects."""
        refused = prepared.refused
        values: dict[str, object] = {
            "content_hash": content.digest,
            "path": drop.path,
            "kind": None if refused else prepared.kind,
            "outcome": "quarantined" if refused else "loaded",
            "reason": str(refused)[:_REASON_KEPT] if refused else None,
            "feed": prepared.feed,
            "bytes": drop.size,
            "loaded_us": self.clock_us,
            "newest_us": prepared.newest_us,
            "read_with": self.feeds.digest,
        }
        file_id = ledger.open_entry(connection, values, stale)
        if refused is not None:
            return FileReport(
                drop.path, "quarantined", prepared.kind, prepared.feed, reasons=(refused,)
            )
        stored = store_batch(connection, file_id, prepared, self.vocabulary)
        counts = Counts(
            rows=prepared.rows,
            loaded=stored.loaded,
            duplicate=stored.duplicate,
            superseded=stored.superseded,
            rejected=prepared.rejected,
        )
        ledger.close_entry(connection, file_id, asdict(counts))
        reasons, warnings = prepared.reasons(), prepared.warned()
        for severity, kept in (("rejected", reasons), ("warned", warnings)):
            ledger.record_rejects(connection, file_id, severity, map(_row, kept))
        return FileReport(
            drop.path,
            "loaded",
            prepared.kind,
            prepared.feed,
            counts,
            tuple(reasons),
            tuple(warnings),
        )


def store_batch(
    connection: Connection, file_id: int, prepared: Prepared, vocabulary: Vocabulary
) -> Stored:
    """Store the good rows of a file; those in conflict with stored ones are marked as faulty."""
    batch = prepared.batch
    if isinstance(batch, Batch):
        return store_readings(connection, file_id, batch, vocabulary, prepared.faults)
    if isinstance(batch, LogBatch):
        return Stored(*store_log(connection, file_id, batch, vocabulary), 0)
    if isinstance(batch, EventBatch):
        return Stored(*store_events(connection, file_id, batch), 0)
    return Stored(0, 0, 0)


def _row(one: Reason) -> tuple[int, str | None, str | None, str, str | None]:
    return one.line or 0, one.column, one.value, one.reason, one.text


def _kind(text: str | None) -> Kind | None:
    return next((kind for kind in REQUIRED if kind == text), None)

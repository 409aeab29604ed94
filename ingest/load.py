"""One pass over the drop folder: drop file -> records, one transaction a file.

A file and its row in the ledger land together: after any crash a file is in whole or not at all,
and the next pass takes up what is missing. Files are never moved, changed or deleted; one that is
no drop is put in quarantine by its entry in the ledger, with the reason, and stays where it lies.
It is tried again when its content changes, or when the feeds of the configuration do.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import asdict, dataclass, field
from datetime import datetime

from sqlalchemy import Connection, Engine

from config.load import Bay
from ingest.drops import Content, Drop, NotSettledError, find_drops, read_drop, settled
from ingest.feeds import REQUIRED, Feeds, feeds_of
from ingest.log_rows import EventBatch, LogBatch, store_events, store_log
from ingest.prepare import Prepared, Rulebook, prepare
from ingest.readings import Batch
from ingest.report import Counts, FileReport, IngestReport, Kind, LateFeed, Reason
from ingest.store_readings import Stored, store_readings
from ingest.units import planned_units
from spc.records import ledger
from spc.records.interned import Vocabulary
from spc.records.sessions import reading
from spc.records.stamps import to_us

_REASON_KEPT = 2000

Progress = Callable[[int, int, str], None]


def take_in(
    engine: Engine,
    bay: Bay,
    clock: datetime,
    *,
    now: datetime | None = None,
    stop: Callable[[], bool] = lambda: False,
    progress: Progress | None = None,
) -> IngestReport:
    """Take in what has landed in the drop folder and is not in yet.

    Parameters
    ----------
    engine : the database, its schema up to date.
    bay : the configuration.
    clock : clock of the pass (aware), written to the ledger. Rows later than it are stored as well.
    now : time of day (aware) against which the age of files is held; `clock` without it. They
        differ where a pass looks back: a file still being written must wait all the same.
    stop : asked between files; the pass ends early, and whole, when it says True.
    progress : called with (files done, files to do, path) before each file.

    Raises
    ------
    ingest.drops.DropFolderError
        When the drop folder is missing or cannot be read.
    sqlalchemy.exc.DBAPIError
        When the database fails; the file in hand is not in, those before it are.
    """
    clock_us = to_us(clock)
    now_ns = to_us(now or clock) * 1000
    settings = bay.settings
    feeds = feeds_of(settings)
    found = find_drops(bay.path(settings.drops.folder))
    with reading(engine) as connection:
        seen = ledger.sightings_of(connection)
        stale = ledger.stale_hashes(connection, feeds.digest)
        units = ledger.parameter_units(connection)
    todo, waiting, unchanged = [], [], 0
    for drop in found:
        known = seen.get(drop.path)
        if (
            known is not None
            and (known.bytes, known.modified_ns) == (drop.size, drop.modified_ns)
            and known.content_hash not in stale
        ):
            unchanged += 1
        elif settled(drop, now_ns, settings.drops.settle_seconds):
            todo.append(drop)
        else:
            waiting.append(_waiting(drop, "was changed just now and may still be written"))
    rulebook = Rulebook(settings, planned_units(bay.plan), units)
    intake = _Pass(engine, clock_us, feeds, rulebook, stale)
    reports = []
    stopped = False
    for done, drop in enumerate(todo):
        if stop():
            stopped = True
            break
        if progress is not None:
            progress(done, len(todo), drop.path)
        report = intake.take(drop)
        if report is None:
            unchanged += 1
        else:
            reports.append(report)
    with reading(engine) as connection:
        late = _late_feeds(connection, bay, clock_us)
    return IngestReport(
        files=tuple(sorted([*reports, *waiting], key=lambda one: one.path)),
        late=late,
        stopped=stopped,
        unchanged=unchanged,
    )


@dataclass
class _Pass:
    """What one pass carries from file to file."""

    engine: Engine
    clock_us: int
    feeds: Feeds
    rulebook: Rulebook
    stale: set[str]
    vocabulary: Vocabulary = field(default_factory=Vocabulary)

    def take(self, drop: Drop) -> FileReport | None:
        """Take in one file; None when its content was seen under this very path before."""
        with ledger.claimed(self.engine, drop.path) as mine:
            if not mine:
                return _waiting(drop, "another worker has it in hand")
            try:
                content = read_drop(drop, self.rulebook.settings.drops.max_file_bytes)
            except NotSettledError as error:
                return _waiting(drop, str(error))
            with reading(self.engine) as connection:
                entry = ledger.entry_of(connection, content.digest)
            prepared = None
            if entry is None or content.digest in self.stale:
                prepared = self._prepare(drop, content)
            try:
                with self.engine.begin() as connection:
                    ledger.begin_storing(connection)
                    report = self._store(connection, drop, content, prepared)
            except BaseException:
                self.vocabulary.forget()
                raise
            self.vocabulary.keep()
            self.stale.discard(content.digest)
            return report

    def _prepare(self, drop: Drop, content: Content) -> Prepared:
        return prepare(content, self.feeds.of(drop.path), self.rulebook)

    def _store(
        self, connection: Connection, drop: Drop, content: Content, prepared: Prepared | None
    ) -> FileReport | None:
        sighting = ledger.Sighting(drop.path, drop.size, drop.modified_ns, content.digest)
        entry = ledger.entry_of(connection, content.digest)
        again = entry is not None and entry.outcome == "quarantined" and prepared is not None
        if entry is not None and not again:
            before = ledger.sighting_of(connection, drop.path)
            ledger.record_sighting(connection, sighting, self.clock_us)
            if drop.path == entry.path or (before and before.content_hash == content.digest):
                return None
            reason = Reason(None, None, None, f"the same content as {entry.path}")
            return FileReport(drop.path, "duplicate", _kind(entry.kind), reasons=(reason,))
        assert prepared is not None  # a content without an entry was prepared
        known = ledger.parameter_units(connection)
        if prepared.contradicts(known):
            self.rulebook.stored_units.update(known)
            prepared = self._prepare(drop, content)
        report = self._write(connection, drop, content, prepared, entry)
        new_units = {p: u for p, u in prepared.units.items() if p not in known}
        ledger.record_units(connection, new_units)
        self.rulebook.stored_units.update(new_units)
        ledger.record_sighting(connection, sighting, self.clock_us)
        if again and report.outcome == "quarantined":
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


def _waiting(drop: Drop, why: str) -> FileReport:
    return FileReport(drop.path, "waiting", reasons=(Reason(None, None, None, why),))


def _late_feeds(connection: Connection, bay: Bay, clock_us: int) -> tuple[LateFeed, ...]:
    """Feeds whose last file is longer ago than they should be silent."""
    newest = ledger.newest_by_feed(connection)
    late = []
    for feed in bay.settings.feed:
        if feed.expected_every is None:
            continue
        seconds = feed.expected_every.total_seconds()
        last = newest.get(feed.name)
        if last is None or clock_us - last > seconds * 1e6:
            late.append(LateFeed(feed.name, last, seconds))
    return tuple(late)

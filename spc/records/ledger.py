"""The ledger of drops: which contents are in, under which names, and their rejects."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any

from sqlalchemy import Connection, Engine, case, delete, func, insert, select, text, update

from spc.records.bulk import insert_rows, upsert
from spc.records.tables import files, parameters, rejects, sightings

# Keys of PostgreSQL advisory locks: one for storing (one writer at a time, so that what a writer
# finds stored stays true until it commits), one family for claiming a file by its path.
_STORE_LOCK = 0x79656C6C6F77
_CLAIM_LOCK = 0x62617931


@dataclass(frozen=True)
class Sighting:
    """A content seen at a path."""

    path: str
    bytes: int
    modified_ns: int
    content_hash: str


@dataclass(frozen=True)
class LedgerEntry:
    """A content in the ledger. `read_with` is the digest of the settings it was read with."""

    id: int
    content_hash: str
    path: str
    kind: str | None
    outcome: str
    reason: str | None
    read_with: str


def sightings_of(connection: Connection) -> dict[str, Sighting]:
    """All sightings, by path."""
    table = sightings.c
    query = select(table.path, table.bytes, table.modified_ns, table.content_hash)
    return {row[0]: Sighting(*row) for row in connection.execute(query)}


def sighting_of(connection: Connection, path: str) -> Sighting | None:
    """What was seen at a path, None where nothing was."""
    table = sightings.c
    query = select(table.path, table.bytes, table.modified_ns, table.content_hash)
    row = connection.execute(query.where(table.path == path)).first()
    return None if row is None else Sighting(*row)


def stale_hashes(connection: Connection, read_with: str) -> set[str]:
    """Contents that were quarantined under other settings and deserve another try."""
    query = select(files.c.content_hash).where(
        files.c.outcome == "quarantined", files.c.read_with != read_with
    )
    return set(connection.scalars(query))


def entry_of(connection: Connection, content_hash: str) -> LedgerEntry | None:
    """The ledger's entry of a content, None for a new one."""
    table = files.c
    query = select(
        table.id,
        table.content_hash,
        table.path,
        table.kind,
        table.outcome,
        table.reason,
        table.read_with,
    ).where(table.content_hash == content_hash)
    row = connection.execute(query).first()
    return None if row is None else LedgerEntry(*row)


def open_entry(connection: Connection, values: dict[str, Any], stale: LedgerEntry | None) -> int:
    """Write a row of the ledger and return its id. A stale quarantined one is replaced."""
    if stale is not None:
        connection.execute(delete(rejects).where(rejects.c.file_id == stale.id))
        connection.execute(update(files).where(files.c.id == stale.id).values(**values))
        return stale.id
    return int(connection.execute(insert(files).returning(files.c.id), values).scalar_one())


def close_entry(connection: Connection, file_id: int, values: dict[str, Any]) -> None:
    """Complete a row of the ledger with the counts of its rows."""
    connection.execute(update(files).where(files.c.id == file_id).values(**values))


def record_sighting(connection: Connection, sighting: Sighting, seen_us: int) -> None:
    """Remember that a content was seen at a path, so that it need not be read again.

    `seen_us` stays the clock at which this content was first seen there.
    """
    new = upsert(connection, sightings).values(
        path=sighting.path,
        bytes=sighting.bytes,
        modified_ns=sighting.modified_ns,
        content_hash=sighting.content_hash,
        seen_us=seen_us,
    )
    given = new.excluded
    same = sightings.c.content_hash == given.content_hash
    changed = {
        "bytes": given.bytes,
        "modified_ns": given.modified_ns,
        "content_hash": given.content_hash,
        "seen_us": case((same, sightings.c.seen_us), else_=given.seen_us),
    }
    connection.execute(new.on_conflict_do_update(index_elements=["path"], set_=changed))


def record_rejects(
    connection: Connection, file_id: int, severity: str, rows: Iterable[Sequence[Any]]
) -> None:
    """Keep rejected (or `warned`) rows: (line, column, value, reason, text) each."""
    insert_rows(
        connection,
        rejects,
        ("file_id", "severity", "line", "column", "value", "reason", "text"),
        [(file_id, severity, *row) for row in rows],
    )


def parameter_units(connection: Connection) -> dict[str, str]:
    """The unit that each parameter is kept in."""
    query = select(parameters.c.parameter, parameters.c.unit)
    return {row[0]: row[1] for row in connection.execute(query)}


def record_units(connection: Connection, units: dict[str, str]) -> None:
    """Fix the units of parameters that are new."""
    if units:
        rows = [{"parameter": p, "unit": u} for p, u in units.items()]
        connection.execute(insert(parameters), rows)


def newest_by_feed(connection: Connection) -> dict[str, int]:
    """Clock of the pass that last loaded a file of each feed."""
    query = (
        select(files.c.feed, func.max(files.c.loaded_us))
        .where(files.c.feed.is_not(None), files.c.outcome == "loaded")
        .group_by(files.c.feed)
    )
    return {feed: int(at) for feed, at in connection.execute(query)}


def begin_storing(connection: Connection) -> None:
    """Wait until no other writer stores a file; until the end of the transaction.

    SQLite has one writer anyway (the transaction began as a writing one).
    """
    if connection.dialect.name == "postgresql":
        connection.execute(text("SELECT pg_advisory_xact_lock(:key)"), {"key": _STORE_LOCK})


@contextmanager
def claimed(engine: Engine, path: str) -> Iterator[bool]:
    """Claim a file among several workers; False when another one has it in hand.

    On SQLite there is nothing to claim: storing is serial, and the ledger is asked again then.
    """
    if engine.dialect.name != "postgresql":
        yield True
        return
    keys = {"family": _CLAIM_LOCK, "key": path}
    with engine.connect() as connection:
        query = text("SELECT pg_try_advisory_xact_lock(:family, hashtext(:key))")
        got = bool(connection.execute(query, keys).scalar())
        yield got
        connection.rollback()

"""The archive of drops in the records: what may go there, and where each drop lies."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from sqlalchemy import Connection, delete, func, insert, or_, select

from spc.records.ledger import Sighting
from spc.records.retention_tables import archived
from spc.records.tables import files, sightings


@dataclass(frozen=True)
class ArchivedDrop:
    """One drop in the archive; both paths are relative, with forward slashes."""

    path: str
    content_hash: str
    archive_path: str
    bytes: int
    archived_us: int


def taken_in_before(connection: Connection, before_us: int) -> dict[str, tuple[Sighting, int]]:
    """Drops whose content was loaded, and seen at their path, up to a clock.

    By path, with the later of both clocks. What was quarantined or waits is not among them.
    """
    s, f = sightings.c, files.c
    query = (
        select(s.path, s.bytes, s.modified_ns, s.content_hash, s.seen_us, f.loaded_us)
        .join(files, f.content_hash == s.content_hash)
        .where(f.outcome == "loaded", s.seen_us <= before_us, f.loaded_us <= before_us)
    )
    return {
        row.path: (
            Sighting(row.path, row.bytes, row.modified_ns, row.content_hash),
            max(row.seen_us, row.loaded_us),
        )
        for row in connection.execute(query)
    }


def record(connection: Connection, drop: ArchivedDrop) -> None:
    """Write down where a drop lies; saying it again changes nothing."""
    same = (archived.c.path == drop.path) & (archived.c.content_hash == drop.content_hash)
    connection.execute(delete(archived).where(same))
    connection.execute(insert(archived), dict(drop.__dict__))


def count(connection: Connection) -> tuple[int, int]:
    """Drops in the archive, and their bytes."""
    row = connection.execute(select(func.count(), func.sum(archived.c.bytes))).one()
    return int(row[0]), int(row[1] or 0)


def find(connection: Connection, text: str, most: int = 50) -> Sequence[ArchivedDrop]:
    """Drops in the archive whose path holds a text or whose content hash begins with it."""
    a = archived.c
    query = (
        select(a.path, a.content_hash, a.archive_path, a.bytes, a.archived_us)
        .where(
            or_(
                a.path.contains(text, autoescape=True),
                a.content_hash.startswith(text.lower(), autoescape=True),
            )
        )
        .order_by(a.archived_us.desc(), a.path)
        .limit(most)
    )
    return [ArchivedDrop(*row) for row in connection.execute(query)]

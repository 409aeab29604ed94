"""The record of passes, and the pace at which streams are measured."""

from __future__ import annotations

from collections.abc import Sequence

from sqlalchemy import Connection, func, select

from spc.records.contexts import chunks
from spc.records.tables import files, passes, points


def last_before(connection: Connection, as_of_us: int) -> int | None:
    """Clock of the last finished pass before a stamp, None when there was none."""
    newest = select(func.max(passes.c.as_of_us)).where(
        passes.c.finished == 1, passes.c.as_of_us < as_of_us
    )
    return connection.scalar(newest)


def mean_gaps(connection: Connection, stream_ids: Sequence[int]) -> dict[int, float]:
    """Mean time between the lots of streams, in us; streams of fewer than 5 lots are left out."""
    found: dict[int, float] = {}
    at = points.c.measured_us
    for part in chunks(sorted(set(stream_ids))):
        query = (
            select(
                points.c.stream_id,
                func.count(func.distinct(points.c.lot)),
                func.min(at),
                func.max(at),
            )
            .where(points.c.stream_id.in_(part))
            .group_by(points.c.stream_id)
        )
        for stream, lots, first, last in connection.execute(query):
            if lots >= 5:
                found[int(stream)] = (last - first) / (lots - 1)
    return found


def newest(connection: Connection) -> int | None:
    """Clock of the newest finished pass, None when there was none."""
    return connection.scalar(select(func.max(passes.c.as_of_us)).where(passes.c.finished == 1))


def files_since(connection: Connection, since_us: int) -> bool:
    """Whether a file was loaded by a pass of a later clock."""
    found = select(files.c.id).where(files.c.outcome == "loaded", files.c.loaded_us > since_us)
    return connection.scalar(found.limit(1)) is not None

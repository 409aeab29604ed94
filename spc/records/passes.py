"""The record of passes, and the pace at which streams are measured.

A pass is begun before it does anything and finished together with its report and mail. One that
was begun and not finished died on the way; the next pass sees it here and makes good for it.
"""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from sqlalchemy import Connection, func, select, update

from spc.records.contexts import chunks
from spc.records.tables import files, passes, points, sightings


@dataclass(frozen=True)
class LeftOver:
    """A pass that died: its clock, and what it had found (empty before its triage was done)."""

    as_of_us: int
    account: dict[str, Any]


def left_over(connection: Connection) -> list[LeftOver]:
    """Passes that were begun and not finished, oldest clock first."""
    rows = connection.execute(
        select(passes.c.as_of_us, passes.c.result)
        .where(passes.c.finished == 0)
        .order_by(passes.c.as_of_us)
    )
    return [LeftOver(row.as_of_us, json.loads(row.result)) for row in rows]


def begin(connection: Connection, as_of_us: int) -> None:
    """Record that the pass of a clock has begun; an account of it from before is kept."""
    mine = passes.c.as_of_us == as_of_us
    if not connection.execute(update(passes).where(mine).values(finished=0)).rowcount:
        connection.execute(passes.insert().values(as_of_us=as_of_us, finished=0, result="{}"))


def account_of(connection: Connection, as_of_us: int) -> dict[str, Any]:
    """What was found so far by the pass, or passes, of a clock."""
    found = connection.scalar(select(passes.c.result).where(passes.c.as_of_us == as_of_us))
    return dict(json.loads(found)) if found else {}


def keep(
    connection: Connection, as_of_us: int, account: dict[str, Any], *, finished: bool = False
) -> None:
    """Keep what was found by the pass of a clock, in the transaction that found it."""
    connection.execute(
        update(passes)
        .where(passes.c.as_of_us == as_of_us)
        .values(
            finished=int(finished),
            result=json.dumps(account, ensure_ascii=False, sort_keys=True),
            report=account.get("report"),
        )
    )


def take_over(connection: Connection, dead_us: int, as_of_us: int) -> None:
    """Make what a pass took in before it died the intake of another one, and forget that pass."""
    for table, stamp in ((files, files.c.loaded_us), (sightings, sightings.c.seen_us)):
        moved = update(table).where(stamp == dead_us).values({stamp.name: as_of_us})
        connection.execute(moved)
    connection.execute(passes.delete().where(passes.c.as_of_us == dead_us, passes.c.finished == 0))


def intake_of(connection: Connection, as_of_us: int) -> dict[str, dict[str, int]]:
    """Files and readings taken in under a clock, by one pass or by several.

    The contract's `drops` and `readings`, without the files that wait.
    """
    mine = files.c.loaded_us == as_of_us
    asked = select(files.c.outcome, func.count()).where(mine).group_by(files.c.outcome)
    outcomes = {row[0]: int(row[1]) for row in connection.execute(asked)}
    again = select(func.count()).where(
        sightings.c.seen_us == as_of_us,
        sightings.c.content_hash == files.c.content_hash,
        sightings.c.path != files.c.path,
    )
    drops = {
        "loaded": outcomes.get("loaded", 0),
        "duplicate": int(connection.scalar(again) or 0),
        "quarantined": outcomes.get("quarantined", 0),
    }
    names = ("loaded", "duplicate", "superseded", "rejected")
    sums = [func.coalesce(func.sum(files.c[name]), 0) for name in names]
    row = connection.execute(
        select(*sums).where(mine, files.c.outcome == "loaded", files.c.kind == "readings")
    ).one()
    return {"drops": drops, "readings": dict(zip(names, map(int, row), strict=True))}


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

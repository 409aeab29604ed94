"""Sets of control limits in the database. None is overwritten: a set is withdrawn, not changed."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Any

from sqlalchemy import Connection, Row, Select, func, select, update

from spc.records.contexts import chunks
from spc.records.stamps import to_us
from spc.records.tables import baselines, streams


@dataclass(frozen=True)
class NewSet:
    """A set of limits to be kept."""

    stream_id: int
    status: str
    from_us: int
    first_us: int
    last_us: int
    n_points: int
    payload: str
    made_us: int
    made_by: str
    reason: str


def of_streams(
    connection: Connection, stream_ids: Iterable[int], statuses: Sequence[str] | None = None
) -> list[Row[Any]]:
    """Sets of some streams, by stream and age."""
    rows: list[Row[Any]] = []
    for part in chunks(sorted(set(stream_ids))):
        query = select(baselines).where(baselines.c.stream_id.in_(part))
        if statuses is not None:
            query = query.where(baselines.c.status.in_(list(statuses)))
        rows += connection.execute(query.order_by(baselines.c.stream_id, baselines.c.id)).all()
    return rows


def of_characteristic(
    connection: Connection, characteristic: str, statuses: Sequence[str]
) -> list[Row[Any]]:
    """Sets of the streams of a characteristic, by stream and age."""
    query = (
        select(baselines)
        .join(streams, streams.c.id == baselines.c.stream_id)
        .where(streams.c.characteristic == characteristic, baselines.c.status.in_(list(statuses)))
        .order_by(baselines.c.stream_id, baselines.c.id)
    )
    return [*connection.execute(query).all()]


def one(connection: Connection, number: int) -> Row[Any] | None:
    """One set, or None."""
    return connection.execute(select(baselines).where(baselines.c.id == number)).one_or_none()


def add(connection: Connection, new: NewSet) -> int:
    """Keep a new set; returns its id."""
    result = connection.execute(baselines.insert().values(**new.__dict__))
    assert result.inserted_primary_key is not None  # an insert of one row has its key
    return int(result.inserted_primary_key[0])


def decide(
    connection: Connection, number: int, status: str, at: datetime, who: str, reason: str
) -> None:
    """Approve or withdraw a set."""
    connection.execute(
        update(baselines)
        .where(baselines.c.id == number)
        .values(status=status, decided_us=to_us(at), decided_by=who, decided_reason=reason)
    )


def set_from(connection: Connection, number: int, from_us: int) -> None:
    """Set the first stamp that a proposed set will hold from."""
    connection.execute(update(baselines).where(baselines.c.id == number).values(from_us=from_us))


def decided_by_hand(connection: Connection, engine: str) -> list[Row[Any]]:
    """Approved and withdrawn sets that `engine` did not make: id, stream, status, from, name."""
    query: Select[Any] = (
        select(
            baselines.c.id,
            baselines.c.stream_id,
            baselines.c.status,
            baselines.c.from_us,
            streams.c.characteristic,
        )
        .join(streams, streams.c.id == baselines.c.stream_id)
        .where(baselines.c.made_by != engine, baselines.c.status.in_(["approved", "withdrawn"]))
        .order_by(baselines.c.id)
    )
    return list(connection.execute(query).all())


def by_ids(connection: Connection, ids: Iterable[int]) -> list[Row[Any]]:
    """Some sets by their ids."""
    rows: list[Row[Any]] = []
    for part in chunks(sorted(set(ids))):
        rows += connection.execute(select(baselines).where(baselines.c.id.in_(part))).all()
    return rows


def spans(connection: Connection, stream_ids: Iterable[int], status: str) -> dict[int, int]:
    """Last stamp of the baseline of each stream that has a set of that status."""
    found: dict[int, int] = {}
    for part in chunks(sorted(set(stream_ids))):
        query = select(baselines.c.stream_id, func.max(baselines.c.last_us)).where(
            baselines.c.stream_id.in_(part), baselines.c.status == status
        )
        rows = connection.execute(query.group_by(baselines.c.stream_id))
        found |= {int(stream): int(us) for stream, us in rows}
    return found


def stream_of(connection: Connection, stream_id: int) -> tuple[str, str]:
    """Characteristic and context (JSON) of a stream."""
    row = connection.execute(
        select(streams.c.characteristic, streams.c.context).where(streams.c.id == stream_id)
    ).one()
    return row.characteristic, row.context

"""How far each characteristic was evaluated, and with what plan."""

from __future__ import annotations

from collections.abc import Sequence

from sqlalchemy import Connection, func, select, update

from spc.records.contexts import chunks
from spc.records.measurements import Marker
from spc.records.tables import evaluations, points, streams


def all_kept(connection: Connection) -> dict[str, tuple[str, Marker]]:
    """Plan digest and marker of every characteristic ever evaluated."""
    return {
        row.characteristic: (
            row.plan_digest,
            Marker(row.as_of_us, row.last_measurement_id, row.last_log_id),
        )
        for row in connection.execute(select(evaluations))
    }


def keep(connection: Connection, name: str, digest: str, marker: Marker) -> None:
    """Remember how far a characteristic was evaluated."""
    values = _values(marker) | {"plan_digest": digest}
    changed = connection.execute(
        update(evaluations).where(evaluations.c.characteristic == name).values(**values)
    )
    if not changed.rowcount:
        connection.execute(evaluations.insert().values(characteristic=name, **values))


def move_on(connection: Connection, names: Sequence[str], marker: Marker) -> None:
    """Remember the same marker for characteristics for which nothing was new."""
    for part in chunks(list(names)):
        connection.execute(
            update(evaluations)
            .where(evaluations.c.characteristic.in_(part))
            .values(**_values(marker))
        )


def _values(marker: Marker) -> dict[str, int]:
    return {
        "as_of_us": marker.as_of_us,
        "last_measurement_id": marker.last_measurement_id,
        "last_log_id": marker.last_log_id,
    }


def stream_count(connection: Connection, characteristics: Sequence[str]) -> int:
    """Streams of these characteristics that have points."""
    total = 0
    for part in chunks(list(characteristics)):
        query = select(func.count(streams.c.id)).where(
            streams.c.characteristic.in_(part),
            select(points.c.stream_id).where(points.c.stream_id == streams.c.id).exists(),
        )
        total += int(connection.scalar(query) or 0)
    return total

"""What the monthly review asks of the records: wafers of a span, signals, states of excursions."""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import replace
from datetime import datetime
from typing import Any

from sqlalchemy import Connection, Row, and_, case, func, or_, select

from spc.records import findings
from spc.records.columns import Columns, of_rows
from spc.records.contexts import chunks
from spc.records.findings import Excursion
from spc.records.measurements import Marker, newest_ids
from spc.records.stamps import to_us
from spc.records.tables import (
    actions,
    evaluations,
    excursion_history,
    measurements,
    points,
    process_log,
    streams,
    wafer_results,
)

_WAFERS = {
    "stream": "i",
    "lot": "o",
    "layer": "o",
    "wafer": "o",
    "at_us": "i",
    "measured_us": "i",
    "n_sites": "i",
    "mean": "f",
}


def streams_of(connection: Connection, characteristic: str, as_of_us: int) -> dict[str, int]:
    """Id of each stream by its context (JSON) that had a wafer by then."""
    seen = (
        select(wafer_results.c.stream_id)
        .where(wafer_results.c.stream_id == streams.c.id, wafer_results.c.measured_us <= as_of_us)
        .exists()
    )
    query = select(streams.c.context, streams.c.id).where(
        streams.c.characteristic == characteristic, seen
    )
    return {row.context: row.id for row in connection.execute(query)}


def up_to_date(connection: Connection, characteristic: str, as_of_us: int) -> bool:
    """Whether the wafer results are what an evaluation at that clock would leave.

    So it is when the last evaluation saw every row there is and no later clock.
    """
    query = select(evaluations).where(evaluations.c.characteristic == characteristic)
    kept = connection.execute(query).one_or_none()
    if kept is None or kept.as_of_us > as_of_us:
        return False
    measurement, log = newest_ids(connection)
    seen = Marker(kept.as_of_us, kept.last_measurement_id, kept.last_log_id)
    if seen == Marker(as_of_us, measurement, log):
        return True
    return not _passed(connection, seen, as_of_us)


def _passed(connection: Connection, seen: Marker, as_of_us: int) -> bool:
    """Whether there are rows up to the clock that the evaluation did not see."""
    for table, stamp, last in (
        (measurements, measurements.c.measured_us, seen.last_measurement_id),
        (process_log, process_log.c.processed_us, seen.last_log_id),
    ):
        for unseen in (table.c.id > last, stamp > seen.as_of_us):
            query = select(table.c.id).where(unseen, stamp <= as_of_us).limit(1)
            if connection.execute(query).first() is not None:
                return True
    return False


def wafers_between(
    connection: Connection, ids: Sequence[int], span: tuple[int, int], as_of_us: int
) -> Columns:
    """Wafer results of streams with `at_us` in [span), measured by the clock."""
    t = wafer_results.c
    names = ("stream_id", *list(_WAFERS)[1:])
    rows: list[Any] = []
    for part in chunks(sorted(ids)):
        query = select(*(t[name] for name in names)).where(
            t.stream_id.in_(part),
            t.at_us >= span[0],
            t.at_us < span[1],
            t.measured_us <= as_of_us,
        )
        rows += connection.execute(query).all()
    return of_rows(rows, _WAFERS)


def lots_between(
    connection: Connection, parameters: Sequence[str], span: tuple[int, int], as_of_us: int
) -> list[str]:
    """Lots that may have a wafer of some parameters in [span): measured or processed in it."""
    m, log = measurements.c, process_log.c
    readings = select(m.lot).where(
        m.parameter.in_(list(parameters)),
        m.measured_us <= as_of_us,
        or_(
            and_(m.measured_us >= span[0], m.measured_us < span[1]),
            and_(m.processed_us >= span[0], m.processed_us < span[1]),
        ),
    )
    logged = select(log.lot).where(
        log.processed_us >= span[0], log.processed_us < min(span[1], as_of_us + 1)
    )
    found = set(connection.scalars(readings.distinct()))
    return sorted(found | set(connection.scalars(logged.distinct())))


# ---- points ------------------------------------------------------------------------------------


def point_counts(
    connection: Connection, starts_us: Sequence[int], as_of_us: int
) -> list[tuple[int, str, int, int, int]]:
    """Monitored points with limits: stream_id, statistic, baseline_id, month, count.

    `starts_us` are the first stamps of the months, and the end of the last one.
    """
    p = points.c
    month = _month(p.at_us, starts_us).label("month")
    query = (
        select(p.stream_id, p.statistic, p.baseline_id, month, func.count())
        .where(*_judged(starts_us, as_of_us))
        .group_by(p.stream_id, p.statistic, p.baseline_id, month)
    )
    return [tuple(row) for row in connection.execute(query)]  # type: ignore[misc]


def signals(
    connection: Connection, starts_us: Sequence[int], as_of_us: int
) -> list[tuple[int, str, int, str, str, int]]:
    """Monitored points that complete a rule: stream_id, statistic, month, lot, layer, place.

    `place` counts the points of the stream and statistic in the span in the order of time, so that
    neighbours have consecutive places.
    """
    p = points.c
    place = func.row_number().over(
        partition_by=(p.stream_id, p.statistic), order_by=(p.at_us, p.lot, p.layer, p.wafer)
    )
    inner = (
        select(
            p.stream_id,
            p.statistic,
            _month(p.at_us, starts_us).label("month"),
            p.lot,
            p.layer,
            place.label("place"),
            p.rules,
        )
        .where(*_judged(starts_us, as_of_us))
        .subquery()
    )
    query = (
        select(*[column for column in inner.c if column.name != "rules"])
        .where(inner.c.rules != "")
        .order_by(inner.c.stream_id, inner.c.statistic, inner.c.place)
    )
    return [tuple(row) for row in connection.execute(query)]  # type: ignore[misc]


def _judged(starts_us: Sequence[int], as_of_us: int) -> tuple[Any, ...]:
    p = points.c
    return (
        p.phase == "monitoring",
        p.z.is_not(None),
        p.at_us >= starts_us[0],
        p.at_us < starts_us[-1],
        p.measured_us <= as_of_us,
    )


def _month(at_us: Any, starts_us: Sequence[int]) -> Any:
    """Number of the month of a stamp, from 0."""
    whens = [(at_us < end, i) for i, end in enumerate(starts_us[1:])]
    return case(*whens, else_=len(starts_us) - 1)


# ---- excursions --------------------------------------------------------------------------------


def excursions_until(connection: Connection, as_of: datetime) -> list[Excursion]:
    """Excursions opened by then, each as the last pass up to then left it; oldest first.

    Status and merging are those of now: what people do is kept apart, with its own stamps.
    """
    clock = to_us(as_of)
    found = findings.listed(connection, until=as_of)
    later = [one.id for one in found if one.updated_us > clock]
    states: dict[int, Row[Any]] = {}
    h = excursion_history.c
    for part in chunks(later):
        query = (
            select(excursion_history)
            .where(h.excursion_id.in_(part), h.as_of_us <= clock)
            .order_by(h.as_of_us)
        )
        states |= {row.excursion_id: row for row in connection.execute(query)}
    return sorted((_as_was(one, states.get(one.id)) for one in found), key=lambda one: one.id)


def _as_was(one: Excursion, state: Row[Any] | None) -> Excursion:
    if state is None:
        return one
    return replace(
        one,
        tier=state.tier,
        pattern=state.pattern,
        updated_us=state.as_of_us,
        payload=json.loads(state.payload),
    )


def closings(connection: Connection, as_of_us: int) -> dict[int, tuple[int, str, str]]:
    """Last closing of each excursion up to a clock: stamp, outcome, cause ("" for none)."""
    query = (
        select(actions.c.subject, actions.c.at_us, actions.c.detail)
        .where(
            actions.c.action == "close",
            actions.c.subject.like("excursion:%"),
            actions.c.at_us <= as_of_us,
        )
        .order_by(actions.c.at_us, actions.c.id)
    )
    out = {}
    for subject, at_us, text in connection.execute(query):
        detail = json.loads(text)
        number = int(subject.removeprefix("excursion:"))
        out[number] = (at_us, str(detail.get("outcome", "")), str(detail.get("cause", "")))
    return out

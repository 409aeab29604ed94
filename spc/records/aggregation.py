"""Taking site values away month by month, and what is kept of them.

A measurement keeps n, mean and sum of squares; `kept_wafers` and `kept_distances` keep what the
evaluation had made of the sites, `kept_studies` the capability of each month. All of it is written
in the transaction that takes the values away.
"""

from __future__ import annotations

import json
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from sqlalchemy import Connection, and_, delete, func, insert, or_, select, tuple_, update

from spc.records.columns import Columns, of_rows
from spc.records.contexts import chunks
from spc.records.retention_tables import (
    aggregated_months,
    kept_distances,
    kept_studies,
    kept_wafers,
)
from spc.records.tables import measurements, points, streams, wafer_results

LotKey = tuple[str, str]  # lot, layer
_m = measurements.c
_KEPT = {
    "lot": "o",
    "layer": "o",
    "wafer": "o",
    "measured_us": "i",
    "baseline_id": "f",
    "unit": "o",
    "n_sites": "i",
    "mean": "f",
    "sum_squares": "f",
    "df": "f",
    "out_of_spec_sites": "i",
    "names": "o",
    "statistics": "o",
}


@dataclass(frozen=True)
class Month:
    """A month of the table `aggregated_months`; `done_us` is None while it is being worked on."""

    month: str
    begins_us: int
    ends_us: int
    started_us: int
    done_us: int | None = None
    last_measurement_id: int = 0
    measurements: int = 0
    site_values: int = 0


def months(connection: Connection) -> list[Month]:
    """Months whose site values were taken away, or are being taken away, oldest first."""
    t = aggregated_months.c
    query = select(*(t[name] for name in Month.__dataclass_fields__)).order_by(t.begins_us)
    return [Month(*row) for row in connection.execute(query)]


def begin(connection: Connection, month: Month) -> None:
    """Write down that a month is being worked on."""
    connection.execute(insert(aggregated_months), dict(month.__dict__))


def add_up(connection: Connection, month: str, taken: tuple[int, int]) -> None:
    """Count measurements and site values that were taken away for a month."""
    t = aggregated_months.c
    connection.execute(
        update(aggregated_months)
        .where(t.month == month)
        .values(measurements=t.measurements + taken[0], site_values=t.site_values + taken[1])
    )


def finish(connection: Connection, month: str, done_us: int, last_measurement_id: int) -> None:
    """Write down that nothing of a month is left to take away."""
    connection.execute(
        update(aggregated_months)
        .where(aggregated_months.c.month == month)
        .values(done_us=done_us, last_measurement_id=last_measurement_id)
    )


def oldest_stamp(connection: Connection, since_us: int | None) -> int | None:
    """Stamp (us) of the oldest measurement with site values from a stamp on, None for none."""
    query = select(_m.measured_us).where(_m.site_values.is_not(None))
    if since_us is not None:
        query = query.where(_m.measured_us >= since_us)
    found = connection.scalar(query.order_by(_m.measured_us).limit(1))
    return None if found is None else int(found)


def lots_to_do(connection: Connection, ends_us: int, done: Month | None, most: int) -> list[LotKey]:
    """Lots and layers that have site values, the newest of them older than a stamp.

    Parameters
    ----------
    done : the last month that was finished; what is older than its end was looked at already, but
        for what came in since.
    most : so many at the most.
    """
    new = _m.measured_us < ends_us
    if done is not None:
        late = and_(_m.id > done.last_measurement_id, _m.measured_us < done.ends_us)
        new = or_(and_(_m.measured_us >= done.ends_us, new), late)
    query = (
        select(_m.lot, _m.layer)
        .where(new, _m.site_values.is_not(None))
        .group_by(_m.lot, _m.layer)
        .order_by(func.min(_m.measured_us), _m.lot, _m.layer)
    )
    found: list[LotKey] = []
    keys = [(row.lot, row.layer) for row in connection.execute(query)]
    for start in range(0, len(keys), most):
        part = keys[start : start + most]
        newest = (
            select(_m.lot, _m.layer, func.max(_m.measured_us).label("newest"))
            .where(_of(part), _m.site_values.is_not(None))
            .group_by(_m.lot, _m.layer)
        )
        old = {(r.lot, r.layer) for r in connection.execute(newest) if r.newest < ends_us}
        found += [key for key in part if key in old]
        if len(found) >= most:
            break
    return found[:most]


def _of(lots: Sequence[LotKey]) -> Any:
    # By lot first, which has an index; the pair then.
    return and_(
        _m.lot.in_(sorted({lot for lot, _ in lots})),
        tuple_(_m.lot, _m.layer).in_(list(lots)),
    )


def take_away(connection: Connection, lots: Sequence[LotKey]) -> tuple[int, int]:
    """Take the site values of lots away; returns the measurements and the site values taken."""
    sited = and_(_of(lots), _m.site_values.is_not(None))
    row = connection.execute(select(func.count(), func.sum(_m.n)).where(sited)).one()
    connection.execute(update(measurements).where(sited).values(site_values=None))
    return int(row[0]), int(row[1] or 0)


def stamps_of(connection: Connection, lots: Sequence[LotKey]) -> dict[tuple[str, str, str], int]:
    """Stamp of the newest measurement with site values of each (lot, layer, wafer)."""
    query = (
        select(_m.lot, _m.layer, _m.wafer, func.max(_m.measured_us).label("at"))
        .where(_of(lots), _m.site_values.is_not(None))
        .group_by(_m.lot, _m.layer, _m.wafer)
    )
    return {(r.lot, r.layer, r.wafer): int(r.at) for r in connection.execute(query)}


def newest_measurement(connection: Connection) -> int:
    """Largest id of a measurement, 0 for none."""
    return int(connection.scalar(select(func.max(_m.id))) or 0)


# ---- what the sites said -----------------------------------------------------------------------


def results_of(
    connection: Connection, lots: Sequence[LotKey], statistics: Sequence[str]
) -> list[Any]:
    """Wafer results of lots with the characteristic of their stream, and the set of their point.

    `set_at` is the set of limits whose signature is out of the squares. `statistics` are those that
    points may have; named so that the primary key is walked.
    """
    w, p = wafer_results.c, points.c
    same = [p[name] == w[name] for name in ("stream_id", "lot", "layer")]
    set_of = (
        select(func.max(p.baseline_id))
        .where(*same, p.statistic.in_(list(statistics)), p.wafer.in_(["", w.wafer]))
        .correlate(wafer_results)
        .scalar_subquery()
    )
    names = (
        "stream_id", "lot", "layer", "wafer", "measured_us", "n_sites", "mean", "sum_squares",
        "df", "out_of_spec_sites", "statistics",
    )  # fmt: skip
    query = (
        select(streams.c.characteristic, set_of.label("set_at"), *(w[name] for name in names))
        .join(streams, streams.c.id == w.stream_id)
        .where(w.lot.in_(sorted({lot for lot, _ in lots})), tuple_(w.lot, w.layer).in_(list(lots)))
    )
    return list(connection.execute(query))


def distances_of(connection: Connection, lots: Sequence[LotKey]) -> list[dict[str, Any]]:
    """Rows of `kept_distances` from the map distances of lots."""
    p = points.c
    names = (
        "stream_id", "lot", "layer", "wafer", "baseline_id", "n_wafers", "value", "df", "z",
    )  # fmt: skip
    query = select(*(p[name] for name in names)).where(
        p.statistic == "map-distance",
        p.baseline_id.is_not(None),
        p.lot.in_(sorted({lot for lot, _ in lots})),
        tuple_(p.lot, p.layer).in_(list(lots)),
    )
    return [row._asdict() for row in connection.execute(query)]


def keep_wafers(connection: Connection, rows: Sequence[Mapping[str, Any]]) -> None:
    """Keep what the sites of wafers said; a wafer kept before is written anew."""
    _replace(connection, kept_wafers, rows)


def keep_distances(connection: Connection, rows: Sequence[Mapping[str, Any]]) -> None:
    """Keep map distances of points; one kept before is written anew."""
    _replace(connection, kept_distances, rows)


def _replace(connection: Connection, table: Any, rows: Sequence[Mapping[str, Any]]) -> None:
    keys = ("stream_id", "lot", "layer", "wafer")
    for start in range(0, len(rows), 100):
        part = rows[start : start + 100]
        same = tuple_(*(table.c[k] for k in keys)).in_([tuple(r[k] for k in keys) for r in part])
        connection.execute(delete(table).where(same))
        connection.execute(insert(table), [dict(row) for row in part])


def kept_wafers_of(connection: Connection, characteristic: str, lots: Iterable[str]) -> Columns:
    """What was kept of wafers of a characteristic, in any of its streams."""
    k = kept_wafers.c
    rows: list[Any] = []
    for part in chunks(sorted(set(lots))):
        query = (
            select(*(k[name] for name in _KEPT))
            .join(streams, streams.c.id == k.stream_id)
            .where(streams.c.characteristic == characteristic, k.lot.in_(part))
        )
        rows += connection.execute(query).all()
    return of_rows(rows, _KEPT)


def kept_units(connection: Connection, characteristic: str) -> set[str]:
    """Units that wafers of a characteristic were kept in."""
    query = (
        select(kept_wafers.c.unit)
        .join(streams, streams.c.id == kept_wafers.c.stream_id)
        .where(streams.c.characteristic == characteristic)
    )
    return set(connection.scalars(query.distinct()))


def kept_distances_of(connection: Connection, ids: Iterable[int], lots: Iterable[str]) -> list[Any]:
    """Map distances that were kept of streams and lots."""
    k = kept_distances.c
    wanted = sorted(set(ids))
    rows: list[Any] = []
    for part in chunks(sorted(set(lots))):
        for some in chunks(wanted):
            query = select(kept_distances).where(k.lot.in_(part), k.stream_id.in_(some))
            rows += connection.execute(query).all()
    return rows


# ---- capability --------------------------------------------------------------------------------


@dataclass(frozen=True)
class KeptStudy:
    """Capability of a stream, a tool or a whole characteristic in one month, as it was then."""

    asked: str
    n_wafers: int
    made_us: int
    numbers: dict[str, Any]
    verdict: str


StudyKey = tuple[str, str, str]  # characteristic, context (JSON), month


def keep_studies(connection: Connection, studies: Mapping[StudyKey, KeptStudy]) -> None:
    """Keep the capability of units in a month."""
    rows = [
        {
            "characteristic": key[0],
            "context": key[1],
            "month": key[2],
            **one.__dict__,
            "numbers": json.dumps(one.numbers, ensure_ascii=False, sort_keys=True),
        }
        for key, one in studies.items()
    ]
    if rows:
        connection.execute(insert(kept_studies), rows)


def studies_of(connection: Connection, names: Sequence[str]) -> dict[StudyKey, KeptStudy]:
    """Capability kept of some months."""
    k = kept_studies.c
    query = select(kept_studies).where(k.month.in_(list(names)))
    return {
        (r.characteristic, r.context, r.month): KeptStudy(
            r.asked, r.n_wafers, r.made_us, json.loads(r.numbers), r.verdict
        )
        for r in connection.execute(query)
    }

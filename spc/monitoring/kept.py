"""Wafers whose site values were taken away: what is kept of them, and how it comes back.

A point whose wafers have no sites any more cannot be made from the readings again. What the
evaluation had found before the values went stands in `kept_wafers` and `kept_distances`; when a
stream is evaluated anew (other limits, another plan, a clock that went back) it is put in the place
of what the sites would have given. A spread is put back only under the set of limits whose
signature it is free of, a map distance only under its own set: under another they are not known.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Connection

from config.control_plan import Characteristic, ControlPlan
from config.values import unit_factor
from spc.monitoring.grouping import PointGroups
from spc.monitoring.points import VALUE_COLUMNS, Assignment
from spc.monitoring.wafer_statistics import MAP_TERMS, WaferStatistics
from spc.monitoring.wafers import Wafers
from spc.records import aggregation
from spc.records.aggregation import LotKey
from spc.records.columns import Columns, codes_of, joined, row_codes, text

BoolArray = NDArray[np.bool_]
FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

_AS_IT_IS = (
    "stream_id", "lot", "layer", "wafer", "n_sites", "mean", "sum_squares", "df",
    "out_of_spec_sites",
)  # fmt: skip


def keep(connection: Connection, plan: ControlPlan, lots: Sequence[LotKey]) -> None:
    """Keep what the sites of lots said, in the transaction that takes their values away.

    The results must be up to date. Wafers that were kept before and have no sites left stay as they
    were kept.
    """
    stamps = aggregation.stamps_of(connection, lots)
    rows = []
    charted = sorted({name for one in plan.characteristic for name in one.charted})
    for row in aggregation.results_of(connection, lots, charted):
        one = plan.named(row.characteristic)
        if one is None or (row.lot, row.layer, row.wafer) not in stamps:
            continue  # not in the plan any more, or without site values before
        if len(row.statistics) != 8 * len(one.charted):
            continue  # of another plan; `aggregate_sites` asks for results of the plan of now
        rows.append(
            {name: getattr(row, name) for name in _AS_IT_IS}
            | {
                "measured_us": row.measured_us,
                "baseline_id": row.set_at,
                "unit": one.unit,
                "names": ",".join(one.charted),
                "statistics": row.statistics,
            }
        )
    aggregation.keep_wafers(connection, rows)
    aggregation.keep_distances(connection, aggregation.distances_of(connection, lots))


def without_sites(wafers: Wafers) -> BoolArray:
    """Which wafers have no site value left."""
    size = len(wafers.table)
    return np.bincount(wafers.wafer, minlength=size) == 0


def with_kept_sums(connection: Connection, wafers: Wafers, one: Characteristic) -> Wafers:
    """The same wafers with the counts and means that held when their site values were taken away.

    A wafer measured in parts has several measurements; the sums of one alone are not its own.
    """
    at, kept, factor = _found(connection, wafers, one, np.flatnonzero(without_sites(wafers)))
    if not at.size:
        return wafers
    table = wafers.table
    n, mean, outside = (table[name].copy() for name in ("n_sites", "mean", "out_of_spec_sites"))
    n[at], outside[at] = kept["n_sites"], kept["out_of_spec_sites"]
    mean[at] = kept["mean"] * factor
    return replace(wafers, table=table.having(n_sites=n, mean=mean, out_of_spec_sites=outside))


def restore(
    connection: Connection,
    wafers: Wafers,
    one: Characteristic,
    assigned: tuple[PointGroups, Assignment],
    found: WaferStatistics,
) -> None:
    """Put spreads and terms of wafers without sites in their places; notes say what is lacking."""
    bare = np.flatnonzero(without_sites(wafers))
    if not bare.size:
        return
    at, kept, factor = _found(connection, wafers, one, bare)
    codes, kinds = codes_of(kept["names"])
    for code, names in enumerate(kinds):
        rows = np.flatnonzero(codes == code)
        packed = np.frombuffer(b"".join(kept["statistics"][rows]), "<f8").reshape(rows.size, -1)
        for column, name in enumerate(names.split(",") if names else ()):
            if name in found.terms:
                scale = factor[rows] if name in MAP_TERMS else 1.0
                found.terms[name][at[rows]] = packed[:, column] * scale
    groups, assignment = assigned
    ids = np.array([one_set.id for one_set in assignment.sets] + [-1], np.int64)
    holds = ids[assignment.of_point[groups.of_wafer[at]]]
    then = np.nan_to_num(kept["baseline_id"], nan=-1.0).astype(np.int64)
    good = np.full(at.size, one.is_overlay) | (holds == then)
    found.squares[at[good]] = (kept["sum_squares"] * factor**2)[good]
    found.df[at[good]] = kept["df"][good]
    lacking = bare.size - int(good.sum())
    if lacking:
        found.notes.append(
            f"{one.name}: the site values of {lacking} wafers were taken away by the retention "
            "rule; statistics of their sites are not known under the plan and limits of now"
        )


def with_kept_distances(
    connection: Connection,
    wafers: Wafers,
    stream_id: IntArray,
    assigned: tuple[PointGroups, Assignment],
    made: tuple[Columns, FloatArray],
) -> tuple[Columns, FloatArray]:
    """Map distances and scores with those kept of points whose wafers have no sites any more.

    `stream_id` is that of each point.
    """
    groups, assignment = assigned
    bare = groups.total(without_sites(wafers).astype(float)) == groups.table["n_wafers"]
    at = np.flatnonzero(bare & (assignment.of_point >= 0))
    if not at.size:
        return made
    lots = groups.table["lot"][at].tolist()
    rows = aggregation.kept_distances_of(connection, stream_id[at].tolist(), lots)
    kept = {(r.stream_id, r.lot, r.layer, r.wafer): r for r in rows}
    keys = zip(
        stream_id[at].tolist(), groups.table.take(at).rows(("lot", "layer", "wafer")), strict=True
    )
    back = []
    for i, (stream, key) in zip(at.tolist(), keys, strict=True):
        row = kept.get((stream, *key))
        number = assignment.sets[int(assignment.of_point[i])].id
        if row is not None and row.baseline_id == number:
            back.append((i, row))
    if not back:
        return made
    point = np.array([i for i, _ in back], np.int64)
    more = Columns(
        {
            "point": point,
            "statistic": text("map-distance", point.size),
            "value": np.array([row.value for _, row in back], float),
            "n_wafers": np.array([row.n_wafers for _, row in back], np.int64),
            "n_sites": groups.table["n_sites"][point],
            "effective_sites": groups.table["effective_sites"][point],
            "df": np.array([row.df for _, row in back], float),
        }
    )
    scores = np.array([np.nan if row.z is None else row.z for _, row in back], float)
    return joined([made[0].pick(VALUE_COLUMNS), more]), np.append(made[1], scores)


def _found(
    connection: Connection, wafers: Wafers, one: Characteristic, bare: IntArray
) -> tuple[IntArray, Columns, FloatArray]:
    """Wafers without sites of which something was kept, what it is, and its factor to the unit.

    It must be of the newest measurement of the wafer, and in a unit that converts.
    """
    short = wafers.table.take(bare)
    kept = aggregation.kept_wafers_of(connection, one.name, set(short["lot"].tolist()))
    keys = ("lot", "layer", "wafer", "measured_us")
    code = row_codes([np.concatenate([short[name], kept[name]]) for name in keys])
    row_of = np.full(int(code.max(initial=-1)) + 1, -1, np.int64)
    row_of[code[bare.size :]] = np.arange(len(kept))
    row = row_of[code[: bare.size]]
    units, names = codes_of(kept["unit"])
    factors = np.array([_factor(unit, one) for unit in names] + [np.nan], float)[units]
    good = (row >= 0) & np.isfinite(np.append(factors, np.nan)[row])
    return bare[good], kept.take(row[good]), factors[row[good]]


def _factor(unit: str, one: Characteristic) -> float:
    """Factor from the unit of then to that of now, NaN where there is none."""
    if unit == one.unit:
        return 1.0
    found = None if one.is_overlay else unit_factor(unit, one.unit)
    return float("nan") if found is None else float(found)

"""Plotted points of a characteristic: values, sample sizes, and the limits that hold for them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from config.control_plan import Characteristic
from spc.monitoring import map_payload
from spc.monitoring.grouping import PointGroups
from spc.monitoring.limit_sets import LimitSet, kind_of, place_keys, signature_at
from spc.monitoring.point_limits import LIMIT_COLUMNS, PointSizes, limits_of
from spc.monitoring.wafer_statistics import (
    MAP_TERMS,
    SignatureAt,
    WaferStatistics,
    add_map_terms,
    overlay_statistics,
    site_spread,
)
from spc.monitoring.wafers import Wafers
from spc.records.columns import Columns, codes_of, joined, text
from spc.stats.overlay import OVERLAY_TERMS
from spc.stats.wafer_map import map_distance

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

VALUE_COLUMNS = ("point", "statistic", "value", "n_wafers", "n_sites", "effective_sites", "df")


@dataclass(frozen=True)
class Assignment:
    """Which set of limits holds for each point.

    sets : the sets. of_point : (n_points,) index into them, -1 none.
    member : (n_points,) whether the set's estimates stand on the point.
    baseline : (n_points,) whether the point lies in the baseline of its set.
    """

    sets: Sequence[LimitSet]
    of_point: IntArray
    member: BoolArray
    baseline: BoolArray


def assignment(groups: PointGroups, sets: Sequence[LimitSet], of_point: IntArray) -> Assignment:
    """Phase and membership of points whose sets are known."""
    n = groups.n
    member, baseline = np.zeros(n, bool), of_point < 0
    at = groups.table["at_us"]
    if len(sets):
        has = of_point >= 0
        first = np.array([one.first_us for one in sets], np.int64)[of_point]
        last = np.array([one.last_us for one in sets], np.int64)[of_point]
        inside = has & (at >= first) & (at <= last)
        baseline |= inside
        where = np.flatnonzero(inside)
        keys = groups.table.take(where).rows(("lot", "layer", "wafer"))
        for i, key in zip(where.tolist(), keys, strict=True):
            member[i] = key in sets[of_point[i]].participants
    return Assignment(sets, of_point, member, baseline)


def wafer_statistics(
    wafers: Wafers,
    groups: PointGroups,
    assigned: Assignment,
    characteristic: Characteristic,
    wafer_radius_mm: float,
) -> WaferStatistics:
    """Statistics of single wafers under the limits that hold for their points."""
    if characteristic.is_overlay:
        return overlay_statistics(wafers)
    effect, count = signature_at(assigned.sets, wafers.places)
    none = np.full((1, effect.shape[1]), np.nan)  # the row that index -1 picks
    kept = [one.payload["components"] or {} for one in assigned.sets]
    sites = np.array([*(one.get("site") or np.nan for one in kept), np.nan], float)
    at = SignatureAt(
        np.vstack([effect, none]),
        np.vstack([count, none]),
        np.sqrt(sites),
        assigned.of_point[groups.of_wafer],
        assigned.member[groups.of_wafer],
    )
    found = site_spread(wafers, at)
    if set(characteristic.charted) & set(MAP_TERMS):
        add_map_terms(found, wafers, wafer_radius_mm)
    return found


def point_values(
    wafers: Wafers, groups: PointGroups, found: WaferStatistics, characteristic: Characteristic
) -> Columns:
    """Values of all points but map distances, one row a point and statistic (VALUE_COLUMNS)."""
    mean = wafers.table["mean"]
    parts = []
    for statistic in characteristic.charted:
        if statistic == "mean":
            parts.append(_of_terms(groups, statistic, mean))
        elif statistic in ("within-wafer", "residual"):
            df = groups.total(found.df)
            squares = groups.total(np.where(found.df > 0, found.squares, 0.0))
            value = np.sqrt(squares / np.where(df > 0, df, np.nan))
            parts.append(_rows(groups, statistic, value, df))
        elif statistic == "wafer-to-wafer" and characteristic.point == "lot":
            parts.append(_wafer_to_wafer(groups, mean))
        elif statistic in OVERLAY_TERMS or statistic in MAP_TERMS:
            parts.append(_of_terms(groups, statistic, found.terms[statistic]))
    nothing = np.full(groups.n, np.nan)
    return joined(parts or [_rows(groups, "", nothing, nothing)])


def _rows(groups: PointGroups, statistic: str, value: FloatArray, df: FloatArray) -> Columns:
    at = np.flatnonzero(np.isfinite(value))
    table = groups.table
    return Columns(
        {
            "point": at,
            "statistic": text(statistic, at.size),
            "value": value[at],
            "n_wafers": table["n_wafers"][at],
            "n_sites": table["n_sites"][at],
            "effective_sites": table["effective_sites"][at],
            "df": df[at],
        }
    )


def _of_terms(groups: PointGroups, statistic: str, per_wafer: FloatArray) -> Columns:
    """Mean over the wafers of a point that have the term; sizes are those wafers'."""
    there = np.isfinite(per_wafer)
    n = groups.total(there.astype(float))
    value = groups.total(np.where(there, per_wafer, 0.0)) / np.where(n > 0, n, np.nan)
    # Means of numbers far from zero: one more step takes out the rounding of the sum.
    off = np.where(there, per_wafer - np.nan_to_num(value)[groups.of_wafer], 0.0)
    value = value + groups.total(off) / np.where(n > 0, n, np.nan)
    rows = _rows(groups, statistic, value, np.maximum(n - 1.0, 0.0))
    return rows.having(n_wafers=n[rows["point"]].astype(np.int64))


def _wafer_to_wafer(groups: PointGroups, mean: FloatArray) -> Columns:
    n = groups.table["n_wafers"].astype(np.float64)
    center = groups.total(mean) / n
    squares = groups.total((mean - center[groups.of_wafer]) ** 2)
    value = np.sqrt(squares / np.where(n > 1, n - 1.0, np.nan))
    return _rows(groups, "wafer-to-wafer", value, n - 1.0)


def _steady(values: FloatArray) -> FloatArray:
    """Values to ten significant digits."""
    size = np.abs(values)
    known = np.isfinite(values) & (size > 0)
    unit = np.ones_like(values)
    unit[known] = 10.0 ** (9 - np.floor(np.log10(size[known])))
    return np.asarray(np.round(values * unit) / unit)


def map_distances(
    wafers: Wafers, groups: PointGroups, assigned: Assignment
) -> tuple[Columns, FloatArray]:
    """Map distances of points whose set has a map reference, and their normal scores.

    `wafers` are those without flyers. The second result has one score a row of the first.
    """
    keys = place_keys(wafers.places)
    value, df, z = np.full((3, groups.n), np.nan)
    set_of = assigned.of_point[groups.of_wafer]
    member = assigned.member[groups.of_wafer]
    count = np.bincount(wafers.wafer, minlength=len(wafers.table))
    start = np.cumsum(count) - count
    for index, one in enumerate(assigned.sets):
        kept = one.payload.get("map")
        if not kept:
            continue
        reference = map_payload.from_payload(kept)
        column_of = _columns([tuple(site) for site in kept["sites"]], keys)
        for baseline in (False, True):
            rows = np.flatnonzero((set_of == index) & (member == baseline) & (count > 0))
            if not rows.size:
                continue
            maps = _map_rows(wafers, rows, (start, count), column_of, len(kept["sites"]))
            points, local = np.unique(groups.of_wafer[rows], return_inverse=True)
            found = map_distance(reference, maps, groups=local, baseline=baseline)
            value[points], df[points], z[points] = found.distance, found.df, found.z
    # A product of matrices may differ in the last bits with the rows that happen to be beside;
    # what is kept must not.
    value, z = _steady(value), _steady(z)
    distances = _rows(groups, "map-distance", value, df)
    return distances, z[distances["point"]]


def _columns(
    sites: list[tuple[str, int | None, int | None]], keys: list[tuple[str, int | None, int | None]]
) -> IntArray:
    """Column of the reference for each place, -1 for none."""
    number = {site: i for i, site in enumerate(sites)}
    return np.array([number.get(key, -1) for key in keys], np.int64)


def _map_rows(
    wafers: Wafers,
    rows: IntArray,
    spans: tuple[IntArray, IntArray],
    column_of: IntArray,
    n_columns: int,
) -> FloatArray:
    start, count = spans
    lengths = count[rows]
    line = np.repeat(np.arange(rows.size), lengths)
    index = np.arange(line.size) - np.repeat(np.cumsum(lengths) - lengths, lengths)
    index += np.repeat(start[rows], lengths)
    column = column_of[wafers.place[index]]
    maps = np.full((rows.size, n_columns), np.nan)
    known = column >= 0
    maps[line[known], column[known]] = wafers.value[index[known], 0]
    return maps


def with_limits(values: Columns, assigned: Assignment, z: FloatArray) -> Columns:
    """Add the limits, z, phase and set of each row of point values.

    `z` holds the score of rows whose law is not that of their limits (map distances), else NaN.
    """
    point = values["point"]
    set_of = assigned.of_point[point]
    out = {name: np.full(len(values), np.nan) for name in LIMIT_COLUMNS}
    kinds, names = codes_of(values["statistic"])
    for code, statistic in enumerate(names):
        found = [one.statistic(statistic) for one in assigned.sets]
        known = np.array([one is not None for one in found] + [False], bool)
        rows = np.flatnonzero((kinds == code) & known[set_of])
        if not rows.size:
            continue
        used, of_point = np.unique(set_of[rows], return_inverse=True)
        sizes = PointSizes(
            *(values[n][rows].astype(np.float64) for n in ("n_wafers", "effective_sites", "df"))
        )
        limits = limits_of(
            statistic,
            values["value"][rows],
            sizes,
            [entry for i in used if (entry := found[i]) is not None],
            of_point,
        )
        if kind_of(statistic) == "distance":
            limits["z"] = z[rows]
        for name in LIMIT_COLUMNS:
            out[name][rows] = limits[name]
    ids = np.array([one.id for one in assigned.sets] + [-1], np.int64)
    phase = np.where(assigned.baseline[point], "baseline", "monitoring").astype(object)
    return values.having(**out, baseline_id=ids[set_of], phase=phase)

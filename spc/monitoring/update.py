"""Bringing one characteristic up to date: readings -> wafers -> points, limits and rule hits."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from sqlalchemy import Connection

from config.control_plan import Characteristic
from config.load import Bay
from spc.monitoring import baselines, signals
from spc.monitoring.grouping import PointGroups, group_points
from spc.monitoring.limit_sets import LimitSet
from spc.monitoring.point_limits import assign_sets
from spc.monitoring.points import (
    assignment,
    map_distances,
    point_values,
    wafer_statistics,
    with_limits,
)
from spc.monitoring.wafer_statistics import WaferStatistics
from spc.monitoring.wafers import Stores, Wafers, build_wafers, subset
from spc.monitoring.work import Work
from spc.records import series
from spc.records.contexts import ContextStore
from spc.records.measurements import LayoutStore, Marker, log_rows, measurement_rows
from spc.records.tables import points as points_table
from spc.records.tables import wafer_results as wafer_results_table

IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

GROUP = ["stream_id", "lot", "layer"]
_COMPARED = (
    "at_us",
    "measured_us",
    "processed_us",
    "context_id",
    "step_context_id",
    "n_sites",
    "mean",
    "out_of_spec_sites",
)


@dataclass
class Updated:
    """What was done for one characteristic; see `spc.monitoring.evaluation.Evaluation`."""

    points: int = 0
    signals: int = 0
    new_baselines: int = 0
    touched: dict[int, int] = field(default_factory=dict)
    notes: list[str] = field(default_factory=list)


@dataclass(frozen=True)
class _Changes:
    """Which points are to be made again.

    groups : stream_id, lot, layer and first_us (us) of points whose wafers are not as before.
    anew : streams of which every point is made again.
    """

    groups: pd.DataFrame
    anew: frozenset[int]


class Update:
    """One pass over the characteristics, in one transaction."""

    def __init__(self, connection: Connection, bay: Bay, now: Marker) -> None:
        self._connection = connection
        self._radius = bay.settings.bay.wafer_radius_mm
        self._now = now
        self._stores = Stores(ContextStore(connection), LayoutStore(connection))

    def run(self, one: Characteristic, work: Work) -> Updated:
        """Bring one characteristic up to date."""
        known = series.stream_ids(self._connection, one.name)
        if work.everything:
            series.clear(self._connection, known.values())
        lots = None if work.everything else sorted(work.lots)
        wafers, ids = self.read(one, lots)
        known = series.stream_ids(self._connection, one.name)
        old = self._old_results(known, work)
        changes = self._changes(one, wafers, ids, old, work)
        if changes.anew and not work.everything:
            wafers, ids = self.read(one, self._lots_of(changes, sorted(work.lots)))
        result = Updated(notes=list(wafers.notes))
        self._make(one, _needed(wafers, ids, changes), ids, changes, result)
        return result

    # ---- reading ---------------------------------------------------------------------------

    def read(self, one: Characteristic, lots: list[str] | None) -> tuple[Wafers, IntArray]:
        """Wafers of lots (None: all), and the id of each of their streams."""
        layer = one.where.get("layer")
        frame = measurement_rows(
            self._connection,
            one.parameters,
            self._now.as_of_us,
            layers=None if layer is None else [layer, ""],
            lots=lots,
        )
        log = log_rows(self._connection, self._now.as_of_us, sorted(set(frame["lot"])))
        wafers = build_wafers(frame, log, self._stores, one)
        known = series.stream_ids(self._connection, one.name)
        new = [key for key in wafers.keys if key not in known]
        if new:
            series.add_streams(self._connection, one.name, new)
            known = series.stream_ids(self._connection, one.name)
        return wafers, np.array([known[key] for key in wafers.keys], np.int64)

    def _old_results(self, known: dict[str, int], work: Work) -> pd.DataFrame:
        ids = [] if work.everything else list(known.values())
        return series.wafer_results_of(self._connection, ids, sorted(work.lots))

    def _lots_of(self, changes: _Changes, lots: list[str]) -> list[str]:
        more = series.wafer_results_of(self._connection, changes.anew)["lot"]
        return sorted(set(lots) | set(more))

    # ---- what to make again ----------------------------------------------------------------

    def _changes(
        self, one: Characteristic, wafers: Wafers, ids: IntArray, old: pd.DataFrame, work: Work
    ) -> _Changes:
        new = _with_ids(wafers, ids)
        groups = _changed_groups(new, old)
        anew: set[int] = set(ids.tolist()) if work.everything else set()
        if not work.everything:
            anew |= baselines.to_set_again(self._connection, _first_stamps(groups))
            if work.hand:
                anew |= baselines.with_hand_made(self._connection, one.name)
        return _Changes(groups, frozenset(anew))

    # ---- making ----------------------------------------------------------------------------

    def _make(
        self,
        one: Characteristic,
        wafers: Wafers,
        ids: IntArray,
        changes: _Changes,
        result: Updated,
    ) -> None:
        groups = group_points(wafers.table, one.point)
        made = baselines.Maker(self._connection, one, self._radius, self._now.as_of_us)
        result.new_baselines = made.renew(wafers, groups, ids, changes.anew)
        stream_id = ids[groups.table["stream"].to_numpy(np.int64)]
        concerned = set(stream_id.tolist()) | changes.anew
        sets = baselines.in_force(self._connection, concerned)
        at = groups.table["at_us"].to_numpy(np.int64)
        assigned = assignment(groups, sets, assign_sets(stream_id, at, sets))
        found = wafer_statistics(wafers, groups, assigned, one, self._radius)
        values = point_values(wafers, groups, found, one)
        scores = np.full(len(values), np.nan)
        if "map-distance" in one.charted:
            distances, z = map_distances(wafers, groups, assigned)
            if len(distances):
                values = pd.concat([values, distances], ignore_index=True)
                scores = np.append(scores, z)
        points = _point_rows(groups, stream_id, with_limits(values, assigned, scores))
        self._clear(changes)
        self._signal(one, points, sets, changes, result)
        series.insert(self._connection, points_table, points)
        results = _wafer_rows(one, wafers, ids, found)
        series.insert(self._connection, wafer_results_table, results)
        result.notes += found.notes

    def _clear(self, changes: _Changes) -> None:
        series.clear(self._connection, changes.anew)
        groups = changes.groups
        rest = groups[~groups["stream_id"].isin(changes.anew)]
        series.delete_lots(self._connection, rest)

    def _signal(
        self,
        one: Characteristic,
        points: pd.DataFrame,
        sets: list[LimitSet],
        changes: _Changes,
        result: Updated,
    ) -> None:
        """Rule hits of the new points (in place) and of the stored ones behind them."""
        first = _first_stamps(changes.groups)
        tails = {stream: us for stream, us in first.items() if stream not in changes.anew}
        before = signals.longest_window(one.rules) + 1
        stored = series.points_from(self._connection, one.charted, tails, before)
        sets = sets + baselines.of_points(self._connection, stored, sets)
        columns = list(stored.columns)
        both = pd.concat(
            [part for part in (points[columns], stored) if len(part)] or [points[columns]],
            ignore_index=True,
        )
        both["place"] = np.arange(len(both))
        both = both.sort_values(signals.ORDER, kind="stable", ignore_index=True)
        both["baseline_id"] = both["baseline_id"].astype(float)
        hits = signals.rule_hits(both, one.rules, baselines.surely_correlated(sets))
        names = np.empty(len(both), dtype=object)
        names[both["place"].to_numpy()] = hits
        n = len(points)
        points["rules"] = names[:n]
        later = stored.assign(found=names[n:]) if len(stored) else stored.assign(found="")
        at = later["stream_id"].map(tails) if len(later) else later["at_us"]
        # Points in front of the first change only lend their z; their own window is not all here.
        changed = later[(later["at_us"] >= at) & (later["found"] != later["rules"])]
        series.update_rules(self._connection, changed.assign(rules=changed["found"]))
        fresh = points.merge(changes.groups[GROUP].drop_duplicates(), on=GROUP)
        result.points = len(fresh)
        result.signals = int((fresh["rules"] != "").sum())
        result.touched = dict(first)
        for stream in changes.anew - result.touched.keys():
            mine = points.loc[points["stream_id"] == stream, "at_us"]
            if len(mine):
                result.touched[stream] = int(mine.min())


def _with_ids(wafers: Wafers, ids: IntArray) -> pd.DataFrame:
    stream = wafers.table["stream"].to_numpy(np.int64)
    return wafers.table.assign(stream_id=ids[stream] if len(ids) else stream)


def _changed_groups(new: pd.DataFrame, old: pd.DataFrame) -> pd.DataFrame:
    """Points (stream_id, lot, layer) whose wafers differ, and the first stamp they had or have."""
    keys = [*GROUP, "wafer"]
    names = [*keys, *_COMPARED]
    sides = new[names].merge(
        old[names], on=keys, how="outer", suffixes=("", "_old"), indicator=True
    )
    same = (sides["_merge"] == "both").to_numpy()
    for name in _COMPARED:
        a, b = (sides[n].to_numpy(np.float64, na_value=np.nan) for n in (name, f"{name}_old"))
        same = same & ((a == b) | (np.isnan(a) & np.isnan(b)))
    # A point stands at the last of its wafers, old or new, whichever wafer changed: the earliest
    # wafer of the lot is never after it.
    earliest = sides[["at_us", "at_us_old"]].min(axis=1).astype(np.int64)
    sides = sides.assign(first_us=earliest, differs=~same)
    found = sides.groupby(GROUP, as_index=False, sort=True).agg(
        first_us=("first_us", "min"), differs=("differs", "any")
    )
    return found.loc[found["differs"], [*GROUP, "first_us"]].reset_index(drop=True)


def _first_stamps(groups: pd.DataFrame) -> dict[int, int]:
    first = groups.groupby("stream_id")["first_us"].min()
    return dict(zip(first.index.tolist(), first.tolist(), strict=True))


def _needed(wafers: Wafers, ids: IntArray, changes: _Changes) -> Wafers:
    """Only the wafers whose points are made again."""
    table = _with_ids(wafers, ids)
    wanted = table["stream_id"].isin(changes.anew).to_numpy()
    if not wanted.all():
        marks = table[GROUP].merge(changes.groups[GROUP], on=GROUP, how="left", indicator=True)
        wanted = wanted | (marks["_merge"] == "both").to_numpy()
    return wafers if wanted.all() else subset(wafers, wanted)


def _point_rows(groups: PointGroups, stream_id: IntArray, values: pd.DataFrame) -> pd.DataFrame:
    """Rows of the table `points`, without rules yet."""
    point = values["point"].to_numpy(np.int64)
    table = groups.table
    rows = pd.DataFrame(
        {"stream_id": stream_id[point], "statistic": values["statistic"].to_numpy()}
    )
    for name in ("lot", "layer", "wafer", "at_us", "measured_us", "processed_us"):
        rows[name] = table[name].to_numpy()[point]
    for name in ("value", "n_wafers", "n_sites", "effective_sites", "df"):
        rows[name] = values[name].to_numpy()
    rows["n_wafers"] = rows["n_wafers"].astype(np.int64)
    rows["n_sites"] = rows["n_sites"].astype(np.int64)
    ids = values["baseline_id"].to_numpy(np.float64)
    rows["baseline_id"] = np.where(ids < 0, np.nan, ids)
    rows["phase"] = values["phase"].to_numpy(object)
    for name in ("center", "lower_limit", "upper_limit", "sigma", "z"):
        rows[name] = values[name].to_numpy(np.float64)
    rows["rules"] = ""
    return rows


def _wafer_rows(
    one: Characteristic, wafers: Wafers, ids: IntArray, found: WaferStatistics
) -> pd.DataFrame:
    """Rows of the table `wafer_results`."""
    table = wafers.table
    statistics = np.full((len(table), len(one.charted)), np.nan)
    for column, name in enumerate(one.charted):
        if name == "mean":
            statistics[:, column] = table["mean"]
        elif name in ("within-wafer", "residual"):
            statistics[:, column] = found.sd
        elif name in found.terms:
            statistics[:, column] = found.terms[name]
    rows = _with_ids(wafers, ids)[[*GROUP, "wafer", "at_us", "measured_us", "processed_us"]]
    rows = rows.assign(
        context_id=table["context_id"],
        step_context_id=table["step_context_id"],
        n_sites=table["n_sites"],
        mean=table["mean"],
        sum_squares=found.squares,
        df=found.df,
        statistics=[row.tobytes() for row in statistics.astype("<f8")],
        out_of_spec_sites=table["out_of_spec_sites"],
    )
    return rows

"""Bringing one characteristic up to date: readings -> wafers -> points, limits and rule hits."""

from __future__ import annotations

from collections.abc import Collection, Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Connection

from config.control_plan import Characteristic
from config.load import Bay
from spc.monitoring import baselines, kept, signals
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
from spc.monitoring.wafer_statistics import WaferStatistics, without_flyers
from spc.monitoring.wafers import Stores, Wafers, build_wafers, dense_streams, subset
from spc.monitoring.work import Work
from spc.monitoring.writer import Writer
from spc.records import series
from spc.records.columns import Columns, joined, of_rows, order_of, row_codes, text
from spc.records.contexts import chunks
from spc.records.measurements import WHOLE_TABLE, LayoutStore, Marker, log_rows, measurement_rows
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

    groups: Columns
    anew: frozenset[int]


class Update:
    """One pass over the characteristics, in one transaction."""

    def __init__(
        self,
        connection: Connection,
        bay: Bay,
        now: Marker,
        writer: Writer | None = None,
    ) -> None:
        """`writer` takes what is found; without one it is written on the same connection."""
        self._connection = connection
        self._radius = bay.settings.bay.wafer_radius_mm
        self._now = now
        self._writer = writer or Writer(connection)
        self._stores = Stores(self._writer.contexts, LayoutStore(connection))

    def run(self, one: Characteristic, work: Work) -> Updated:
        """Bring one characteristic up to date."""
        if work.everything:
            known = series.stream_ids(self._connection, one.name)
            self._writer.clear(known.values())
        lots = None if work.everything else sorted(work.lots)
        wafers, ids = self.read(one, lots)
        known = series.stream_ids(self._connection, one.name)
        old = self._old_results(known, work)
        if not (len(wafers.table) or len(old) or work.hand):
            return Updated(notes=list(wafers.notes))
        changes = self._changes(one, wafers, ids, old, work)
        if changes.anew and not work.everything:
            wafers, ids = self.read(one, self._lots_of(changes, sorted(work.lots)))
        result = Updated(notes=list(wafers.notes))
        self._make(one, _needed(wafers, ids, changes), ids, changes, result)
        return result

    def run_streams(
        self, one: Characteristic, keys: Collection[str], lots: Sequence[str]
    ) -> Updated:
        """Make everything of some streams anew, as `run` does of all of them.

        `keys` are their contexts (JSON); `lots` has every lot that one of their wafers is in.
        """
        known = series.stream_ids(self._connection, one.name)
        self._writer.clear(known[key] for key in keys if key in known)
        if not lots:
            return Updated()
        blocks = [[str(lot) for lot in part] for part in chunks(sorted(lots), WHOLE_TABLE)]
        rows = [self._rows(one, block) for block in blocks]
        frame, log = (joined(tables) for tables in zip(*rows, strict=True))
        wafers = build_wafers(frame, log, self._stores, one)
        mine = np.array([key in keys for key in wafers.keys], bool)
        wafers, _ = dense_streams(subset(wafers, mine[wafers.table["stream"]]))
        result = Updated(notes=list(wafers.notes))
        if len(wafers.table):
            ids = self._ids(one, wafers)
            everything = Work(everything=True)
            changes = self._changes(one, wafers, ids, of_rows([], series.RESULT), everything)
            self._make(one, wafers, ids, changes, result)
        return result

    # ---- reading ---------------------------------------------------------------------------

    def read(self, one: Characteristic, lots: list[str] | None) -> tuple[Wafers, IntArray]:
        """Wafers of lots (None: all), and the id of each of their streams."""
        frame, log = self._rows(one, lots)
        wafers = build_wafers(frame, log, self._stores, one)
        return wafers, self._ids(one, wafers)

    def _ids(self, one: Characteristic, wafers: Wafers) -> IntArray:
        known = self._writer.stream_ids(one.name, wafers.keys)
        return np.array([known[key] for key in wafers.keys], np.int64)

    def _rows(self, one: Characteristic, lots: list[str] | None) -> tuple[Columns, Columns]:
        """Measurements of lots, and the process log that goes with them."""
        layer = one.where.get("layer")
        frame = measurement_rows(
            self._connection,
            one.parameters,
            self._now.as_of_us,
            layers=None if layer is None else [layer, ""],
            lots=lots,
        )
        known_layers = set(frame["layer"].tolist())
        log = log_rows(
            self._connection,
            self._now.as_of_us,
            sorted(set(frame["lot"].tolist())),
            # A reading without a layer may belong to any.
            layers=None if "" in known_layers else sorted(known_layers | {""}),
            parameters=one.parameters,
        )
        return frame, log

    def _old_results(self, known: dict[str, int], work: Work) -> Columns:
        ids = [] if work.everything else list(known.values())
        return series.wafer_results_of(self._connection, ids, sorted(work.lots))

    def _lots_of(self, changes: _Changes, lots: list[str]) -> list[str]:
        more = series.lots_between(self._connection, changes.anew, None, None)
        return sorted(set(lots) | set(more))

    # ---- what to make again ----------------------------------------------------------------

    def _changes(
        self, one: Characteristic, wafers: Wafers, ids: IntArray, old: Columns, work: Work
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
        maker = baselines.Maker(self._connection, one, self._radius, self._now.as_of_us)
        decisions = maker.decisions(wafers, groups, ids, changes.anew)
        result.new_baselines = self._writer.decide(decisions, self._now.as_of_us)
        stream_id = ids[groups.table["stream"]]
        concerned = set(stream_id.tolist()) | changes.anew
        sets = self._writer.in_force(concerned)
        assigned = assignment(groups, sets, assign_sets(stream_id, groups.table["at_us"], sets))
        found = wafer_statistics(wafers, groups, assigned, one, self._radius)
        kept.restore(self._connection, wafers, one, (groups, assigned), found)
        values = point_values(wafers, groups, found, one)
        scores = np.full(len(values), np.nan)
        if "map-distance" in one.charted:
            made = map_distances(without_flyers(wafers, found), groups, assigned)
            distances, z = kept.with_kept_distances(
                self._connection, wafers, stream_id, (groups, assigned), made
            )
            values, scores = joined([values, distances]), np.append(scores, z)
        points = _point_rows(groups, stream_id, with_limits(values, assigned, scores))
        self._clear(one, changes)
        points = self._signal(one, points, sets, changes, result)
        self._writer.insert(points_table, points)
        results = _wafer_rows(one, wafers, ids, found)
        self._writer.insert(wafer_results_table, results)
        result.notes += found.notes

    def _clear(self, one: Characteristic, changes: _Changes) -> None:
        self._writer.clear(changes.anew)
        rest = changes.groups.take(~np.isin(changes.groups["stream_id"], list(changes.anew)))
        series.delete_lots(self._connection, rest, one.charted)

    def _signal(
        self,
        one: Characteristic,
        points: Columns,
        sets: list[LimitSet],
        changes: _Changes,
        result: Updated,
    ) -> Columns:
        """The new points with their rule hits; those of the stored ones behind them are renewed."""
        first = _first_stamps(changes.groups)
        tails = {stream: us for stream, us in first.items() if stream not in changes.anew}
        before = signals.longest_window(one.rules) + 1
        stored = series.points_from(self._connection, one.charted, tails, before)
        sets = sets + baselines.of_points(self._connection, stored, sets)
        both = joined([points.pick(series.TAIL), stored])
        order = order_of([both[name] for name in signals.ORDER])
        correlated = baselines.surely_correlated(sets)
        names = np.empty(len(both), dtype=object)
        names[order] = signals.rule_hits(both.take(order), one.rules, correlated)
        points, later = points.having(rules=names[: len(points)]), names[len(points) :]
        # Points in front of the first change only lend their z; their own window is not all here.
        at = np.array([tails[stream] for stream in stored["stream_id"].tolist()], np.int64)
        changed = (stored["at_us"] >= at) & (later != stored["rules"])
        renewed = stored.having(rules=later).take(changed.astype(bool))
        series.update_rules(self._connection, renewed)
        fresh = _among(points, changes.groups)
        result.points = int(fresh.sum())
        result.signals = int((points["rules"][fresh] != "").sum())
        anew = points.take(np.isin(points["stream_id"], list(changes.anew - first.keys())))
        result.touched = _first_stamps(anew.having(first_us=anew["at_us"])) | first
        return points


def _with_ids(wafers: Wafers, ids: IntArray) -> Columns:
    stream = wafers.table["stream"]
    return wafers.table.having(stream_id=ids[stream] if len(ids) else stream)


def _changed_groups(new: Columns, old: Columns) -> Columns:
    """Points (stream_id, lot, layer) whose wafers differ, and the first stamp they had or have."""
    both = joined([new.pick(series.RESULT), old])
    wafer = row_codes([both[name] for name in (*GROUP, "wafer")])
    size = int(wafer.max(initial=-1)) + 1
    same = np.ones(size, bool)
    for name in _COMPARED:
        sides = np.full((2, size), np.inf)  # stands for no such wafer
        sides[0, wafer[: len(new)]], sides[1, wafer[len(new) :]] = new[name], old[name]
        same &= (sides[0] == sides[1]) | np.isnan(sides).all(axis=0)
    # A point stands at the last of its wafers, old or new, whichever wafer changed: the earliest
    # wafer of the lot is never after it.
    group = row_codes([both[name] for name in GROUP])
    count = int(group.max(initial=-1)) + 1
    first_us = np.full(count, np.iinfo(np.int64).max)
    np.minimum.at(first_us, group, both["at_us"])
    differs = np.bincount(group, weights=~same[wafer], minlength=count) > 0
    example = np.zeros(count, np.int64)
    example[group] = np.arange(len(both))
    return both.take(example).pick(GROUP).having(first_us=first_us).take(differs)


def _first_stamps(groups: Columns) -> dict[int, int]:
    streams, of = np.unique(groups["stream_id"], return_inverse=True)
    first = np.full(streams.size, np.iinfo(np.int64).max)
    np.minimum.at(first, of, groups["first_us"])
    return dict(zip(streams.tolist(), first.tolist(), strict=True))


def _among(rows: Columns, groups: Columns) -> BoolArray:
    """Whether each row belongs to one of the groups."""
    both = joined([rows.pick(GROUP), groups.pick(GROUP)])
    code = row_codes([both[name] for name in GROUP])
    return np.isin(code[: len(rows)], code[len(rows) :])


def _needed(wafers: Wafers, ids: IntArray, changes: _Changes) -> Wafers:
    """Only the wafers whose points are made again."""
    table = _with_ids(wafers, ids)
    wanted = np.isin(table["stream_id"], list(changes.anew))
    if not wanted.all():
        wanted = wanted | _among(table, changes.groups)
    return wafers if wanted.all() else subset(wafers, wanted)


def _point_rows(groups: PointGroups, stream_id: IntArray, values: Columns) -> Columns:
    """Rows of the table `points`, without rules yet."""
    point = values["point"]
    of_point = ("lot", "layer", "wafer", "at_us", "measured_us", "processed_us")
    of_value = ("statistic", "value", "n_wafers", "n_sites", "effective_sites", "df", "phase")
    limits = ("center", "lower_limit", "upper_limit", "sigma", "z")
    ids = values["baseline_id"]
    return Columns(
        {
            "stream_id": stream_id[point],
            **{name: groups.table[name][point] for name in of_point},
            **{name: values[name] for name in (*of_value, *limits)},
            "baseline_id": np.where(ids < 0, np.nan, ids.astype(np.float64)),
            "rules": text("", len(values)),
        }
    )


def _wafer_rows(
    one: Characteristic, wafers: Wafers, ids: IntArray, found: WaferStatistics
) -> Columns:
    """Rows of the table `wafer_results`."""
    table = _with_ids(wafers, ids)
    statistics = np.full((len(table), len(one.charted)), np.nan, dtype="<f8")
    for column, name in enumerate(one.charted):
        if name == "mean":
            statistics[:, column] = table["mean"]
        elif name in ("within-wafer", "residual"):
            statistics[:, column] = found.sd
        elif name in found.terms:
            statistics[:, column] = found.terms[name]
    packed = np.empty(len(table), dtype=object)
    packed[:] = [row.tobytes() for row in statistics]
    return table.pick(series.RESULT).having(
        sum_squares=found.squares, df=found.df, statistics=packed
    )

"""Limits of streams: set from the first points, in force, and set again when those change.

What people decide by hand is in `spc.monitoring.limits_by_hand`.
"""

from __future__ import annotations

import json
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Connection

from config.control_plan import Characteristic
from spc.monitoring.drafts import Baseline
from spc.monitoring.estimates import estimate
from spc.monitoring.grouping import PointGroups, group_points
from spc.monitoring.limit_sets import APPROVED, AUTOMATIC, WITHDRAWN, LimitSet, payload_text
from spc.monitoring.serial import add_autocorrelation
from spc.monitoring.wafers import Wafers, dense_streams, subset
from spc.monitoring.work import ENGINE
from spc.records import aggregation, limits
from spc.records.columns import Columns, order_of
from spc.records.stamps import from_us

IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

_ORDER = ["at_us", "lot", "layer", "wafer"]


def limit_set(row: Any) -> LimitSet:
    """A row of `baselines` with its payload read."""
    fields = dict(row._mapping)
    return LimitSet(**(fields | {"payload": json.loads(row.payload)}))


def in_force(connection: Connection, stream_ids: Iterable[int]) -> list[LimitSet]:
    """Automatic and approved sets of some streams."""
    rows = limits.of_streams(connection, stream_ids, (AUTOMATIC, APPROVED))
    return [limit_set(row) for row in rows]


def of_points(connection: Connection, points: Columns, known: Sequence[LimitSet]) -> list[LimitSet]:
    """Sets that some points name and that are not among the known ones."""
    named = points["baseline_id"]
    ids = set(named[np.isfinite(named)].astype(int).tolist()) - {one.id for one in known}
    if not ids:
        return []
    return [limit_set(row) for row in limits.by_ids(connection, ids)]


def surely_correlated(sets: Iterable[LimitSet]) -> dict[tuple[int, str], float]:
    """Autocorrelation of (set, statistic) where it is surely positive."""
    return {
        (one.id, name): float(found["phi"])
        for one in sets
        for name, found in one.payload["statistics"].items()
        if found.get("correlated")
    }


def to_set_again(connection: Connection, first_us: Mapping[int, int]) -> set[int]:
    """Streams whose limits may change with points that changed from a stamp on.

    They are those without automatic limits, and those whose baseline reaches up to the stamp.
    """
    rows = limits.spans(connection, first_us, AUTOMATIC)
    return {stream for stream, first in first_us.items() if first <= rows.get(stream, 2**62)}


def with_hand_made(connection: Connection, characteristic: str) -> set[int]:
    """Streams of a characteristic whose limits people have decided on."""
    rows = limits.decided_by_hand(connection, ENGINE)
    return {row.stream_id for row in rows if row.characteristic == characteristic}


def _members(payload: str) -> Any:
    return json.loads(payload)["members"]


@dataclass(frozen=True)
class Decision:
    """What is to become of the automatic limits of a stream.

    withdraw : number of the set to withdraw, and `reason` why. new : the set to put in force.
    """

    stream_id: int
    withdraw: int | None
    reason: str
    new: limits.NewSet | None


def carry_out(connection: Connection, decisions: Iterable[Decision], as_of_us: int) -> list[int]:
    """Write decisions; returns the numbers of the new sets, in their order."""
    made = []
    for one in decisions:
        if one.withdraw is not None:
            at = from_us(as_of_us)
            limits.decide(connection, one.withdraw, WITHDRAWN, at, ENGINE, one.reason)
        if one.new is not None:
            made.append(limits.add(connection, one.new))
    return made


@dataclass(frozen=True)
class Maker:
    """Sets the automatic limits of the streams of one characteristic."""

    connection: Connection
    characteristic: Characteristic
    wafer_radius_mm: float
    as_of_us: int

    def decisions(
        self, wafers: Wafers, groups: PointGroups, ids: IntArray, streams: frozenset[int]
    ) -> list[Decision]:
        """Which automatic limits to set or withdraw, of streams given with all their points."""
        rows = limits.of_streams(self.connection, streams, (AUTOMATIC,))
        old = {row.stream_id: row for row in rows}
        drafts = self._drafts(wafers, groups, ids, streams)
        read = np.bincount(wafers.wafer, minlength=len(wafers.table)) > 0
        bare = set(ids[wafers.table["stream"][~read]].tolist())
        one = self.characteristic
        if bare and aggregation.kept_units(self.connection, one.name) - {one.unit}:
            bare = set()  # limits in the unit of then would be wrong now, by a factor
        found = []
        for stream in sorted(streams):
            draft, before = drafts.get(stream), old.get(stream)
            if before is not None and draft is not None:
                if before.payload == draft.payload:
                    continue
                if stream in bare and _members(before.payload) == _members(draft.payload):
                    continue  # the same points, whose site values were since kept as sums alone
            reason = ""
            if before is not None:
                reason = "its first points are not what they were: readings came late or changed"
                if draft is not None and draft.n_points != before.n_points:
                    reason = f"the plan asks for {draft.n_points} baseline points"
                if draft is None:
                    reason = "the stream has fewer points than a baseline needs"
            if before is not None or draft is not None:
                withdraw = None if before is None else int(before.id)
                found.append(Decision(stream, withdraw, reason, draft))
        return found

    def _drafts(
        self, wafers: Wafers, groups: PointGroups, ids: IntArray, streams: frozenset[int]
    ) -> dict[int, limits.NewSet]:
        table = groups.table
        stream = table["stream"]
        count = np.bincount(stream, minlength=len(ids))
        enough = (count >= self.characteristic.baseline_points) & np.isin(ids, list(streams))
        order = order_of([table[name] for name in ("stream", *_ORDER)])
        start = np.cumsum(count) - count
        rank = np.arange(len(table)) - start[stream[order]]
        first = np.zeros(len(table), bool)
        first[order[rank < self.characteristic.baseline_points]] = True
        chosen = first & enough[stream]
        if not chosen.any():
            return {}
        reason = f"the first {self.characteristic.baseline_points} points of the stream"
        payloads, spans = self.payloads(wafers, groups, chosen)
        return {
            int(ids[code]): limits.NewSet(
                stream_id=int(ids[code]),
                status=AUTOMATIC,
                from_us=spans[code][0],
                first_us=spans[code][0],
                last_us=spans[code][1],
                n_points=spans[code][2],
                payload=payload,
                made_us=self.as_of_us,
                made_by=ENGINE,
                reason=reason,
            )
            for code, payload in payloads.items()
        }

    def payloads(
        self, wafers: Wafers, groups: PointGroups, chosen: BoolArray
    ) -> tuple[dict[int, str], dict[int, tuple[int, int, int]]]:
        """Payload (JSON) and span (first and last stamp, points) by stream code of `wafers`.

        `chosen` marks the points of the baselines.
        """
        part, codes = dense_streams(subset(wafers, chosen[groups.of_wafer]))
        base = Baseline(
            part,
            group_points(part.table, self.characteristic.point),
            self.characteristic,
            self.wafer_radius_mm,
        )
        drafts = estimate(base)
        add_autocorrelation(base, drafts)
        at, stream = base.groups.table["at_us"], base.stream
        start = np.searchsorted(stream, np.arange(codes.size))
        low, high = np.minimum.reduceat(at, start), np.maximum.reduceat(at, start)
        count = np.bincount(stream)
        spans = {int(c): (int(low[s]), int(high[s]), int(count[s])) for s, c in enumerate(codes)}
        return {int(codes[s]): payload_text(one) for s, one in enumerate(drafts)}, spans

"""Points and limits to rule hits.

Rules of one point are judged on its marginal z, which is what the limits on the chart show. Rules
of several points are judged on one-step residuals where the stream's autocorrelation is surely
positive, else on z. A window never reaches across a change of limits; only monitoring points hit.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spc.monitoring.limit_sets import kind_of
from spc.records.columns import Columns, codes_of, starts_of_groups
from spc.stats.autocorrelation import residual_chart
from spc.stats.rules import evaluate, first_of_run, parse_rules

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

ORDER = ["stream_id", "statistic", "at_us", "lot", "layer", "wafer"]
SERIES = ["stream_id", "statistic"]


def longest_window(rules: Sequence[str]) -> int:
    """Points that the longest rule looks at."""
    return max((rule.m for rule in parse_rules(rules)), default=1)


@dataclass(frozen=True)
class Series:
    """Series of points side by side: row and column of each point in a rectangle."""

    row: IntArray
    column: IntArray
    shape: tuple[int, int]

    def fill(self, values: NDArray, empty: float) -> NDArray:
        """The rectangle of some values."""
        out = np.full(self.shape, empty, dtype=values.dtype)
        out[self.row, self.column] = values
        return out

    def take(self, table: NDArray) -> NDArray:
        """Values of the points again; leading axes stay."""
        return np.asarray(table[..., self.row, self.column])


def series_of(frame: Columns) -> Series:
    """Rectangle of points that are sorted by ORDER."""
    new = starts_of_groups([frame[name] for name in SERIES])
    row = np.asarray(np.cumsum(new) - 1, np.int64)
    start = np.flatnonzero(new)
    column = np.arange(len(frame)) - start[row] if len(frame) else np.zeros(0, np.int64)
    longest = int(column.max(initial=-1)) + 1
    return Series(row, column, (start.size, longest))


def rule_hits(
    frame: Columns, rules: Sequence[str], phi: Mapping[tuple[int, str], float]
) -> NDArray[np.object_]:
    """Names of the rules that each point completes, joined by commas.

    Parameters
    ----------
    frame : points sorted by ORDER, with z, baseline_id and phase.
    rules : names, in the order they are listed.
    phi : autocorrelation of (baseline id, statistic) where it is surely positive.
    """
    names = np.full(len(frame), "", dtype=object)
    chosen = parse_rules(rules)
    z = frame["z"]
    judged = np.flatnonzero(np.isfinite(z))
    if not judged.size or not chosen:
        return names
    part = frame.take(judged)
    series, z = series_of(part), z[judged]
    segment = part["baseline_id"].astype(np.int64)
    free = _residuals(part, series, z, segment, phi)
    monitoring = part["phase"] == "monitoring"
    kinds, statistics = codes_of(part["statistic"])
    above_only = np.array([kind_of(s) == "distance" for s in statistics], bool)[kinds]
    codes = series.fill(segment, -1)
    hits = np.zeros((len(chosen), judged.size), bool)
    for values, wanted in ((z, True), (free, False)):
        index = [i for i, rule in enumerate(chosen) if (rule.m == 1) == wanted]
        if not index:
            continue
        found = evaluate(
            series.fill(values, np.nan), [chosen[i] for i in index], codes, missing="skip"
        )
        # A small distance from the reference map means nothing.
        hits[index] = series.take(found.hits) & ~(above_only & (series.take(found.side) < 0))
    hits &= monitoring
    joined = np.full(judged.size, "", dtype=object)
    for i, rule in enumerate(chosen):
        joined[hits[i]] = joined[hits[i]] + (rule.name + ",")
    names[judged] = [text.rstrip(",") for text in joined]
    return names


def _residuals(
    part: Columns,
    series: Series,
    z: FloatArray,
    segment: IntArray,
    phi: Mapping[tuple[int, str], float],
) -> FloatArray:
    """z, or the one-step residuals of series whose autocorrelation is surely positive."""
    if not phi:
        return z
    pairs = zip(segment.tolist(), part["statistic"].tolist(), strict=True)
    lean = np.array([phi.get(pair, 0.0) for pair in pairs], float)
    if not lean.any():
        return z
    runs = np.unique(np.column_stack([series.row, segment]), axis=0, return_inverse=True)[1]
    return residual_chart(z, 0.0, lean, stream=runs.ravel().astype(np.int64)).z


def first_signals(frame: Columns) -> BoolArray:
    """Points at which a rule begins to signal: later points of the same run are the same event.

    Parameters
    ----------
    frame : points sorted by ORDER, with rules (names joined by commas), baseline_id and z.
    """
    n = len(frame)
    out = np.zeros(n, bool)
    judged = np.flatnonzero(np.isfinite(frame["z"]))
    if not judged.size:
        return out
    part = frame.take(judged)
    series = series_of(part)
    codes = series.fill(part["baseline_id"].astype(np.int64), -1)
    there = series.fill(np.ones(judged.size, bool), False)
    listed = [set(text.split(",")) - {""} for text in part["rules"].tolist()]
    for name in sorted(set().union(*listed)):
        marks = series.fill(np.array([name in one for one in listed], bool), False)
        out[judged] |= series.take(first_of_run(marks, codes, there))
    return out

"""Autocorrelation of the points of a baseline, and what it does to the limits."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from spc.monitoring.drafts import Baseline
from spc.monitoring.limit_sets import AUTOMATIC, LimitSet, kind_of, rounded
from spc.monitoring.points import (
    assignment,
    map_distances,
    point_values,
    wafer_statistics,
    with_limits,
)
from spc.monitoring.wafer_statistics import without_flyers
from spc.records.columns import Columns, codes_of, order_of
from spc.stats.autocorrelation import ar1_baseline, lag1

# Two-sided, so that each bound by itself is a 99 % one.
CONFIDENCE = 0.98


def add_autocorrelation(base: Baseline, payloads: list[dict[str, Any]]) -> None:
    """Add phi, its interval, `correlated` and `variance_bias` to the statistics of payloads.

    Where phi is surely positive the spread of the baseline points about their own mean is too
    small for the sigma of a point; `variance_bias` is by how much (the limits divide by it).
    """
    at = base.groups.table["at_us"]
    stream = base.stream
    sets = [
        LimitSet(
            s,
            s,
            AUTOMATIC,
            0,
            int(at[stream == s].min()),
            int(at[stream == s].max()),
            0,
            payload,
            0,
            "",
            "",
        )
        for s, payload in enumerate(payloads)
    ]
    assigned = assignment(base.groups, sets, stream)
    found = wafer_statistics(
        base.wafers, base.groups, assigned, base.characteristic, base.wafer_radius_mm
    )
    values = point_values(base.wafers, base.groups, found, base.characteristic)
    distances, z = map_distances(without_flyers(base.wafers, found), base.groups, assigned)
    parts = [(values, np.full(len(values), np.nan)), (distances, z)]
    for rows, scores in parts:
        if len(rows):
            _add(base, payloads, with_limits(rows, assigned, scores))


def _add(base: Baseline, payloads: list[dict[str, Any]], points: Columns) -> None:
    table = base.groups.table
    point = points["point"]
    names = ("lot", "layer", "wafer", "at_us")
    points = points.having(
        stream=base.stream[point], **{name: table[name][point] for name in names}
    )
    keys = ("statistic", "stream", "at_us", "lot", "layer", "wafer")
    points = points.take(order_of([points[key] for key in keys]))
    points = points.take(np.isfinite(points["z"]) & ~_wild(payloads, points))
    kinds, statistics = codes_of(points["statistic"])
    for code, statistic in enumerate(statistics):
        rows = points.take(kinds == code)
        stream = rows["stream"]
        found = lag1(rows["z"], stream=stream, confidence=CONFIDENCE)
        for s in np.unique(stream):
            entry = payloads[s]["statistics"].get(statistic)
            if entry is None or not np.isfinite(found.phi[s]):
                continue
            correlated = bool(found.low[s] > 0)
            entry["phi"] = rounded(float(found.phi[s]))
            entry["phi_low"] = rounded(float(found.low[s]))
            entry["phi_high"] = rounded(float(found.high[s]))
            entry["correlated"] = correlated
            entry["n"] = int(found.n[s])
            if correlated and kind_of(statistic) == "mean":
                effect = ar1_baseline(float(found.phi[s]), int(found.n[s]))
                entry["variance_bias"] = rounded(float(effect.variance_bias[0]))


def _wild(payloads: list[dict[str, Any]], points: Columns) -> NDArray[np.bool_]:
    """Points that the estimates of their statistic do not stand on."""
    wild = {
        (s, w["lot"], w["layer"], w["wafer"], w["excluded"])
        for s, one in enumerate(payloads)
        for w in one["wild"]
    }
    if not wild:
        return np.zeros(len(points), bool)
    rows = points.rows(("stream", "lot", "layer", "wafer", "statistic"))
    return np.array([row in wild or (*row[:4], "all") in wild for row in rows], bool)

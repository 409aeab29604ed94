"""Autocorrelation of the points of a baseline, and what it does to the limits."""

from __future__ import annotations

from typing import Any

import numpy as np

from spc.monitoring.estimates import Baseline
from spc.monitoring.limit_sets import AUTOMATIC, LimitSet, kind_of, rounded
from spc.monitoring.points import (
    assignment,
    map_distances,
    point_values,
    wafer_statistics,
    with_limits,
)
from spc.stats.autocorrelation import ar1_baseline, lag1

# Two-sided, so that each bound by itself is a 99 % one.
CONFIDENCE = 0.98


def add_autocorrelation(base: Baseline, payloads: list[dict[str, Any]]) -> None:
    """Add phi, its interval, `correlated` and `variance_bias` to the statistics of payloads.

    Where phi is surely positive the spread of the baseline points about their own mean is too
    small for the sigma of a point; `variance_bias` is by how much (the limits divide by it).
    """
    at = base.groups.table["at_us"].to_numpy(np.int64)
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
    distances, z = map_distances(base.wafers, base.groups, assigned)
    parts = [(values, np.full(len(values), np.nan)), (distances, z)]
    for rows, scores in parts:
        if len(rows):
            _add(base, payloads, with_limits(rows, assigned, scores))


def _add(base: Baseline, payloads: list[dict[str, Any]], points: Any) -> None:
    table = base.groups.table
    wild = [
        {(w["lot"], w["layer"], w["wafer"], name) for w in one["wild"] for name in _kept_from(w)}
        for one in payloads
    ]
    point = points["point"].to_numpy(np.int64)
    points = points.assign(stream=base.stream[point])
    for name in ("lot", "layer", "wafer", "at_us"):
        points[name] = table[name].to_numpy()[point]
    points = points.sort_values(["stream", "at_us", "lot", "layer", "wafer"])
    for statistic, rows in points.groupby("statistic", sort=False):
        keys = rows[["stream", "lot", "layer", "wafer"]].itertuples(index=False)
        good = np.array(
            [
                not ({(lot, layer, wafer, statistic), (lot, layer, wafer, "all")} & wild[s])
                for s, lot, layer, wafer in keys
            ],
            bool,
        )
        good &= np.isfinite(rows["z"].to_numpy(np.float64))
        if not good.any():
            continue
        stream = rows["stream"].to_numpy(np.int64)[good]
        found = lag1(rows["z"].to_numpy(np.float64)[good], stream=stream, confidence=CONFIDENCE)
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
            if correlated and kind_of(str(statistic)) == "mean":
                effect = ar1_baseline(float(found.phi[s]), int(found.n[s]))
                entry["variance_bias"] = rounded(float(effect.variance_bias[0]))


def _kept_from(wild: dict[str, Any]) -> tuple[str, ...]:
    return (wild["excluded"],)

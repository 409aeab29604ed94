"""Limits and standardised values of points, from the set of limits that holds for each."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spc.monitoring.limit_sets import LimitSet, kind_of
from spc.stats.components import Components
from spc.stats.limit_options import LimitOptions
from spc.stats.limits import mean_limits
from spc.stats.serial_effect import SerialEffect
from spc.stats.spread import distance_limit, spread_limits, wafer_spread_limits
from spc.stats.tails import SCORE_LIMIT, chi2_quantile

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

LIMIT_COLUMNS = ("center", "lower_limit", "upper_limit", "sigma", "z")
# A spread law with its own degrees of freedom gives F limits, with none chi-square limits.
_OWN_LAW = LimitOptions(widen=True)


@dataclass(frozen=True)
class PointSizes:
    """Sample sizes of points of one statistic; arrays (n,)."""

    n_wafers: FloatArray
    effective_sites: FloatArray
    df: FloatArray

    @property
    def sites_a_wafer(self) -> FloatArray:
        """Harmonic mean of the sites of the wafers of a point."""
        return np.maximum(self.effective_sites / self.n_wafers, 1.0)


def limits_of(
    statistic: str,
    value: FloatArray,
    sizes: PointSizes,
    found: Sequence[Mapping[str, Any]],
    of_point: IntArray,
) -> dict[str, FloatArray]:
    """Limits and z of points of one statistic.

    Parameters
    ----------
    value : (n,) plotted values, in the unit of the statistic.
    found : what each set knows of this statistic (an entry of `statistics` in its payload).
    of_point : (n,) index into `found` of each point.

    Returns
    -------
    Arrays (n,) by the names of LIMIT_COLUMNS. A distance gets its z from elsewhere (NaN here).
    """
    if statistic == "map-distance":
        return _distance_limits(value, sizes)
    if kind_of(statistic) == "spread":
        return _spread_limits(statistic, value, sizes, found, of_point)
    components = components_of([one["components"] for one in found])
    sites = sizes.sites_a_wafer if statistic == "mean" else np.ones_like(value)
    bias = np.array([one.get("variance_bias") or 1.0 for one in found], float)
    ones = np.ones_like(bias)
    serial = SerialEffect(np.zeros_like(bias), bias, ones, ones, ones)
    center = np.array([one["center"] for one in found], float)[of_point]
    options = LimitOptions(serial=serial)
    found_limits = mean_limits(
        components, sizes.n_wafers, sites, stream=of_point, center=center, options=options
    )
    off = value - found_limits.center
    still = found_limits.sigma <= 0
    z = np.where(still, np.sign(off) * SCORE_LIMIT, off / np.where(still, 1.0, found_limits.sigma))
    return _frame(
        found_limits.center, found_limits.lower, found_limits.upper, found_limits.sigma, z
    )


def components_of(kept: Sequence[Mapping[str, Any]]) -> Components:
    """Components of several baselines from what their payloads keep."""
    size = len(kept)

    def column(name: str) -> FloatArray:
        return np.array([np.nan if one[name] is None else one[name] for one in kept], float)

    counts = {
        name: np.array([one[name] for one in kept], np.int64)
        for name in ("n_lots", "n_wafers", "n_sites")
    }
    covariance = np.array([one["covariance"] for one in kept], float).reshape(size, 4, 4)
    return Components(
        mean=column("mean"),
        mean_se=column("mean_se"),
        site=column("site"),
        wafer=column("wafer"),
        lot=column("lot"),
        tool=np.zeros(size),
        covariance=covariance,
        loglik=np.full(size, np.nan),
        n_tools=np.zeros(size, np.int64),
        **counts,
        site_df=column("site_df"),
        pooled=tuple(one["pooled"] for one in kept),
        converged=np.ones(size, bool),
        iterations=0,
    )


def _spread_limits(
    statistic: str,
    value: FloatArray,
    sizes: PointSizes,
    found: Sequence[Mapping[str, Any]],
    of_point: IntArray,
) -> dict[str, FloatArray]:
    df_sigma = np.array([one["df_sigma"] or np.inf for one in found], float)[of_point]
    sigma = np.array([one["sigma"] or 0.0 for one in found], float)[of_point]
    if statistic == "wafer-to-wafer":
        # Its sigma follows the sites a wafer, where the wafers vary no more than chance.
        own = wafer_spread_limits(
            components_of([one["components"] for one in found]),
            sizes.n_wafers,
            sizes.sites_a_wafer,
            stream=of_point,
        ).expected
        plain = np.isinf(df_sigma) & np.isfinite(own)
        sigma = np.where(plain, own, sigma)
    limits = spread_limits(sigma, sizes.df, df_sigma=df_sigma, options=_OWN_LAW)
    z = limits.scores(value)
    # A spread known to be zero: any spread at all is beyond it.
    z = np.where(np.isnan(z) & (sizes.df > 0), np.where(value > 0, SCORE_LIMIT, 0.0), z)
    # Two wafer means alike to the last digit read say more of the rounding than of the process.
    coarse = sizes.df < 2
    lower = np.where(coarse & np.isfinite(limits.lower), 0.0, limits.lower)
    z = np.where(coarse, np.maximum(z, -3.0), z)
    return _frame(limits.center, lower, limits.upper, limits.sigma, z)


def _distance_limits(value: FloatArray, sizes: PointSizes) -> dict[str, FloatArray]:
    df = np.maximum(sizes.df, 1.0)
    none = np.full(value.shape, np.nan)
    return _frame(
        chi2_quantile(0.5, df, upper=True), none, distance_limit(df), np.sqrt(2.0 * df), none
    )


def _frame(
    center: FloatArray, lower: FloatArray, upper: FloatArray, sigma: FloatArray, z: FloatArray
) -> dict[str, FloatArray]:
    columns = (center, lower, upper, sigma, np.clip(z, -SCORE_LIMIT, SCORE_LIMIT))
    return dict(zip(LIMIT_COLUMNS, columns, strict=True))


def assign_sets(stream_id: IntArray, at_us: IntArray, sets: Sequence[LimitSet]) -> IntArray:
    """Index of the set of limits that holds for each point, -1 for none.

    The approved set with the newest `from_us` not after the point (the newer decision of two
    alike); without one the automatic set of the stream.
    """
    out = np.full(stream_id.size, -1, np.int64)
    order = sorted(range(len(sets)), key=lambda i: (sets[i].by_hand, sets[i].from_us, sets[i].id))
    by_stream: dict[int, list[int]] = {}
    for index in order:
        by_stream.setdefault(sets[index].stream_id, []).append(index)
    order_of_points = np.argsort(stream_id, kind="stable")
    streams, start = np.unique(stream_id[order_of_points], return_index=True)
    mine_of = dict(zip(streams.tolist(), np.split(order_of_points, start[1:]), strict=True))
    for stream, candidates in by_stream.items():
        mine = mine_of.get(stream)
        if mine is None:
            continue
        for index in candidates:
            one = sets[index]
            holds = (at_us[mine] >= one.from_us) if one.by_hand else np.ones(mine.size, bool)
            out[mine[holds]] = index
    return out

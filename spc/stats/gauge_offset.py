"""How far two gauges are apart, from wafers measured on both and wafers measured on one."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import stats

Array = NDArray[np.float64]
Interval = tuple[float, float]


@dataclass(frozen=True)
class GaugeOffset:
    """How far the first gauge reads above the second, value unit.

    offset, low, high, standard_error, df : with a t interval.
    method : ``paired`` (wafers measured on both), ``unpaired``, or ``mixed`` (both, weighted).
    n_paired, n_first, n_second : wafers on both, on the first alone, on the second alone.
    sd_difference : sd of the wafer differences. agreement : limits that 95 % of wafer differences
        keep (Bland & Altman 1986, Lancet 327:307-310). slope, slope_low, slope_high : change of
        the difference a unit of level; NaN with fewer than three pairs or no range of level.
    """

    offset: float
    low: float
    high: float
    standard_error: float
    df: float
    method: str
    n_paired: int
    n_first: int
    n_second: int
    sd_difference: float
    agreement: Interval
    slope: float
    slope_low: float
    slope_high: float


def gauge_offset(
    values: ArrayLike, wafer: ArrayLike, first: ArrayLike, *, confidence: float = 0.95
) -> GaugeOffset:
    """Offset between two gauges from wafers measured on both, and from those measured on one.

    Parameters
    ----------
    values : (n,) readings, value unit; NaN left out. wafer : (n,) codes or names of the wafer.
    first : (n,) bool, True where the reading is of the first gauge.

    Readings of a wafer on a gauge are averaged first: wafers, not sites, are independent. Wafers
    on one gauge only add an unpaired estimate, weighted with the paired one by its variance; they
    must be like each other (the same product and weeks), which only the caller can know.

    Raises
    ------
    ValueError: shapes differ, or there are neither two pairs nor two wafers on each gauge.
    """
    both, alone_first, alone_second = _by_wafer(values, wafer, first)
    estimates: list[tuple[float, float, float]] = []  # offset, variance, df
    difference = both[:, 0] - both[:, 1]
    n = difference.size
    sd = float(difference.std(ddof=1)) if n > 1 else float("nan")
    if n > 1:
        estimates.append((float(difference.mean()), sd**2 / n, n - 1.0))
    if min(alone_first.size, alone_second.size) > 1:
        estimates.append(_unpaired(alone_first, alone_second))
    if not estimates:
        raise ValueError(
            f"{n} wafers on both gauges, {alone_first.size} and {alone_second.size} on one: an "
            "offset needs two on both, or two on each"
        )
    offset, variance, df = _combined(estimates)
    half = float(stats.t.ppf((1 + confidence) / 2, df)) * np.sqrt(variance)
    method = "mixed" if len(estimates) == 2 else "paired" if n > 1 else "unpaired"
    mean = float(difference.mean()) if n else float("nan")
    slope, slope_low, slope_high = _slope(both, difference, confidence)
    return GaugeOffset(
        offset=offset,
        low=offset - half,
        high=offset + half,
        standard_error=float(np.sqrt(variance)),
        df=df,
        method=method,
        n_paired=n,
        n_first=int(alone_first.size),
        n_second=int(alone_second.size),
        sd_difference=sd,
        agreement=(mean - 1.959964 * sd, mean + 1.959964 * sd),
        slope=slope,
        slope_low=slope_low,
        slope_high=slope_high,
    )


def _by_wafer(values: ArrayLike, wafer: ArrayLike, first: ArrayLike) -> tuple[Array, Array, Array]:
    """Wafer means: (n_paired, 2) on both gauges, and those on the first and second alone."""
    y, names, side = np.asarray(values, float), np.asarray(wafer), np.asarray(first, bool)
    if not (y.shape == names.shape == side.shape) or y.ndim != 1:
        raise ValueError(
            f"values {y.shape}, wafer {names.shape} and first {side.shape} must be one length"
        )
    keep = np.isfinite(y)
    codes = np.unique(names[keep], return_inverse=True)[1]
    y, side = y[keep], side[keep]
    size = int(codes.max()) + 1 if codes.size else 0
    means = np.full((size, 2), np.nan)
    for k, here in enumerate((side, ~side)):
        count = np.bincount(codes[here], minlength=size)
        total = np.bincount(codes[here], y[here], minlength=size)
        means[:, k] = np.divide(total, count, out=np.full(size, np.nan), where=count > 0)
    seen = np.isfinite(means)
    return (
        means[seen.all(axis=1)],
        means[seen[:, 0] & ~seen[:, 1], 0],
        means[seen[:, 1] & ~seen[:, 0], 1],
    )


def _unpaired(a: Array, b: Array) -> tuple[float, float, float]:
    """Difference of means, its variance and Welch's degrees of freedom (Welch 1947)."""
    va, vb = a.var(ddof=1) / a.size, b.var(ddof=1) / b.size
    variance = float(va + vb)
    df = variance**2 / (va**2 / (a.size - 1) + vb**2 / (b.size - 1)) if variance > 0 else a.size
    return float(a.mean() - b.mean()), variance, float(df)


def _combined(estimates: list[tuple[float, float, float]]) -> tuple[float, float, float]:
    """Estimates weighted by their variances, which are estimated: Meier's (1953) correction.

    Variance of the weighted mean (1/W)(1 + 4 sum p (1 - p)/df), p a weight's share (Meier 1953,
    Biometrics 9:59-73); degrees of freedom 1 / sum(p^2/df).
    """
    value, variance, df = (np.array(column) for column in zip(*estimates, strict=True))
    if (variance <= 0).any():
        best = int(variance.argmin())
        return float(value[best]), float(variance[best]), float(df[best])
    share = (1 / variance) / (1 / variance).sum()
    inflate = 1 + 4 * float((share * (1 - share) / df).sum())
    return (
        float(share @ value),
        inflate / float((1 / variance).sum()),
        1 / float((share**2 / df).sum()),
    )


def _slope(both: Array, difference: Array, confidence: float) -> tuple[float, float, float]:
    level = both.mean(axis=1)
    nan = float("nan")
    if difference.size < 3 or np.ptp(level) == 0:
        return nan, nan, nan
    fit = stats.linregress(level, difference)
    half = stats.t.ppf((1 + confidence) / 2, difference.size - 2) * fit.stderr
    return float(fit.slope), float(fit.slope - half), float(fit.slope + half)

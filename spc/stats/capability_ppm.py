"""Parts per million out of specification: expected from a normal law, and observed."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike
from scipy import special, stats

from spc.stats.capability_indices import (
    Array,
    Sigma,
    SpecLimits,
    noncentral_t_interval,
    one_sided,
)

MILLION = 1e6


def ppm_expected(mean: ArrayLike, sd: ArrayLike, spec: SpecLimits) -> tuple[Array, Array, Array]:
    """ppm below, above and in all, by the normal law (plug-in). 0 on a side without a limit."""
    low, high = one_sided(mean, sd, spec)
    blank = np.isnan(np.fmin(low, high))
    below, above = (
        np.where(np.isnan(side), 0.0, MILLION * special.ndtr(-3.0 * side)) for side in (low, high)
    )
    return tuple(np.where(blank, np.nan, p) for p in (below, above, below + above))  # type: ignore[return-value]


def ppm_interval(
    mean: ArrayLike, sigma: Sigma, spec: SpecLimits, confidence: float = 0.95
) -> tuple[Array, Array]:
    """Interval of the expected ppm in all.

    One limit: exact, from the noncentral t of that side. Two limits: delta method on the normal
    score of the fraction out (variance of the mean sd^2/n, of the sd sd^2/(2 df)), n the effective
    number; close to exact when one side dominates, and checked by simulation in the tests.
    """
    low, high = one_sided(mean, sigma.sd, spec)
    if spec.lower is None or spec.upper is None:
        least, most = noncentral_t_interval(np.fmin(low, high), sigma, confidence)
        return MILLION * special.ndtr(-3.0 * most), MILLION * special.ndtr(-3.0 * least)
    blank = np.isnan(low + high)
    # Distances to the limits in sds.
    a, b = (np.where(blank, 1.0, 3.0 * side) for side in (low, high))
    # A process wholly outside is 1 to all digits: keep its score finite.
    log_out = np.minimum(np.logaddexp(special.log_ndtr(-a), special.log_ndtr(-b)), -1e-16)
    score = -special.ndtri_exp(log_out)
    # d(score)/d(mean) and d(score)/d(ln sd), in units of the sd, over the density at the score.
    log_density = -0.5 * score**2
    to_mean = np.exp(-0.5 * a**2 - log_density) - np.exp(-0.5 * b**2 - log_density)
    to_sd = -(a * np.exp(-0.5 * a**2 - log_density) + b * np.exp(-0.5 * b**2 - log_density))
    error = np.sqrt(to_mean**2 / sigma.n_effective + to_sd**2 / (2.0 * sigma.df))
    error = np.where(blank, np.nan, error)
    z = stats.norm.ppf((1 + confidence) / 2)
    return (
        np.asarray(MILLION * special.ndtr(-(score + z * error))),
        np.asarray(MILLION * special.ndtr(-(score - z * error))),
    )


def ppm_observed(
    n_out: ArrayLike,
    n_readings: ArrayLike,
    *,
    confidence: float = 0.95,
    n_effective: ArrayLike | None = None,
) -> tuple[Array, Array, Array]:
    """Observed ppm with its binomial interval (Clopper & Pearson 1934, exact for independent ones).

    n_effective : independent readings that the sample is worth; the interval is then that of the
        same share among so many (sites out of specification come in clusters).
    NaN without readings. Raises ValueError when more are out than there are.
    """
    out, n = np.broadcast_arrays(np.asarray(n_out, float), np.asarray(n_readings, float))
    if ((out < 0) | (out > n)).any():
        raise ValueError("readings out of specification must be between 0 and the readings")
    size = np.where(n > 0, n, np.nan)
    worth = size if n_effective is None else np.minimum(np.asarray(n_effective, float), size)
    share = out / size
    count = share * worth
    tail = (1 - confidence) / 2
    low = np.where(count > 0, stats.beta.ppf(tail, np.maximum(count, 1e-9), worth - count + 1), 0.0)
    high = np.where(out < n, stats.beta.isf(tail, count + 1, np.maximum(worth - count, 1e-9)), 1.0)
    blank = np.isnan(size)
    shown = [MILLION * np.where(blank, np.nan, v) for v in (share, low, high)]
    return shown[0], shown[1], shown[2]

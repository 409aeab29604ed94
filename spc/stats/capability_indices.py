"""Capability indices and their intervals, from a normal process.

    Cp  = (USL - LSL) / (6 s)                    Pp with the overall s
    Cpk = min(USL - mean, mean - LSL) / (3 s)    Ppk with the overall s
    Cpm = (USL - LSL) / (6 sqrt(s^2 + (mean - T)^2))

Definitions: ISO 22514-2; NIST/SEMATECH e-Handbook 6.1.6. Which index it is depends only on the s
handed in: within-lot sigma for Cp and Cpk, overall sigma for Pp and Ppk.

An estimate of sigma comes as a `Sigma`: its value, its degrees of freedom and the number of
independent values that the mean is worth in that sigma's terms. With plain independent readings
these are n - 1 and n; with sites in wafers in lots they are far fewer (`capability_sampling`).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import special, stats

Array = NDArray[np.float64]


@dataclass(frozen=True)
class SpecLimits:
    """Specification limits and target of one characteristic, value unit; None when absent."""

    lower: float | None = None
    upper: float | None = None
    target: float | None = None

    def __post_init__(self) -> None:
        if self.lower is None and self.upper is None:
            raise ValueError("capability needs a lower or an upper specification limit")
        if self.lower is not None and self.upper is not None and not self.lower < self.upper:
            raise ValueError(
                f"lower limit {self.lower:g} must be below the upper limit {self.upper:g}"
            )


@dataclass(frozen=True)
class Sigma:
    """A standard deviation with what is known about it.

    sd : value unit. df : its degrees of freedom (chi-square).
    n_effective : sd^2 / variance of the mean. Scalars or arrays of one shape.
    """

    sd: Array
    df: Array
    n_effective: Array

    @classmethod
    def of(cls, sd: ArrayLike, df: ArrayLike, n_effective: ArrayLike) -> Sigma:
        a, b, c = np.broadcast_arrays(*(np.asarray(v, float) for v in (sd, df, n_effective)))
        return cls(a, b, c)

    @classmethod
    def independent(cls, sd: ArrayLike, n: ArrayLike) -> Sigma:
        """From n independent readings."""
        n = np.asarray(n, float)
        return cls.of(sd, n - 1.0, n)


def _positive(sd: ArrayLike) -> Array:
    sd = np.asarray(sd, float)
    return np.where(sd > 0, sd, np.nan)


def cp(sd: ArrayLike, spec: SpecLimits) -> Array:
    """Cp (or Pp); NaN for a one-sided specification or an sd that is not positive."""
    if spec.lower is None or spec.upper is None:
        return np.full(np.shape(sd), np.nan)
    return np.asarray((spec.upper - spec.lower) / (6.0 * _positive(sd)))


def one_sided(mean: ArrayLike, sd: ArrayLike, spec: SpecLimits) -> tuple[Array, Array]:
    """Cpl and Cpu, distances of the mean to each limit in units of 3 sd; NaN where no limit."""
    mean, sd = np.broadcast_arrays(np.asarray(mean, float), _positive(sd))
    blank = np.full(mean.shape, np.nan)
    low = blank if spec.lower is None else (mean - spec.lower) / (3.0 * sd)
    high = blank if spec.upper is None else (spec.upper - mean) / (3.0 * sd)
    return low, high


def cpk(mean: ArrayLike, sd: ArrayLike, spec: SpecLimits) -> Array:
    """Cpk (or Ppk): the smaller of Cpl and Cpu; the one there is for a one-sided specification."""
    return np.asarray(np.fmin(*one_sided(mean, sd, spec)))


def off_centre(mean: ArrayLike, spec: SpecLimits) -> Array:
    """k = |mean - midpoint| / half width; Cpk = (1 - k) Cp (e-Handbook 6.1.6)."""
    if spec.lower is None or spec.upper is None:
        return np.full(np.shape(mean), np.nan)
    middle, half = (spec.lower + spec.upper) / 2, (spec.upper - spec.lower) / 2
    return np.asarray(np.abs(np.asarray(mean, float) - middle) / half)


def cpm(mean: ArrayLike, sd: ArrayLike, spec: SpecLimits) -> Array:
    """Cpm, which counts distance from target as spread (Chan, Cheng & Spiring 1988).

    NaN without both limits and a target.
    """
    if spec.lower is None or spec.upper is None or spec.target is None:
        return np.full(np.broadcast_shapes(np.shape(mean), np.shape(sd)), np.nan)
    off = np.asarray(mean, float) - spec.target
    return np.asarray((spec.upper - spec.lower) / (6.0 * np.sqrt(_positive(sd) ** 2 + off**2)))


def _tails(confidence: float) -> tuple[float, float]:
    if not 0 < confidence < 1:
        raise ValueError(f"confidence {confidence} must be between 0 and 1")
    return (1 - confidence) / 2, (1 + confidence) / 2


def cp_interval(index: ArrayLike, df: ArrayLike, confidence: float = 0.95) -> tuple[Array, Array]:
    """Two-sided chi-square interval of Cp (Kane 1986; exact). For one side use 2 c - 1."""
    low, high = _tails(confidence)
    df = _positive(df)
    index = np.asarray(index, float)
    return (
        np.asarray(index * np.sqrt(stats.chi2.ppf(low, df) / df)),
        np.asarray(index * np.sqrt(stats.chi2.ppf(high, df) / df)),
    )


def cpm_df(mean: ArrayLike, sigma: Sigma, target: float) -> Array:
    """Degrees of freedom of Cpm's approximate chi-square law (Boyles 1991, JQT 23:17-26).

    With xi = (mean - target)/s: df (1 + xi^2)^2 / (1 + 2 xi^2).
    """
    xi2 = ((np.asarray(mean, float) - target) / _positive(sigma.sd)) ** 2
    return np.asarray(sigma.df * (1 + xi2) ** 2 / (1 + 2 * xi2))


def cpm_interval(
    mean: ArrayLike, sigma: Sigma, spec: SpecLimits, confidence: float = 0.95
) -> tuple[Array, Array]:
    """Approximate chi-square interval of Cpm (Boyles 1991)."""
    index = cpm(mean, sigma.sd, spec)
    if spec.target is None:
        return index, index
    return cp_interval(index, cpm_df(mean, sigma, spec.target), confidence)


def bissell_interval(
    index: ArrayLike, sigma: Sigma, confidence: float = 0.95
) -> tuple[Array, Array]:
    """Normal approximation for Cpk (Bissell 1990, Applied Statistics 39:331-340).

    Cpk -+ z sqrt(1/(9 n) + Cpk^2/(2 df)), n the effective number.
    """
    index = np.asarray(index, float)
    z = stats.norm.ppf(_tails(confidence)[1])
    half = z * np.sqrt(1 / (9 * sigma.n_effective) + index**2 / (2 * sigma.df))
    return np.asarray(index - half), np.asarray(index + half)


def noncentral_t_interval(
    index: ArrayLike, sigma: Sigma, confidence: float = 0.95
) -> tuple[Array, Array]:
    """Interval of a one-sided index from the noncentral t (Chou, Owen & Borrego 1990).

    3 sqrt(n) times the estimate is noncentral t with noncentrality 3 sqrt(n) times the index:
    exact for Cpl and Cpu; for Cpk (the nearest side) it errs on the safe side as a lower limit.
    n and df need not be whole.
    """
    low, high = _tails(confidence)
    index, df, n = np.broadcast_arrays(np.asarray(index, float), sigma.df, sigma.n_effective)
    root = 3.0 * np.sqrt(_positive(n))
    return (
        noncentrality(root * index, df, high) / root,
        noncentrality(root * index, df, low) / root,
    )


def noncentrality(t: ArrayLike, df: ArrayLike, p: float) -> Array:
    """The noncentrality for which a noncentral t with ``df`` is below ``t`` with probability p.

    Vectorised; about 1e-10 of the spread of t. NaN where t or df is.
    """
    t, df = (np.array(a, float) for a in np.broadcast_arrays(t, df))
    bad = ~(np.isfinite(t) & (df > 0) & np.isfinite(df))
    t, df = np.where(bad, 0.0, t), np.where(bad, 1.0, df)
    # By symmetry only t >= 0 is needed: P(T <= t; d) = 1 - P(T <= -t; -d).
    sign = np.where(t < 0, -1.0, 1.0)
    want = np.where(t < 0, -1.0, 1.0) * float(special.ndtri(p))
    t = np.abs(t)
    spread = np.sqrt(1.0 + t**2 / (2.0 * df))
    low, high = t - 40.0 * spread, t + 40.0 * spread
    # The normal score of the probability is nearly straight in the noncentrality: secant steps on
    # it, held inside a bracket that shrinks at each step.
    point, slope = t - want * spread, -1.0 / spread
    before = miss_before = None
    for _ in range(80):
        miss = special.ndtri(np.clip(_nct_cdf(t, df, point), 1e-300, 1 - 1e-16)) - want
        low, high = np.where(miss > 0, point, low), np.where(miss > 0, high, point)
        if before is not None and miss_before is not None:
            run = np.where(point == before, 1.0, point - before)
            fresh = (miss - miss_before) / run
            slope = np.where((point != before) & (fresh < 0), fresh, slope)
        step = point - miss / slope
        inside = (step > low) & (step < high)
        before, miss_before = point, miss
        point = np.where(inside, step, 0.5 * (low + high))
        point = np.where(np.abs(miss) < 1e-13, before, point)
        if np.all(np.abs(point - before) <= 1e-12 * spread):
            break
    return np.where(bad, np.nan, sign * point)


def _nct_cdf(t: Array, df: Array, shift: Array) -> Array:
    """P(T <= t) for t >= 0. Far below zero shift it is 1 to all digits."""
    value = special.nctdtr(df, np.maximum(shift, -37.0), t)
    far = np.where(t > shift, 1.0, 0.0)  # where the library's series gives up
    return np.where(np.isfinite(value), value, far)

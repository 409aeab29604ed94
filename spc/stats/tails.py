"""Tail probabilities and normal scores that stay accurate far out.

A spread or a distance is put on the scale of a standard normal variable by equal probability, so
that run rules, EWMA and CUSUM apply to it. Far out, where probabilities underflow, their
logarithms are used.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike
from scipy import special

from spc.stats.grouping import FloatArray

SCORE_LIMIT = 40.0  # beyond this a normal score says no more; a spread of exactly 0 gets -40
_UNDERFLOW = 1e-280


def two_sided_alpha(n_sigma: ArrayLike) -> FloatArray:
    """Probability of a normal value beyond +- `n_sigma`: 0.0027 at 3."""
    return np.asarray(2.0 * special.ndtr(-np.asarray(n_sigma, dtype=np.float64)))


def normal_score(log_below: FloatArray, log_above: FloatArray) -> FloatArray:
    """Normal value with the given log probabilities below and above it, within +- 40."""
    below = special.ndtri_exp(np.minimum(log_below, 0.0))
    above = -special.ndtri_exp(np.minimum(log_above, 0.0))
    score = np.where(log_above < log_below, above, below)
    return np.clip(score, -SCORE_LIMIT, SCORE_LIMIT)


def chi2_score(x: ArrayLike, df: ArrayLike) -> FloatArray:
    """Normal score of a chi-square value `x` with `df` degrees of freedom."""
    return normal_score(*chi2_log_tails(x, df))


def chi2_log_tails(x: ArrayLike, df: ArrayLike) -> tuple[FloatArray, FloatArray]:
    """Logarithms of the chi-square probabilities below and above `x` (shapes broadcast)."""
    half, a = np.broadcast_arrays(
        0.5 * np.asarray(x, dtype=np.float64), 0.5 * np.asarray(df, dtype=np.float64)
    )
    below, above = special.gammainc(a, half), special.gammaincc(a, half)
    log_below, log_above = _logs(below), _logs(above)
    tiny = (below < _UNDERFLOW) & (half > 0)
    if tiny.any():
        y, b = half[tiny], a[tiny]
        series = special.hyp1f1(1.0, b + 1.0, y)
        log_below[tiny] = b * np.log(y) - y - special.gammaln(b + 1.0) + np.log(series)
    tiny = (above < _UNDERFLOW) & np.isfinite(half)
    if tiny.any():
        y, b = half[tiny], a[tiny]
        head = b * np.log(y) - y - special.gammaln(b)
        log_above[tiny] = head + np.log(_upper_fraction(b, y))
    return log_below, log_above


def _upper_fraction(a: FloatArray, x: FloatArray) -> FloatArray:
    """Continued fraction of the upper incomplete gamma function, for x well above a.

    NIST Digital Library of Mathematical Functions, 8.9.2, evaluated from the far end.
    """
    depth = 200
    value = x + 2.0 * depth + 1.0 - a
    for k in range(depth, 0, -1):
        value = x + 2.0 * k - 1.0 - a - k * (k - a) / value
    return np.asarray(1.0 / value)


def f_score(ratio: ArrayLike, df1: ArrayLike, df2: ArrayLike) -> FloatArray:
    """Normal score of an F ratio with `df1`, `df2` degrees of freedom (`df2` may be inf)."""
    r, d1, d2 = np.broadcast_arrays(*(np.asarray(v, dtype=np.float64) for v in (ratio, df1, df2)))
    known = np.isinf(d2)
    finite = np.where(known, 1.0, d2)
    part = d1 * r
    above = _log_betainc(0.5 * finite, 0.5 * d1, finite / (part + finite), part / (part + finite))
    below = _log_betainc(0.5 * d1, 0.5 * finite, part / (part + finite), finite / (part + finite))
    return np.where(known, chi2_score(part, d1), normal_score(below, above))


def t_score(value: ArrayLike, df: ArrayLike) -> FloatArray:
    """Normal score of a Student t value (`df` may be inf)."""
    t, nu = np.broadcast_arrays(np.asarray(value, dtype=np.float64), np.asarray(df, np.float64))
    known = np.isinf(nu)
    finite = np.where(known, 1.0, nu)
    total = finite + t**2
    log_tail = _log_betainc(0.5 * finite, np.full(t.shape, 0.5), finite / total, t**2 / total)
    size = -special.ndtri_exp(np.minimum(log_tail - np.log(2.0), 0.0))
    size = np.clip(size, 0.0, SCORE_LIMIT)
    return np.where(known, t, np.sign(t) * size)


def _log_betainc(a: FloatArray, b: FloatArray, x: FloatArray, rest: FloatArray) -> FloatArray:
    """Logarithm of the regularised incomplete beta function; `rest` is 1 - x, given exactly."""
    value = np.asarray(special.betainc(a, b, x), dtype=np.float64)
    # Near x = 1 the complement keeps the digits that 1 - x has lost.
    value = np.where(x > 0.5, special.betaincc(b, a, rest), value)
    out = _logs(value)
    tiny = (value < _UNDERFLOW) & (x > 0)
    if tiny.any():
        p, q, y = a[tiny], b[tiny], x[tiny]
        series = special.hyp2f1(1.0, p + q, p + 1.0, y)
        head = p * np.log(y) + q * np.log(rest[tiny]) - np.log(p) - special.betaln(p, q)
        out[tiny] = head + np.log(series)
    return out


def _logs(probability: FloatArray) -> FloatArray:
    with np.errstate(divide="ignore"):
        return np.asarray(np.log(probability))


def chi2_quantile(alpha: ArrayLike, df: ArrayLike, *, upper: bool) -> FloatArray:
    """Chi-square value with probability `alpha` above it (`upper`) or below it."""
    half = 0.5 * np.asarray(df, dtype=np.float64)
    p = np.asarray(alpha, dtype=np.float64)
    value = special.gammainccinv(half, p) if upper else special.gammaincinv(half, p)
    return np.asarray(2.0 * value, dtype=np.float64)


def f_quantile(alpha: ArrayLike, df1: ArrayLike, df2: ArrayLike, *, upper: bool) -> FloatArray:
    """F ratio with probability `alpha` above or below it; `df2` may be inf (chi-square / df1)."""
    p, d1, d2 = np.broadcast_arrays(*(np.asarray(v, dtype=np.float64) for v in (alpha, df1, df2)))
    known = np.isinf(d2)
    finite = np.where(known, 1.0, d2)
    if upper:
        x = special.betaincinv(0.5 * finite, 0.5 * d1, p)
        ratio = finite * (1.0 - x) / (d1 * x)
    else:
        x = special.betaincinv(0.5 * d1, 0.5 * finite, p)
        ratio = finite * x / (d1 * (1.0 - x))
    return np.where(known, chi2_quantile(p, d1, upper=upper) / d1, ratio)


def t_quantile(alpha: ArrayLike, df: ArrayLike) -> FloatArray:
    """Student t value with probability `alpha` / 2 above it; `df` may be inf."""
    tail = 0.5 * np.asarray(alpha, dtype=np.float64)
    nu = np.asarray(df, dtype=np.float64)
    finite = np.where(np.isinf(nu), 1.0, nu)
    return np.where(np.isinf(nu), -special.ndtri(tail), -special.stdtrit(finite, tail))

"""Lag-1 autocorrelation of plotted points, what it does to limits and run rules, and the residual
chart that puts it right.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike
from scipy import special

from spc.stats.ar1_chain import log_factors
from spc.stats.ar1_table import PHI, TABLE
from spc.stats.grouping import BoolArray, FloatArray, IntArray, as_codes, as_values, sum_by
from spc.stats.rules import WESTERN_ELECTRIC, parse_rules
from spc.stats.serial_effect import SerialEffect

__all__ = [
    "Lag1",
    "ResidualChart",
    "SerialEffect",
    "ar1_baseline",
    "false_signal_factor",
    "lag1",
    "residual_chart",
]


@dataclass(frozen=True)
class Lag1:
    """Lag-1 autocorrelation by stream; arrays (n_streams,).

    Attributes
    ----------
    raw : the usual r1, sum of products of neighbours over the sum of squares about the mean.
    phi : r1 corrected for its small-sample bias, within +- 0.95.
    low, high : approximate interval for phi.
    n : points. Below 8 points, or where all points are alike, the estimates are NaN.
    """

    raw: FloatArray
    phi: FloatArray
    low: FloatArray
    high: FloatArray
    n: IntArray

    @property
    def significant(self) -> BoolArray:
        """Whether the interval leaves out zero."""
        return (self.low > 0) | (self.high < 0)


LARGEST_PHI = 0.95
FEWEST_POINTS = 8


def lag1(values: ArrayLike, *, stream: ArrayLike | None = None, confidence: float = 0.95) -> Lag1:
    """Estimate the lag-1 autocorrelation of plotted points, for many streams at once.

    Parameters
    ----------
    values : (n,) array_like of float
        Points in time order within each stream.
    stream : (n,) array_like of int, optional
        Stream codes; default one stream.
    confidence : float
        Of the interval.

    Raises
    ------
    ValueError, TypeError
        On bad shapes or codes, values that are not finite, confidence outside (0, 1).

    Notes
    -----
    The bias E r1 = phi - (1 + 4 phi) / n (Kendall 1954 and Marriott & Pope 1954, both Biometrika
    41) is solved for phi: (n r1 + 1) / (n - 4). The interval is even on the arcsine scale, where
    the standard error is sqrt(n) / (n - 4), as var r1 = (1 - phi^2) / n (Bartlett 1946); the
    simulated coverage of 95 % intervals is 90 to 96 %, see tests/stats/test_autocorrelation.py.
    """
    data = as_values(values)
    if not 0.0 < confidence < 1.0:
        raise ValueError(f"confidence must lie between 0 and 1, not {confidence}")
    size = data.size
    place = np.zeros(size, np.int64) if stream is None else as_codes(stream, "stream", size)
    order = np.argsort(place, kind="stable")
    data, place = data[order], place[order]
    n_streams = int(place.max(initial=-1)) + 1
    n = np.bincount(place, minlength=n_streams)
    mean = sum_by(place, data, n_streams) / np.maximum(n, 1)
    off = data - mean[place]
    square = sum_by(place, off**2, n_streams)
    beside = place[1:] == place[:-1]
    product = sum_by(place[1:][beside], (off[1:] * off[:-1])[beside], n_streams)
    level = np.zeros(n_streams)
    np.maximum.at(level, place, np.abs(data))
    usable = (n >= FEWEST_POINTS) & (square > n * (16.0 * np.finfo(float).eps * level) ** 2)
    raw = np.where(usable, product / np.where(usable, square, 1.0), np.nan)
    free = np.where(usable, n - 4.0, 1.0)
    phi = np.clip((n * raw + 1.0) / free, -LARGEST_PHI, LARGEST_PHI)
    reach = special.ndtri(0.5 + 0.5 * confidence) * np.sqrt(n) / free
    middle, right = np.arcsin(phi), 0.5 * np.pi
    low = np.sin(np.maximum(middle - reach, -right))
    high = np.sin(np.minimum(middle + reach, right))
    return Lag1(raw, phi, low, high, n.astype(np.int64))


def ar1_baseline(phi: ArrayLike, m: ArrayLike) -> SerialEffect:
    """Effect of AR(1) autocorrelation on the mean and the sd of m points; exact.

    Parameters
    ----------
    phi : (n_streams,) array_like of float
        Lag-1 autocorrelation, between -1 and 1.
    m : (n_streams,) array_like of int
        Points of the baseline, at least 2.

    Returns
    -------
    SerialEffect

    Raises
    ------
    ValueError
        If phi is not inside (-1, 1) or m below 2.

    Notes
    -----
    Moments of quadratic forms of a normal vector with correlations phi^|i-j|:
    E s^2 = tr(A R) / (m - 1), var s^2 = 2 tr(A R A R) / (m - 1)^2 with A the centring matrix.
    """
    rho, points = np.broadcast_arrays(
        np.atleast_1d(np.asarray(phi, np.float64)), np.atleast_1d(np.asarray(m, np.int64))
    )
    if not ((np.abs(rho) < 1).all() and (points >= 2).all()):
        raise ValueError("phi must lie inside (-1, 1) and a baseline has at least two points")
    longest = int(points.max())
    lag = np.arange(longest)
    size = points[:, None].astype(np.float64)
    inside = lag < size
    power = np.where(inside, rho[:, None] ** lag, 0.0)
    # Row i of R sums to the lags that reach left and those that reach right.
    left = np.cumsum(power, axis=1)
    back = np.maximum(points[:, None] - 1 - lag, 0)
    rows = np.where(inside, left + np.take_along_axis(left, back, axis=1) - 1.0, 0.0)
    total = rows.sum(axis=1)
    repeat = np.where(inside, np.where(lag == 0, size, 2.0 * (size - lag)), 0.0)
    square = (repeat * power**2).sum(axis=1)
    count = points.astype(np.float64)
    trace = count - total / count
    trace2 = square - 2.0 * (rows**2).sum(axis=1) / count + (total / count) ** 2
    df = trace**2 / trace2
    return SerialEffect(rho, trace / (count - 1.0), total / count, df, df / (count - 1.0))


@dataclass(frozen=True)
class ResidualChart:
    """One-step prediction errors; arrays (n,).

    Attributes
    ----------
    z : standardised residuals, independent standard normal while the stream is in control; chart
        these with centre 0 and sigma 1.
    predicted : the prediction of each point, in the unit of the readings.
    sigma : standard deviation of the point about its prediction.
    first : points without a predecessor; their prediction is the centre.
    """

    z: FloatArray
    predicted: FloatArray
    sigma: FloatArray
    first: BoolArray


def residual_chart(
    values: ArrayLike,
    center: ArrayLike,
    phi: ArrayLike,
    *,
    sigma: ArrayLike = 1.0,
    stream: ArrayLike | None = None,
) -> ResidualChart:
    """Residuals of an AR(1) stream about the prediction from the point before.

    Parameters
    ----------
    values : (n,) array_like of float
        Points in time order within each stream; NaN for a missing point, after which the
        prediction starts again from the centre.
    center, sigma : float or (n,) array_like
        Centre and sigma of each plotted point (they may change with the sample size).
    phi : float or (n,) array_like
        Lag-1 autocorrelation of the stream, inside (-1, 1).
    stream : (n,) array_like of int, optional

    Raises
    ------
    ValueError, TypeError
        On bad shapes or codes, phi not inside (-1, 1), sigma not positive.

    Notes
    -----
    z_t = (u_t - phi u_{t-1}) / sqrt(1 - phi^2), u = (value - centre) / sigma; a stream's first
    point is u itself, which has the same variance (Alwan & Roberts 1988, Journal of Business &
    Economic Statistics 6). A lasting shift of d sigmas shows as d in the first residual's numerator
    and (1 - phi) d after it: for phi > 0 small shifts are seen later than on independent points.
    """
    data = np.asarray(values, dtype=np.float64)
    if data.ndim != 1:
        raise ValueError(f"values must be one-dimensional, not of shape {data.shape}")
    middle, scale, rho = (
        np.broadcast_to(np.asarray(v, dtype=np.float64), data.shape) for v in (center, sigma, phi)
    )
    if not (np.abs(rho) < 1).all():
        raise ValueError("phi must lie inside (-1, 1)")
    if not (scale > 0).all():
        raise ValueError("sigma must be positive")
    size = data.size
    place = np.zeros(size, np.int64) if stream is None else as_codes(stream, "stream", size)
    order = np.argsort(place, kind="stable")
    u = ((data - middle) / scale)[order]
    before = np.zeros(size)
    before[1:] = u[:-1]
    first = np.ones(size, dtype=bool)
    first[1:] = (place[order][1:] != place[order][:-1]) | np.isnan(u[:-1])
    lean = np.where(first, 0.0, rho[order])
    before = np.where(first, 0.0, before)
    spread = np.sqrt(1.0 - lean**2)
    z, predicted, sd, begins = np.empty(size), np.empty(size), np.empty(size), first.copy()
    z[order] = (u - lean * before) / spread
    predicted[order] = middle[order] + scale[order] * lean * before
    sd[order] = scale[order] * spread
    begins[order] = first
    return ResidualChart(z, predicted, sd, begins)


def false_signal_factor(
    phi: ArrayLike, rules: Sequence[str] | None = None, *, per: str = "run"
) -> FloatArray:
    """How many times more false signals run rules give on an AR(1) stream.

    Parameters
    ----------
    phi : array_like of float
        Lag-1 autocorrelation; beyond -0.5 and 0.95 the value at the end is returned.
    rules : sequence of str, optional
        Names of run rules; default the four Western Electric rules.
    per : {"run", "point"}
        "run": in-control average run length without autocorrelation over that with it (fresh start
        after each signal). "point": long-run share of points that complete a rule, with over
        without.

    Returns
    -------
    array of float
        1 at phi = 0. Points are standardised by their own sigma, so rule `beyond-3s` alone has
        "point" factor 1 at any phi, and a "run" factor below 1 (its signals come in clusters).

    Raises
    ------
    ValueError
        For NaN, another `per`, or rules that have no chain (`trending`, `alternating`).

    Notes
    -----
    From `spc.stats.ar1_table` for every choice from the four Western Electric rules, made by
    tests/benchmarks/generate_ar1_table.py; other rules are computed on first use (seconds). The
    logarithm is interpolated linearly in phi.
    """
    if per not in ("run", "point"):
        raise ValueError(f'per is "run" or "point", not {per!r}')
    values = np.asarray(phi, dtype=np.float64)
    if np.isnan(values).any():
        raise ValueError("phi is NaN; give 0 where it is not known")
    names = tuple(WESTERN_ELECTRIC_NAMES if rules is None else rules)
    key = tuple(sorted(rule.name for rule in parse_rules(names)))
    curve = TABLE.get(key)
    run, point = curve if curve is not None else _computed(key)
    return np.exp(np.interp(values, PHI, run if per == "run" else point))


WESTERN_ELECTRIC_NAMES = tuple(rule.name for rule in WESTERN_ELECTRIC)


@lru_cache(maxsize=32)
def _computed(rules: tuple[str, ...]) -> tuple[tuple[float, ...], tuple[float, ...]]:
    """Log factors of rules that the table does not hold, on the table's grid."""
    return log_factors(rules, PHI)

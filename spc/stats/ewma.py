"""EWMA charts: the statistic, its exact limits with unequal sample sizes, its signals.

Lucas & Saccucci (1990), Technometrics 32:1-12; fast initial response as in Steiner (1999),
Journal of Quality Technology 31:75-86 (from memory).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from spc.stats.designs import EwmaDesign
from spc.stats.segments import (
    BoolArray,
    FloatArray,
    IntArray,
    Missing,
    as_points,
    find_runs,
    map_rows,
)


@dataclass(frozen=True)
class EwmaPath:
    """An EWMA chart, arrays in the shape of the points.

    Attributes
    ----------
    value : array
        The EWMA, in the unit of the points; NaN where there is no point.
    sigma : array
        Standard deviation of the EWMA that the limits are made of.
    center, lower, upper : array
        Centre and limits of the EWMA.
    side : int8 array
        +1 above the upper limit, -1 below the lower one, 0 between (limits included).
    """

    value: FloatArray
    sigma: FloatArray
    center: FloatArray
    lower: FloatArray
    upper: FloatArray
    side: NDArray[np.int8]

    @property
    def signal(self) -> BoolArray:
        """Points at which the chart signals."""
        return np.asarray(self.side != 0)


def ewma(
    z: ArrayLike,
    lam: float,
    start: ArrayLike = 0.0,
    segment: ArrayLike | None = None,
    *,
    missing: Missing = "raise",
) -> FloatArray:
    """Exponentially weighted moving average, afresh from `start` with each segment.

    Parameters
    ----------
    z : array_like, shape (n,) or (streams, n)
        Points, any unit.
    lam : float
        Weight of the new point, in (0, 1].
    start : float or array_like, shape (streams,)
        Value before the first point of a run.  To carry on from an earlier batch, give its
        last value (and no segments).
    segment : array_like of codes, optional
        Broadcast against `z`; the average starts afresh where the code changes.
    missing : {"raise", "skip"}
        With "skip" a NaN is no point: the average stays as it is, and NaN is returned there.

    Returns
    -------
    array, shape of `z`

    Raises
    ------
    ValueError
        For a weight outside (0, 1] or points that are not finite.
    """
    EwmaDesign(lam, 1.0)
    points = as_points(z, missing)
    begin = _per_stream(start, points, "start")
    out = np.full(points.shape, np.nan)

    def kernel(block: FloatArray, rows: IntArray) -> tuple[FloatArray]:
        return (_smooth(block, lam, begin[rows]),)

    map_rows(points, find_runs(points, segment), kernel, (out,))
    return out


def ewma_chart(
    x: ArrayLike,
    design: EwmaDesign,
    center: ArrayLike = 0.0,
    sigma: ArrayLike = 1.0,
    segment: ArrayLike | None = None,
    *,
    missing: Missing = "raise",
) -> EwmaPath:
    """EWMA chart of points whose sigma may differ from point to point.

    Parameters
    ----------
    x : array_like, shape (n,) or (streams, n)
        Points, in their unit (or standardised, with the default centre and sigma).
    design : EwmaDesign
    center : array_like, unit of `x`
        Centre of each point, broadcast against `x`; constant within a segment.
    sigma : array_like, unit of `x`
        Standard deviation of each point in control, broadcast against `x`, above 0.
    segment, missing
        As for :func:`ewma`.

    Returns
    -------
    EwmaPath

    Raises
    ------
    ValueError
        For points, centres or sigmas that are not finite, or sigmas not above 0.

    Notes
    -----
    The variance follows ``V_t = lam^2 sigma_t^2 + (1 - lam)^2 V_{t-1}``, exact for independent
    points.  With time-varying limits V starts at 0; else it starts where equal sigmas would
    keep it, ``lam / (2 - lam) sigma_1^2``.
    """
    points = as_points(x, missing)
    middle = np.broadcast_to(np.asarray(center, dtype=np.float64), points.shape)
    spread = np.broadcast_to(np.asarray(sigma, dtype=np.float64), points.shape)
    there = ~np.isnan(points)
    if not np.isfinite(middle[there]).all():
        raise ValueError("the centre of every point must be a finite number")
    if not (np.isfinite(spread[there]) & (spread[there] > 0.0)).all():
        raise ValueError("the sigma of every point must be a finite number above 0")
    runs = find_runs(points, segment)
    lam = design.lam

    def smooth(block: FloatArray, rows: IntArray) -> tuple[FloatArray, FloatArray]:
        age = np.broadcast_to(np.arange(1, block.shape[1] + 1), block.shape)
        return _smooth(block, lam, np.zeros(rows.size)), age.astype(np.float64)

    def spread_out(block: FloatArray, rows: IntArray) -> tuple[FloatArray]:
        first = block[:, 0] * (0.0 if design.time_varying else lam / (2.0 - lam))
        return (first_order_recursion(lam**2 * block, (1.0 - lam) ** 2, first),)

    deviation, age = np.full(points.shape, np.nan), np.ones(points.shape)
    variance = np.full(points.shape, np.nan)
    map_rows(points - middle, runs, smooth, (deviation, age))
    map_rows(np.where(there, spread**2, np.nan), runs, spread_out, (variance,))
    sd = np.sqrt(variance)
    reach = design.limit * sd * (1.0 if design.fast_start is None else _opening(design, age))
    side = (deviation > reach).astype(np.int8) - (deviation < -reach).astype(np.int8)
    return EwmaPath(middle + deviation, sd, middle, middle - reach, middle + reach, side)


def limit_factors(design: EwmaDesign, t: ArrayLike) -> FloatArray:
    """Limits at point t (1, 2, ...) since the start over their settled width, equal sigmas."""
    age = np.asarray(t, dtype=np.float64)
    if not design.time_varying:
        return np.ones_like(age)
    with np.errstate(divide="ignore"):
        held = np.log1p(-np.float64(design.lam))
    factor = np.sqrt(-np.expm1(2.0 * age * held))
    return np.asarray(factor if design.fast_start is None else factor * _opening(design, age))


def _opening(design: EwmaDesign, age: FloatArray) -> FloatArray:
    """Steiner's adjustment: the start share at point 1, all but 1 % by point 20."""
    assert design.fast_start is not None
    closed = math.log10(1.0 - design.fast_start)
    growth = (-2.0 / closed - 1.0) / 19.0
    return np.asarray(1.0 - 10.0 ** (closed * (1.0 + growth * (age - 1.0))))


def _per_stream(value: ArrayLike, points: FloatArray, name: str) -> FloatArray:
    streams = 1 if points.ndim == 1 else points.shape[0]
    given = np.asarray(value, dtype=np.float64)
    if given.ndim > 1 or given.size not in (1, streams) or not np.isfinite(given).all():
        raise ValueError(f"{name} must be a finite number, or one for each of {streams} streams")
    return np.broadcast_to(given.reshape(-1), (streams,)).astype(np.float64)


def _smooth(block: FloatArray, lam: float, start: FloatArray) -> FloatArray:
    return first_order_recursion(lam * block, 1.0 - lam, start)


def first_order_recursion(inputs: FloatArray, keep: float, start: FloatArray) -> FloatArray:
    """Return ``y_t = inputs_t + keep y_{t-1}`` along rows, from ``y_0 = start``.

    Parameters
    ----------
    inputs : array, shape (streams, n)
    keep : float
        In (-1, 1).
    start : array, shape (streams,)

    Notes
    -----
    By doubling: after pass p a value holds the last ``2^p`` inputs, and the passes stop where
    what is left weighs nothing.  As fast as a compiled filter, and no heavy import.
    """
    out = inputs.copy()
    reach, weight = 1, keep
    spare = np.empty_like(out)
    while reach < out.shape[1] and abs(weight) > 1e-18:
        held = np.multiply(out[:, :-reach], weight, out=spare[:, reach:])
        out[:, reach:] += held
        reach, weight = 2 * reach, weight * weight
    if keep != 0.0 and start.any():
        out += start[:, None] * keep ** np.arange(1, out.shape[1] + 1)
    return out

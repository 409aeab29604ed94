"""EWMA charts: the statistic, its exact limits with unequal sample sizes, its signals.

Lucas & Saccucci (1990), Technometrics 32:1-12; fast initial response as in Steiner (1999),
Journal of Quality Technology 31:75-86 (from memory).
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import ArrayLike, NDArray

from spc.stats.designs import EwmaDesign
from spc.stats.segments import (
    Blocks,
    BoolArray,
    FloatArray,
    IntArray,
    Missing,
    Runs,
    as_points,
    blank,
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
    runs = find_runs(points, segment)
    out = blank(points, runs)

    def kernel(blocks: Blocks, rows: IntArray, results: Blocks) -> None:
        first_order_recursion(lam * blocks[0], 1.0 - lam, begin[rows], out=results[0])

    map_rows((points,), runs, kernel, (out,))
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
    there = ~np.isnan(points)
    middle = _beside(center, there, "centre")
    spread = _beside(sigma, there, "sigma")
    runs = find_runs(points, segment)
    if runs.whole and middle.shape[-1] == 1 and spread.shape[-1] == 1:
        return _even_chart(points, design, middle, spread, runs)
    value, sd, lower, upper = (blank(points, runs) for _ in range(4))
    side = np.zeros(points.shape, dtype=np.int8)
    lam, keep = design.lam, 1.0 - design.lam

    def kernel(blocks: Blocks, rows: IntArray, results: Blocks) -> None:
        (x, mid, s), (out, spread_now, below, above, mark) = blocks, results
        start = np.zeros(rows.size)
        first_order_recursion(lam * (x - mid), keep, start, out=out)
        square = s * s
        first = start if design.time_varying else square[:, 0] * (lam / (2.0 - lam))
        first_order_recursion(lam**2 * square, keep**2, first, out=spread_now)
        np.sqrt(spread_now, out=spread_now)
        reach = design.limit * spread_now
        if design.fast_start is not None:
            reach *= _opening(design, np.arange(1.0, x.shape[1] + 1.0))
        np.subtract((out > reach).view(np.int8), (out < -reach).view(np.int8), out=mark)
        np.subtract(mid, reach, out=below)
        np.add(mid, reach, out=above)
        out += mid

    whole_shape = tuple(np.broadcast_to(a, points.shape) for a in (middle, spread))
    map_rows((points, *whole_shape), runs, kernel, (value, sd, lower, upper, side))
    return EwmaPath(value, sd, whole_shape[0], lower, upper, side)


def _beside(value: ArrayLike, there: BoolArray, name: str) -> FloatArray:
    """Check a centre or sigma; the last axis is kept short where it does not change in time."""
    given = np.atleast_1d(np.asarray(value, dtype=np.float64))
    given = given.reshape((1,) * (there.ndim - given.ndim) + given.shape)
    try:
        np.broadcast_to(given, there.shape)
    except ValueError:
        raise ValueError(f"{name} of shape {given.shape} does not fit {there.shape}") from None
    used = given[there] if given.shape == there.shape else given
    if not np.isfinite(used).all() or (name == "sigma" and not (used > 0.0).all()):
        above = " above 0" if name == "sigma" else ""
        raise ValueError(f"the {name} of every point must be a finite number{above}")
    return given


def _even_chart(
    points: FloatArray, design: EwmaDesign, middle: FloatArray, spread: FloatArray, runs: Runs
) -> EwmaPath:
    """The chart of streams with one centre and sigma each: limits need no pass over points."""
    settled = math.sqrt(design.lam / (2.0 - design.lam))
    age = np.arange(1, points.shape[-1] + 1)
    plain = replace(design, fast_start=None)
    sd = spread * settled * limit_factors(plain, age)
    reach = design.limit * spread * settled * limit_factors(design, age)
    lower, upper = (np.broadcast_to(a, points.shape) for a in (middle - reach, middle + reach))
    begin = np.broadcast_to(middle, (*points.shape[:-1], 1)).reshape(-1)
    value = blank(points, runs)
    side = np.zeros(points.shape, dtype=np.int8)

    def kernel(blocks: Blocks, rows: IntArray, results: Blocks) -> None:
        (x, low, high), (out, mark) = blocks, results
        first_order_recursion(design.lam * x, 1.0 - design.lam, begin[rows], out=out)
        np.subtract((out > high).view(np.int8), (out < low).view(np.int8), out=mark)

    map_rows((points, lower, upper), runs, kernel, (value, side))
    spreads, centers = (np.broadcast_to(a, points.shape) for a in (sd, middle))
    return EwmaPath(value, spreads, centers, lower, upper, side)


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


def first_order_recursion(
    inputs: FloatArray, keep: float, start: FloatArray, out: FloatArray | None = None
) -> FloatArray:
    """Return ``y_t = inputs_t + keep y_{t-1}`` along rows, from ``y_0 = start``.

    Parameters
    ----------
    inputs : array, shape (streams, n)
    keep : float
        In (-1, 1).
    start : array, shape (streams,)
    out : array, shape (streams, n), optional
        Where to put the result.

    Notes
    -----
    By doubling: after pass p a value holds the last ``2^p`` inputs, and the passes stop where
    what is left weighs nothing.  As fast as a compiled filter, and no heavy import.
    """
    if out is None:
        out = np.empty(inputs.shape)
    np.multiply(inputs[:, :-1], keep, out=out[:, 1:])
    out[:, 1:] += inputs[:, 1:]
    out[:, :1] = inputs[:, :1]
    reach, weight = 2, keep * keep
    spare = np.empty(out.shape)
    while reach < out.shape[1] and abs(weight) > 1e-18:
        held = np.multiply(out[:, :-reach], weight, out=spare[:, reach:])
        out[:, reach:] += held
        reach, weight = 2 * reach, weight * weight
    if keep != 0.0 and start.any():
        out += start[:, None] * keep ** np.arange(1, out.shape[1] + 1)
    return out

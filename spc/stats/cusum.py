"""Two-sided tabular CUSUM charts: the statistic, its signals, the estimated onset.

Page (1954), Biometrika 41:100-115; head start as in Lucas & Crosier (1982),
Technometrics 24:199-205.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import ArrayLike, NDArray

from spc.stats.designs import CusumDesign
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
class CusumPath:
    """A two-sided CUSUM, arrays in the shape of the points.

    Attributes
    ----------
    design : CusumDesign
    upper, lower : array
        The two sums, in sigmas of the plotted point, 0 or above; NaN where there is no point.
    side : int8 array
        +1 where the upper sum is above h, -1 where the lower one is, 0 for neither; where both
        are, the larger sum decides.
    """

    design: CusumDesign
    upper: FloatArray
    lower: FloatArray
    side: NDArray[np.int8]
    _start: IntArray = field(repr=False)

    @property
    def signal(self) -> BoolArray:
        """Points at which the chart signals."""
        return np.asarray(self.side != 0)

    def onset(self, side: int) -> IntArray:
        """Estimated first point after the change, were the chart to signal at each point.

        Parameters
        ----------
        side : {+1, -1}
            Upper or lower sum.

        Returns
        -------
        int array, shape of the points
            Position in the stream of the point after the last zero of that sum (the first
            point of the segment where it has had none); the point itself where the sum is 0.
        """
        total = _sum_of(self, side)
        place = np.arange(total.shape[-1])
        after_zero = np.where(total == 0.0, place + 1, self._start)
        last = np.maximum.accumulate(after_zero, axis=-1)
        # A gap after the zero is no point: the next point that is there is meant.
        following = np.where(np.isnan(total), total.shape[-1], place)
        following = np.minimum.accumulate(following[..., ::-1], axis=-1)[..., ::-1]
        reached = np.take_along_axis(following, np.minimum(last, total.shape[-1] - 1), axis=-1)
        return np.minimum(reached, place)

    def shift_estimate(self, side: int) -> FloatArray:
        """Estimated shift of the mean in sigmas since :meth:`onset`: ``side (k + sum / points)``.

        Notes
        -----
        Page's estimate; with a head start in force it is too large.  NaN where the sum is 0.
        """
        total = _sum_of(self, side)
        there = np.cumsum(~np.isnan(total), axis=-1)
        onset = self.onset(side)
        before = np.take_along_axis(there, np.maximum(onset - 1, 0), axis=-1)
        count = there - np.where(onset > 0, before, 0)
        mean = np.divide(total, count, out=np.full(total.shape, np.nan), where=total > 0.0)
        return np.asarray(side * (self.design.k + mean))


def _sum_of(path: CusumPath, side: int) -> FloatArray:
    if side not in (1, -1):
        raise ValueError(f"side must be +1 or -1, not {side!r}")
    return path.upper if side == 1 else path.lower


def cusum(
    z: ArrayLike,
    design: CusumDesign,
    segment: ArrayLike | None = None,
    *,
    start: tuple[ArrayLike, ArrayLike] | None = None,
    missing: Missing = "raise",
) -> CusumPath:
    """Two-sided tabular CUSUM, afresh from the head start with each segment.

    Parameters
    ----------
    z : array_like, shape (n,) or (streams, n)
        Standardised points (dimensionless), in the order of time.
    design : CusumDesign
    segment : array_like of codes, optional
        Broadcast against `z`; the sums start afresh where the code changes.
    start : (upper, lower), optional
        Sums before the first point of a run, each a number or one for each stream, instead of
        the head start.  To carry on from an earlier batch, give its last sums (no segments).
    missing : {"raise", "skip"}
        With "skip" a NaN is no point: the sums stay as they are, and NaN is returned there.

    Returns
    -------
    CusumPath

    Raises
    ------
    ValueError
        For points that are not finite, or a start below 0.

    Notes
    -----
    Closed form: with C the cumulative sum of ``z - k``, ``upper_t = C_t - min(-start,
    min_{s<=t} C_s)``.  The sums are not reset by a signal.
    """
    points = as_points(z, missing)
    begin = (design.head_start, design.head_start) if start is None else start
    up, down = (_starts(value, points) for value in begin)
    runs = find_runs(points, segment)
    upper, lower = blank(points, runs), blank(points, runs)
    side = np.zeros(points.shape, dtype=np.int8)

    def kernel(blocks: Blocks, rows: IntArray, results: Blocks) -> None:
        (block,), (high, low, mark) = blocks, results
        # In place: fresh memory costs more than the arithmetic.
        np.cumsum(block, axis=1, out=high)
        np.negative(high, out=low)
        drop = design.k * np.arange(1.0, block.shape[1] + 1.0)
        floor = np.empty(block.shape)
        for walk, start in ((high, up[rows]), (low, down[rows])):
            walk -= drop
            # The lowest level begins at -start: it stands in the first place for a moment.
            first = walk[:, 0].copy()
            np.minimum(first, -start, out=walk[:, 0])
            np.minimum.accumulate(walk, axis=1, out=floor)
            walk[:, 0] = first
            walk -= floor
        rise, fall = high > design.h, low > design.h
        both = rise & fall
        if both.any():
            rise &= ~both | (high > low)
            fall &= ~rise
        np.subtract(rise.view(np.int8), fall.view(np.int8), out=mark)

    map_rows((points,), runs, kernel, (upper, lower, side))
    return CusumPath(design, upper, lower, side, _run_starts(runs))


def _run_starts(runs: Runs) -> IntArray:
    """Position of the first point of the run that each point is in."""
    if runs.whole or runs.lengths.size == 0:
        return np.broadcast_to(np.int64(0), runs.shape)
    first = np.zeros(runs.shape, dtype=np.int64)
    flat = runs.starts if runs.order is None else runs.order[runs.starts]
    first.reshape(-1)[flat] = flat % runs.shape[-1]
    return np.asarray(np.maximum.accumulate(first, axis=-1))


def _starts(value: ArrayLike, points: FloatArray) -> FloatArray:
    streams = 1 if points.ndim == 1 else points.shape[0]
    given = np.asarray(value, dtype=np.float64).reshape(-1)
    if given.size not in (1, streams) or not (np.isfinite(given) & (given >= 0.0)).all():
        raise ValueError(f"a start must be 0 or above, one number or one for each of {streams}")
    return np.broadcast_to(given, (streams,)).astype(np.float64)

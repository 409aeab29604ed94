"""Streams of unequal length and charts that start afresh, laid out as plain rectangles.

A run of points is a stretch of one stream within one segment (one set of control limits).
Every chart of this package starts afresh with each run.  Runs are padded at their end to a
common width, in a few groups of similar length, so that the arithmetic of a chart is written
once, for a rectangle of runs.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]
Missing = Literal["raise", "skip"]
Blocks = tuple[NDArray[Any], ...]

# A rectangle of this many points stays in the processor's cache through all passes of a chart.
_BLOCK_POINTS = 1 << 17


@dataclass(frozen=True)
class Runs:
    """Where the runs of some streams are.

    Attributes
    ----------
    shape : shape of the points, ``(n,)`` or ``(streams, n)``
    order : flat positions of the points that are there, stream by stream; None where all are
    starts, lengths : where each run starts in `order`, and how many points it has
    whole : True where each stream is one run with no point missing
    """

    shape: tuple[int, ...]
    order: IntArray | None
    starts: IntArray
    lengths: IntArray
    whole: bool


def as_points(z: ArrayLike, missing: Missing = "raise") -> FloatArray:
    """Return points as a float array of shape ``(n,)`` or ``(streams, n)``, checked.

    Parameters
    ----------
    z : array_like
        Points, any unit.
    missing : {"raise", "skip"}
        With "skip" a NaN stands for "no point here"; with "raise" it is an error.

    Raises
    ------
    ValueError
        For another number of dimensions, an infinite value, or a NaN where none is allowed.
    """
    if missing not in ("raise", "skip"):
        raise ValueError(f"missing must be 'raise' or 'skip', not {missing!r}")
    points = np.asarray(z, dtype=np.float64)
    if points.ndim not in (1, 2):
        raise ValueError(f"points must have shape (n,) or (streams, n), not {points.shape}")
    if not _sum_is_finite(points):
        bad = ~np.isfinite(points) if missing == "raise" else np.isinf(points)
        if bad.any():
            where = tuple(int(i) for i in np.argwhere(bad)[0])
            place = where[0] if points.ndim == 1 else where
            mend = "" if missing == "skip" else "; pass missing='skip' where NaN means no point"
            raise ValueError(f"point {place} is {points[where]}, not a finite number{mend}")
    return points


def _sum_is_finite(points: FloatArray) -> bool:
    """False where any point is not finite (a quick look; rarely also where all are)."""
    with np.errstate(over="ignore", invalid="ignore"):
        return bool(np.isfinite(points.sum()))


def find_runs(points: FloatArray, segment: ArrayLike | None = None) -> Runs:
    """Find the runs: a run ends where its stream ends or its segment code changes.

    Parameters
    ----------
    points : array, shape (n,) or (streams, n)
        NaN where there is no point.
    segment : array_like of codes, optional
        Broadcast against `points`; only changes from a point to the next matter.

    Raises
    ------
    ValueError
        Where `segment` does not fit the points.
    """
    width = points.shape[-1]
    codes = None if segment is None else _fit_codes(segment, points.shape)
    order = None
    if not _sum_is_finite(points):
        present = ~np.isnan(points)
        order = None if present.all() else np.flatnonzero(present)
    count = points.size if order is None else order.size
    if order is None:
        change = np.zeros(points.shape, dtype=np.bool_)
        change[..., :1] = True
        if codes is not None:
            np.not_equal(codes[..., 1:], codes[..., :-1], out=change[..., 1:])
        starts = np.flatnonzero(change)
    else:
        stream = order // max(width, 1)
        fresh = np.ones(count, dtype=np.bool_)
        fresh[1:] = stream[1:] != stream[:-1]
        if codes is not None:
            kept = codes.reshape(-1)[order]
            fresh[1:] |= kept[1:] != kept[:-1]
        starts = np.flatnonzero(fresh)
    lengths = np.diff(np.concatenate((starts, [count])))
    whole = order is None and bool((lengths == width).all())
    return Runs(points.shape, order, starts, lengths, whole)


def _fit_codes(segment: ArrayLike, shape: tuple[int, ...]) -> NDArray[Any]:
    codes = np.asarray(segment)
    try:
        return np.broadcast_to(codes, shape)
    except ValueError:
        raise ValueError(
            f"segment codes of shape {codes.shape} do not fit points {shape}"
        ) from None


def run_blocks(runs: Runs) -> list[tuple[IntArray, BoolArray]]:
    """Return rectangles of runs: flat positions ``(runs, width)`` and which of them are real.

    Padding comes after the last point of a run and repeats a real position; a rectangle
    holds runs whose lengths differ by less than a factor of two.
    """
    blocks: list[tuple[IntArray, BoolArray]] = []
    size_class = np.ceil(np.log2(np.maximum(runs.lengths, 1))).astype(np.int64)
    for value in np.unique(size_class):
        chosen = np.flatnonzero(size_class == value)
        width = int(runs.lengths[chosen].max())
        per_block = max(1, _BLOCK_POINTS // width)
        for low in range(0, chosen.size, per_block):
            part = chosen[low : low + per_block]
            step = np.arange(width)
            real = step[None, :] < runs.lengths[part, None]
            slot = np.where(real, runs.starts[part, None] + step[None, :], runs.starts[part, None])
            blocks.append((slot if runs.order is None else runs.order[slot], real))
    return blocks


def blank(points: FloatArray, runs: Runs) -> FloatArray:
    """Return an array to be filled by :func:`map_rows`; NaN where there is no point."""
    return np.empty(points.shape) if runs.order is None else np.full(points.shape, np.nan)


def map_rows(
    inputs: tuple[FloatArray, ...],
    runs: Runs,
    kernel: Callable[[Blocks, IntArray, Blocks], None],
    out: tuple[NDArray[Any], ...],
) -> None:
    """Fill `out` with what `kernel` makes of the runs, rectangle by rectangle.

    Parameters
    ----------
    inputs : tuple of arrays, shape (n,) or (streams, n)
        The points, and what else goes with each of them.
    runs : Runs
        From :func:`find_runs` of the points.
    kernel : callable
        ``kernel(blocks, rows, results)`` takes a rectangle ``(runs, width)`` of each input and
        the stream of each of its runs, and fills rectangles of the results, whose last two axes
        are ``(runs, width)``.  It must be causal: a value may depend on earlier points of its
        row alone.
    out : tuple of arrays
        One for each result, last axes like the points; places without a point are left alone.
    """
    width = runs.shape[-1]
    if runs.lengths.size == 0 or width == 0:
        return
    if runs.whole:
        single = len(runs.shape) == 1
        rows_of = [a[None] if single else a for a in inputs]
        targets = [a[..., None, :] if single else a for a in out]
        streams = rows_of[0].shape[0]
        per_block = max(1, _BLOCK_POINTS // width)
        for low in range(0, streams, per_block):
            high = min(low + per_block, streams)
            kernel(
                tuple(a[low:high] for a in rows_of),
                np.arange(low, high),
                tuple(a[..., low:high, :] for a in targets),
            )
        return
    flat_in = [a.reshape(-1) for a in inputs]
    flat_out = [a.reshape(*a.shape[: a.ndim - len(runs.shape)], -1) for a in out]
    for positions, real in run_blocks(runs):
        results = tuple(np.empty((*a.shape[:-1], *positions.shape), a.dtype) for a in flat_out)
        kernel(tuple(a[positions] for a in flat_in), positions[:, 0] // width, results)
        full = bool(real.all())
        for flat_target, result in zip(flat_out, results, strict=True):
            if full:
                flat_target[..., positions] = result
            else:
                flat_target[..., positions[real]] = result[..., real]

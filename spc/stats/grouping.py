"""Integer codes and grouped sums: the small tools that the estimators share."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]


def as_values(values: ArrayLike, name: str = "values") -> FloatArray:
    """Return `values` as a 1-D float array.

    Raises
    ------
    ValueError
        If it is not one-dimensional or holds NaN or infinity; the first bad index is named.
    """
    out = np.asarray(values, dtype=np.float64)
    if out.ndim != 1:
        raise ValueError(f"{name} must be one-dimensional, not of shape {out.shape}")
    finite = np.isfinite(out)
    if not finite.all():
        where = int(np.flatnonzero(~finite)[0])
        raise ValueError(f"{name}[{where}] is {out[where]}; leave missing readings out")
    return out


def as_codes(codes: ArrayLike, name: str, length: int) -> IntArray:
    """Return `codes` as a 1-D int array of non-negative codes of the given length.

    Raises
    ------
    ValueError
        If the shape is wrong or a code is negative.
    TypeError
        If the codes are not integers.
    """
    out = np.asarray(codes)
    if out.shape != (length,):
        raise ValueError(f"{name} has shape {out.shape}, but there are {length} rows")
    if out.size and not np.issubdtype(out.dtype, np.integer):
        raise TypeError(f"{name} must be integer codes, not {out.dtype}")
    out = out.astype(np.int64)
    if out.size and out.min() < 0:
        where = int(np.flatnonzero(out < 0)[0])
        raise ValueError(f"{name}[{where}] is {out[where]}; codes start at 0")
    return out


def parent_of(child: IntArray, parent: IntArray, child_name: str, parent_name: str) -> IntArray:
    """Return the parent of each child code (-1 where a code does not occur).

    Raises
    ------
    ValueError
        If one child code occurs under two parents.
    """
    out = np.full(int(child.max()) + 1 if child.size else 0, -1, dtype=np.int64)
    out[child] = parent
    clash = out[child] != parent
    if clash.any():
        code = int(child[clash][0])
        raise ValueError(
            f"{child_name} code {code} occurs under two codes of {parent_name}; "
            f"number each {child_name} once over all of them"
        )
    return out


def starts_of(sorted_codes: IntArray) -> IntArray:
    """Return the index at which each run of equal codes begins."""
    if sorted_codes.size == 0:
        return np.zeros(0, dtype=np.int64)
    return np.concatenate(([0], np.flatnonzero(np.diff(sorted_codes)) + 1)).astype(np.int64)


def sum_by(codes: IntArray, weights: ArrayLike, size: int) -> FloatArray:
    """Sum the weights of each code; shape (size,)."""
    return np.asarray(np.bincount(codes, weights=weights, minlength=size), dtype=np.float64)


def centred_sums(
    codes: IntArray, values: FloatArray, size: int
) -> tuple[IntArray, FloatArray, FloatArray]:
    """Count, mean and sum of squares about the mean of each code, in two passes.

    The second pass repairs the rounding of the first mean (Chan, Golub & LeVeque 1983,
    The American Statistician 37). Codes without rows have count 0, mean NaN, sum 0.
    """
    count = np.bincount(codes, minlength=size)
    some = np.maximum(count, 1)
    mean = sum_by(codes, values, size) / some
    deviation = values - mean[codes]
    slip = sum_by(codes, deviation, size)
    squares = sum_by(codes, deviation * deviation, size)
    squares = np.maximum(squares - slip * slip / some, 0.0)
    mean = np.where(count > 0, mean + slip / some, np.nan)
    return count.astype(np.int64), mean, squares

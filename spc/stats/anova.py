"""Analysis of variance: one way, and nested lot / wafer / site by the method of moments.

Sums of squares are taken about a reference value first, so that readings with a large common part
keep their digits.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import special

from spc.stats.grouping import FloatArray, IntArray, as_codes, centred_sums, sum_by
from spc.stats.wafer_summary import WaferSummary


@dataclass(frozen=True)
class OneWayAnova:
    """One-way analysis of variance of one set of groups.

    Degrees of freedom, sums of squares and mean squares between and within groups, the F ratio and
    its upper-tail probability; `component` = (MS between - MS within) / n0, not clipped at zero,
    with n0 the effective group size (the group size when all are equal).
    """

    df_between: int
    df_within: int
    ss_between: float
    ss_within: float
    ms_between: float
    ms_within: float
    f: float
    p: float
    component: float


def one_way_anova(group: ArrayLike, values: ArrayLike) -> OneWayAnova:
    """One-way analysis of variance.

    Parameters
    ----------
    group : (n,) array_like of int
        Codes from 0; groups may differ in size.
    values : (n,) array_like of float
        Readings, any unit. `numpy.longdouble` is used at its own precision for the one
        subtraction that decides how many digits are left.

    Raises
    ------
    ValueError
        For fewer than two groups, no replication, or readings that are not finite.

    Notes
    -----
    The first reading is subtracted from all. For readings within a factor two of one another that
    subtraction is exact (Sterbenz 1974), so only the rounding of the input is left.
    Checked on the NIST StRD sets, see `tests/published/test_anova_published.py`.
    """
    data = np.asarray(values)
    if data.ndim != 1 or not np.isfinite(data).all():
        raise ValueError("values must be one-dimensional and finite")
    codes = as_codes(group, "group", data.size)
    shifted = (data - data[0]).astype(np.float64) if data.size else data.astype(np.float64)
    count, mean, squares = centred_sums(codes, shifted, int(codes.max(initial=-1)) + 1)
    used = count > 0
    count, mean = count[used].astype(np.float64), mean[used]
    groups, total = count.size, float(count.sum())
    if groups < 2 or total <= groups:
        raise ValueError(
            f"{groups} groups with {int(total)} readings: at least two groups, and one group with "
            "two readings, are needed"
        )
    grand = float((count * mean).sum() / total)
    off = mean - grand
    grand += float((count * off).sum() / total)
    ss_between = float((count * (mean - grand) ** 2).sum())
    ss_within = float(squares.sum())
    df_between, df_within = groups - 1, int(total) - groups
    ms_between, ms_within = ss_between / df_between, ss_within / df_within
    f = ms_between / ms_within if ms_within > 0 else (np.inf if ms_between > 0 else np.nan)
    n0 = (total - float((count**2).sum()) / total) / df_between
    return OneWayAnova(
        df_between, df_within, ss_between, ss_within, ms_between, ms_within, float(f),
        float(special.fdtrc(df_between, df_within, f)), (ms_between - ms_within) / n0,
    )  # fmt: skip


@dataclass(frozen=True)
class NestedAnova:
    """Nested analysis of variance by stream; arrays (n_streams,) or (n_streams, 3).

    The columns of `df`, `ss`, `ms` and `variance` are site within wafer, wafer within lot, lot.
    `variance` are the components by the method of moments; they can be negative, and are NaN where
    there are no degrees of freedom. `f_lot` = MS lot / MS wafer and `f_wafer` = MS wafer / MS site
    with upper-tail probabilities `p_lot`, `p_wafer` (exact tests when the layout is balanced,
    which `balanced` tells).
    """

    df: FloatArray
    ss: FloatArray
    ms: FloatArray
    variance: FloatArray
    f_lot: FloatArray
    p_lot: FloatArray
    f_wafer: FloatArray
    p_wafer: FloatArray
    mean: FloatArray
    balanced: NDArray[np.bool_]


def nested_anova(summary: WaferSummary, *, site_df_lost: ArrayLike | None = None) -> NestedAnova:
    """Nested analysis of variance of lots, wafers within lots and sites within wafers.

    Parameters
    ----------
    summary : WaferSummary
        One row a wafer.
    site_df_lost : (n_streams,) array_like of int, optional
        Degrees of freedom that the site signature took.

    Raises
    ------
    ValueError, TypeError
        If `site_df_lost` does not fit the streams.

    Notes
    -----
    Sums of squares weighted by readings and their expectations in unbalanced layouts: Searle,
    Casella & McCulloch, Variance Components (1992), section 5.6 (Henderson's method I).
    """
    size = summary.n_streams
    lost = np.zeros(size) if site_df_lost is None else as_codes(site_df_lost, "site_df_lost", size)
    n = summary.n_sites.astype(np.float64)
    n_lots = int(summary.lot.max(initial=-1)) + 1
    lot_stream = np.zeros(n_lots, dtype=np.int64)
    lot_stream[summary.lot] = summary.stream
    centre = sum_by(summary.stream, summary.mean, size)
    centre /= np.maximum(sum_by(summary.stream, np.ones(n.size), size), 1.0)
    y = summary.mean - centre[summary.stream]
    lot_n = sum_by(summary.lot, n, n_lots)
    some = np.maximum(lot_n, 1.0)
    lot_mean = sum_by(summary.lot, n * y, n_lots) / some
    total = sum_by(lot_stream, lot_n, size)
    grand = sum_by(lot_stream, lot_n * lot_mean, size) / np.maximum(total, 1.0)
    wafers = sum_by(summary.stream, np.ones(n.size), size)
    lots = sum_by(lot_stream, lot_n > 0, size)
    ss = np.stack(
        [
            sum_by(summary.stream, summary.ss, size),
            sum_by(summary.stream, n * (y - lot_mean[summary.lot]) ** 2, size),
            sum_by(lot_stream, lot_n * (lot_mean - grand[lot_stream]) ** 2, size),
        ],
        axis=1,
    )
    df = np.stack([total - wafers - lost, wafers - lots, lots - 1], axis=1)
    df = np.maximum(df, 0.0)
    square = sum_by(summary.lot, n**2, n_lots)
    parts = [square / some, square, lot_n**2]
    ms, variance = _moments(ss, df, total, [sum_by(lot_stream, part, size) for part in parts])
    with np.errstate(divide="ignore", invalid="ignore"):
        f_lot, f_wafer = ms[:, 2] / ms[:, 1], ms[:, 1] / ms[:, 0]
        p_lot = np.asarray(special.fdtrc(df[:, 2], df[:, 1], f_lot), dtype=np.float64)
        p_wafer = np.asarray(special.fdtrc(df[:, 1], df[:, 0], f_wafer), dtype=np.float64)
    balanced = _balanced(summary, lot_stream, size)
    return NestedAnova(
        df, ss, ms, variance, f_lot, p_lot, f_wafer, p_wafer, centre + grand, balanced
    )


def _moments(
    ss: FloatArray, df: FloatArray, total: FloatArray, sums: list[FloatArray]
) -> tuple[FloatArray, FloatArray]:
    """Mean squares and the components that make them equal to their expectations.

    `sums` by stream: sum over lots of (sum n^2) / n_lot, sum of n^2, sum of n_lot^2.
    """
    shared, square, lot_square = sums
    with np.errstate(divide="ignore", invalid="ignore"):
        ms = np.where(df > 0, ss / df, np.nan)
        k1 = (total - shared) / df[:, 1]
        k2 = (shared - square / total) / df[:, 2]
        k3 = (total - lot_square / total) / df[:, 2]
        site = ms[:, 0]
        wafer = (ms[:, 1] - site) / k1
        lot = (ms[:, 2] - site - k2 * wafer) / k3
    return ms, np.stack([site, wafer, lot], axis=1)


def _balanced(summary: WaferSummary, lot_stream: IntArray, size: int) -> NDArray[np.bool_]:
    """Whether every wafer of a stream has as many sites, every lot as many wafers."""
    wafers = np.bincount(summary.lot, minlength=lot_stream.size)
    lots = np.flatnonzero(wafers)
    return _equal(summary.stream, summary.n_sites, size) & _equal(
        lot_stream[lots], wafers[lots], size
    )


def _equal(codes: IntArray, values: NDArray[Any], size: int) -> NDArray[np.bool_]:
    low, high = np.full(size, np.inf), np.full(size, -np.inf)
    np.minimum.at(low, codes, values)
    np.maximum.at(high, codes, values)
    return np.asarray(low == high)

"""The wafers behind each plotted point: a lot (or a wafer) of one stream and layer."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spc.records.columns import Columns, starts_of_groups, text

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


@dataclass(frozen=True)
class PointGroups:
    """Points and their wafers.

    Attributes
    ----------
    of_wafer : (n_wafers,) point of each row of the wafer table.
    table : one row a point, sorted by stream, lot, layer, wafer: stream, lot, layer, wafer (""
        for a whole lot), at_us, measured_us, processed_us (NaN: not known of any wafer),
        n_wafers, n_sites, effective_sites = n_wafers^2 / sum(1 / n_sites of a wafer).
    """

    of_wafer: IntArray
    table: Columns

    @property
    def n(self) -> int:
        """Number of points."""
        return len(self.table)

    def total(self, per_wafer: FloatArray) -> FloatArray:
        """Sum over the wafers of each point."""
        total = np.bincount(self.of_wafer, weights=per_wafer, minlength=self.n)
        return np.asarray(total, np.float64)


def group_points(wafers: Columns, point: str) -> PointGroups:
    """Group wafers (sorted by stream, lot, layer, wafer) into points.

    Parameters
    ----------
    wafers : with columns stream, lot, layer, wafer, at_us, measured_us, processed_us, n_sites.
    point : ``lot`` or ``wafer``.
    """
    keys = ["stream", "lot", "layer", *(["wafer"] if point == "wafer" else [])]
    new = starts_of_groups([wafers[name] for name in keys])
    of_wafer = np.asarray(np.cumsum(new) - 1, np.int64)
    first = np.flatnonzero(new)
    size = first.size
    sites = wafers["n_sites"].astype(np.float64)
    count = np.bincount(of_wafer, minlength=size)
    inverse = np.bincount(of_wafer, weights=1.0 / np.maximum(sites, 1), minlength=size)
    processed = wafers["processed_us"]
    latest = _largest(np.where(np.isnan(processed), -1.0, processed), first)
    table = Columns(
        {
            **{name: wafers[name][first] for name in ("stream", "lot", "layer")},
            "wafer": wafers["wafer"][first] if point == "wafer" else text("", size),
            "at_us": _largest(wafers["at_us"], first),
            "measured_us": _largest(wafers["measured_us"], first),
            "processed_us": np.where(latest < 0, np.nan, latest),
            "n_wafers": count,
            "n_sites": np.bincount(of_wafer, weights=sites, minlength=size).astype(np.int64),
            "effective_sites": count**2 / np.maximum(inverse, 1e-300),
        }
    )
    return PointGroups(of_wafer, table)


def _largest(values: NDArray, first: IntArray) -> NDArray:
    return np.maximum.reduceat(values, first) if first.size else values[:0]

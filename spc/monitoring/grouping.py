"""The wafers behind each plotted point: a lot (or a wafer) of one stream and layer."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

POINT_KEYS = ["stream", "lot", "layer", "point_wafer"]


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
    table: pd.DataFrame

    @property
    def n(self) -> int:
        """Number of points."""
        return len(self.table)

    def total(self, per_wafer: FloatArray) -> FloatArray:
        """Sum over the wafers of each point."""
        total = np.bincount(self.of_wafer, weights=per_wafer, minlength=self.n)
        return np.asarray(total, np.float64)


def group_points(wafers: pd.DataFrame, point: str) -> PointGroups:
    """Group wafers (sorted by stream, lot, layer, wafer) into points.

    Parameters
    ----------
    wafers : with columns stream, lot, layer, wafer, at_us, measured_us, processed_us, n_sites.
    point : ``lot`` or ``wafer``.
    """
    n = len(wafers)
    keys = [wafers[name].to_numpy(object) for name in ("stream", "lot", "layer")]
    if point == "wafer":
        keys.append(wafers["wafer"].to_numpy(object))
    new = np.ones(n, bool)
    if n:
        new[1:] = np.any([key[1:] != key[:-1] for key in keys], axis=0)
    of_wafer = np.asarray(np.cumsum(new) - 1, np.int64)
    first = np.flatnonzero(new)
    size = first.size
    sites = wafers["n_sites"].to_numpy(np.float64)
    count = np.bincount(of_wafer, minlength=size)
    inverse = np.bincount(of_wafer, weights=1.0 / np.maximum(sites, 1), minlength=size)
    processed = wafers["processed_us"].to_numpy(np.float64)
    table = wafers.iloc[first][["stream", "lot", "layer"]].reset_index(drop=True)
    table["wafer"] = wafers["wafer"].to_numpy(object)[first] if point == "wafer" else ""
    table["at_us"] = _largest(wafers["at_us"].to_numpy(np.int64), first)
    table["measured_us"] = _largest(wafers["measured_us"].to_numpy(np.int64), first)
    latest = _largest(np.where(np.isnan(processed), -1.0, processed), first)
    table["processed_us"] = np.where(latest < 0, np.nan, latest)
    table["n_wafers"] = count
    table["n_sites"] = np.bincount(of_wafer, weights=sites, minlength=size).astype(np.int64)
    table["effective_sites"] = count**2 / np.maximum(inverse, 1e-300)
    return PointGroups(of_wafer, table)


def _largest(values: NDArray, first: IntArray) -> NDArray:
    return np.maximum.reduceat(values, first) if first.size else values[:0]

"""Wafers in place of readings: the sufficient statistics of the nested model."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from spc.stats.grouping import (
    FloatArray,
    IntArray,
    as_codes,
    as_values,
    centred_sums,
    parent_of,
)


@dataclass(frozen=True)
class WaferSummary:
    """One row a wafer; arrays of shape (n_wafers,).

    Attributes
    ----------
    stream : int codes of the process stream, from 0.
    lot : int codes of the lot, unique over streams.
    n_sites : readings on the wafer, at least 1.
    mean : their mean, in the unit of the readings.
    ss : their sum of squares about the wafer mean (signature removed), squared unit.

    Raises
    ------
    ValueError, TypeError
        On construction, if shapes differ, codes are no codes, `n_sites` is below 1, `ss` is
        negative, a number is not finite, or a lot occurs in two streams.
    """

    stream: IntArray
    lot: IntArray
    n_sites: IntArray
    mean: FloatArray
    ss: FloatArray

    def __post_init__(self) -> None:
        mean = as_values(self.mean, "mean")
        ss = as_values(self.ss, "ss")
        if ss.shape != mean.shape:
            raise ValueError(f"ss has shape {ss.shape}, but there are {mean.size} rows")
        n_sites = as_codes(self.n_sites, "n_sites", mean.size)
        if n_sites.size and n_sites.min() < 1:
            raise ValueError(f"n_sites[{int(np.argmin(n_sites))}] is 0; leave empty wafers out")
        if ss.size and ss.min() < 0:
            raise ValueError(f"ss[{int(np.argmin(ss))}] is negative: {ss.min()}")
        stream = as_codes(self.stream, "stream", mean.size)
        lot = as_codes(self.lot, "lot", mean.size)
        parent_of(lot, stream, "lot", "stream")
        fields = {"stream": stream, "lot": lot, "n_sites": n_sites, "mean": mean, "ss": ss}
        for name, array in fields.items():
            object.__setattr__(self, name, array)

    @property
    def n_streams(self) -> int:
        """Streams, counted to the highest code."""
        return int(self.stream.max(initial=-1)) + 1


def summarise(
    stream: ArrayLike, lot: ArrayLike, wafer: ArrayLike, values: ArrayLike
) -> WaferSummary:
    """Reduce readings to one row a wafer, in ascending order of the wafer codes that occur.

    Parameters
    ----------
    stream, lot, wafer : (n,) array_like of int
        Codes from 0; each wafer code belongs to one lot, each lot code to one stream.
    values : (n,) array_like of float
        Readings with the site signature taken out, any unit.

    Raises
    ------
    ValueError, TypeError
        On bad shapes or codes, readings that are not finite, a wafer in two lots.

    Notes
    -----
    Two passes over the data: means first, then squares about them, with the rounding of the first
    mean repaired (Chan, Golub & LeVeque 1983).
    """
    data = as_values(values)
    wafers = as_codes(wafer, "wafer", data.size)
    lots = as_codes(lot, "lot", data.size)
    streams = as_codes(stream, "stream", data.size)
    wafer_lot = parent_of(wafers, lots, "wafer", "lot")
    lot_stream = parent_of(lots, streams, "lot", "stream")
    count, mean, squares = centred_sums(wafers, data, wafer_lot.size)
    present = np.flatnonzero(count > 0)
    own_lot = wafer_lot[present]
    return WaferSummary(
        lot_stream[own_lot], own_lot, count[present], mean[present], squares[present]
    )

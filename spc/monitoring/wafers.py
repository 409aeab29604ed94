"""Wafers of a characteristic: which stream, when, and the site readings that hold.

What depends on a baseline (the site signature, the map reference) is not here: see
`spc.monitoring.statistics`.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from config.control_plan import Characteristic
from config.values import unit_factor
from spc.monitoring.sites import Places, SiteReadings, current_sites
from spc.monitoring.streams import Placed, place_in_streams
from spc.records.columns import Columns, codes_of, order_of, starts_of_groups
from spc.records.contexts import ContextStore
from spc.records.measurements import LayoutStore

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

# One row a wafer in a stream, sorted by stream, lot, layer, wafer.
WAFER_COLUMNS = (
    "stream",  # code into Wafers.keys
    "lot",
    "layer",
    "wafer",
    "at_us",
    "measured_us",
    "processed_us",  # NaN where not known
    "context_id",
    "step_context_id",
    "n_sites",
    "mean",
    "squares",  # raw sum of squares about the mean
    "out_of_spec_sites",
)


@dataclass(frozen=True)
class Wafers:
    """Wafers and their sites.

    Attributes
    ----------
    keys : contexts (JSON) of the streams.
    table : one row a wafer, columns WAFER_COLUMNS.
    wafer, place : (n_sites,) row of the table and place of each site reading, sorted by both
        wafer and site name.
    value : (n_sites, 1) readings in the unit of the characteristic, or (n_sites, 2) dx and dy
        of an overlay characteristic (NaN: only the other axis was read).
    places : the places.
    notes : what could not be used and why.
    """

    keys: tuple[str, ...]
    table: Columns
    wafer: IntArray
    place: IntArray
    value: FloatArray
    places: Places
    notes: tuple[str, ...]


@dataclass(frozen=True)
class Stores:
    """What is read once in a transaction."""

    contexts: ContextStore
    layouts: LayoutStore


def build_wafers(
    frame: Columns, log: Columns, stores: Stores, characteristic: Characteristic
) -> Wafers:
    """Wafers of a characteristic from its measurements and the process log of their lots.

    Parameters
    ----------
    frame : from `measurement_rows`, with every measurement of the wafers it holds.
    """
    stores.layouts.load(np.unique(frame["layout_id"]).tolist())
    sites = current_sites(frame, stores.layouts.known)
    factor, notes = _factors(frame, characteristic)
    live = _live_rows(frame, sites) & np.isfinite(factor)
    rows = np.flatnonzero(live)
    short = frame.take(rows)
    placed = place_in_streams(short, log, stores.contexts, characteristic)
    stream = np.full(len(frame), -1, np.int64)
    stream[rows] = placed.stream
    of_row, table = _wafer_table(short, placed)
    wafer_of = np.full(len(frame), -1, np.int64)
    wafer_of[rows] = of_row
    keep = wafer_of[sites.row] >= 0
    row, place = sites.row[keep], sites.place[keep]
    value = sites.value[keep] * factor[row]
    wafer = wafer_of[row]
    axis = np.zeros(row.size, np.int64)
    if characteristic.is_overlay:
        axis = (frame["parameter"][row] == "overlay_y").astype(np.int64)
    wafer, place, values = _by_axis(wafer, place, value, axis, characteristic.is_overlay)
    bare = _bare_sums(short, of_row, factor[rows], len(table))
    table = _with_sums(table, wafer, values, bare, characteristic)
    found = Wafers(placed.keys, table, wafer, place, values, sites.places, notes)
    if not (frame["site_values"] == None).any():  # noqa: E711
        return found
    from spc.monitoring.kept import with_kept_sums  # which knows wafers, and so this room

    return with_kept_sums(stores.layouts.connection, found, characteristic)


def _factors(frame: Columns, c: Characteristic) -> tuple[FloatArray, tuple[str, ...]]:
    """Factor of each measurement to the characteristic's unit; NaN where units do not convert."""
    of, units = codes_of(frame["unit"])
    factors = np.array([unit_factor(u, c.unit) or np.nan for u in units], float)
    notes = tuple(
        f"{c.name}: readings in {u!r} do not convert to {c.unit!r} and are left out"
        for u, f in zip(units, factors, strict=True)
        if np.isnan(f)
    )
    return factors[of], notes


def _live_rows(frame: Columns, sites: SiteReadings) -> NDArray[np.bool_]:
    """Measurements with a site that holds, and the newest of a wafer kept as sums alone."""
    live = np.zeros(len(frame), bool)
    live[np.unique(sites.row)] = True
    bare = frame["site_values"] == None  # noqa: E711
    if bare.any():
        keys = [frame[name] for name in ("lot", "layer", "wafer", "parameter")]
        newest = np.append(starts_of_groups(keys)[1:], True)  # rows are in the order of time
        live |= bare.astype(bool) & newest
    return live


def _wafer_table(short: Columns, placed: Placed) -> tuple[IntArray, Columns]:
    """Wafer of each measurement (-1: not taken), and the table of wafers without sums."""
    taken = np.flatnonzero(placed.stream >= 0)
    names = ("lot", "layer", "wafer")
    table = Columns(
        {
            "stream": placed.stream[taken],
            **{name: short[name][taken] for name in names},
            "measured_us": short["measured_us"][taken],
            "processed_us": placed.processed_us[taken],
            "context_id": placed.context_id[taken],
            "step_context_id": placed.step_context_id[taken],
        }
    )
    keys = ["stream", *names]
    order = order_of([*(table[key] for key in keys), table["measured_us"]])
    table = table.take(order)
    new = starts_of_groups([table[key] for key in keys])
    of_row = np.full(len(short), -1, np.int64)
    of_row[taken[order]] = np.cumsum(new) - 1
    # The newest measurement speaks for the wafer; of two of one stamp (overlay) the last name.
    newest = np.append(new[1:], True) if len(table) else new
    table = table.take(newest)
    processed, measured = table["processed_us"], table["measured_us"]
    at = np.where(np.isnan(processed), measured, np.nan_to_num(processed)).astype(np.int64)
    return of_row, table.having(at_us=at)


def _by_axis(
    wafer: IntArray, place: IntArray, value: FloatArray, axis: IntArray, overlay: bool
) -> tuple[IntArray, IntArray, FloatArray]:
    """Site readings sorted by wafer; the two axes of an overlay mark side by side."""
    order = np.argsort(wafer, kind="stable")  # within a wafer the order of names stays
    wafer, place, value, axis = wafer[order], place[order], value[order], axis[order]
    if not overlay:
        return wafer, place, value[:, None]
    width = int(place.max(initial=0)) + 1
    key, mark = np.unique(wafer * width + place, return_inverse=True)
    both = np.full((key.size, 2), np.nan)
    both[mark, axis] = value
    return key // width, key % width, both


@dataclass(frozen=True)
class _Bare:
    n: IntArray
    mean: FloatArray
    squares: FloatArray


def _bare_sums(short: Columns, of_row: IntArray, factor: FloatArray, size: int) -> _Bare:
    """Sums of wafers whose site values the retention rule has taken away."""
    n, mean, squares = np.zeros(size, np.int64), np.full(size, np.nan), np.zeros(size)
    at = np.flatnonzero((of_row >= 0) & (short["site_values"] == None))  # noqa: E711
    n[of_row[at]] = short["n"][at]
    mean[of_row[at]] = short["mean"][at] * factor[at]
    squares[of_row[at]] = short["sum_squares"][at] * factor[at] ** 2
    return _Bare(n, mean, squares)


def _with_sums(
    table: Columns, wafer: IntArray, values: FloatArray, bare: _Bare, c: Characteristic
) -> Columns:
    size = len(table)
    low = -np.inf if c.lower_spec is None else c.lower_spec
    high = np.inf if c.upper_spec is None else c.upper_spec
    outside = ((values < low) | (values > high)).any(axis=1)
    n = np.bincount(wafer, minlength=size)
    # The mean of an overlay wafer is that of all its dx and dy; it is kept, not charted.
    first = values[:, 0] if values.shape[1] == 1 else np.nanmean(values, axis=1)
    some = np.maximum(n, 1)
    mean = np.bincount(wafer, weights=first, minlength=size) / some
    deviation = first - mean[wafer]
    mean = mean + np.bincount(wafer, weights=deviation, minlength=size) / some
    squares = np.bincount(wafer, weights=(first - mean[wafer]) ** 2, minlength=size)
    empty = n == 0
    return table.having(
        n_sites=np.where(empty, bare.n, n).astype(np.int64),
        mean=np.where(empty, bare.mean, mean),
        squares=np.where(empty, bare.squares, squares),
        out_of_spec_sites=np.bincount(wafer, weights=outside, minlength=size).astype(np.int64),
    ).pick(WAFER_COLUMNS)


def subset(wafers: Wafers, wanted: NDArray[np.bool_]) -> Wafers:
    """The same with some of the wafers only (stream codes and places stay)."""
    number = np.cumsum(wanted) - 1
    sites = wanted[wafers.wafer]
    return Wafers(
        wafers.keys,
        wafers.table.take(wanted),
        number[wafers.wafer[sites]],
        wafers.place[sites],
        wafers.value[sites],
        wafers.places,
        wafers.notes,
    )


def dense_streams(wafers: Wafers) -> tuple[Wafers, IntArray]:
    """The same with the streams that have wafers alone, and their codes in what was given."""
    codes, dense = np.unique(wafers.table["stream"], return_inverse=True)
    keys = tuple(wafers.keys[code] for code in codes)
    table = wafers.table.having(stream=dense.astype(np.int64))
    return replace(wafers, keys=keys, table=table), codes.astype(np.int64)

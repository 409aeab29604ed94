"""The readings behind a review: wafers of a span of months with their streams and sites.

Where the last evaluation saw all that the clock allows, the stream and the stamp of each wafer are
taken from its results; else they are found anew from readings and process log, as an evaluation at
that clock would. Both ways give the same, so that a review depends on the readings and the clock.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Connection

from config.control_plan import Characteristic
from config.values import unit_factor
from spc.monitoring.limit_sets import place_keys
from spc.monitoring.sites import Places, SiteReadings, current_sites
from spc.monitoring.wafers import Stores, build_wafers
from spc.records import review as records
from spc.records.columns import Columns, codes_of, row_codes
from spc.records.measurements import log_rows, measurement_rows

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


@dataclass(frozen=True)
class Window:
    """Months in a row: names (YYYY-MM) and stamps (us) of their beginnings and of the last end."""

    months: tuple[str, ...]
    starts_us: tuple[int, ...]
    as_of_us: int

    @property
    def span(self) -> tuple[int, int]:
        """First stamp of the first month and end of the last."""
        return self.starts_us[0], self.starts_us[-1]

    def month_of(self, at_us: IntArray) -> IntArray:
        """Number of the month of stamps within the span."""
        return np.searchsorted(np.array(self.starts_us[1:]), at_us, side="right").astype(np.int64)


@dataclass(frozen=True)
class Readings:
    """Wafers of a characteristic and their readings.

    Attributes
    ----------
    keys : contexts (JSON) of all its streams, with wafers in the span or not.
    stream, month : (n_wafers,) codes of the stream and of the month.
    lot, lot_wafer : (n_wafers,) codes of the lot (and layer), and of the wafer in it.
    bare_n, bare_mean, bare_squares : (n_wafers,) sums of wafers whose sites the retention rule took
        away; n is 0 for the others.
    wafer, site : (n,) row of the wafer and code of the place of each reading.
    value : (n, axes) readings in the characteristic's unit; two axes for overlay, NaN not read.
    notes : what could not be used, and why.
    """

    keys: tuple[str, ...]
    stream: IntArray
    month: IntArray
    lot: IntArray
    lot_wafer: IntArray
    bare_n: IntArray
    bare_mean: FloatArray
    bare_squares: FloatArray
    wafer: IntArray
    site: IntArray
    value: FloatArray
    notes: tuple[str, ...] = ()


@dataclass
class LogBook:
    """Process log of the lots of a window, read once for all characteristics that need it."""

    connection: Connection
    window: Window
    parameters: tuple[str, ...]  # of all characteristics
    _rows: Columns | None = None

    @property
    def rows(self) -> Columns:
        """The log of every lot that may have a wafer in the window."""
        if self._rows is None:
            as_of_us = self.window.as_of_us
            lots = records.lots_between(
                self.connection, self.parameters, self.window.span, as_of_us
            )
            self._rows = log_rows(self.connection, as_of_us, lots)
        return self._rows


def read_months(
    connection: Connection, stores: Stores, one: Characteristic, book: LogBook
) -> Readings:
    """Readings of one characteristic in the months of the book's window."""
    window = book.window
    known = records.streams_of(connection, one.name, window.as_of_us)
    if records.up_to_date(connection, one.name, window.as_of_us):
        return _from_results(connection, stores, one, window, known)
    return _made_anew(connection, stores, one, book)


def _layers(one: Characteristic) -> list[str] | None:
    layer = one.where.get("layer")
    return None if layer is None else [layer, ""]


# ---- found anew --------------------------------------------------------------------------------


def _made_anew(
    connection: Connection, stores: Stores, one: Characteristic, book: LogBook
) -> Readings:
    window = book.window
    lots = records.lots_between(connection, one.parameters, window.span, window.as_of_us)
    frame = measurement_rows(
        connection, one.parameters, window.as_of_us, layers=_layers(one), lots=lots
    )
    wafers = build_wafers(frame, book.rows, stores, one)
    table = wafers.table
    first, last = window.span
    keep = (table["at_us"] >= first) & (table["at_us"] < last)
    number = np.cumsum(keep) - 1
    sites = keep[wafers.wafer]
    table = table.take(keep)
    n_read = np.bincount(number[wafers.wafer[sites]], minlength=len(table))
    bare = (n_read == 0) & (not one.is_overlay)
    names = set(wafers.keys) | set(records.streams_of(connection, one.name, window.as_of_us))
    keys = tuple(sorted(names))
    code = {key: i for i, key in enumerate(keys)}
    of_stream = np.array([code[key] for key in wafers.keys], np.int64)
    return _readings(
        keys,
        table.having(
            stream=of_stream[table["stream"]],
            bare_n=np.where(bare, table["n_sites"], 0),
            bare_mean=table["mean"],
            bare_squares=table["squares"],
        ),
        number[wafers.wafer[sites]],
        _site_codes(wafers.places)[wafers.place[sites]],
        wafers.value[sites],
        window,
        wafers.notes,
    )


# ---- from the results of the last evaluation -----------------------------------------------------


def _from_results(
    connection: Connection,
    stores: Stores,
    one: Characteristic,
    window: Window,
    known: dict[str, int],
) -> Readings:
    keys = tuple(sorted(known))
    ids = np.array([known[key] for key in keys], np.int64)
    table = records.wafers_between(connection, ids.tolist(), window.span, window.as_of_us)
    order = np.argsort(ids)
    stream = order[np.searchsorted(ids[order], table["stream"])] if len(table) else table["stream"]
    table = table.having(stream=stream)
    lots = sorted(set(table["lot"].tolist()))
    frame = measurement_rows(
        connection, one.parameters, window.as_of_us, layers=_layers(one), lots=lots
    )
    stores.layouts.load(np.unique(frame["layout_id"]).tolist())
    sites = current_sites(frame, stores.layouts.known)
    units, names = codes_of(frame["unit"])
    factor = np.array([unit_factor(u, one.unit) or np.nan for u in names], float)[units]
    of_row = _wafer_of_rows(frame, table)
    of_row[np.isnan(factor)] = -1
    table = table.having(**_bare(frame, table, of_row, factor, one.is_overlay))
    wafer, site, value = _values(frame, sites, of_row, factor, one.is_overlay)
    return _readings(keys, table, wafer, site, value, window)


def _wafer_of_rows(frame: Columns, table: Columns) -> IntArray:
    """Row of the table that each measurement belongs to, -1 for none.

    A wafer stands in two streams when some of its sites were measured again in another context;
    the older measurement then belongs to the older of the two.
    """
    n = len(frame)
    if not len(table) or not n:
        return np.full(n, -1, np.int64)
    names = ("lot", "layer", "wafer")
    key = row_codes([np.concatenate([frame[name], table[name]]) for name in names])
    stamps = np.concatenate([frame["measured_us"], table["measured_us"]])
    rank = np.unique(stamps, return_inverse=True)[1].astype(np.int64)
    code = key * (int(rank.max()) + 1) + rank
    order = np.argsort(code[n:], kind="stable")
    at = np.minimum(np.searchsorted(code[n:][order], code[:n]), order.size - 1)
    found = order[at]
    same = key[n:][found] == key[:n]
    return np.where(same, found, -1)


def _bare(
    frame: Columns, table: Columns, of_row: IntArray, factor: FloatArray, overlay: bool
) -> dict[str, FloatArray]:
    """Sums of wafers of which no site is left; the newest measurement speaks."""
    size = len(table)
    n, mean, squares = np.zeros(size, np.int64), np.full(size, np.nan), np.zeros(size)
    sited = np.zeros(size, bool)
    packed = frame["site_values"] != None  # noqa: E711
    sited[of_row[packed & (of_row >= 0)]] = True
    if not overlay:
        at = np.flatnonzero(~packed.astype(bool) & (of_row >= 0))
        at = at[~sited[of_row[at]]]
        n[of_row[at]] = frame["n"][at]
        mean[of_row[at]] = frame["mean"][at] * factor[at]
        squares[of_row[at]] = frame["sum_squares"][at] * factor[at] ** 2
    return {"bare_n": n, "bare_mean": mean, "bare_squares": squares}


def _values(
    frame: Columns, sites: SiteReadings, of_row: IntArray, factor: FloatArray, overlay: bool
) -> tuple[IntArray, IntArray, FloatArray]:
    """Wafer, place and values of the site readings, the axes of a mark side by side."""
    keep = of_row[sites.row] >= 0
    row, place = sites.row[keep], sites.place[keep]
    value = sites.value[keep] * factor[row]
    wafer = of_row[row]
    codes = _site_codes(sites.places)
    if not overlay:
        return wafer, codes[place], value[:, None]
    axis = (frame["parameter"][row] == "overlay_y").astype(np.int64)
    width = int(place.max(initial=0)) + 1
    key, mark = np.unique(wafer * width + place, return_inverse=True)
    both = np.full((key.size, 2), np.nan)
    both[mark, axis] = value
    return key // width, codes[key % width], both


def _site_codes(places: Places) -> IntArray:
    """Code of each place, the same for places that differ by stage noise."""
    keys = place_keys(places)
    number = {key: i for i, key in enumerate(dict.fromkeys(keys))}
    return np.array([number[key] for key in keys], np.int64)


def _readings(
    keys: tuple[str, ...],
    table: Columns,
    wafer: IntArray,
    site: IntArray,
    value: FloatArray,
    window: Window,
    notes: tuple[str, ...] = (),
) -> Readings:
    empty = np.zeros(0, np.int64)
    lot = row_codes([table[name] for name in ("lot", "layer")]) if len(table) else empty
    of_wafer = row_codes([lot, table["wafer"]]) if len(table) else empty
    order = np.argsort(wafer, kind="stable")
    return Readings(
        keys,
        table["stream"],
        window.month_of(table["at_us"]),
        lot,
        of_wafer,
        table["bare_n"].astype(np.int64),
        table["bare_mean"],
        table["bare_squares"],
        wafer[order],
        site[order],
        value[order],
        notes,
    )

"""Readings on their way in: what is stored of the same wafers already, and storing new ones."""

from __future__ import annotations

import json
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Connection, select

from spc.records.bulk import any_of, insert_rows
from spc.records.contexts import chunks
from spc.records.tables import bay_events, layouts, measurements, process_log

WaferKey = tuple[str, str, str, str]  # parameter, layer, lot, wafer

MEASUREMENT_COLUMNS = (
    "file_id",
    "parameter",
    "layer",
    "lot",
    "wafer",
    "measured_us",
    "processed_us",
    "context_id",
    "layout_id",
    "unit",
    "n",
    "mean",
    "sum_squares",
    "site_values",
    "first_line",
    "last_line",
)
LOG_COLUMNS = (
    "file_id",
    "processed_us",
    "lot",
    "wafer",
    "layer",
    "step",
    "tool",
    "module",
    "context_id",
)
EVENT_COLUMNS = ("file_id", "at_us", "kind", "tool", "module", "text", "columns")


@dataclass(frozen=True)
class StoredMeasurement:
    """A measurement in the database, without its values."""

    id: int
    wafer: WaferKey
    measured_us: int
    processed_us: int | None
    context_id: int
    layout_id: int


def stored_measurements(
    connection: Connection, wafers: Iterable[WaferKey]
) -> list[StoredMeasurement]:
    """All measurements of some wafers, oldest id first."""
    wanted = set(wafers)
    table = measurements.c
    query = select(
        table.id,
        table.parameter,
        table.layer,
        table.lot,
        table.wafer,
        table.measured_us,
        table.processed_us,
        table.context_id,
        table.layout_id,
    )
    parameters = sorted({key[0] for key in wanted})
    if len(parameters) <= 100:
        query = query.where(table.parameter.in_(parameters))
    lots = sorted({key[2] for key in wanted})
    found = []
    for row in connection.execute(query.where(any_of(connection, table.lot, lots))):
        key = (row[1], row[2], row[3], row[4])
        if key in wanted:
            found.append(StoredMeasurement(row[0], key, row[5], row[6], row[7], row[8]))
    return sorted(found, key=lambda one: one.id)


def stored_values(
    connection: Connection, ids: Sequence[int]
) -> dict[int, NDArray[np.float64] | None]:
    """Site values of measurements; None where only their sums are kept."""
    found: dict[int, NDArray[np.float64] | None] = {}
    for part in chunks(list(ids)):
        query = select(measurements.c.id, measurements.c.site_values).where(
            measurements.c.id.in_(part)
        )
        for number, packed in connection.execute(query):
            found[number] = None if packed is None else np.frombuffer(packed, "<f8")
    return found


def layout_sites(connection: Connection, ids: Iterable[int]) -> dict[int, list[list[object]]]:
    """Sites of layouts: lists of [site, x_mm, y_mm, field_x_mm, field_y_mm]."""
    found: dict[int, list[list[object]]] = {}
    for part in chunks(sorted(set(ids))):
        query = select(layouts.c.id, layouts.c.sites).where(layouts.c.id.in_(part))
        found |= {number: json.loads(text) for number, text in connection.execute(query)}
    return found


def insert_measurements(connection: Connection, rows: Iterable[Sequence[object]]) -> None:
    """Store measurements, in the order of `MEASUREMENT_COLUMNS`."""
    insert_rows(connection, measurements, MEASUREMENT_COLUMNS, rows)


def stored_log(
    connection: Connection, lots: Iterable[str], first_us: int, last_us: int
) -> set[tuple[int, str, str, int]]:
    """Rows of the process log of some lots: (processed_us, lot, wafer, context_id)."""
    table = process_log.c
    query = select(table.processed_us, table.lot, table.wafer, table.context_id).where(
        table.processed_us >= first_us, table.processed_us <= last_us
    )
    rows = connection.execute(query.where(any_of(connection, table.lot, sorted(set(lots)))))
    return {(row[0], row[1], row[2], row[3]) for row in rows}


def insert_log(connection: Connection, rows: Iterable[Sequence[object]]) -> None:
    """Store rows of the process log, in the order of `LOG_COLUMNS`."""
    insert_rows(connection, process_log, LOG_COLUMNS, rows)


def stored_events(
    connection: Connection, first_us: int, last_us: int
) -> set[tuple[int, str, str | None, str | None, str | None, str]]:
    """Bay events between two stamps: (at_us, kind, tool, module, text, columns)."""
    table = bay_events.c
    query = select(
        table.at_us, table.kind, table.tool, table.module, table.text, table.columns
    ).where(table.at_us >= first_us, table.at_us <= last_us)
    return {(r[0], r[1], r[2], r[3], r[4], r[5]) for r in connection.execute(query)}


def insert_events(connection: Connection, rows: Iterable[Sequence[object]]) -> None:
    """Store bay events, in the order of `EVENT_COLUMNS`."""
    insert_rows(connection, bay_events, EVENT_COLUMNS, rows)

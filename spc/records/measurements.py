"""Questions about measurements and the process log: what is new, and the rows behind it."""

from __future__ import annotations

import json
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from typing import Any

from sqlalchemy import Connection, Select, func, select, union

from spc.records.columns import Columns, of_rows, order_of
from spc.records.contexts import chunks
from spc.records.tables import layouts, measurements, process_log

# More lots than this are read by one walk over the table instead of by their names.
WHOLE_TABLE = 4000

_MEASUREMENT = {
    "id": "i",
    "parameter": "o",
    "layer": "o",
    "lot": "o",
    "wafer": "o",
    "measured_us": "i",
    "processed_us": "f",
    "context_id": "i",
    "layout_id": "i",
    "unit": "o",
    "n": "i",
    "mean": "f",
    "sum_squares": "f",
    "site_values": "o",
}
_LOG = {
    "id": "i",
    "processed_us": "i",
    "lot": "o",
    "wafer": "o",
    "layer": "o",
    "step": "o",
    "tool": "o",
    "module": "o",
    "context_id": "i",
}


@dataclass(frozen=True)
class Marker:
    """How far an evaluation has looked: the clock, and the newest rows of both tables."""

    as_of_us: int
    last_measurement_id: int
    last_log_id: int


NOTHING_SEEN = Marker(-(2**62), 0, 0)


@dataclass(frozen=True)
class Changed:
    """Lots with something new: (parameter, layer, lot) of readings, (layer, lot) of the log."""

    readings: frozenset[tuple[str, str, str]]
    log: frozenset[tuple[str, str]]


def newest_ids(connection: Connection) -> tuple[int, int]:
    """Newest id of the measurements and of the process log, 0 where empty."""
    reading = connection.scalar(select(func.max(measurements.c.id)))
    log = connection.scalar(select(func.max(process_log.c.id)))
    return int(reading or 0), int(log or 0)


def changed_lots(connection: Connection, seen: Marker, now: Marker) -> Changed:
    """Lots whose readings or log rows an evaluation at `seen` did not see and `now` does.

    They are new rows, and old rows whose stamps the clock has passed since.
    """
    found = []
    for table, stamp, last_id, newest, names in (
        (
            measurements,
            "measured_us",
            seen.last_measurement_id,
            now.last_measurement_id,
            ("parameter", "layer", "lot"),
        ),
        (process_log, "processed_us", seen.last_log_id, now.last_log_id, ("layer", "lot")),
    ):
        columns = [table.c[name] for name in names]
        at = table.c[stamp]
        parts: list[Select[Any]] = []
        if newest > last_id:
            parts.append(select(*columns).where(table.c.id > last_id, at <= now.as_of_us))
        if now.as_of_us > seen.as_of_us and last_id:
            parts.append(select(*columns).where(at > seen.as_of_us, at <= now.as_of_us))
        rows = connection.execute(union(*parts)).all() if parts else []
        found.append(frozenset(tuple(row) for row in rows))
    return Changed(found[0], found[1])


def measurement_rows(
    connection: Connection,
    parameters: Sequence[str],
    as_of_us: int,
    *,
    layers: Sequence[str] | None = None,
    lots: Sequence[str] | None = None,
) -> Columns:
    """Measurements of some parameters up to a stamp, with their packed sites.

    `layers` and `lots` narrow it down. Row order: lot, layer, wafer, parameter, stamp, and of one
    stamp the newest row first, so that the row taken in first is the last of its stamp.
    """
    table = measurements.c
    query = select(*(table[name] for name in _MEASUREMENT)).where(
        table.parameter.in_(list(parameters)), table.measured_us <= as_of_us
    )
    if layers is not None:
        query = query.where(table.layer.in_(list(layers)))
    found = of_rows(_of_lots(connection, query, table.lot, lots), _MEASUREMENT)
    names = ("lot", "layer", "wafer", "parameter", "measured_us")
    return found.take(order_of([*(found[name] for name in names), -found["id"]]))


def log_rows(
    connection: Connection,
    as_of_us: int,
    lots: Sequence[str] | None = None,
    *,
    layers: Sequence[str] | None = None,
    parameters: Sequence[str] | None = None,
) -> Columns:
    """Process log up to a stamp, of some lots or all.

    `layers` narrows it to those layers, `parameters` to the wafers on which one of them was read.
    """
    table = process_log.c
    query = select(*(table[name] for name in _LOG)).where(table.processed_us <= as_of_us)
    if layers is not None:
        query = query.where(table.layer.in_(list(layers)))
    if parameters is not None:
        m = measurements.c
        read = select(m.id).where(
            m.lot == table.lot, m.wafer == table.wafer, m.parameter.in_(list(parameters))
        )
        query = query.where(read.exists())
    return of_rows(_of_lots(connection, query, table.lot, lots), _LOG)


def _of_lots(
    connection: Connection, query: Select[Any], lot: Any, lots: Sequence[str] | None
) -> list[Any]:
    if lots is None:
        return list(connection.execute(query).all())
    if len(lots) > WHOLE_TABLE:
        wanted = set(lots)
        place = [c.key for c in query.selected_columns].index("lot")
        return [row for row in connection.execute(query).all() if row[place] in wanted]
    rows: list[Any] = []
    for part in chunks(sorted(lots)):
        rows += connection.execute(query.where(lot.in_(part))).all()
    return rows


@dataclass(frozen=True)
class Layout:
    """The sites of a measurement in the order of its packed values; NaN where not given."""

    names: tuple[str, ...]
    x: tuple[float, ...]
    y: tuple[float, ...]
    u: tuple[float, ...]
    v: tuple[float, ...]


@dataclass
class LayoutStore:
    """Layouts read so far in one transaction."""

    connection: Connection
    known: dict[int, Layout] = field(default_factory=dict)

    def load(self, ids: Iterable[int]) -> None:
        """Read the layouts of these ids that are not known yet."""
        wanted = sorted(set(map(int, ids)) - self.known.keys())
        for part in chunks(wanted):
            query = select(layouts.c.id, layouts.c.sites).where(layouts.c.id.in_(part))
            for number, text in self.connection.execute(query):
                self.known[number] = _layout(json.loads(text))


def _layout(sites: list[list[Any]]) -> Layout:
    places = [[float("nan") if v is None else float(v) for v in site[1:5]] for site in sites]
    names = tuple(
        # A site without a name is known by its place, one without both by its turn.
        str(site[0]) if site[0] not in (None, "") else _nameless(place, turn)
        for turn, (site, place) in enumerate(zip(sites, places, strict=True))
    )
    x, y, u, v = zip(*places, strict=True) if places else ((), (), (), ())
    return Layout(names, x, y, u, v)


def _nameless(place: list[float], turn: int) -> str:
    if place[0] == place[0] and place[1] == place[1]:
        return f"({place[0]:.3f}, {place[1]:.3f})"
    return f"#{turn + 1}"

"""Streams, wafer results and plotted points in the database, and how far each was evaluated."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import (
    BigInteger,
    Connection,
    Integer,
    Table,
    bindparam,
    delete,
    func,
    select,
    update,
)

from spc.records.bulk import insert_rows
from spc.records.columns import Columns, of_rows
from spc.records.contexts import chunks
from spc.records.tables import points, streams, wafer_results

# Columns read back, with their kinds (see `spc.records.columns.of_rows`).
RESULT = {
    "stream_id": "i",
    "lot": "o",
    "layer": "o",
    "wafer": "o",
    "at_us": "i",
    "measured_us": "i",
    "processed_us": "f",
    "context_id": "i",
    "step_context_id": "i",
    "n_sites": "i",
    "mean": "f",
    "out_of_spec_sites": "i",
}
TAIL = {
    "stream_id": "i",
    "statistic": "o",
    "lot": "o",
    "layer": "o",
    "wafer": "o",
    "at_us": "i",
    "baseline_id": "f",
    "phase": "o",
    "z": "f",
    "rules": "o",
}
POINT_KEY = ["stream_id", "statistic", "lot", "layer", "wafer"]


def stream_ids(connection: Connection, characteristic: str) -> dict[str, int]:
    """Id of each stream of a characteristic by its context (JSON)."""
    query = select(streams.c.context, streams.c.id).where(
        streams.c.characteristic == characteristic
    )
    return {row.context: row.id for row in connection.execute(query)}


def add_streams(connection: Connection, characteristic: str, contexts: Sequence[str]) -> None:
    """Add streams that are not known yet."""
    if contexts:
        rows = [{"characteristic": characteristic, "context": one} for one in contexts]
        connection.execute(streams.insert(), rows)


def clear(connection: Connection, ids: Iterable[int]) -> None:
    """Take away the points and wafer results of streams, which are made anew from the readings."""
    for part in chunks(sorted(set(ids))):
        connection.execute(delete(points).where(points.c.stream_id.in_(part)))
        connection.execute(delete(wafer_results).where(wafer_results.c.stream_id.in_(part)))


def wafer_results_of(
    connection: Connection, ids: Iterable[int], lots: Sequence[str] | None = None
) -> Columns:
    """Wafer results (RESULT) of streams, of some lots or all."""
    t = wafer_results.c
    query = select(*(t[name] for name in RESULT))
    rows: list[Any] = []
    for part in chunks(sorted(set(ids))):
        narrowed = query.where(t.stream_id.in_(part))
        if lots is None:
            rows += connection.execute(narrowed).all()
            continue
        for some in chunks(sorted(set(lots))):
            rows += connection.execute(narrowed.where(t.lot.in_(some))).all()
    return of_rows(rows, RESULT)


def delete_lots(connection: Connection, keys: Columns, statistics: Sequence[str]) -> None:
    """Take away the results of (stream_id, lot, layer), which are about to be written anew.

    `statistics` are those that the streams have; named so that the primary key is walked.
    """
    rows = [
        {"b_stream": stream, "b_lot": lot, "b_layer": layer}
        for stream, lot, layer in keys.rows(("stream_id", "lot", "layer"))
    ]
    if not rows:
        return
    for table in (points, wafer_results):
        statement = delete(table).where(
            table.c.stream_id == bindparam("b_stream"),
            table.c.lot == bindparam("b_lot"),
            table.c.layer == bindparam("b_layer"),
        )
        some = rows
        if table is points:
            statement = statement.where(points.c.statistic == bindparam("b_statistic"))
            some = [row | {"b_statistic": name} for row in rows for name in statistics]
        connection.execute(statement, some)


def insert(connection: Connection, table: Table, frame: Columns) -> None:
    """Insert a table whose columns are those of the database's; NaN becomes null."""
    names = list(frame)
    columns = [_values(frame[name], table.c[name].type) for name in names]
    if len(frame):
        insert_rows(connection, table, names, zip(*columns, strict=True))


def _values(values: NDArray[Any], kind: object) -> list[Any]:
    if values.dtype.kind != "f":
        return list(values.tolist())
    whole = isinstance(kind, (Integer, BigInteger))
    absent = np.isnan(values)
    given = np.where(absent, 0.0, values)
    out = (given.astype(np.int64) if whole else given).astype(object)
    out[absent] = None
    return list(out.tolist())


def update_rules(connection: Connection, frame: Columns) -> None:
    """Set the rule names of points that are stored already."""
    statement = (
        update(points)
        .where(*(points.c[name] == bindparam(f"b_{name}") for name in POINT_KEY))
        .values(rules=bindparam("b_rules"))
    )
    names = [*POINT_KEY, "rules"]
    keys = [f"b_{name}" for name in names]
    rows = [dict(zip(keys, row, strict=True)) for row in frame.rows(names)]
    if rows:
        connection.execute(statement, rows)


def points_from(
    connection: Connection, statistics: Sequence[str], first_us: Mapping[int, int], before: int
) -> Columns:
    """Points of streams from a stamp on, and the `before` points in front of it.

    Parameters
    ----------
    statistics : statistics that the streams have.
    first_us : stream id -> stamp.
    before : points in front, of every statistic by itself.
    """
    rows: list[Any] = []
    columns = [points.c[name] for name in TAIL]
    reach = (
        select(points.c.at_us)
        .where(
            points.c.stream_id == bindparam("b_stream"),
            points.c.statistic == bindparam("b_statistic"),
            points.c.at_us < bindparam("b_first"),
        )
        .order_by(points.c.at_us.desc())
        .limit(1)
        .offset(before - 1)
        .scalar_subquery()
    )
    query = select(*columns).where(
        points.c.stream_id == bindparam("b_stream"),
        points.c.statistic == bindparam("b_statistic"),
        points.c.at_us >= func.coalesce(reach, bindparam("b_lowest")),
    )
    lowest = -(2**62)
    for stream, first in first_us.items():
        for statistic in statistics:
            some = {"b_stream": stream, "b_statistic": statistic, "b_first": first}
            rows += connection.execute(query, some | {"b_lowest": lowest}).all()
    return of_rows(rows, TAIL)


def lots_between(
    connection: Connection, ids: Iterable[int], first_us: int | None, last_us: int | None
) -> list[str]:
    """Lots of streams with a wafer in a span of time (us, both ends in; None: open)."""
    t = wafer_results.c
    found: set[str] = set()
    for part in chunks(sorted(set(ids))):
        query = select(t.lot).distinct().where(t.stream_id.in_(part))
        if first_us is not None:
            query = query.where(t.at_us >= first_us)
        if last_us is not None:
            # The point of a lot stands at its last wafer; a lot that began before is in the span.
            query = query.where(t.at_us <= last_us)
        found |= set(connection.scalars(query))
    return sorted(found)

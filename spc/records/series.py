"""Streams, wafer results and plotted points in the database, and how far each was evaluated."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from typing import Any

import numpy as np
import pandas as pd
from sqlalchemy import (
    BigInteger,
    Connection,
    Integer,
    Select,
    Table,
    bindparam,
    delete,
    func,
    select,
    update,
)

from spc.records.bulk import insert_rows
from spc.records.contexts import chunks
from spc.records.tables import points, streams, wafer_results

POINT_COLUMNS = tuple(c.name for c in points.columns)
WAFER_RESULT_COLUMNS = tuple(c.name for c in wafer_results.columns)
TAIL_COLUMNS = (
    "stream_id",
    "statistic",
    "lot",
    "layer",
    "wafer",
    "at_us",
    "baseline_id",
    "phase",
    "z",
    "rules",
)
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
) -> pd.DataFrame:
    """Wafer results of streams, of some lots or all, without the packed statistics."""
    columns = [c for c in wafer_results.columns if c.name != "statistics"]
    query = select(*columns)
    return _rows(connection, query, wafer_results, (ids, lots), [c.name for c in columns])


def points_of(
    connection: Connection, ids: Iterable[int], lots: Sequence[str] | None = None
) -> pd.DataFrame:
    """Points of streams, of some lots or all."""
    return _rows(connection, select(points), points, (ids, lots), POINT_COLUMNS)


def _rows(
    connection: Connection,
    query: Select[Any],
    table: Any,
    of: tuple[Iterable[int], Sequence[str] | None],
    names: Sequence[str],
) -> pd.DataFrame:
    ids, lots = sorted(set(of[0])), of[1]
    rows: list[Any] = []
    for part in chunks(ids):
        narrowed = query.where(table.c.stream_id.in_(part))
        if lots is None:
            rows += connection.execute(narrowed).all()
            continue
        for some in chunks(sorted(set(lots))):
            rows += connection.execute(narrowed.where(table.c.lot.in_(some))).all()
    return pd.DataFrame([tuple(row) for row in rows], columns=list(names))


def delete_lots(connection: Connection, keys: pd.DataFrame) -> None:
    """Take away the results of (stream_id, lot, layer), which are about to be written anew."""
    if keys.empty:
        return
    rows = [
        {"b_stream": int(s), "b_lot": lot, "b_layer": layer}
        for s, lot, layer in keys[["stream_id", "lot", "layer"]].itertuples(index=False)
    ]
    for table in (points, wafer_results):
        statement = delete(table).where(
            table.c.stream_id == bindparam("b_stream"),
            table.c.lot == bindparam("b_lot"),
            table.c.layer == bindparam("b_layer"),
        )
        if table is points:
            # All statistics are named so that the primary key is walked, not the whole stream.
            statement = statement.where(points.c.statistic == bindparam("b_statistic"))
            names = _statistics(connection, keys["stream_id"].unique())
            some = [row | {"b_statistic": name} for row in rows for name in names]
            if some:
                connection.execute(statement, some)
        else:
            connection.execute(statement, rows)


def _statistics(connection: Connection, ids: Iterable[int]) -> list[str]:
    names: set[str] = set()
    for part in chunks([int(i) for i in ids]):
        query = select(points.c.statistic).distinct().where(points.c.stream_id.in_(part))
        names |= set(connection.scalars(query))
    return sorted(names)


def insert(connection: Connection, table: Table, frame: pd.DataFrame) -> None:
    """Insert a frame whose columns are those of the table; NaN becomes null."""
    names = [str(name) for name in frame.columns]
    columns = [_values(frame[name], table.c[name].type) for name in names]
    if len(frame):
        insert_rows(connection, table, names, zip(*columns, strict=True))


def _values(column: pd.Series, kind: object) -> list[Any]:
    values = column.to_numpy()
    if values.dtype.kind != "f":
        return list(values.tolist())
    whole = isinstance(kind, (Integer, BigInteger))
    absent = np.isnan(values)
    given = np.where(absent, 0.0, values)
    out = (given.astype(np.int64) if whole else given).astype(object)
    out[absent] = None
    return list(out.tolist())


def update_rules(connection: Connection, frame: pd.DataFrame) -> None:
    """Set the rule names of points that are stored already."""
    if frame.empty:
        return
    statement = (
        update(points)
        .where(*(points.c[name] == bindparam(f"b_{name}") for name in POINT_KEY))
        .values(rules=bindparam("b_rules"))
    )
    rows = [
        {f"b_{name}": value for name, value in zip([*POINT_KEY, "rules"], row, strict=True)}
        for row in frame[[*POINT_KEY, "rules"]].itertuples(index=False)
    ]
    connection.execute(statement, rows)


def points_from(
    connection: Connection, statistics: Sequence[str], first_us: Mapping[int, int], before: int
) -> pd.DataFrame:
    """Points of streams from a stamp on, and the `before` points in front of it.

    Parameters
    ----------
    statistics : statistics that the streams have.
    first_us : stream id -> stamp.
    before : points in front, of every statistic by itself.
    """
    rows: list[Any] = []
    columns = [points.c[name] for name in TAIL_COLUMNS]
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
    return pd.DataFrame([tuple(row) for row in rows], columns=list(TAIL_COLUMNS))


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

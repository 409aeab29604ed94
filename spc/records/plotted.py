"""Plotted points as rows, for reading them: JSON, CSV, charts and the silent streams."""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from sqlalchemy import Connection, Row, case, func, select

from spc.records.tables import contexts, points, streams, wafer_results


@dataclass(frozen=True)
class Wanted:
    """Which points of a characteristic: all, or those of one statistic, stream or span (us)."""

    characteristic: str
    statistic: str | None = None
    stream_id: int | None = None
    since_us: int | None = None
    until_us: int | None = None


def rows(connection: Connection, wanted: Wanted) -> Sequence[Row[Any]]:
    """Points with the context (JSON) of their stream, by context, statistic and stamp."""
    columns = [c for c in points.columns if c.name != "effective_sites"]
    query = (
        select(streams.c.context, *columns)
        .join(streams, streams.c.id == points.c.stream_id)
        .where(streams.c.characteristic == wanted.characteristic)
        .order_by(
            streams.c.context,
            points.c.statistic,
            points.c.at_us,
            points.c.lot,
            points.c.layer,
            points.c.wafer,
        )
    )
    if wanted.statistic is not None:
        query = query.where(points.c.statistic == wanted.statistic)
    if wanted.stream_id is not None:
        query = query.where(points.c.stream_id == wanted.stream_id)
    if wanted.since_us is not None:
        query = query.where(points.c.at_us >= wanted.since_us)
    if wanted.until_us is not None:
        query = query.where(points.c.at_us <= wanted.until_us)
    return connection.execute(query).all()


@dataclass(frozen=True)
class LastSeen:
    """The newest wafer of a stream: when it was measured and processed, and its context; and when
    each gauge last measured one of its newest wafers."""

    stream_id: int
    context: dict[str, str]
    measured_us: int
    at_us: int
    columns: dict[str, str]
    gauges: dict[str, int]


def last_seen(connection: Connection, characteristic: str) -> list[LastSeen]:
    """The newest wafer, by its measurement, of each stream of a characteristic.

    Only the wafers since the newest point of each stream are walked, whatever the history.
    """
    known = connection.execute(
        select(streams.c.id, streams.c.context)
        .where(streams.c.characteristic == characteristic)
        .order_by(streams.c.id)
    ).all()
    found = []
    for stream in known:
        newest = (
            select(wafer_results.c.measured_us, wafer_results.c.at_us, wafer_results.c.context_id)
            .where(wafer_results.c.stream_id == stream.id)
            .order_by(wafer_results.c.at_us.desc())
            .limit(_NEWEST)
            .subquery()
        )
        rows = connection.execute(
            select(newest.c.measured_us, newest.c.at_us, contexts.c.columns)
            .join(contexts, contexts.c.id == newest.c.context_id)
            .order_by(newest.c.measured_us.desc(), newest.c.at_us.desc())
        ).all()
        gauges: dict[str, int] = {}
        for one in rows:
            gauges.setdefault(json.loads(one.columns).get("gauge", ""), one.measured_us)
        if rows:
            row = rows[0]
            found.append(
                LastSeen(
                    stream.id,
                    json.loads(stream.context),
                    row.measured_us,
                    row.at_us,
                    json.loads(row.columns),
                    {name: stamp for name, stamp in gauges.items() if name},
                )
            )
    return found


# Wafers are measured nearly in the order they were processed in; the last of so many is the last.
_NEWEST = 200


def out_of_spec_lots(
    connection: Connection, characteristic: str, since_us: int, until_us: int
) -> Sequence[Row[Any]]:
    """Lots with sites out of specification, measured in a span of time (us, both ends in).

    Columns: stream_id, context (JSON of the stream), lot, layer, at_us, measured_us, wafers,
    sites, out_of_spec_wafers, out_of_spec_sites; in the order of at_us.
    """
    keys = [points.c.stream_id, points.c.lot, points.c.layer]
    lots = (
        select(*keys)
        .join(streams, streams.c.id == points.c.stream_id)
        .where(
            streams.c.characteristic == characteristic,
            points.c.measured_us >= since_us,
            points.c.measured_us <= until_us,
        )
        .distinct()
        .subquery()
    )
    t = wafer_results.c
    outside = func.sum(t.out_of_spec_sites)
    query = (
        select(
            t.stream_id,
            streams.c.context,
            t.lot,
            t.layer,
            func.max(t.at_us).label("at_us"),
            func.max(t.measured_us).label("measured_us"),
            func.count().label("wafers"),
            func.sum(t.n_sites).label("sites"),
            func.sum(case((t.out_of_spec_sites > 0, 1), else_=0)).label("out_of_spec_wafers"),
            outside.label("out_of_spec_sites"),
        )
        .join(streams, streams.c.id == t.stream_id)
        .join(
            lots,
            (lots.c.stream_id == t.stream_id) & (lots.c.lot == t.lot) & (lots.c.layer == t.layer),
        )
        .group_by(t.stream_id, streams.c.context, t.lot, t.layer)
        .having(outside > 0)
        .order_by("at_us", t.stream_id, t.lot)
    )
    return connection.execute(query).all()

"""What triage looks back on: points, wafers and process stamps of a span of time."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import pandas as pd
from sqlalchemy import Connection, or_, select

from spc.records.contexts import chunks
from spc.records.tables import baselines, points, process_log, streams, wafer_results

_WEEK_US = 7 * 86_400_000_000
_POINT_NAMES = (
    "stream_id",
    "statistic",
    "lot",
    "layer",
    "wafer",
    "at_us",
    "measured_us",
    "processed_us",
    "value",
    "n_wafers",
    "n_sites",
    "effective_sites",
    "df",
    "baseline_id",
    "phase",
    "center",
    "lower_limit",
    "upper_limit",
    "sigma",
    "z",
    "rules",
)
_WAFER_NAMES = (
    "stream_id",
    "lot",
    "layer",
    "wafer",
    "at_us",
    "measured_us",
    "processed_us",
    "context_id",
    "step_context_id",
    "n_sites",
    "mean",
    "sum_squares",
    "df",
    "statistics",
    "out_of_spec_sites",
)


def all_streams(connection: Connection) -> pd.DataFrame:
    """Every stream: stream_id, characteristic, context (JSON)."""
    names = ("stream_id", "characteristic", "context")
    query = select(streams.c.id, streams.c.characteristic, streams.c.context)
    rows = connection.execute(query.order_by(streams.c.id)).all()
    return pd.DataFrame([tuple(row) for row in rows], columns=list(names))


def points_since(connection: Connection, since_us: int) -> pd.DataFrame:
    """Points with limits from a stamp on, and all baseline points (there are few a stream).

    Sorted by stream, statistic, at_us, lot, layer, wafer.
    """
    query = select(*(points.c[name] for name in _POINT_NAMES)).where(
        points.c.baseline_id.is_not(None),
        or_(points.c.at_us >= since_us, points.c.phase == "baseline"),
    )
    rows = connection.execute(query).all()
    frame = pd.DataFrame([tuple(row) for row in rows], columns=list(_POINT_NAMES))
    keys = ["stream_id", "statistic", "at_us", "lot", "layer", "wafer"]
    return frame.sort_values(keys, ignore_index=True)


def wafers_of(
    connection: Connection, stream_ids: Sequence[int], since_us: int, set_ids: Sequence[int]
) -> pd.DataFrame:
    """Wafer results of streams from a stamp on, and those behind the baselines of limit sets.

    With a week on either side, for the wafers of a lot are spread over time. What lies between is
    not read, or a night would take the longer the older its bay is. Sorted by stream, at_us, lot,
    layer, wafer.
    """
    w, b = wafer_results.c, baselines.c
    columns = [w[name] for name in _WAFER_NAMES]
    rows: dict[tuple[Any, ...], tuple[Any, ...]] = {}  # by stream, lot, layer and wafer
    for part in chunks(sorted(set(map(int, stream_ids)))):
        recent = select(*columns).where(w.stream_id.in_(part), w.at_us >= since_us - _WEEK_US)
        rows.update((tuple(row[:4]), tuple(row)) for row in connection.execute(recent))
    for part in chunks(sorted(set(map(int, set_ids)))):
        old = select(*columns).where(
            b.id.in_(part),
            w.stream_id == b.stream_id,
            w.at_us.between(b.first_us - _WEEK_US, b.last_us + _WEEK_US),
        )
        rows.update((tuple(row[:4]), tuple(row)) for row in connection.execute(old))
    frame = pd.DataFrame(list(rows.values()), columns=list(_WAFER_NAMES))
    keys = ["stream_id", "at_us", "lot", "layer", "wafer"]
    return frame.sort_values(keys, ignore_index=True)


def step_stamps(
    connection: Connection, wafers: pd.DataFrame, first_us: int, as_of_us: int
) -> pd.DataFrame:
    """When each step of the log worked on wafers (lot, wafer, layer).

    Returns lot, wafer, layer, context_id, processed_us of every log row of these wafers.
    """
    log = process_log.c
    names = ("lot", "wafer", "layer", "context_id", "processed_us")
    numbers = sorted(wafers["wafer"].unique())
    rows: list[Any] = []
    for part in chunks(sorted(wafers["lot"].unique())):
        query = select(*(log[name] for name in names)).where(
            log.lot.in_(part), log.processed_us >= first_us, log.processed_us <= as_of_us
        )
        if len(numbers) <= 50:
            query = query.where(log.wafer.in_(numbers))
        rows += connection.execute(query).all()
    return pd.DataFrame([tuple(row) for row in rows], columns=list(names))

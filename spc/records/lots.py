"""Questions about lots: which went through a context, which were measured."""

from __future__ import annotations

import json
from collections.abc import Callable, Mapping, Sequence
from functools import lru_cache
from types import MappingProxyType
from typing import Any

import pandas as pd
from sqlalchemy import Connection, select

from spc.records.contexts import chunks
from spc.records.tables import contexts, measurements, process_log

Columns = Mapping[str, str]


def matching_contexts(
    connection: Connection, wanted: Callable[[Columns], bool]
) -> dict[int, dict[str, str]]:
    """Contexts whose columns pass, by id. There are few contexts; all are read."""
    rows = connection.execute(select(contexts.c.id, contexts.c.columns))
    found = ((int(number), _columns(text)) for number, text in rows)
    return {number: dict(columns) for number, columns in found if wanted(columns)}


@lru_cache(maxsize=20_000)
def _columns(text: str) -> Columns:
    """Columns of a context. Contexts never change, and one night asks for all of them often."""
    return MappingProxyType(json.loads(text))


def processed_between(
    connection: Connection, context_ids: Sequence[int], first_us: int, last_us: int
) -> pd.DataFrame:
    """Process log rows of these contexts in a span of time, both ends in.

    Columns: lot, wafer, layer, processed_us, context_id.
    """
    log = process_log.c
    names = ("lot", "wafer", "layer", "processed_us", "context_id")
    rows: list[Any] = []
    for part in chunks(list(context_ids)):
        query = select(*(log[name] for name in names)).where(
            log.context_id.in_(part), log.processed_us >= first_us, log.processed_us <= last_us
        )
        rows += connection.execute(query).all()
    frame = pd.DataFrame([tuple(row) for row in rows], columns=list(names))
    return frame.sort_values(["processed_us", "lot", "wafer"], ignore_index=True)


def measured_between(
    connection: Connection, context_ids: Sequence[int], first_us: int, last_us: int
) -> pd.DataFrame:
    """Measurements of these contexts in a span of time, both ends in.

    Columns: lot, wafer, layer, measured_us, processed_us, context_id.
    """
    table = measurements.c
    names = ("lot", "wafer", "layer", "measured_us", "processed_us", "context_id")
    rows: list[Any] = []
    for part in chunks(list(context_ids)):
        query = select(*(table[name] for name in names)).where(
            table.context_id.in_(part),
            table.measured_us >= first_us,
            table.measured_us <= last_us,
        )
        rows += connection.execute(query).all()
    return pd.DataFrame([tuple(row) for row in rows], columns=list(names))


def measured_lots(
    connection: Connection, lots: Sequence[str], parameters: Sequence[str], as_of_us: int
) -> set[tuple[str, str]]:
    """(lot, layer) pairs, of the lots given, with a reading of any of the parameters."""
    table = measurements.c
    found: set[tuple[str, str]] = set()
    for part in chunks(sorted(lots)):
        query = (
            select(table.lot, table.layer)
            .where(
                table.lot.in_(part),
                table.parameter.in_(list(parameters)),
                table.measured_us <= as_of_us,
            )
            .distinct()
        )
        found |= {(lot, layer) for lot, layer in connection.execute(query)}
    return found


def logged_lots(connection: Connection, lots: Sequence[str]) -> set[str]:
    """Which of the lots the process log knows."""
    found: set[str] = set()
    for part in chunks(sorted(lots)):
        query = select(process_log.c.lot).where(process_log.c.lot.in_(part)).distinct()
        found |= set(connection.scalars(query))
    return found

"""Process log and bay events: checked, compared with what is stored, and stored.

A row that equals a stored one in every respect is a duplicate. Nothing else about them is in
conflict: a wafer can be processed twice.
"""

from __future__ import annotations

from collections.abc import Sequence, Set
from dataclasses import dataclass
from datetime import tzinfo
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Connection

from ingest.columns import Rows
from ingest.readings import NAMES, check_names, contexts_of, stamps_of
from ingest.sheet import Faults, Texts
from spc.records.interned import Vocabulary
from spc.records.readings import insert_events, insert_log, stored_events, stored_log

K = TypeVar("K")


@dataclass(frozen=True)
class LogBatch:
    """Good rows of a process log; arrays of shape (rows,)."""

    processed_us: NDArray[np.int64]
    columns: dict[str, list[str]]  # lot, wafer, layer, step, tool, module
    context: NDArray[np.int64]
    contexts: list[str]


@dataclass(frozen=True)
class EventBatch:
    """Good bay events: (at_us, kind, tool, module, text, JSON of the other columns)."""

    events: list[tuple[int, str, str | None, str | None, str | None, str]]


def read_log(rows: Rows, zone: tzinfo, stamp_format: str | None, faults: Faults) -> LogBatch:
    """Check the rows of a process log, mark the faulty ones, and return the others."""
    columns = {**rows.context, **rows.house}
    for name in ("lot", "wafer", "tool"):
        faults.add(columns[name].empty, f"{name} is empty", columns[name])
    for name in NAMES:
        if name in columns:
            check_names(columns[name], faults)
    processed = stamps_of(rows.house["processed_at"], zone, stamp_format, faults)
    good = np.flatnonzero(faults.clean)
    context, contexts = contexts_of(rows.context, good)
    kept = {
        name: _texts(columns.get(name), good)
        for name in ("lot", "wafer", "layer", "step", "tool", "module")
    }
    return LogBatch(processed[good], kept, context, contexts)


def read_events(rows: Rows, zone: tzinfo, stamp_format: str | None, faults: Faults) -> EventBatch:
    """Check bay events, mark the faulty ones, and return the others."""
    house = rows.house
    faults.add(house["kind"].empty, "kind is empty", house["kind"])
    for name in ("kind", "tool", "module"):
        if name in house:
            check_names(house[name], faults)
    at = stamps_of(house["at"], zone, stamp_format, faults)
    good = np.flatnonzero(faults.clean)
    context, contexts = contexts_of(rows.context, good)
    optional = [[t or None for t in _texts(house.get(n), good)] for n in ("tool", "module", "text")]
    events = zip(
        at[good].tolist(),
        _texts(house["kind"], good),
        *optional,
        [contexts[i] for i in context.tolist()],
        strict=True,
    )
    return EventBatch(list(events))


def store_log(
    connection: Connection, file_id: int, batch: LogBatch, vocabulary: Vocabulary
) -> tuple[int, int]:
    """Store the rows that are new; counts of loaded and of duplicate rows."""
    n = len(batch.processed_us)
    if not n:
        return 0, 0
    ids = vocabulary.contexts.ids(connection, batch.contexts)
    context = [ids[i] for i in batch.context.tolist()]
    at = batch.processed_us.tolist()
    names = ("lot", "wafer", "layer", "step", "tool", "module")
    lots, wafers = batch.columns["lot"], batch.columns["wafer"]
    known = stored_log(connection, lots, min(at), max(at))
    keys = list(zip(at, lots, wafers, context, strict=True))
    new = _first_of(keys, known)
    table = list(zip(at, *(batch.columns[name] for name in names), context, strict=True))
    insert_log(connection, ((file_id, *table[i]) for i in new))
    return len(new), n - len(new)


def store_events(connection: Connection, file_id: int, batch: EventBatch) -> tuple[int, int]:
    """Store the events that are new; counts of loaded and of duplicate rows."""
    if not batch.events:
        return 0, 0
    stamps = [event[0] for event in batch.events]
    known = stored_events(connection, min(stamps), max(stamps))
    new = _first_of(batch.events, known)
    insert_events(connection, ((file_id, *batch.events[i]) for i in new))
    return len(new), len(batch.events) - len(new)


def _first_of(keys: Sequence[K], known: Set[K]) -> list[int]:
    """Places of the keys that are not known, each once."""
    first: dict[K, int] = {}
    for i, key in enumerate(keys):
        first.setdefault(key, i)
    return [i for key, i in first.items() if key not in known]


def _texts(column: Texts | None, rows: NDArray[np.int64]) -> list[str]:
    if column is None:
        return [""] * len(rows)
    texts = column.texts
    return [texts[code] for code in column.codes[rows].tolist()]

"""Which process stream a wafer belongs to: its own context, and what the process log adds.

The log row that belongs to a reading is the one of the same lot, wafer and layer that agrees with
every `tool`, `module` and `step` the reading names; of several passes of that step the last one
before the measurement. Where rows of different steps agree (the reading names no tool and the log
has coat and expose), none belongs to it and the columns that the reading lacks stay empty.
The columns of that row count under their bare names where the reading has none of its own, those
of the other steps before the measurement as `step.column` (the recipe stands for a missing step).
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from config.control_plan import Characteristic
from spc.records.columns import Columns, codes_of, row_codes
from spc.records.contexts import ContextStore

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]


def stream_key(characteristic: Characteristic, columns: Mapping[str, str]) -> str | None:
    """JSON of the stream's context, or None where the characteristic does not take the wafer."""
    for name, wanted in characteristic.where.items():
        if columns.get(name, "") != wanted:
            return None
    key = {name: columns.get(name, "") for name in characteristic.stream_by}
    return json.dumps(key, sort_keys=True, ensure_ascii=False)


@dataclass(frozen=True)
class Placed:
    """Streams of measurements; one entry each.

    stream : codes into `keys`, -1 where the characteristic does not take the measurement.
    processed_us : NaN where not known. context_id, step_context_id : ids in `contexts`.
    """

    keys: tuple[str, ...]
    stream: IntArray
    processed_us: FloatArray
    context_id: IntArray
    step_context_id: IntArray


def place_in_streams(
    rows: Columns, log: Columns, contexts: ContextStore, characteristic: Characteristic
) -> Placed:
    """Find the stream, the process stamp and the contexts of measurements.

    Parameters
    ----------
    rows : measurements (lot, layer, wafer, measured_us, processed_us, context_id).
    log : process log of at least their lots.
    """
    contexts.load(np.unique(rows["context_id"]).tolist())
    contexts.load(np.unique(log["context_id"]).tolist())
    found = _log_of(rows, log, contexts)
    own = rows["context_id"]
    pairs, pair_of = np.unique(np.column_stack([own, found.context]), axis=0, return_inverse=True)
    others, others_of = np.unique(found.others, axis=0, return_inverse=True)
    effective = [_effective(contexts, int(mine), int(logged)) for mine, logged in pairs]
    steps = [_step_columns(contexts, row) for row in others]
    both, both_of = np.unique(
        np.column_stack([pair_of.ravel(), others_of.ravel()]), axis=0, return_inverse=True
    )
    keys = [stream_key(characteristic, effective[a] | steps[b]) for a, b in both]
    names = tuple(sorted({key for key in keys if key is not None}))
    code = {key: i for i, key in enumerate(names)}
    stream = np.array([-1 if k is None else code[k] for k in keys], np.int64)[both_of.ravel()]
    taken = stream >= 0
    processed = rows["processed_us"]
    processed = np.where(np.isnan(processed), found.processed, processed)
    return Placed(
        names,
        stream,
        processed,
        _stored(contexts, effective, pair_of.ravel(), taken),
        _stored(contexts, steps, others_of.ravel(), taken),
    )


def _stored(
    contexts: ContextStore, columns: list[dict[str, str]], of: IntArray, taken: BoolArray
) -> IntArray:
    """Ids of the contexts that wafers taken have; 0 for the rest, which are not stored."""
    used = np.unique(of[taken])
    ids = np.zeros(len(columns), np.int64)
    ids[used] = contexts.ids_of([columns[i] for i in used])
    return ids[of]


@dataclass(frozen=True)
class _LogOf:
    context: IntArray  # of the log row that belongs to each measurement, 0 for none
    processed: FloatArray  # its stamp, NaN for none
    others: IntArray  # (n, k) contexts of the other steps in front, 0 padded


def _log_of(rows: Columns, log: Columns, contexts: ContextStore) -> _LogOf:
    n = len(rows)
    pairs = _pairs(rows, log)
    if not len(pairs):
        return _LogOf(np.zeros(n, np.int64), np.full(n, np.nan), np.zeros((n, 1), np.int64))
    row = pairs["row"]
    step = _step_codes(pairs, contexts)
    chosen = _chosen(pairs, row, step, _agreeing(pairs, contexts), n)
    context, processed = np.zeros(n, np.int64), np.full(n, np.nan)
    own_step = np.full(n, -1, np.int64)
    has = chosen >= 0
    log_context = pairs["context_id_log"]
    context[has] = log_context[chosen[has]]
    processed[has] = pairs["processed_us_log"][chosen[has]]
    own_step[has] = step[chosen[has]]
    front = pairs["processed_us_log"] <= pairs["measured_us"]
    front &= step != own_step[row]
    return _LogOf(context, processed, _padded(row[front], step[front], log_context[front], n))


def _pairs(rows: Columns, log: Columns) -> Columns:
    """Measurements (`row`) with each log row of their wafer and layer, in the order of time."""
    n = len(rows)
    wafer = row_codes([np.concatenate([rows[name], log[name]]) for name in ("lot", "wafer")])
    mine, logged = wafer[:n], wafer[n:]
    order = np.argsort(logged, kind="stable")
    low = np.searchsorted(logged[order], mine, side="left")
    count = np.searchsorted(logged[order], mine, side="right") - low
    row = np.repeat(np.arange(n), count)
    turn = np.arange(row.size) - np.repeat(np.cumsum(count) - count, count)
    at = order[np.repeat(low, count) + turn]
    layer, layer_log = rows["layer"][row], log["layer"][at]
    fits = (layer == layer_log) | (layer == "") | (layer_log == "")
    row, at = row[fits], at[fits]
    order = np.lexsort((log["id"][at], log["processed_us"][at], row))
    row, at = row[order], at[order]
    arrays = {name: rows[name][row] for name in ("measured_us", "processed_us", "context_id")}
    for name in ("tool", "module", "step"):
        arrays[name] = log[name][at]
    for name in ("processed_us", "context_id"):
        arrays[f"{name}_log"] = log[name][at]
    return Columns({"row": row, **arrays})


def _step_codes(pairs: Columns, contexts: ContextStore) -> IntArray:
    """Code of the step of each log row: its name, else its recipe, else its tool."""
    ids, of = np.unique(pairs["context_id_log"], return_inverse=True)
    columns = [contexts.columns(int(i)) for i in ids]
    names = np.empty(len(columns), dtype=object)
    names[:] = [step_name(one) or "\x00" + one.get("tool", "") for one in columns]
    return codes_of(names)[0][of]


def step_name(columns: Mapping[str, str]) -> str:
    """Name of a step of the log; the recipe stands for a missing step."""
    return columns.get("step") or columns.get("recipe") or ""


def _agreeing(pairs: Columns, contexts: ContextStore) -> BoolArray:
    """Whether a log row agrees with all that the reading says of where it was processed."""
    ids, of = np.unique(pairs["context_id"], return_inverse=True)
    columns = [contexts.columns(int(i)) for i in ids]
    agrees = np.ones(len(pairs), bool)
    for name in ("tool", "module", "step"):
        said = np.array([one.get(name, "") for one in columns], object)[of]
        logged = pairs[name]
        unknown = said == ""
        if name != "tool":  # a log row always has its tool
            unknown |= logged == ""
        agrees &= unknown | (said == logged)
    return agrees


def _chosen(pairs: Columns, row: IntArray, step: IntArray, agrees: BoolArray, n: int) -> IntArray:
    """Position of the log row that belongs to each measurement, -1 for none."""
    processed = pairs["processed_us"]
    logged = pairs["processed_us_log"]
    candidate = agrees.copy()
    # The reading's own process stamp, then the order in time, tell passes of a step apart.
    for better in (processed == logged, logged <= pairs["measured_us"]):
        some = np.bincount(row, weights=candidate & better, minlength=n) > 0
        candidate &= better | ~some[row]
    at = np.flatnonzero(candidate)
    steps = np.unique(np.column_stack([row[at], step[at]]), axis=0)[:, 0]
    alone = np.bincount(steps, minlength=n) == 1
    chosen = np.full(n, -1, np.int64)
    chosen[row[at]] = at  # rows are in the order of time, so the last pass stays
    return np.where(alone, chosen, -1)


def _padded(row: IntArray, step: IntArray, context: IntArray, n: int) -> IntArray:
    """The last row of each step of each measurement, side by side in the order of the steps."""
    order = np.lexsort((np.arange(row.size), step, row))
    row, step, context = row[order], step[order], context[order]
    if not row.size:
        return np.zeros((n, 1), np.int64)
    last = np.append((row[1:] != row[:-1]) | (step[1:] != step[:-1]), True)
    row, context = row[last], context[last]
    counts = np.bincount(row, minlength=n)
    place = np.arange(row.size) - (np.cumsum(counts) - counts)[row]
    out = np.zeros((n, int(counts.max())), np.int64)
    out[row, place] = context
    return out


def _effective(contexts: ContextStore, own: int, logged: int) -> dict[str, str]:
    if not logged:
        return dict(contexts.columns(own))
    return contexts.columns(logged) | contexts.columns(own)


def _step_columns(contexts: ContextStore, ids: IntArray) -> dict[str, str]:
    """Columns of other steps as `step.column`; what is the same for all steps is left out."""
    out: dict[str, str] = {}
    for number in ids[ids > 0]:
        columns = contexts.columns(int(number))
        prefix = step_name(columns) or "log"
        for name, value in columns.items():
            if name not in ("step", "layer", "product"):
                out[f"{prefix}.{name}"] = value
    return out

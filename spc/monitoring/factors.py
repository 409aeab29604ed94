"""Factors and levels of the evidence: every context column, and those of the steps in front."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from sqlalchemy import Connection

from spc.monitoring.streams import step_name
from spc.records import history
from spc.records.contexts import ContextStore

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

# Where the data cannot tell two levels apart, the earlier factor is named first.
PREFERENCE = ("tool", "module", "reticle", "gauge", "resist_batch", "recipe")
# A column of which nearly every lot has its own value names lots, not causes.
_MOST_LEVELS = 400
_LEAST_LOTS_A_LEVEL = 1.5
# What a lot is belongs to no step of it; the gauge belongs to the reading, not to the step that it
# tells of.
_OF_NO_STEP = frozenset({"layer", "product", "gauge"})
_NO_FACTOR = frozenset({"step", "lot", "wafer", "site"})


@dataclass(frozen=True)
class FactorTable:
    """Levels of cells: `levels` (n, k) codes, -1 unknown or mixed; `times` (n, k) seconds at which
    each factor acted, NaN where not known. `own_step` names, for each cell, the step its readings
    belong to ("" where the log does not say)."""

    names: tuple[str, ...]
    level_names: tuple[tuple[str, ...], ...]
    levels: IntArray
    times: FloatArray
    own_step: NDArray[np.object_]


@dataclass(frozen=True)
class CellWafers:
    """Cells with the wafers behind them; `members` are rows of `wafers`, those of a cell from its
    `first_member` on, `n_wafers` of them. `searched` cells are searched for onsets, so it matters
    when each step worked on them."""

    cells: pd.DataFrame
    members: IntArray
    wafers: pd.DataFrame
    searched: NDArray[np.bool_]


def factor_table(
    connection: Connection, contexts: ContextStore, of: CellWafers, span: tuple[int, int]
) -> FactorTable:
    """Levels of every factor for every cell."""
    cells, wafers = of.cells, of.wafers
    pair_code, columns, own = _columns_of_wafers(contexts, wafers)
    counts = cells["n_wafers"].to_numpy(np.int64)
    cell_of = np.repeat(np.arange(len(cells)), counts)
    start = np.cumsum(counts) - counts
    place = cells["first_member"].to_numpy(np.int64)[cell_of] + np.arange(cell_of.size)
    wafer_of = of.members[place - start[cell_of]]
    first = cells["first_wafer"].to_numpy(np.int64)
    lots = np.unique(wafers["lot"].to_numpy(str), return_inverse=True)[1][first]
    names, level_names, level_columns = [], [], []
    for name in _ordered({key for one in columns for key in one}):
        values = np.array([one.get(name, "") for one in columns], object)
        codes_of_pair, levels = _coded(values)
        code = codes_of_pair[pair_code]  # per wafer row
        of_cell = _common(code[wafer_of], start, len(cells))
        if not _is_factor(of_cell, lots, len(levels)):
            continue
        names.append(name)
        level_names.append(levels)
        level_columns.append(of_cell)
    k = len(names)
    levels_table = np.column_stack(level_columns) if k else np.zeros((len(cells), 0), np.int64)
    times = _times(connection, contexts, of, tuple(names), span)
    own_step = np.array(own, object)[pair_code[first]]
    return FactorTable(
        tuple(names), tuple(level_names), levels_table.astype(np.int64), times, own_step
    )


def _columns_of_wafers(
    contexts: ContextStore, wafers: pd.DataFrame
) -> tuple[IntArray, list[dict[str, str]], list[str]]:
    """Code of the pair of contexts of each wafer, the columns of each pair, its own step."""
    ids = wafers[["context_id", "step_context_id"]].to_numpy(np.int64)
    pairs, code = np.unique(ids, axis=0, return_inverse=True)
    columns, own = [], []
    for context, steps in pairs.tolist():
        mine = contexts.columns(context)
        step = step_name(mine) if "step" in mine else ""
        both = {**contexts.columns(steps), **mine}
        if step:
            twins = {f"{step}.{k}": v for k, v in mine.items() if k not in _OF_NO_STEP}
            both = {**both, **twins}
        columns.append({k: v for k, v in both.items() if k.rpartition(".")[2] not in _NO_FACTOR})
        own.append(step)
    return np.asarray(code, np.int64).ravel(), columns, own


def _ordered(names: set[str]) -> list[str]:
    """Machines first, whatever their step, then what they are fed with; layer and product last."""

    def place(name: str) -> tuple[bool, int, bool, str]:
        bare = name.rpartition(".")[2]
        rank = PREFERENCE.index(bare) if bare in PREFERENCE else len(PREFERENCE)
        return (name in ("layer", "product"), rank, "." in name, name)

    return sorted(names, key=place)


def _coded(values: NDArray[np.object_]) -> tuple[IntArray, tuple[str, ...]]:
    levels = tuple(sorted({str(v) for v in values if v}))
    number = {level: i for i, level in enumerate(levels)}
    return np.array([number.get(str(v), -1) for v in values], np.int64), levels


def _common(code: IntArray, start: IntArray, n: int) -> IntArray:
    """Code shared by all wafers of each cell, -1 where they differ."""
    if not n:
        return np.zeros(0, np.int64)
    low, high = np.minimum.reduceat(code, start), np.maximum.reduceat(code, start)
    return np.asarray(np.where(low == high, high, -1), np.int64)


def _is_factor(codes: IntArray, lots: IntArray, n_levels: int) -> bool:
    """Whether a column can name a cause: it has levels, and not one for each lot."""
    known = codes >= 0
    if not known.any() or n_levels < 1:
        return False
    pairs = np.unique(codes[known] * (int(lots.max()) + 1) + lots[known])
    used = np.unique(codes[known]).size
    return used <= _MOST_LEVELS and pairs.size >= _LEAST_LOTS_A_LEVEL * used


def _times(
    connection: Connection,
    contexts: ContextStore,
    of: CellWafers,
    names: tuple[str, ...],
    span: tuple[int, int],
) -> FloatArray:
    """When the step of each `step.column` factor worked on the first wafer of each cell."""
    times = np.full((len(of.cells), len(names)), np.nan)
    steps = {name.rpartition(".")[0] for name in names if "." in name}
    searched = np.flatnonzero(of.searched)
    if not steps or not searched.size:
        return times
    rows, cell_wafer = np.unique(
        of.cells["first_wafer"].to_numpy(np.int64)[searched], return_inverse=True
    )
    wanted = of.wafers.iloc[rows][["lot", "wafer", "layer", "measured_us"]].reset_index(drop=True)
    log = history.step_stamps(connection, wanted, *span)
    if log.empty:
        return times
    contexts.load(log["context_id"].unique())
    distinct, code = np.unique(log["context_id"].to_numpy(np.int64), return_inverse=True)
    log["step"] = np.array([step_name(contexts.columns(int(i))) for i in distinct], object)[code]
    wanted["place"] = np.arange(len(wanted))
    joined = wanted.merge(log[log["step"].isin(steps)], on=["lot", "wafer", "layer"])
    joined = joined[joined["processed_us"] <= joined["measured_us"]]
    last = joined.groupby(["step", "place"])["processed_us"].max()
    for column, name in enumerate(names):
        step = name.rpartition(".")[0]
        if step and step in last.index.get_level_values("step"):
            some = last.xs(step, level="step")
            by_wafer = np.full(len(wanted), np.nan)
            by_wafer[some.index.to_numpy(np.int64)] = some.to_numpy(np.float64) / 1e6
            times[searched, column] = by_wafer[cell_wafer]
    return times

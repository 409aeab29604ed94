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
PREFERENCE = ("tool", "module", "gauge", "reticle", "resist_batch", "recipe")
# A column of which nearly every lot has its own value names lots, not causes.
_MOST_LEVELS = 400
_LEAST_LOTS_A_LEVEL = 1.5
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


def factor_table(
    connection: Connection,
    contexts: ContextStore,
    cells: pd.DataFrame,
    wafers: pd.DataFrame,
    span: tuple[int, int],
) -> FactorTable:
    """Levels of every factor for every cell; `cells` as of `spc.monitoring.evidence`."""
    pair_code, columns, own = _columns_of_wafers(contexts, wafers)
    cell_of = np.repeat(np.arange(len(cells)), [len(rows) for rows in cells["wafer_rows"]])
    flat = [row for rows in cells["wafer_rows"] for row in rows]
    wafer_of = np.asarray(flat, np.int64)
    first = cells["first_wafer"].to_numpy(np.int64)
    lots = wafers["lot"].to_numpy(object)[first]
    names, level_names, level_columns = [], [], []
    for name in _ordered({key for one in columns for key in one}):
        values = np.array([one.get(name, "") for one in columns], object)
        codes_of_pair, levels = _coded(values)
        code = codes_of_pair[pair_code]  # per wafer row
        of_cell = _common(code[wafer_of], cell_of, len(cells))
        if not _is_factor(of_cell, lots, len(levels)):
            continue
        names.append(name)
        level_names.append(levels)
        level_columns.append(of_cell)
    k = len(names)
    levels_table = np.column_stack(level_columns) if k else np.zeros((len(cells), 0), np.int64)
    times = _times(connection, contexts, cells, wafers, tuple(names), span)
    own_step = np.array([own[pair_code[row]] for row in first], object)
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
            twins = {f"{step}.{k}": v for k, v in mine.items() if k not in ("layer", "product")}
            both = {**both, **twins}
        columns.append({k: v for k, v in both.items() if k.rpartition(".")[2] not in _NO_FACTOR})
        own.append(step)
    return np.asarray(code, np.int64).ravel(), columns, own


def _ordered(names: set[str]) -> list[str]:
    """Bare columns before those of steps, tools first, layer and product last."""

    def place(name: str) -> tuple[bool, bool, int, str]:
        bare = name.rpartition(".")[2]
        rank = PREFERENCE.index(bare) if bare in PREFERENCE else len(PREFERENCE)
        return (name in ("layer", "product"), "." in name, rank, name)

    return sorted(names, key=place)


def _coded(values: NDArray[np.object_]) -> tuple[IntArray, tuple[str, ...]]:
    levels = tuple(sorted({str(v) for v in values if v}))
    number = {level: i for i, level in enumerate(levels)}
    return np.array([number.get(str(v), -1) for v in values], np.int64), levels


def _common(code: IntArray, cell: IntArray, n: int) -> IntArray:
    """Code shared by all wafers of each cell, -1 where they differ."""
    low, high = np.full(n, np.iinfo(np.int64).max), np.full(n, -1, np.int64)
    np.minimum.at(low, cell, code)
    np.maximum.at(high, cell, code)
    return np.where(low == high, high, -1)


def _is_factor(codes: IntArray, lots: NDArray[np.object_], n_levels: int) -> bool:
    """Whether a column can name a cause: it has levels, and not one for each lot."""
    known = codes >= 0
    if not known.any() or n_levels < 1:
        return False
    pairs = pd.DataFrame({"level": codes[known], "lot": lots[known]}).drop_duplicates()
    used = pairs["level"].nunique()
    return used <= _MOST_LEVELS and len(pairs) >= _LEAST_LOTS_A_LEVEL * used


def _times(
    connection: Connection,
    contexts: ContextStore,
    cells: pd.DataFrame,
    wafers: pd.DataFrame,
    names: tuple[str, ...],
    span: tuple[int, int],
) -> FloatArray:
    """When the step of each `step.column` factor worked on the first wafer of each cell."""
    times = np.full((len(cells), len(names)), np.nan)
    steps = {name.rpartition(".")[0] for name in names if "." in name}
    if not steps:
        return times
    first = wafers.iloc[cells["first_wafer"].to_numpy(np.int64)]
    wanted = first[["lot", "wafer", "layer", "measured_us"]].reset_index(drop=True)
    log = history.step_stamps(connection, wanted, *span)
    if log.empty:
        return times
    contexts.load(log["context_id"].unique())
    distinct, of = np.unique(log["context_id"].to_numpy(np.int64), return_inverse=True)
    log["step"] = np.array([step_name(contexts.columns(int(i))) for i in distinct], object)[of]
    wanted["cell"] = np.arange(len(wanted))
    joined = wanted.merge(log, on=["lot", "wafer", "layer"])
    joined = joined[joined["processed_us"] <= joined["measured_us"]]
    last = joined.groupby(["cell", "step"])["processed_us"].max()
    for column, name in enumerate(names):
        step = name.rpartition(".")[0]
        if step and step in last.index.get_level_values("step"):
            some = last.xs(step, level="step")
            times[some.index.to_numpy(np.int64), column] = some.to_numpy(np.float64) / 1e6
    return times

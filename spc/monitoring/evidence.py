"""From records to the evidence that the attribution engine reads.

Points become cells: that part of a plotted lot whose wafers share the whole context, the steps in
front included. Means keep their unit and their nested variance; spreads and distances come as
normal scores. Each column of a context is a factor; the columns of the reading's own step stand
under the name of that step too, so that one cause has one level over thickness and CD.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from sqlalchemy import Connection

from config.control_plan import Characteristic, ControlPlan
from spc.monitoring.baselines import limit_set
from spc.monitoring.factors import CellWafers, FactorTable, factor_table
from spc.monitoring.limit_sets import LimitSet, kind_of
from spc.records import history
from spc.records import limits as limit_records
from spc.records.contexts import ContextStore
from spc.stats.attribution import Evidence

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

US = 1e6
_POINT = ["stream_id", "lot", "layer", "wafer"]
_LEAST_VARIANCE = 1e-12


@dataclass(frozen=True)
class Case:
    """Everything triage knows of the span it looks at.

    points : points with limits, one row each, with the columns `series` and `characteristic`.
    wafers : wafer results of their streams.
    streams : stream_id, characteristic, context.
    evidence : the cells; `cell_point` is the row of `points` that each cell belongs to, and
        `lots` the name behind each lot code.
    sets : limit sets by id. series : (stream_id, statistic) of each series code.
    own_steps : name of the step that a characteristic's readings belong to, where the log says.
    """

    points: pd.DataFrame
    wafers: pd.DataFrame
    streams: pd.DataFrame
    evidence: Evidence
    cell_point: IntArray
    lots: tuple[str, ...]
    sets: Mapping[int, LimitSet]
    series: tuple[tuple[int, str], ...]
    plan: ControlPlan
    factors: FactorTable


def build_case(
    connection: Connection, plan: ControlPlan, since_us: int, as_of_us: int
) -> Case | None:
    """Read the evidence since a stamp; None where no stream has limits yet."""
    streams = history.all_streams(connection)
    names = {c.name for c in plan.characteristic}
    streams = streams[streams["characteristic"].isin(names)].reset_index(drop=True)
    points = history.points_since(connection, since_us)
    points = points[points["stream_id"].isin(streams["stream_id"])].reset_index(drop=True)
    if points.empty:
        return None
    set_ids = points["baseline_id"].unique().tolist()
    stream_ids = points["stream_id"].unique().tolist()
    wafers = history.wafers_of(connection, stream_ids, since_us, set_ids)
    wafers = wafers[wafers["at_us"] >= points["at_us"].min()].reset_index(drop=True)
    rows = limit_records.by_ids(connection, set_ids)
    sets = {row.id: limit_set(row) for row in rows}
    series = list(dict.fromkeys(zip(points["stream_id"], points["statistic"], strict=True)))
    code = {key: i for i, key in enumerate(series)}
    pairs = zip(points["stream_id"], points["statistic"], strict=True)
    points["series"] = [code[pair] for pair in pairs]
    name_of = dict(zip(streams["stream_id"], streams["characteristic"], strict=True))
    points["characteristic"] = points["stream_id"].map(name_of)
    contexts = ContextStore(connection)
    for column in ("context_id", "step_context_id"):
        contexts.load(wafers[column].unique())
    cells, members = _cells(points, wafers, plan, sets)
    span = (int(wafers["at_us"].min()) - 7 * 86_400_000_000, as_of_us)
    searched = points["phase"].to_numpy(object)[cells["row"]] == "monitoring"
    factors = factor_table(connection, contexts, CellWafers(cells, members, wafers, searched), span)
    lots, lot_code = np.unique(cells["lot"].to_numpy(str), return_inverse=True)
    evidence = _evidence(points, cells, series, plan, name_of, sets, factors, lot_code)
    return Case(
        points,
        wafers,
        streams,
        evidence,
        cells["row"].to_numpy(np.int64),
        tuple(lots.tolist()),
        sets,
        tuple((int(s), str(n)) for s, n in series),
        plan,
        factors,
    )


def _cells(
    points: pd.DataFrame, wafers: pd.DataFrame, plan: ControlPlan, sets: Mapping[int, LimitSet]
) -> tuple[pd.DataFrame, IntArray]:
    """One row a cell: row (of points), lot, residual, variances; and the wafer rows behind them,
    those of a cell from its `first_member` on, `n_wafers` of them.

    A mean is cut into cells by context; a spread or a distance stays whole.
    """
    by_lot = points[points["wafer"] == ""]
    pieces = []
    for keys, some in (
        (["stream_id", "lot", "layer"], by_lot),
        (_POINT, points[points["wafer"] != ""]),
    ):
        if some.empty:
            continue
        link = some[["stream_id", "lot", "layer", "wafer"]].copy()
        link["row"] = some.index
        left = link.drop(columns=["wafer"]) if len(keys) == 3 else link
        pairs = left.merge(wafers.reset_index(names="wafer_row"), on=keys)
        pieces.append(pairs[["row", "wafer_row"]])
    pairs = pd.concat(pieces, ignore_index=True)
    pairs = _with_values(pairs, points, wafers, plan)
    pairs = pairs[np.isfinite(pairs["value"]) | ~pairs["is_mean"]]
    whole = ~pairs["is_mean"].to_numpy()
    parts = [
        pairs["row"].to_numpy(np.int64),
        np.where(whole, -1, pairs["context_id"].to_numpy(np.int64)),
        np.where(whole, -1, pairs["step_context_id"].to_numpy(np.int64)),
    ]
    wafer_row = pairs["wafer_row"].to_numpy(np.int64)
    order = np.lexsort((wafer_row, parts[2], parts[1], parts[0]))
    parts = [part[order] for part in parts]
    new = np.ones(order.size, bool)
    new[1:] = np.any([part[1:] != part[:-1] for part in parts], axis=0)
    start = np.flatnonzero(new)
    count = np.diff(np.append(start, order.size))
    value = pairs["value"].to_numpy(np.float64)[order]
    inverse = 1.0 / pairs["n_sites"].to_numpy(np.float64)[order]
    cells = pd.DataFrame(
        {
            "row": parts[0][start],
            "value": np.add.reduceat(value, start) / count,
            "n_wafers": count,
            "inverse_sites": np.add.reduceat(inverse, start) / count,
            "first_member": start,
        }
    )
    members = wafer_row[order]
    cells["first_wafer"] = members[start]
    cells["lot"] = points["lot"].to_numpy(object)[cells["row"]]
    return _with_residuals(cells, points, sets), members


def _with_values(
    pairs: pd.DataFrame, points: pd.DataFrame, wafers: pd.DataFrame, plan: ControlPlan
) -> pd.DataFrame:
    """Add the value of each wafer in the statistic of its point, and the wafer's contexts."""
    statistic = points["statistic"].to_numpy(object)[pairs["row"]]
    characteristic = points["characteristic"].to_numpy(object)[pairs["row"]]
    wafer = pairs["wafer_row"].to_numpy()
    value = np.full(len(pairs), np.nan)
    blobs = wafers["statistics"].to_numpy(object)
    for one in plan.characteristic:
        for column, name in enumerate(one.charted):
            if kind_of(name) != "mean":
                continue
            mine = np.flatnonzero((characteristic == one.name) & (statistic == name))
            if not mine.size:
                continue
            if name == "mean":
                value[mine] = wafers["mean"].to_numpy(np.float64)[wafer[mine]]
            else:
                table = np.frombuffer(b"".join(blobs[wafer[mine]]), "<f8")
                value[mine] = table.reshape(mine.size, -1)[:, column]
    out = pairs.copy()
    out["value"] = value
    out["is_mean"] = [kind_of(str(name)) == "mean" for name in statistic]
    for name in ("context_id", "step_context_id", "n_sites"):
        out[name] = wafers[name].to_numpy()[wafer]
    return out


def _with_residuals(
    cells: pd.DataFrame, points: pd.DataFrame, sets: Mapping[int, LimitSet]
) -> pd.DataFrame:
    """Add residual, var_own and var_lot of each cell."""
    row = cells["row"].to_numpy(np.int64)
    statistic = points["statistic"].to_numpy(object)[row]
    baseline = points["baseline_id"].to_numpy(np.int64)[row]
    mean = np.array([kind_of(str(name)) == "mean" for name in statistic])
    lot, wafer, site, _ = _laws(baseline, statistic, sets)
    center = points["center"].to_numpy(np.float64)[row]
    z = points["z"].to_numpy(np.float64)[row]
    n_wafers = cells["n_wafers"].to_numpy(np.float64)
    own = (wafer + site * cells["inverse_sites"].to_numpy(np.float64)) / n_wafers
    sigma = points["sigma"].to_numpy(np.float64)[row]
    # A single component (one wafer a lot) stands in `lot`; a cell still needs noise of its own.
    own = np.maximum(own, np.maximum(1e-3 * sigma**2, _LEAST_VARIANCE))
    cells["residual"] = np.where(mean, cells["value"].to_numpy(np.float64) - center, z)
    cells["var_own"] = np.where(mean, own, 1.0)
    cells["var_lot"] = np.where(mean, lot, 0.0)
    usable = np.isfinite(cells["residual"]) & np.isfinite(cells["var_own"])
    return cells[usable & np.isfinite(cells["var_lot"])].reset_index(drop=True)


def _laws(
    baseline: IntArray, statistic: NDArray[np.object_], sets: Mapping[int, LimitSet]
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Lot, wafer and site variance and the variance of the centre, per (set, statistic)."""
    pairs = pd.MultiIndex.from_arrays([baseline, statistic])
    codes, distinct = pairs.factorize()
    table = np.zeros((len(distinct), 4))
    for i, (number, name) in enumerate(distinct):
        found = sets[int(number)].statistic(str(name)) or {}
        part = found.get("components") or {}
        if kind_of(str(name)) == "mean":
            # Rises of the variance for autocorrelation are in the limits; the engine has phi.
            table[i, :3] = [part.get(key) or 0.0 for key in ("lot", "wafer", "site")]
            table[i, 3] = float(part.get("mean_se") or 0.0) ** 2
        else:
            table[i] = (0.0, 0.0, 0.0, 1.0 / max(int(found.get("n") or 1), 1))
    lot, wafer, site, center = table[codes].T
    return lot, wafer, site, center


def _evidence(
    points: pd.DataFrame,
    cells: pd.DataFrame,
    series: list[tuple[Any, Any]],
    plan: ControlPlan,
    name_of: Mapping[int, str],
    sets: Mapping[int, LimitSet],
    factors: FactorTable,
    lot_code: IntArray,
) -> Evidence:
    row = cells["row"].to_numpy(np.int64)
    at = points["at_us"].to_numpy(np.float64)[row] / US
    numbers = {c.name: i for i, c in enumerate(plan.characteristic)}
    characteristic = np.array([numbers[name_of[int(stream)]] for stream, _ in series], np.int64)
    kind, family = _families(plan, characteristic, [str(name) for _, name in series])
    last_set = points.groupby("series")["baseline_id"].last()
    set_of = last_set.reindex(range(len(series))).to_numpy(np.int64)
    names = np.array([name for _, name in series], object)
    var_center = _laws(set_of, names, sets)[3]
    phi = np.zeros(len(series))
    for i, (_, name) in enumerate(series):
        found = sets[int(set_of[i])].statistic(str(name)) or {}
        phi[i] = float(np.clip(found.get("phi") or 0.0, 0.0, 0.9))
    return Evidence(
        series=points["series"].to_numpy(np.int64)[row],
        point=row,
        lot=np.asarray(lot_code, np.int64),
        t_process=at,
        t_measure=points["measured_us"].to_numpy(np.float64)[row] / US,
        residual=cells["residual"].to_numpy(np.float64),
        var_own=cells["var_own"].to_numpy(np.float64),
        var_lot=cells["var_lot"].to_numpy(np.float64),
        monitoring=(points["phase"].to_numpy(object)[row] == "monitoring"),
        levels=factors.levels,
        factors=factors.names,
        level_names=factors.level_names,
        family=family,
        characteristic=characteristic,
        statistic=tuple(str(name) for _, name in series),
        var_center=var_center,
        phi=phi,
        t_level=factors.times,
        kind=kind,
    )


def _families(
    plan: ControlPlan, characteristic: IntArray, statistics: list[str]
) -> tuple[IntArray, IntArray]:
    """Kind (statistic of a parameter) and family (of a characteristic) of each series, the
    families of a kind one after the other."""
    names = np.array([[plan.characteristic[c].parameter for c in characteristic], statistics])
    kind = np.unique(names, axis=1, return_inverse=True)[1].ravel()
    family = np.unique(np.stack([kind, characteristic]), axis=1, return_inverse=True)[1].ravel()
    return kind.astype(np.int64), family.astype(np.int64)


def characteristic_of(case: Case, series: int) -> Characteristic:
    """Characteristic of a series."""
    return case.plan.characteristic[int(case.evidence.characteristic[series])]


def stream_context(case: Case, stream_id: int) -> dict[str, str]:
    """Context of a stream."""
    row = case.streams.index[case.streams["stream_id"] == stream_id][0]
    return dict(json.loads(str(case.streams.at[row, "context"])))

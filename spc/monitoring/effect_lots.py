"""The lots that an effect may have touched, and what is to be expected of each."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Connection

from config.control_plan import Characteristic
from spc.monitoring.evidence import US, Case
from spc.monitoring.lots_at_risk import Outlook, Suspicion, lots_at_risk, p_out_of_spec
from spc.stats.attribution import Effect, FamilySize

FloatArray = NDArray[np.float64]

# The engine's factor for "every stream of a characteristic"; it is no context column.
WHOLE = "characteristic"


@dataclass(frozen=True)
class Span:
    """From the earliest onset to the end of the fault or the clock, in us."""

    first_us: int
    last_us: int


def us(seconds: float) -> int:
    """Stamp of a time of the evidence."""
    return round(seconds * US)


def lots_of(
    connection: Connection,
    case: Case,
    effect: Effect,
    suspects: Sequence[dict[str, Any]],
    span: Span,
    as_of_us: int,
) -> list[dict[str, Any]]:
    """The lots that the best suspect's context saw in the span, with their outlook."""
    lead = effect.sizes[effect.leading]
    moved = {s.characteristic for s in effect.sizes if s.moved} | {lead.characteristic}
    plans = [case.plan.characteristic[i] for i in sorted(moved)]
    parameters = tuple(sorted({p for plan in plans for p in plan.parameters}))
    if suspects:
        factors = tuple(suspects[0]["factor"].split("+"))
        suspicion = Suspicion(
            factors,
            _levels(suspects[0]["level"], len(factors)),
            span.first_us,
            span.last_us,
            own_steps(case, effect),
        )
    else:
        suspicion = Suspicion((), (), span.first_us, span.last_us)
    frame = lots_at_risk(connection, suspicion, parameters, as_of_us)
    if effect.shape.lot >= 0 and len(frame):
        frame = frame[frame["lot"] == case.lots[effect.shape.lot]].reset_index(drop=True)
    best = np.full(len(frame), np.nan)
    predicted = np.full(len(frame), np.nan)
    for size in effect.sizes:
        plan = case.plan.characteristic[size.characteristic]
        if size.characteristic not in moved or size.statistic != "mean":
            continue
        outlook = _outlook(case, effect, size, plan)
        if outlook is None:
            continue
        value, chance = p_out_of_spec(frame, outlook)
        better = np.isfinite(chance) & ~(chance <= np.nan_to_num(best, nan=-1.0))
        best, predicted = np.where(better, chance, best), np.where(better, value, predicted)
    unit = case.plan.characteristic[lead.characteristic].unit
    return [
        {
            "lot": row.lot,
            "layer": row.layer,
            "wafers": list(row.wafers),
            "measured": bool(row.measured),
            "processed_at_us": int(row.processed_us),
            "predicted": finite(predicted[i]),
            "unit": unit,
            "p_out_of_spec": finite(best[i]),
        }
        for i, row in enumerate(_rows(frame))
    ]


def own_steps(case: Case, effect: Effect) -> frozenset[str]:
    """The steps that the moved readings belong to, where the log says."""
    families = {s.family for s in effect.sizes if s.moved} | {effect.sizes[effect.leading].family}
    mine = np.isin(case.evidence.cell_family, list(families))
    steps = np.unique(case.factors.own_step[mine].astype(str))
    return frozenset(str(step) for step in steps if step)


def _levels(text: str, n: int) -> tuple[str, ...]:
    """Levels of a conjunction; a single level may have a `+` in its own name."""
    return tuple(text.split("+")) if n > 1 else (text,)


def _outlook(case: Case, effect: Effect, size: FamilySize, plan: Characteristic) -> Outlook | None:
    series = [s.series for s in effect.series if int(case.evidence.family[s.series]) == size.family]
    points = case.points[case.points["series"].isin(series)]
    if points.empty:
        return None
    center = float(points["center"].median())
    cells = np.isin(case.evidence.series, series)
    noise = float(np.median(case.evidence.var_own[cells] + case.evidence.var_lot[cells]))
    drift = effect.drift

    def moved(stamps: FloatArray) -> FloatArray:
        if drift is None or drift.family != size.family:
            return np.full(stamps.shape, center + size.value)
        change = drift.change + drift.per_second * (stamps / US - drift.reference)
        # Before its onset a drift has not moved anything.
        return center + np.where(np.sign(change) == np.sign(size.value), change, 0.0)

    lots = points[points["phase"] == "monitoring"]
    measured = {
        (str(lot), str(layer)): float(value)
        for lot, layer, value in zip(lots["lot"], lots["layer"], lots["value"], strict=True)
    }
    return Outlook(
        moved=moved,
        sd=float(np.sqrt(noise + size.se**2)),
        lower=plan.lower_spec,
        upper=plan.upper_spec,
        unit=plan.unit,
        layer=plan.where.get("layer"),
        measured=measured,
        measured_sd=float(np.sqrt(np.median(case.evidence.var_own[cells]))),
    )


def _rows(frame: Any) -> Any:
    return frame.itertuples(index=False)


def finite(value: float | None) -> float | None:
    """The number, or None where it is none."""
    return None if value is None or not np.isfinite(value) else float(value)

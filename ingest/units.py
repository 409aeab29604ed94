"""Units of readings: converted to the unit the records keep, or refused."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from config.control_plan import ControlPlan
from config.values import house_unit
from ingest.sheet import Faults, Texts, numbered


@dataclass(frozen=True)
class KnownUnits:
    """House units by parameter: those of the control plan, and those fixed by earlier readings."""

    planned: dict[str, str]
    stored: dict[str, str]

    def of(self, parameter: str) -> str | None:
        """House unit of a parameter, None for a new one that no characteristic uses."""
        return self.planned.get(parameter) or self.stored.get(parameter)


def planned_units(plan: ControlPlan) -> dict[str, str]:
    """House unit of each parameter of the control plan."""
    return {
        parameter: house_unit(one.unit)[0]
        for one in plan.characteristic
        for parameter in one.parameters
    }


def factors(
    parameter: Texts, unit: Texts, known: KnownUnits, faults: Faults
) -> tuple[NDArray[np.float64], dict[str, str]]:
    """Factor of each row to the house unit, shape (rows,), and the house unit of each parameter.

    Rows whose unit does not convert are marked. A parameter that nobody knows takes the unit of its
    first good row.
    """
    faults.add(unit.empty, "has no unit; write 1 where there is none", unit)
    rows = np.flatnonzero(faults.clean)
    result = np.ones(len(parameter.codes))
    if not len(rows):
        return result, {}
    pair = parameter.codes[rows].astype(np.int64) * len(unit.texts) + unit.codes[rows]
    first, of_row = numbered(pair, len(parameter.texts) * len(unit.texts))
    pairs = pair[first]
    factor = np.ones(len(pairs))
    good = np.ones(len(pairs), bool)
    chosen: dict[str, str] = {}
    wrong: dict[str, list[int]] = {}
    for i in np.argsort(first).tolist():
        name = parameter.texts[int(pairs[i]) // len(unit.texts)]
        base, factor[i] = house_unit(unit.texts[int(pairs[i]) % len(unit.texts)])
        wanted = chosen.setdefault(name, known.of(name) or base)
        if base != wanted:
            good[i] = False
            wrong.setdefault(wanted, []).append(i)
    for wanted, which in wrong.items():
        bad = np.isin(of_row, which)
        reason = f"does not convert to {wanted}, the unit of this parameter; mend it, or map it"
        faults.add(rows[bad], f"{reason} by `units` of a [[feed]]", unit)
        kept = {parameter.texts[int(pairs[i]) // len(unit.texts)] for i in np.flatnonzero(good)}
        chosen = {name: one for name, one in chosen.items() if name in kept}
    result[rows] = factor[of_row]
    return result, chosen

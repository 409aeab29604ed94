"""Run length of a control chart: how many points until it signals.

One door for all designs: sets of run rules (Markov chain, exact), EWMA and two-sided CUSUM
(integral equation), rules that compare points (recursion on the last value).  The few sets of
rules that are out of reach of these are simulated, and the standard error is stated.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from numpy.typing import ArrayLike

from spc.stats.designs import (
    CusumDesign,
    Design,
    EwmaDesign,
    RuleDesign,
    design_from_text,
)
from spc.stats.rule_states import NotAChainError
from spc.stats.run_length_chain import RunLength
from spc.stats.run_length_cusum import cusum_run_length
from spc.stats.run_length_ewma import ewma_run_length
from spc.stats.run_length_rules import rules_run_length
from spc.stats.run_length_simulated import simulated_run_length
from spc.stats.run_length_trends import trends_run_length

__all__ = [
    "CusumDesign",
    "Design",
    "DesignRow",
    "EwmaDesign",
    "RuleDesign",
    "RunLength",
    "compare_designs",
    "design_from_text",
    "run_length",
]

_MOST_SHIFT = 30.0


def run_length(
    design: Design,
    shift: float = 0.0,
    n: ArrayLike | None = None,
    steady_state: bool = False,
) -> RunLength:
    """Run length of a design for independent normal points with known centre and sigma.

    Parameters
    ----------
    design : RuleDesign, EwmaDesign or CusumDesign
    shift : float
        Shift of the mean in sigmas of the plotted point, from the first point on; at most
        30 either way.
    n : int or array of int, optional
        Also give the chance of a signal within n points.
    steady_state : bool
        False: the chart starts fresh at the shift (zero state).  True: it has long run in
        control without a signal when the shift comes; the first point after it is point 1.

    Returns
    -------
    RunLength
        The point that signals counts.  `method` says how it was computed; for simulation
        `relative_error` is the standard error of the mean over the mean.

    Raises
    ------
    ValueError
        For a shift that is not finite or beyond 30 sigmas, counts that are not whole and
        positive, or a design whose run length is out of reach (the message says why).
    """
    shift = float(shift)
    if not abs(shift) <= _MOST_SHIFT:
        raise ValueError(f"shift must be between -30 and 30 sigmas, not {shift:g}")
    if isinstance(design, EwmaDesign):
        return ewma_run_length(design, shift, n, steady_state)
    if isinstance(design, CusumDesign):
        return cusum_run_length(design, shift, n, steady_state)
    compares = any(rule.kind in ("trending", "alternating") for rule in design.rules)
    try:
        if compares and not steady_state:
            return trends_run_length(design, shift, n)
        return rules_run_length(design, shift, n, steady_state)
    except NotAChainError:
        return simulated_run_length(design, shift, n, steady_state)


@dataclass(frozen=True)
class DesignRow:
    """A row of :func:`compare_designs`: a design at a shift (in sigmas of the plotted point)."""

    design: str
    shift: float
    arl: float
    sdrl: float
    median: float


def compare_designs(
    designs: Sequence[Design], shifts: Sequence[float], steady_state: bool = False
) -> tuple[DesignRow, ...]:
    """Run lengths of several designs over several shifts, design by design.

    Raises
    ------
    ValueError
        As :func:`run_length`.
    """
    rows: list[DesignRow] = []
    for design in designs:
        for shift in shifts:
            found = run_length(design, shift, steady_state=steady_state)
            rows.append(DesignRow(design.text, float(shift), found.arl, found.sdrl, found.median))
    return tuple(rows)

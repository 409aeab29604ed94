"""Designs that keep a given false-signal rate and see a given shift soonest."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from spc.stats.designs import CusumDesign, Design, EwmaDesign, RuleDesign
from spc.stats.rule_states import rule_machine
from spc.stats.rules import WESTERN_ELECTRIC, Rule
from spc.stats.run_length import run_length
from spc.stats.run_length_chain import Solver
from spc.stats.run_length_cusum import cusum_arl
from spc.stats.run_length_ewma import ewma_arl
from spc.stats.run_length_rules import transitions

_LAMBDAS = (0.05, 0.1, 0.15, 0.2, 0.25, 0.3, 0.4, 0.5, 0.75)
_REFERENCES = (0.25, 0.5, 0.75, 1.0)
# Widths are rounded up to this, so that the rate that was asked for is kept.
_DIGITS = 3


@dataclass(frozen=True)
class DesignChoice:
    """A design, its run length in control and at the shift that is looked for (zero state).

    Attributes
    ----------
    family : str
        ``limits``, ``run rules``, ``EWMA`` or ``CUSUM``.
    design : Design
    arl0 : float
        Mean run length in control, at least 1 / the rate that was asked for.
    arl, sdrl, median : float
        At the shift.
    """

    family: str
    design: Design
    arl0: float
    arl: float
    sdrl: float
    median: float


def least_delay_designs(false_rate_per_point: float, shift: float) -> tuple[DesignChoice, ...]:
    """Designs that keep a false-signal rate, the one that sees a shift soonest first.

    Parameters
    ----------
    false_rate_per_point : float
        Signals a point in control, 1 / mean run length (known limits), in [1e-9, 0.05].
    shift : float
        Shift of the mean to be seen, in sigmas of the plotted point; not 0.

    Returns
    -------
    tuple of DesignChoice
        Plain limits, run rules with all their distances widened alike (and a longer row on one
        side where needed), EWMA over a grid of weights, CUSUM over a grid of reference values
        and half the shift; by mean run length at the shift.

    Raises
    ------
    ValueError
        For a rate or a shift out of range.
    """
    if not 1e-9 <= false_rate_per_point <= 0.05:
        raise ValueError(
            f"the false-signal rate must be between 1e-9 and 0.05, not {false_rate_per_point:g}"
        )
    if not 0.0 < abs(shift) <= 20.0:
        raise ValueError(f"the shift must be up to 20 sigmas and not 0, but is {shift:g}")
    target = 1.0 / false_rate_per_point
    found: list[tuple[str, Design]] = [("limits", _plain_limits(target))]
    found += [("run rules", design) for design in _rule_sets(target)]
    for lam in _LAMBDAS:
        limit = _solve(lambda x, lam=lam: ewma_arl(lam, x, 0.0), target, 3.0)  # type: ignore[misc]
        found.append(("EWMA", EwmaDesign(lam, limit)))
    for k in sorted({*_REFERENCES, round(min(abs(shift) / 2.0, 2.0), 3)}):
        h = _solve(lambda x, k=k: cusum_arl(k, x, 0.0), target, 4.0)  # type: ignore[misc]
        found.append(("CUSUM", CusumDesign(k, h)))
    choices = []
    for family, design in found:
        quiet, moved = run_length(design, 0.0), run_length(design, shift)
        choices.append(DesignChoice(family, design, quiet.arl, moved.arl, moved.sdrl, moved.median))
    return tuple(sorted(choices, key=lambda choice: choice.arl))


def _plain_limits(target: float) -> RuleDesign:
    from scipy.special import ndtri

    return RuleDesign((Rule("beyond", 1, 1, _up(-float(ndtri(0.5 / target)))),))


def _rule_sets(target: float) -> list[RuleDesign]:
    beyond, two, four, side = WESTERN_ELECTRIC
    # A row on one side alone takes up to half of the rate: m with 2^m - 1 >= 2 target.
    row = replace(side, m=max(side.m, math.ceil(math.log2(2.0 * target + 1.0))), k=0)
    sets = ((beyond, two), (beyond, two, four), (beyond, row), (beyond, two, four, row))
    return [_widened(rules, target) for rules in sets]


def _widened(rules: tuple[Rule, ...], target: float) -> RuleDesign:
    """The rules with all distances times one factor, so that the target is met."""
    machine = rule_machine(rules, True)

    def mean(factor: float) -> float:
        step, leave = transitions(replace(machine, edges=machine.edges * factor), 0.0)
        return float(Solver(step, leave).solve(np.ones(leave.size))[0])

    factor = _solve(mean, target, 1.0)
    return RuleDesign(tuple(replace(r, s=_up(r.s * factor)) if r.s > 0.0 else r for r in rules))


def _up(value: float) -> float:
    scale = 10.0**_DIGITS
    return math.ceil(value * scale - 1e-9) / scale


def _solve(mean: Callable[[float], float], target: float, guess: float) -> float:
    """Least width, rounded up, whose mean run length reaches the target; the mean rises.

    False position on the logarithm of the mean, which is nearly straight in the width.
    """
    goal = math.log(target)

    def gap(x: float) -> float:
        return math.log(mean(x)) - goal

    low, high = 0.5 * guess, 1.5 * guess
    gap_low, gap_high = gap(low), gap(high)
    while gap_low > 0.0 and low > 1e-3:
        high, gap_high = low, gap_low
        low *= 0.5
        gap_low = gap(low)
    while gap_high < 0.0:
        low, gap_low = high, gap_high
        high *= 1.5
        gap_high = gap(high)
    if gap_low > 0.0:
        return _up(low)
    for _ in range(60):
        middle = high - gap_high * (high - low) / (gap_high - gap_low)
        value = gap(middle)
        if abs(value) < 1e-7:
            break
        # Illinois: halve the weight of an end that stays.
        if value * gap_high < 0.0:
            low, gap_low = high, gap_high
        else:
            gap_low *= 0.5
        high, gap_high = middle, value
    return _up(middle)

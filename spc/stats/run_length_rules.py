"""Exact run length of any set of zone rules: the time to absorption of their machine.

Champ & Woodall (1987), Technometrics 29:393-399.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from spc.stats.designs import RuleDesign
from spc.stats.rule_states import NotAChainError, RuleMachine, rule_machine
from spc.stats.run_length_chain import Chain, RunLength, run_length_of, steady_start

FloatArray = NDArray[np.float64]

_MOST_SOLVED = 3_000


def rules_run_length(
    design: RuleDesign,
    shift: float,
    n: ArrayLike | None = None,
    steady_state: bool = False,
) -> RunLength:
    """Run length of a set of zone rules for independent normal points.

    Parameters
    ----------
    design : RuleDesign
    shift : float
        Shift of the mean in sigmas of the plotted point, from the first point on.
    n : int or array of int, optional
        Counts for `prob_within`.
    steady_state : bool
        Start from the long-run state in control, given no signal so far; else an empty history.

    Raises
    ------
    NotAChainError
        Where the rules have no finite chain, or more states than are solved here.
    """
    machine = rule_machine(design.rules, True)
    states = machine.following.shape[0]
    if states > _MOST_SOLVED:
        raise NotAChainError(
            f"{design.text} has {states} states; at most {_MOST_SOLVED} are solved"
        )
    step, leave = transitions(machine, shift)
    if steady_state:
        start = steady_start(*transitions(machine, 0.0))
    else:
        start = np.zeros(states)
        start[0] = 1.0
    return run_length_of(Chain(step, leave, start), n, "exact Markov chain")


def transitions(
    machine: RuleMachine, mean: float, sd: float = 1.0
) -> tuple[FloatArray, FloatArray]:
    """Chances between the states of a stopping machine, and chances of a signal from each."""
    chances = machine.zone_chances(mean, sd)
    states, zones = machine.following.shape
    weight = np.broadcast_to(chances, (states, zones))
    stay = machine.following >= 0
    cell = np.arange(states)[:, None] * states + machine.following
    step = np.bincount(cell[stay], weights=weight[stay], minlength=states * states)
    leave = np.where(stay, 0.0, weight).sum(axis=1)
    return step.reshape(states, states).astype(np.float64), leave

"""Exact run length of sets with `trending` or `alternating` rules, beside any zone rules.

These rules compare a point with the one before, so the state is the last value too.  On the
scale ``u = F(value)`` points are uniform whatever the shift, which then only moves the borders
of the zones.  Within a zone the chance to signal after n more points is smooth in u (a polynomial
for `trending` alone), and the step from one point to the next only integrates it up to u and
from u on.  Values at Gauss-Legendre nodes and the integrals of their interpolating polynomial
carry it to rounding.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike, NDArray

from spc.stats.designs import RuleDesign
from spc.stats.rule_states import NotAChainError, RuleMachine, rule_machine
from spc.stats.rules import Rule
from spc.stats.run_length_chain import RunLength, gauss_legendre, run_length_of_masses

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

_MOST_VALUES = 400_000
_MOST_STEPS = 20_000


@dataclass(frozen=True)
class _States:
    """Histories of zones, zones of the last point and runs of steps, as far as they are reached.

    One number past the last state stands for a signal.

    Attributes
    ----------
    zone : zone of the last point, shape (states,)
    elsewhere : state after a point in each other zone, shape (states, zones)
    above, below : state after a point in the same zone, above or below the last, shape (states,)
    first : state after the first point, shape (zones,)
    """

    zone: IntArray
    elsewhere: IntArray
    above: IntArray
    below: IntArray
    first: IntArray


def trends_run_length(design: RuleDesign, shift: float, n: ArrayLike | None = None) -> RunLength:
    """Zero-state run length of a set of rules that has `trending` or `alternating` ones.

    Parameters
    ----------
    design : RuleDesign
    shift : float
        Shift of the mean in sigmas of the plotted point, from the first point on.
    n : int or array of int, optional
        Counts for `prob_within`.

    Returns
    -------
    RunLength
        `relative_error` is the change of the mean from a third fewer nodes.

    Raises
    ------
    NotAChainError
        Where the other rules have no chain, or the states are too many.
    """
    zoned = tuple(r for r in design.rules if r.kind not in ("trending", "alternating"))
    machine = rule_machine(zoned, True)
    states = _states(machine, design.rules)
    nodes = 24 if not zoned else 12
    if states.zone.size * nodes > _MOST_VALUES:
        raise NotAChainError(f"{design.text} has too many states for an exact run length")
    chances = machine.zone_chances(np.float64(shift))
    coarse = run_length_of_masses(*_walk(states, chances, 2 * nodes // 3, 0), None, "")
    target = 0 if n is None else int(np.max(n))
    walk = _walk(states, chances, nodes, target)
    fine = run_length_of_masses(*walk, n, "exact recursion on the last value")
    return replace(fine, relative_error=abs(coarse.arl / fine.arl - 1.0))


def _trend_moves(rules: tuple[Rule, ...]) -> IntArray:
    """What steps up (column 0) and down (1) do to the runs of steps; -1 for a signal.

    States are (steps in a row, signed; turns in a row); state 0 has had no step.  The shortest
    rule of a kind decides.
    """
    run = min((r.m - 1 for r in rules if r.kind == "trending"), default=0)
    turn = min((r.m - 2 for r in rules if r.kind == "alternating"), default=0)
    states, following = [(0, 0)], []
    for steps, turns in states:
        after = []
        for side in (1, -1):
            if steps * side < 0:
                new = (side, turns + 1 if turn else 0)
            else:
                new = (steps + side if run else side, 0)
            hit = bool(run and abs(new[0]) >= run) or bool(turn and new[1] >= turn)
            if not hit and new not in states:
                states.append(new)
            after.append(-1 if hit else states.index(new))
        following.append(after)
    return np.array(following)


def _states(machine: RuleMachine, rules: tuple[Rule, ...]) -> _States:
    """Explore histories, last zones and trends together, level by level."""
    moves = _trend_moves(rules)
    zones, kinds = machine.following.shape[1], moves.shape[0]
    every = np.arange(zones)

    def key(history: IntArray, zone: IntArray, kind: IntArray) -> IntArray:
        joined = (history * zones + zone) * kinds + kind
        return np.where((history < 0) | (kind < 0), -1, joined)

    first = key(machine.following[0], every, np.zeros(zones, dtype=np.int64))
    known = np.unique(first[first >= 0])
    frontier, found = known, []
    while frontier.size:
        history, kind = frontier // (zones * kinds), frontier % kinds
        after = machine.following[history]
        sides = [key(after, every, moves[kind, side][:, None]) for side in (0, 1)]
        # Zones below the last one are no step up, nor those above it a step down.
        own = (frontier // kinds % zones)[:, None]
        reached = np.concatenate((sides[0][every >= own], sides[1][every <= own]))
        found.append((frontier, *sides))
        fresh = np.unique(reached[reached >= 0])
        frontier = fresh[~np.isin(fresh, known)]
        known = np.union1d(known, frontier)
    keys, up, down = (np.concatenate(part) for part in zip(*found, strict=True))
    order = np.argsort(keys)
    keys, up, down = keys[order], up[order], down[order]
    zone = keys // kinds % zones
    rows = np.arange(keys.size)

    def number(wanted: IntArray) -> IntArray:
        place = np.minimum(np.searchsorted(keys, np.maximum(wanted, 0)), keys.size - 1)
        return np.where(keys[place] == wanted, place, keys.size)

    elsewhere = number(np.where(every > zone[:, None], up, down))
    return _States(zone, elsewhere, number(up[rows, zone]), number(down[rows, zone]), number(first))


@lru_cache(maxsize=16)
def _integral(count: int) -> FloatArray:
    """Integrals from 0 to each node of the polynomial through values at the nodes of [0, 1]."""
    nodes, _ = gauss_legendre(count)
    powers = np.polynomial.legendre.legvander(nodes, count - 1)
    primitive = np.stack(
        [
            np.polynomial.legendre.legval(
                nodes, np.polynomial.legendre.legint(np.eye(count)[j], lbnd=-1)
            )
            for j in range(count)
        ],
        axis=1,
    )
    return np.asarray(0.5 * primitive @ np.linalg.inv(powers))


def _walk(
    states: _States, chances: FloatArray, count: int, target: int
) -> tuple[FloatArray, float, float | None]:
    """Chances that the first signal comes at each point, what is left, the rate of the tail."""
    share = 0.5 * gauss_legendre(count)[1]
    upward = _integral(count)
    size = states.zone.size
    apart = np.arange(chances.size) != states.zone[:, None]
    elsewhere = np.where(apart, states.elsewhere, size)
    own = chances[states.zone][:, None]

    def average(worth: FloatArray, outside: FloatArray) -> FloatArray:
        """Average of a worth of states over the next point, given this one: (states, nodes)."""
        over = (outside @ chances)[:, None]
        up, down = worth[states.above], worth[states.below]
        return np.asarray(over + own * (up @ (share[:, None] - upward.T) + down @ upward.T))

    # The chance of a signal at the next point, then step by step k points on.
    worth = np.zeros((size + 1, count))
    worth[size] = 1.0
    now = average(worth, ((elsewhere == size) & apart).astype(np.float64))
    worth[size] = 0.0
    masses = [float(chances[states.first == size].sum())]
    total, steady = masses[0], 0
    while 1.0 - total > 1e-13 and len(masses) < max(_MOST_STEPS, target):
        worth[:size] = now
        whole = worth @ share
        masses.append(float(chances @ whole[states.first]))
        total += masses[-1]
        if len(masses) > 2 and masses[-2] > 0.0 and masses[-3] > 0.0:
            ratio = masses[-1] / masses[-2]
            steady = steady + 1 if abs(ratio * masses[-3] / masses[-2] - 1.0) < 1e-13 else 0
            if steady >= 5:
                left = 1.0 - total
                return np.array(masses), left, masses[-1] * ratio / left
        now = average(worth, whole[elsewhere])
    left = max(1.0 - total, 0.0)
    return np.array(masses), left, None if left < 1e-12 else masses[-1] / (left + masses[-1])

"""Run rules on an autocorrelated stream: false signals of an AR(1) process, by exact recursion.

The joint state is the machine of the run rules and the last value. Values are carried on
Gauss-Legendre nodes inside each zone, so the recursion is exact up to quadrature (about 1e-9).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from scipy.sparse import csr_matrix

from spc.stats.grouping import FloatArray, IntArray
from spc.stats.rule_states import RuleMachine, rule_machine
from spc.stats.rules import parse_rules

FARTHEST = 8.5  # sigmas; the probability beyond is 2e-17
NODES_A_PANEL = 10


@dataclass(frozen=True)
class Ar1Signals:
    """False signals of a set of run rules on an in-control AR(1) stream.

    Attributes
    ----------
    arl : mean points to the first signal of a fresh chart on the running process (zero-state).
    rate : long-run share of points that complete a rule, without a fresh start after signals.
    """

    arl: float
    rate: float


def ar1_signals(phi: float, rules: Sequence[str]) -> Ar1Signals:
    """False signals of run rules on z_t = phi z_{t-1} + sqrt(1 - phi^2) e_t, e normal.

    Parameters
    ----------
    phi : float
        Lag-1 autocorrelation, between -0.98 and 0.98. The points are standardised by their own
        (marginal) sigma.
    rules : sequence of str
        Names of zone rules, as for `spc.stats.rules.parse_rules`.

    Raises
    ------
    ValueError
        For phi outside that range or rules that have no chain.

    Notes
    -----
    At phi = 0 the values are those of Champ & Woodall (1987), Technometrics 29.
    """
    if not -0.98 <= phi <= 0.98:
        raise ValueError(f"phi must lie between -0.98 and 0.98, not {phi}")
    parsed = parse_rules(rules)
    stopping = rule_machine(parsed, True)
    node, weight, zone = _nodes(stopping.edges, float(np.sqrt(1.0 - phi**2)))
    kernel = _kernel(phi, node, weight)
    start = weight * np.exp(-0.5 * node**2) / np.sqrt(2.0 * np.pi)
    start /= start.sum()
    going = rule_machine(parsed, False)
    longest = max(rule.m for rule in parsed)
    return Ar1Signals(
        _arl(stopping, kernel, start, zone), _rate(going, kernel, start, zone, longest)
    )


def _nodes(edges: FloatArray, step: float) -> tuple[FloatArray, FloatArray, IntArray]:
    """Quadrature nodes, weights and zone of each; panels no wider than 1.5 innovation sigmas."""
    base, base_weight = np.polynomial.legendre.leggauss(NODES_A_PANEL)
    ends = np.concatenate(([-FARTHEST], edges, [FARTHEST]))
    nodes, weights, zones = [], [], []
    for i, (low, high) in enumerate(pairwise(ends)):
        panels = int(np.ceil((high - low) / (1.5 * step)))
        cut = np.linspace(low, high, panels + 1)
        half = 0.5 * np.diff(cut)[:, None]
        nodes.append((cut[:-1, None] + half * (base + 1.0)).ravel())
        weights.append((half * base_weight).ravel())
        zones.append(np.full(panels * NODES_A_PANEL, i))
    return np.concatenate(nodes), np.concatenate(weights), np.concatenate(zones)


def _kernel(phi: float, node: FloatArray, weight: FloatArray) -> FloatArray:
    """Probability of going from node i to node j; rows are scaled to sum to one."""
    variance = 1.0 - phi**2
    off = node[None, :] - phi * node[:, None]
    kernel = np.exp(-0.5 * off**2 / variance) * weight
    return np.asarray(kernel / kernel.sum(axis=1, keepdims=True))


def _moves(machine: RuleMachine) -> list[csr_matrix]:
    """For each zone the matrix that sends machine states on (stopped ones drop out)."""
    states = machine.following.shape[0]
    moves = []
    for zone in range(machine.following.shape[1]):
        after = machine.following[:, zone]
        alive = np.flatnonzero(after >= 0)
        ones = np.ones(alive.size)
        moves.append(csr_matrix((ones, (after[alive], alive)), shape=(states, states)))
    return moves


def _advance(mass: FloatArray, moves: list[csr_matrix], zone: IntArray) -> FloatArray:
    out = np.zeros_like(mass)
    for i, move in enumerate(moves):
        columns = zone == i
        out[:, columns] = move @ mass[:, columns]
    return out


def _arl(machine: RuleMachine, kernel: FloatArray, start: FloatArray, zone: IntArray) -> float:
    """Sum of the survival probabilities; the tail is geometric once its ratio has settled."""
    moves = _moves(machine)
    mass = np.zeros((machine.following.shape[0], start.size))
    mass[0] = start
    mass = _advance(mass, moves, zone)
    total, alive, ratio = 1.0, float(mass.sum()), 0.0
    for step in range(200_000):
        total += alive
        mass = _advance(mass @ kernel, moves, zone)
        left = float(mass.sum())
        new_ratio = left / alive
        alive = left
        if step > 50 and abs(new_ratio - ratio) <= 1e-13 * (1.0 - new_ratio) + 1e-16:
            ratio = new_ratio
            break
        ratio = new_ratio
        if alive < 1e-290:
            return total
    return total + alive / (1.0 - ratio)


def _rate(
    machine: RuleMachine, kernel: FloatArray, start: FloatArray, zone: IntArray, longest: int
) -> float:
    """Share of points that complete a rule: exact once the machine has seen `longest` points."""
    moves = _moves(machine)
    mass = np.zeros((machine.following.shape[0], start.size))
    mass[0] = start
    signal = (machine.completes != 0)[:, zone]
    for _ in range(longest):
        mass = _advance(mass, moves, zone) @ kernel
    return float((mass * signal).sum())


def log_factors(
    rules: Sequence[str], grid: Sequence[float]
) -> tuple[tuple[float, ...], tuple[float, ...]]:
    """Logarithms of the "run" and "point" factors of a set of rules over a grid of phi."""
    calm = ar1_signals(0.0, rules)
    found = [ar1_signals(phi, rules) for phi in grid]
    run = tuple(float(np.log(calm.arl / one.arl)) for one in found)
    point = tuple(float(np.log(one.rate / calm.rate)) for one in found)
    return run, point

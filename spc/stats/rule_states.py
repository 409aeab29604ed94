"""Run rules as a machine: the states are the histories of zones that still matter.

Built automatically from any set of zone rules (all kinds but `trending` and `alternating`,
which need the values themselves).  Champ & Woodall (1987), Technometrics 29:393-399.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from spc.stats.rules import Rule

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

_MOST_STATES = 60_000


class NotAChainError(ValueError):
    """A set of rules has no finite chain of zone histories, or too large a one."""


@dataclass(frozen=True)
class RuleMachine:
    """A machine that reads zones and tells which rules each point completes.

    Attributes
    ----------
    edges : array, shape (zones - 1,)
        Boundaries of the zones in sigmas, ascending.
    following : int array, shape (states, zones)
        State after a point in a zone; state 0 is the start; -1 where the machine stops at a
        signal and the point is one.
    completes : int array, shape (states, zones)
        Bit i is set where the point completes rule i; in a machine that stops, 1 for any rule.
    reachable : int
        States before equal ones were joined.
    """

    edges: FloatArray
    following: IntArray
    completes: IntArray
    reachable: int

    def zone_chances(self, mean: float | FloatArray, sd: float | FloatArray = 1.0) -> FloatArray:
        """Chances of the zones for normal points, shape (..., zones); exact in both tails."""
        from scipy.special import ndtr

        mean, sd = np.asarray(mean, dtype=np.float64), np.asarray(sd, dtype=np.float64)
        ends = (self.edges - mean[..., None]) / sd[..., None]
        low = np.concatenate((np.full((*ends.shape[:-1], 1), -np.inf), ends), axis=-1)
        high = np.concatenate((ends, np.full((*ends.shape[:-1], 1), np.inf)), axis=-1)
        # The difference is taken in the tail that is nearer, where it loses no digits.
        right = low > 0.0
        return np.asarray(np.where(right, ndtr(-low) - ndtr(-high), ndtr(high) - ndtr(low)))


@dataclass(frozen=True)
class _Register:
    """What one rule remembers on one side: a capped run, or the last marks as bits."""

    rule: int
    marks: BoolArray
    size: int
    need: int
    window: bool

    def advance(self, value: IntArray) -> tuple[IntArray, BoolArray]:
        """Values ``(states,)`` -> values and completions, both ``(states, zones)``."""
        marks = self.marks[None, :]
        if self.window:
            mask = (1 << self.size) - 1
            after = ((value[:, None] << 1) | marks) & mask
            count = _bits_set(value)
            return after, marks & (count[:, None] + 1 >= self.need)
        after = np.where(marks, np.minimum(value + 1, self.size)[:, None], 0)
        return after, marks & (value[:, None] >= self.need - 1)

    @property
    def bits(self) -> int:
        return self.size if self.window else int(self.size).bit_length()


def _bits_set(values: IntArray) -> IntArray:
    count, rest = np.zeros_like(values), values.copy()
    while rest.any():
        count += rest & 1
        rest >>= 1
    return count


@lru_cache(maxsize=256)
def rule_machine(rules: tuple[Rule, ...], stop_at_signal: bool) -> RuleMachine:
    """Build the machine of a set of rules; kept for the next call.

    Parameters
    ----------
    rules : tuple of Rule
    stop_at_signal : bool
        True: for run lengths; False: the machine goes on after a signal as the evaluator does.

    Raises
    ------
    NotAChainError
        For rules that need the values themselves, or too many histories.
    """
    for rule in rules:
        if rule.kind in ("trending", "alternating"):
            raise NotAChainError(f"rule {rule.name!r} compares values, not zones")
    edges = _edges(rules)
    registers = [r for i, rule in enumerate(rules) for r in _registers(i, rule, edges)]
    if sum(r.bits for r in registers) > 62:
        names = ",".join(rule.name for rule in rules)
        raise NotAChainError(f"the rules {names} have too many histories for an exact chain")
    following, completes = _explore(registers, edges.size + 1, stop_at_signal)
    reachable = following.shape[0]
    if stop_at_signal:
        completes = (completes != 0).astype(np.int64)
    following, completes = _join_equal_states(following, completes)
    for table in (edges, following, completes):
        table.flags.writeable = False
    return RuleMachine(edges, following, completes, reachable)


def _edges(rules: tuple[Rule, ...]) -> FloatArray:
    found: set[float] = set()
    for rule in rules:
        found |= {rule.s, -rule.s} if rule.s > 0.0 else {0.0}
    return np.array(sorted(found))


def _registers(index: int, rule: Rule, edges: FloatArray) -> list[_Register]:
    low = np.concatenate(([-np.inf], edges))
    high = np.concatenate((edges, [np.inf]))
    up, down = low >= rule.s, high <= -rule.s
    if rule.kind == "within":
        sides = [(low >= -rule.s) & (high <= rule.s)]
    elif rule.kind == "outside":
        sides = [up | down]
    else:
        sides = [up, down]
    if rule.k == 1:
        return [_Register(index, marks, 0, 1, False) for marks in sides]
    if rule.k == rule.m:
        return [_Register(index, marks, rule.m - 1, rule.m, False) for marks in sides]
    return [_Register(index, marks, rule.m - 1, rule.k, True) for marks in sides]


def _explore(
    registers: list[_Register], zones: int, stop_at_signal: bool
) -> tuple[IntArray, IntArray]:
    """Find the reachable states, level by level, from an empty history."""
    offsets = np.cumsum([0] + [r.bits for r in registers])
    known = np.zeros(1, dtype=np.int64)
    frontier = known
    all_keys, all_completes, sources = [], [], []
    while frontier.size:
        keys, completes = _advance(registers, offsets, frontier, zones)
        if stop_at_signal:
            keys = np.where(completes != 0, -1, keys)
        all_keys.append(keys)
        all_completes.append(completes)
        sources.append(frontier)
        fresh = np.unique(keys)
        fresh = fresh[(fresh >= 0) & ~np.isin(fresh, known)]
        known = np.concatenate((known, fresh))
        if known.size > _MOST_STATES:
            raise NotAChainError(f"the rules have more than {_MOST_STATES} histories")
        frontier = fresh
    keys = np.concatenate(all_keys)
    order = np.argsort(known)
    following = order[np.searchsorted(known, np.maximum(keys, 0), sorter=order)]
    return np.where(keys < 0, -1, following), np.concatenate(all_completes)


def _advance(
    registers: list[_Register], offsets: IntArray, states: IntArray, zones: int
) -> tuple[IntArray, IntArray]:
    keys = np.zeros((states.size, zones), dtype=np.int64)
    completes = np.zeros_like(keys)
    for register, offset in zip(registers, offsets[:-1].tolist(), strict=True):
        value = (states >> offset) & ((1 << register.bits) - 1)
        after, done = register.advance(value)
        keys |= after.astype(np.int64) << offset
        completes |= done.astype(np.int64) << register.rule
    return keys, completes


def _join_equal_states(following: IntArray, completes: IntArray) -> tuple[IntArray, IntArray]:
    """Join states that no future can tell apart (Moore 1956: refine until nothing splits)."""
    _, group = np.unique(completes, axis=0, return_inverse=True)
    group = np.asarray(group).reshape(-1)
    count = int(group.max()) + 1
    while True:
        next_group = np.where(following < 0, -1, group[following])
        signature = np.column_stack((group, next_group))
        _, group = np.unique(signature, axis=0, return_inverse=True)
        group = np.asarray(group).reshape(-1)
        if int(group.max()) + 1 == count:
            break
        count = int(group.max()) + 1
    # The start keeps number 0; one state stands for each group.
    first = np.full(count, -1)
    first[group[::-1]] = np.arange(group.size)[::-1]
    order = np.argsort(first)
    rank = np.empty(count, dtype=np.int64)
    rank[order] = np.arange(count)
    chosen = first[order]
    joined = np.where(following[chosen] < 0, -1, rank[group[following[chosen]]])
    return joined, completes[chosen]

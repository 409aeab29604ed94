"""Run rules of control charts as data, and one vectorised evaluator for all of them.

Readings of the rules (Statistical Quality Control Handbook, Western Electric, 1956):

* Points are standardised: ``z = (point - centre) / sigma of the point``.
* "Beyond" and "within" are strict: a point exactly on a limit is neither beyond nor within it.
  A point exactly on the centre line is on neither side and breaks a run on one side.
* The point that completes a pattern is the signal and is itself part of the pattern:
  `2of3-beyond-2s` marks a point beyond 2 sigma where, of it and the two points before,
  at least two are beyond 2 sigma on its side.
* A window never reaches across a change of segment (another stream or set of limits), and
  fewer points than the full window suffice where k of them are there (the first two points of
  a stream, both beyond 2 sigma on one side, complete `2of3-beyond-2s`).
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from spc.stats.segments import (
    Blocks,
    BoolArray,
    FloatArray,
    IntArray,
    Missing,
    as_points,
    find_runs,
    map_rows,
)

Kind = Literal["beyond", "one-side", "trending", "alternating", "within", "outside"]

MAX_WINDOW = 100
LEGAL_FORMS = (
    "beyond-{s}s, {k}of{m}-beyond-{s}s, {m}-one-side, {m}-trending, {m}-alternating, "
    "{m}-within-{s}s, {m}-outside-{s}s (k, m whole numbers, s in sigmas, as in 2of3-beyond-2s)"
)


@dataclass(frozen=True)
class Rule:
    """A run rule.

    Attributes
    ----------
    kind : str
        ``beyond``: k of m points in a row beyond s sigma, all k on one side.
        ``one-side``: m in a row on one side of the centre line.
        ``trending``: m in a row, each above (or each below) the one before (m - 1 steps).
        ``alternating``: m in a row stepping up and down in turn (m - 1 steps).
        ``within``: m in a row within s sigma of the centre, on either side.
        ``outside``: m in a row beyond s sigma, on either side.
    k, m : int
        Points needed, and points in the window; k equals m for all kinds but ``beyond``.
    s : float
        Distance from the centre in sigmas; 0 where the kind has none.
    """

    kind: Kind
    m: int
    k: int = 0
    s: float = 0.0

    def __post_init__(self) -> None:
        if self.k == 0:
            object.__setattr__(self, "k", self.m)
        if self.kind not in ("beyond", "one-side", "trending", "alternating", "within", "outside"):
            raise ValueError(f"unknown kind of rule {self.kind!r}; legal forms: {LEGAL_FORMS}")
        least = 2 if self.kind in ("one-side", "within", "outside") else 1
        least = 3 if self.kind in ("trending", "alternating") else least
        if not least <= self.m <= MAX_WINDOW:
            raise ValueError(
                f"a {self.kind} rule needs {least} to {MAX_WINDOW} points, not {self.m}"
            )
        if not 1 <= self.k <= self.m or (self.kind != "beyond" and self.k != self.m):
            raise ValueError(f"a {self.kind} rule cannot ask for {self.k} of {self.m} points")
        zoned = self.kind in ("beyond", "within", "outside")
        if zoned and not (np.isfinite(self.s) and self.s > 0):
            raise ValueError(f"a {self.kind} rule needs a distance above 0 sigmas, not {self.s:g}")
        if not zoned and self.s != 0:
            raise ValueError(f"a {self.kind} rule takes no distance, but {self.s:g} was given")

    @property
    def name(self) -> str:
        """Name in the grammar of :func:`parse_rule`; parsing it gives the same rule."""
        distance = f"{self.s:.12g}s"
        if self.kind == "beyond":
            return f"beyond-{distance}" if self.m == 1 else f"{self.k}of{self.m}-beyond-{distance}"
        if self.kind in ("within", "outside"):
            return f"{self.m}-{self.kind}-{distance}"
        return f"{self.m}-{self.kind}"

    @property
    def sided(self) -> bool:
        """True where a hit has a side (above or below the centre, rising or falling)."""
        return self.kind in ("beyond", "one-side", "trending")


_GRAMMAR = re.compile(
    r"(?:(?P<k>\d+)of(?P<km>\d+)-)?beyond-(?P<beyond>\d+(?:\.\d+)?)s"
    r"|(?P<m>\d+)-(?P<plain>one-side|trending|alternating)"
    r"|(?P<zm>\d+)-(?P<zone>within|outside)-(?P<s>\d+(?:\.\d+)?)s"
)


def parse_rule(name: str) -> Rule:
    """Return the rule that a name stands for.

    Raises
    ------
    ValueError
        Naming the legal forms, where the name has none of them.
    """
    found = _GRAMMAR.fullmatch(name.strip())
    if found is None:
        raise ValueError(f"rule {name!r} is not understood; legal forms: {LEGAL_FORMS}")
    try:
        if found["beyond"] is not None:
            k, m = int(found["k"] or 1), int(found["km"] or 1)
            if k == 0:
                raise ValueError(f"a beyond rule cannot ask for 0 of {m} points")
            return Rule("beyond", m, k, float(found["beyond"]))
        if found["plain"] is not None:
            return Rule(found["plain"], int(found["m"]))  # type: ignore[arg-type]
        return Rule(found["zone"], int(found["zm"]), s=float(found["s"]))  # type: ignore[arg-type]
    except ValueError as error:
        raise ValueError(f"rule {name!r}: {error}") from None


def parse_rules(names: Iterable[str]) -> tuple[Rule, ...]:
    """Return the rules of several names; a name given twice is an error.

    Raises
    ------
    ValueError
        For a name that is not understood or a rule given twice.
    """
    rules = tuple(parse_rule(name) for name in names)
    for rule in rules:
        if rules.count(rule) > 1:
            raise ValueError(f"rule {rule.name!r} is given twice")
    return rules


# Statistical Quality Control Handbook (1956): the four tests for instability.
WESTERN_ELECTRIC: tuple[Rule, ...] = (
    Rule("beyond", 1, 1, 3.0),
    Rule("beyond", 3, 2, 2.0),
    Rule("beyond", 5, 4, 1.0),
    Rule("one-side", 8),
)


@dataclass(frozen=True)
class RuleHits:
    """What :func:`evaluate` found.

    Attributes
    ----------
    rules : tuple of Rule
    hits : bool array, shape (n_rules, ...) with the shape of the points behind
        True at the point that completes the rule.
    side : int8 array, shape of `hits`
        +1 above (rising), -1 below (falling), 0 for no hit or a rule without sides.
    """

    rules: tuple[Rule, ...]
    hits: BoolArray
    side: NDArray[np.int8]
    _points: FloatArray = field(repr=False)
    _segment: NDArray[np.generic] | None = field(repr=False)

    @property
    def any(self) -> BoolArray:
        """Points at which some rule signals, shape of the points."""
        return np.asarray(self.hits.any(axis=0))

    @property
    def events(self) -> BoolArray:
        """Points at which a rule begins to signal, shape of `hits` (see :func:`first_of_run`)."""
        present = None if not np.isnan(self._points).any() else ~np.isnan(self._points)
        return first_of_run(self.hits, self._segment, present)

    def names_at(self, at: int | tuple[int, ...]) -> tuple[str, ...]:
        """Return the names of the rules that signal at a point."""
        place = at if isinstance(at, tuple) else (at,)
        return tuple(r.name for r, hit in zip(self.rules, self.hits, strict=True) if hit[place])

    def members(self, rule: int, at: int | tuple[int, ...]) -> IntArray:
        """Return the positions, within their stream, of the points that make up a hit.

        Parameters
        ----------
        rule : int
            Index into `rules`.
        at : int or tuple of int
            Place of the signal: ``i``, or ``(stream, i)``.

        Raises
        ------
        ValueError
            Where the rule does not signal at that point.
        """
        place = at if isinstance(at, tuple) else (at,)
        design = self.rules[rule]
        if not self.hits[rule][place]:
            raise ValueError(f"rule {design.name!r} does not signal at point {at}")
        last = place[-1]
        stream = self._points[place[:-1]]
        window = _points_before(stream, last, design.m)
        if self._segment is not None:
            codes = self._segment[place[:-1]][window]
            foreign = np.flatnonzero(codes != codes[-1])
            window = window[foreign[-1] + 1 :] if foreign.size else window
        if design.kind == "beyond":
            window = window[stream[window] * self.side[rule][place] > design.s]
        return window


def _points_before(stream: FloatArray, last: int, count: int) -> IntArray:
    """Positions of the last `count` points up to `last`, over gaps; looks back in steps."""
    reach = count
    while True:
        low = max(0, last + 1 - reach)
        found = low + np.flatnonzero(~np.isnan(stream[low : last + 1]))
        if found.size >= count or low == 0:
            return found[-count:]
        reach *= 4


def evaluate(
    z: ArrayLike,
    rules: Sequence[Rule],
    segment: ArrayLike | None = None,
    *,
    missing: Missing = "raise",
) -> RuleHits:
    """Evaluate run rules on standardised points.

    Parameters
    ----------
    z : array_like, shape (n,) or (streams, n)
        Standardised points (dimensionless), in the order of time.
    rules : sequence of Rule
    segment : array_like of codes, optional
        Broadcast against `z`; a window never reaches across a change of code.
    missing : {"raise", "skip"}
        With "skip" a NaN is no point: it never signals, and the points on both sides of it are
        neighbours.  It serves to pad streams of unequal length.

    Returns
    -------
    RuleHits

    Raises
    ------
    ValueError
        For an infinite value, for NaN unless skipped, for codes that do not fit.

    Notes
    -----
    A value at a point depends on that point and the `max(m) - 1` points before it alone, so
    evaluating new points with that much history equals evaluating everything again.
    """
    chosen = tuple(rules)
    points = as_points(z, missing)
    runs = find_runs(points, segment)
    hits = np.zeros((len(chosen), *points.shape), dtype=np.bool_)
    side = np.zeros((len(chosen), *points.shape), dtype=np.int8)
    if chosen:
        map_rows((points,), runs, _kernel(chosen), (hits, side))
    codes = None if segment is None else np.broadcast_to(np.asarray(segment), points.shape)
    return RuleHits(chosen, hits, side, points, codes)


def first_of_run(
    hits: ArrayLike, segment: ArrayLike | None = None, present: ArrayLike | None = None
) -> BoolArray:
    """Keep the first of each unbroken row of hits: later ones are the same event.

    Parameters
    ----------
    hits : array_like of bool, shape (..., n)
    segment : array_like of codes, optional
        Broadcast against `hits`; a change of code starts a new event.
    present : array_like of bool, optional
        Broadcast against `hits`; False where there is no point (neither hit nor gap).

    Returns
    -------
    bool array, shape of `hits`
        True at a hit whose point before, in the same stream and segment, is no hit.
    """
    marks = np.asarray(hits, dtype=np.bool_)
    before = np.zeros_like(marks)
    if present is None:
        before[..., 1:] = marks[..., :-1]
        if segment is not None:
            codes = np.broadcast_to(np.asarray(segment), marks.shape)
            before[..., 1:] &= codes[..., 1:] == codes[..., :-1]
        return marks & ~before
    there = np.broadcast_to(np.asarray(present, dtype=np.bool_), marks.shape)
    place = np.where(there, np.arange(marks.shape[-1]), -1)
    previous = np.full(marks.shape, -1)
    previous[..., 1:] = np.maximum.accumulate(place, axis=-1)[..., :-1]
    known = previous >= 0
    source = np.maximum(previous, 0)
    before = known & np.take_along_axis(marks & there, source, axis=-1)
    if segment is not None:
        codes = np.broadcast_to(np.asarray(segment), marks.shape)
        before &= np.take_along_axis(codes, source, axis=-1) == codes
    return marks & there & ~before


def _kernel(rules: tuple[Rule, ...]) -> Callable[[Blocks, IntArray, Blocks], None]:
    """Make the evaluator of a rectangle of runs."""

    def run(blocks: Blocks, rows: IntArray, results: Blocks) -> None:
        (block,), (hits, side) = blocks, results
        side[...] = 0
        steps = _steps(block) if any(r.kind in ("trending", "alternating") for r in rules) else None
        for i, rule in enumerate(rules):
            if rule.kind in ("within", "outside"):
                near = np.abs(block)
                inside = near < rule.s if rule.kind == "within" else near > rule.s
                hits[i] = _in_a_row(inside, rule.m)
            elif rule.kind == "alternating":
                assert steps is not None
                hits[i] = _alternating(*steps, rule.m)
            else:
                if rule.kind == "trending":
                    assert steps is not None
                    up, down = (_in_a_row(step, rule.m - 1) for step in steps)
                else:
                    up = _k_of_m(block > rule.s, rule.k, rule.m)
                    down = _k_of_m(block < -rule.s, rule.k, rule.m)
                np.logical_or(up, down, out=hits[i])
                np.subtract(up.view(np.int8), down.view(np.int8), out=side[i])

    return run


def _steps(block: FloatArray) -> tuple[BoolArray, BoolArray]:
    """Steps up and down into each point; the first point of a run has no step."""
    up, down = np.zeros(block.shape, np.bool_), np.zeros(block.shape, np.bool_)
    np.greater(block[:, 1:], block[:, :-1], out=up[:, 1:])
    np.less(block[:, 1:], block[:, :-1], out=down[:, 1:])
    return up, down


def _in_a_row(marks: BoolArray, m: int) -> BoolArray:
    """True where this point and the m - 1 before it are marked; windows join by doubling."""
    out, length = marks, 1
    while length < m:
        reach = min(length, m - length)
        joined = np.zeros_like(out)
        np.logical_and(out[:, reach:], out[:, :-reach], out=joined[:, reach:])
        out, length = joined, length + reach
    return out


def _k_of_m(marks: BoolArray, k: int, m: int) -> BoolArray:
    """True at a marked point with at least k marked among it and the m - 1 before it."""
    if k == 1:
        return marks
    if k == m:
        return _in_a_row(marks, m)
    count = marks.astype(np.int8)
    for lag in range(1, min(m, marks.shape[1])):
        count[:, lag:] += marks[:, :-lag].view(np.int8)
    return np.asarray((count >= k) & marks)


def _alternating(up: BoolArray, down: BoolArray, m: int) -> BoolArray:
    """True where the last m - 1 steps go up and down in turn."""
    turn = np.zeros(up.shape, np.bool_)
    turn[:, 1:] = (up[:, 1:] & down[:, :-1]) | (down[:, 1:] & up[:, :-1])
    return _in_a_row(turn, m - 2)

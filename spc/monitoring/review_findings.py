"""What a review comes down to: gaps between tools, changes from month to month, decisions.

An index has *changed* when the intervals of the two months do not overlap: rarer by chance than one
in two hundred. The interval of a *gap* is that of a difference of two estimates with their own
intervals (Zou & Donner 2008, Statistics in Medicine 27:1693-1702), each widened for the number of
pairs of tools it was picked from (Bonferroni).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any, Literal

from config.control_plan import Characteristic
from spc.monitoring.review import MonthReview, ReviewUnit

GOAL = 1.33  # Ppk that counts as capable (common practice, no source)
FEWEST_LOTS = 10  # fewer make an index that says little (common practice, no source)
MOST_STREAM_CHANGES = 30
GAUGE_SHARE = 0.09  # of the variance: 30 % of the sd (common practice, no source)

Row = dict[str, Any]


@dataclass(frozen=True)
class Gap:
    """Best and worst tool of a characteristic by Ppk, their difference and its 95 % interval."""

    characteristic: str
    best: str
    best_ppk: float
    worst: str
    worst_ppk: float
    gap: float
    low: float | None
    high: float | None


@dataclass(frozen=True)
class Change:
    """An index that moved beyond its interval since the month before."""

    characteristic: str
    context: dict[str, str]
    index: str
    before: float
    after: float


DecisionKind = Literal["below-goal", "unstable", "tool-gap", "too-few", "not-normal", "gauge"]


@dataclass(frozen=True)
class Decision:
    """Something a person must decide.

    streams, excursions : what it is about. levels : tools with their Ppk, of a gap. law : of a law
    that does not fit.
    """

    kind: DecisionKind
    characteristic: str
    context: dict[str, str] = field(default_factory=dict)
    value: float | None = None
    low: float | None = None
    high: float | None = None
    goal: float | None = None
    streams: tuple[dict[str, str], ...] = ()
    excursions: tuple[int, ...] = ()
    levels: tuple[tuple[str, float], ...] = ()
    law: str | None = None


# ---- gaps --------------------------------------------------------------------------------------


def gaps(review: MonthReview) -> list[Gap]:
    """Best against worst tool of each characteristic with at least two tools with a Ppk."""
    out = []
    for one in dict.fromkeys(unit.characteristic.name for unit in review.units):
        rows = _tool_rows(review, one)
        known = [(name, row) for name, row in rows if row["ppk"] is not None]
        if len(known) < 2:
            continue
        best = max(known, key=lambda pair: pair[1]["ppk"])
        worst = min(known, key=lambda pair: pair[1]["ppk"])
        low, high = difference_interval(_bounds(best[1]), _bounds(worst[1]), len(known))
        gap = best[1]["ppk"] - worst[1]["ppk"]
        out.append(Gap(one, best[0], best[1]["ppk"], worst[0], worst[1]["ppk"], gap, low, high))
    return out


def _tool_rows(review: MonthReview, name: str) -> list[tuple[str, Row]]:
    """Tools of a characteristic; its streams where those are its tools or have none."""
    tools = [u for u in review.tools if u.characteristic.name == name]
    if not tools:
        tools = [u for u in review.units if u.characteristic.name == name and u.context]
    return [("+".join(u.context.values()), u.rows[review.month]) for u in tools]


def _bounds(row: Row) -> tuple[float, float | None, float | None]:
    return row["ppk"], row["ppk_low"], row["ppk_high"]


def difference_interval(
    a: tuple[float, float | None, float | None],
    b: tuple[float, float | None, float | None],
    tools: int = 2,
) -> tuple[float | None, float | None]:
    """95 % interval of a - b from (estimate, low, high) of each; None where one has none.

    tools : how many a and b were picked from as the best and the worst.
    """
    from scipy.special import ndtri

    (va, la, ua), (vb, lb, ub) = a, b
    if la is None or ua is None or lb is None or ub is None:
        return None, None
    pairs = tools * (tools - 1) / 2
    wider = float(ndtri(1 - 0.025 / pairs) / ndtri(0.975))
    low = va - vb - wider * math.hypot(va - la, ub - vb)
    high = va - vb + wider * math.hypot(ua - va, vb - lb)
    return low, high


# ---- changes -----------------------------------------------------------------------------------


def changes(review: MonthReview) -> list[Change]:
    """Cpk and Ppk of wholes and streams that moved since the month before, largest first.

    Of the streams only the MOST_STREAM_CHANGES largest; the spreadsheet has every month of all.
    """
    if len(review.months) < 2:
        return []
    before, now = review.months[-2], review.months[-1]
    found = []
    for unit in review.units:
        for index in ("ppk", "cpk"):
            old, new = unit.rows[before], unit.rows[now]
            if _apart(old, new, index):
                name = unit.characteristic.name
                found.append(Change(name, unit.context, index, old[index], new[index]))
    found.sort(key=lambda c: (bool(c.context), -abs(math.log(_ratio(c)))))
    wholes = [change for change in found if not change.context]
    return [*wholes, *[change for change in found if change.context][:MOST_STREAM_CHANGES]]


def _ratio(change: Change) -> float:
    return max(change.after, 0.01) / max(change.before, 0.01)


def _apart(old: Row, new: Row, index: str) -> bool:
    bounds = [row[f"{index}_{end}"] for row in (old, new) for end in ("low", "high")]
    if any(bound is None for bound in bounds):
        return False
    low_old, high_old, low_new, high_new = bounds
    return bool(low_new > high_old or high_new < low_old)


# ---- decisions ---------------------------------------------------------------------------------


def decisions(review: MonthReview, found: Sequence[Gap]) -> list[Decision]:
    """What needs a decision, by weight: control, capability, tools, gauge, law, data."""
    out: list[Decision] = []
    names = dict.fromkeys(unit.characteristic.name for unit in review.units)
    by_name = {n: [u for u in review.units if u.characteristic.name == n] for n in names}
    by_gap = {gap.characteristic: gap for gap in found}
    for name, units in by_name.items():
        whole, streams = units[0], units[1:]
        if not whole.rows[review.month]["n_readings"]:
            continue
        out += _unstable(whole, streams, review.month)
        out += _below_goal(whole, streams, review.month)
        out += _gap(by_gap.get(name))
        out += _gauge(whole, review.month)
        out += _law(units, review.month)
        out += _too_few(whole, streams, review.month)
    order = ("unstable", "below-goal", "tool-gap", "gauge", "not-normal", "too-few")
    return sorted(out, key=lambda d: order.index(d.kind))


def _unstable(whole: ReviewUnit, streams: list[ReviewUnit], month: str) -> list[Decision]:
    if whole.rows[month]["stable"] is not False:
        return []
    moved = tuple(u.context for u in streams if u.rows[month]["stable"] is False)
    name = whole.characteristic.name
    return [Decision("unstable", name, streams=moved, excursions=whole.stability.acted)]


def _below_goal(whole: ReviewUnit, streams: list[ReviewUnit], month: str) -> list[Decision]:
    """The whole where its interval lies below the goal, else the streams of which that is so."""
    row = whole.rows[month]
    low_ones = [u for u in streams if _below(u.rows[month])]
    if _below(row):
        return [_decision(whole, row, tuple(u.context for u in low_ones))]
    return [_decision(u, u.rows[month]) for u in low_ones]


def _below(row: Row) -> bool:
    return row["ppk_high"] is not None and row["ppk_high"] < GOAL


def _decision(unit: ReviewUnit, row: Row, streams: tuple[dict[str, str], ...] = ()) -> Decision:
    name = unit.characteristic.name
    bounds = (row["ppk"], row["ppk_low"], row["ppk_high"])
    return Decision("below-goal", name, unit.context, *bounds, GOAL, streams)


def _gap(gap: Gap | None) -> list[Decision]:
    """A gap that is surely there and leaves the worst tool below the goal."""
    if gap is None or gap.low is None or gap.low <= 0 or gap.worst_ppk >= GOAL:
        return []
    levels = ((gap.best, gap.best_ppk), (gap.worst, gap.worst_ppk))
    bounds = (gap.gap, gap.low, gap.high)
    return [Decision("tool-gap", gap.characteristic, {}, *bounds, levels=levels)]


def _gauge(whole: ReviewUnit, month: str) -> list[Decision]:
    share = whole.rows[month]["gauge_share"]
    if share is None or share < GAUGE_SHARE:
        return []
    return [Decision("gauge", whole.characteristic.name, value=share)]


def _law(units: list[ReviewUnit], month: str) -> list[Decision]:
    """Units whose readings no law fits: their Ppk and expected ppm are rough."""
    odd = [u for u in units if u.study is not None and u.study.fits is False]
    if not odd:
        return []
    law = odd[0].rows[month]["distribution"]
    streams = tuple(u.context for u in odd if u.context)
    return [Decision("not-normal", units[0].characteristic.name, streams=streams, law=law)]


def _too_few(whole: ReviewUnit, streams: list[ReviewUnit], month: str) -> list[Decision]:
    if not _has_spec(whole.characteristic):
        return []
    thin = tuple(u.context for u in streams if 0 < u.rows[month]["n_lots"] < FEWEST_LOTS)
    if not thin and whole.rows[month]["n_lots"] >= FEWEST_LOTS:
        return []
    return [Decision("too-few", whole.characteristic.name, streams=thin)]


def _has_spec(one: Characteristic) -> bool:
    return one.lower_spec is not None or one.upper_spec is not None

"""Whether a stream was in control in a month, and the excursions that touched it.

A month of a stream is *not stable* when
* an excursion to act on (tier ``act``) that shows on the stream lies on the month, unless people
  closed it as a false alarm or it is a silence (of which the process knows nothing); or
* its charts rang more often than they do by chance. A lot at which a new row of signals begins is
  one event; events are Poisson with the expected false events of all its charts, and the signalled
  lots are a Poisson number of rows of geometric length (Polya & Aeppli; Johnson, Kemp & Kotz 2005,
  Univariate Discrete Distributions, 9.7). Either count is too many when it comes by chance with a
  probability below CHANCE: the first sees many brief faults, the second one that stays. Expected
  are the rates of the stream's own limits (`chart_rates`): with an estimated baseline and with the
  autocorrelation that the baseline is sure of.
It is *stable* when neither holds and at least one monitored point with limits lies in the month;
else nothing is known (None). A characteristic as a whole, or a tool, is stable when each of its
streams of which something is known is, and no excursion to act on lies on it.
"""

from __future__ import annotations

import json
from collections import defaultdict
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field, fields
from datetime import datetime
from typing import Any

import numpy as np
from sqlalchemy import Connection

from config.control_plan import Characteristic
from config.load import Bay
from spc.monitoring.chart_rates import Chart, chart_rates
from spc.monitoring.limit_sets import kind_of
from spc.monitoring.review_sites import Window
from spc.records import limits
from spc.records import review as records
from spc.records.findings import Excursion
from spc.stats.rules import parse_rules

CHANCE = 0.001

StreamMonth = tuple[int, int]  # id of the stream, number of the month


@dataclass
class Rung:
    """What the charts of a stream rang in a month.

    points : monitored points. events : lots at which a row of signals began, signalled : lots with
    a signal. expected, expected_signals : false events and signals of that many points.
    """

    points: int = 0
    events: int = 0
    signalled: int = 0
    expected: float = 0.0
    expected_signals: float = 0.0


@dataclass(frozen=True)
class Stability:
    """Verdict of one unit in one month, and what it stands on."""

    stable: bool | None
    excursions: tuple[int, ...] = ()
    acted: tuple[int, ...] = ()
    rung: Rung = field(default_factory=Rung)


@dataclass(frozen=True)
class TimedExcursion:
    """An excursion with the span it lies on (us) and whether it speaks against stability."""

    excursion: Excursion
    first_us: int
    last_us: int
    counts: bool
    cause: str
    streams: frozenset[tuple[str, str]]  # characteristic and context (JSON)

    def lies_on(self, span: tuple[int, int]) -> bool:
        """Whether it overlaps [first, end)."""
        return self.first_us < span[1] and self.last_us >= span[0]


def timed_excursions(
    connection: Connection, as_of: datetime, as_of_us: int
) -> list[TimedExcursion]:
    """Excursions known at a clock, with their spans.

    One without an end goes on to its last signal where it is a matter of single signals, else to
    its closing, else to the clock.
    """
    closed = records.closings(connection, as_of_us)
    out = []
    for one in records.excursions_until(connection, as_of):
        payload = one.payload
        first = int(payload["onset"]["estimate_us"])
        at, outcome, cause = closed.get(one.id, (as_of_us, "", ""))
        if one.status != "closed":
            at, outcome, cause = as_of_us, "", ""
        last = payload.get("end_us") or payload.get("last_signal_us") or at
        counts = one.tier == "act" and one.pattern != "silence" and outcome != "false-alarm"
        names = frozenset(
            (s["characteristic"], json.dumps(s["context"], sort_keys=True, ensure_ascii=False))
            for s in payload["streams"]
        )
        out.append(TimedExcursion(one, first, max(first, int(last)), counts, cause, names))
    return out


def rung_charts(
    connection: Connection, bay: Bay, names: Mapping[int, str], window: Window
) -> dict[StreamMonth, Rung]:
    """Points, events and expected events of every stream and month.

    Parameters
    ----------
    names : characteristic of each stream id.
    """
    out: dict[StreamMonth, Rung] = defaultdict(Rung)
    counts = [
        row
        for row in records.point_counts(connection, window.starts_us, window.as_of_us)
        if row[0] in names
    ]
    rows = limits.by_ids(connection, {row[2] for row in counts if row[2] is not None})
    sets = {row.id: (row.n_points, json.loads(row.payload)["statistics"]) for row in rows}
    for stream, statistic, baseline, month, n in counts:
        one = bay.plan.named(names[stream])
        assert one is not None  # only streams of the plan are asked for
        rung = out[stream, month]
        rung.points += n
        n_points, entries = sets[baseline]
        chart = _chart(one, statistic, entries.get(statistic, {}), n_points)
        rates = chart_rates(chart)
        rung.expected += n * rates.events
        rung.expected_signals += n * rates.signals
    for (stream, month), (events, signalled) in _events(connection, window).items():
        if stream in names:
            rung = out[stream, month]
            rung.events, rung.signalled = events, signalled
    return out


def _chart(one: Characteristic, statistic: str, entry: Mapping[str, Any], n_points: int) -> Chart:
    sure = bool(entry.get("correlated"))
    phi = float(np.clip(round(float(entry["phi"]), 1), -0.9, 0.9)) if sure else 0.0
    n = max(int(entry.get("n") or n_points), 3)
    return Chart(parse_rules(one.rules), kind_of(statistic), n, phi, sure)


def _events(connection: Connection, window: Window) -> dict[StreamMonth, tuple[int, int]]:
    """Lots at which a row of signals of some chart of a stream begins, and lots with a signal.

    A point begins a row when its neighbour in front has no signal. Charts of one stream that begin
    at one lot (a flyer moves spread and map together) are one event.
    """
    begun: dict[StreamMonth, set[tuple[str, str]]] = defaultdict(set)
    signalled: dict[StreamMonth, set[tuple[str, str]]] = defaultdict(set)
    before: tuple[int, str, int] | None = None
    for stream, statistic, month, lot, layer, place in records.signals(
        connection, window.starts_us, window.as_of_us
    ):
        if before != (stream, statistic, place - 1):
            begun[stream, month].add((lot, layer))
        signalled[stream, month].add((lot, layer))
        before = (stream, statistic, place)
    return {key: (len(begun.get(key, ())), len(lots)) for key, lots in signalled.items()}


def stability(
    rung: Iterable[Rung], touching: Sequence[TimedExcursion], known: bool = True
) -> Stability:
    """Verdict of a unit from the charts of its streams and the excursions on it in the month.

    `known` : whether the unit has wafers in the month; without any it is not called stable.
    """
    parts = list(rung)
    total = Rung(**{f.name: sum(getattr(p, f.name) for p in parts) for f in fields(Rung)})
    ids = tuple(sorted(t.excursion.id for t in touching))
    acted = tuple(sorted(t.excursion.id for t in touching if t.counts))
    verdict: bool | None = None
    if acted or any(rings_too_often(part) for part in parts):
        verdict = False
    elif total.points and known:
        verdict = True
    return Stability(verdict, ids, acted, total)


def rings_too_often(rung: Rung) -> bool:
    """Whether so many events or signalled lots come by chance with a probability below CHANCE."""
    from scipy.special import pdtrc

    if rung.events and pdtrc(rung.events - 1, rung.expected) < CHANCE:
        return True
    if not rung.signalled or rung.expected <= 0:
        return rung.signalled > 0
    length = max(rung.expected_signals / rung.expected, 1.0)
    return signalled_or_more(rung.signalled, rung.expected, length) < CHANCE


def signalled_or_more(count: int, rows: float, length: float) -> float:
    """Probability of `count` or more signals in a Poisson number of rows of geometric length.

    Parameters
    ----------
    count : at least 1. rows : expected rows. length : mean length of a row, 1 or more.
    """
    from scipy.special import bdtr, pdtr, pdtrc

    # n rows give fewer than `count` signals when, of count - 1 trials that each end a row with
    # probability 1 / length, fewer than n end one.
    n = np.arange(1, count)
    weight = pdtr(n, rows) - pdtr(n - 1, rows)
    enough = bdtr(n - 1, count - 1, 1.0 / length)
    return float(weight @ enough + pdtrc(count - 1, rows))

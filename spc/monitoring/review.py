"""The capability of a month: every characteristic and stream, beside the months before it."""

from __future__ import annotations

import json
import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from datetime import datetime
from typing import Any

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Connection

from config.control_plan import Characteristic
from config.load import Bay
from spc.monitoring.kept_studies import (
    READ,
    SUMS,
    WHOLE,
    chosen,
    notes_of,
    tool_key,
    wafers_of,
)
from spc.monitoring.review_rows import Ask, UnitStudy, empty_row, study_units, with_stability
from spc.monitoring.review_sites import LogBook, Readings, Window, read_months
from spc.monitoring.review_stability import (
    Rung,
    Stability,
    StreamMonth,
    TimedExcursion,
    rung_charts,
    stability,
    timed_excursions,
)
from spc.monitoring.review_units import units_of
from spc.monitoring.wafers import Stores
from spc.records import aggregation
from spc.records import review as records
from spc.records.aggregation import KeptStudy, StudyKey
from spc.records.contexts import ContextStore
from spc.records.measurements import LayoutStore
from spc.records.stamps import to_us

IntArray = NDArray[np.int64]
Progress = Callable[[str, int, int], None]

MONTHS = 12
_MONTH = re.compile(r"(\d{4})-(0[1-9]|1[0-2])")


class NoMonthError(ValueError):
    """The text names no month."""


@dataclass(frozen=True)
class ReviewUnit:
    """A characteristic as a whole (`context` empty), a stream or a tool.

    rows : by month (YYYY-MM) the contract's rows, oldest first; study : of the last month, None
    without data.
    """

    characteristic: Characteristic
    context: dict[str, str]
    rows: dict[str, dict[str, Any]]
    study: UnitStudy | None
    stability: Stability


@dataclass(frozen=True)
class MonthReview:
    """A month.

    units : wholes and streams, whole first, in the order of the plan. tools : of characteristics
    whose streams are finer than their tools. excursions : those that lie on the month.
    """

    month: str
    months: tuple[str, ...]
    units: tuple[ReviewUnit, ...]
    tools: tuple[ReviewUnit, ...]
    excursions: tuple[TimedExcursion, ...]
    notes: tuple[str, ...]

    @property
    def rows(self) -> list[dict[str, Any]]:
        """The contract's list."""
        return [unit.rows[self.month] for unit in self.units]


def month_window(month: str, as_of: datetime, zone: Any, count: int = MONTHS) -> Window:
    """The months up to one, each in the bay's zone.

    Raises NoMonthError for text that is no month.
    """
    match = _MONTH.fullmatch(month.strip())
    if match is None or int(match[1]) < 1971 or int(match[1]) > 9998:
        raise NoMonthError(f"--month {month!r} is no month; write it as YYYY-MM, such as 2026-11")
    last = int(match[1]) * 12 + int(match[2]) - 1
    numbers = range(last - count + 1, last + 2)
    starts = tuple(to_us(datetime(n // 12, n % 12 + 1, 1, tzinfo=zone)) for n in numbers)
    names = tuple(f"{n // 12:04d}-{n % 12 + 1:02d}" for n in numbers[:-1])
    return Window(names, starts, to_us(as_of))


def review_month(
    connection: Connection,
    bay: Bay,
    month: str,
    as_of: datetime,
    *,
    gauge_out: bool = False,
    progress: Progress = lambda _what, _done, _total: None,
) -> MonthReview:
    """Capability of every characteristic and stream in a month and the months before it.

    Parameters
    ----------
    month : YYYY-MM, in the bay's zone; a wafer belongs to the month it was processed in, where not
        known measured in.
    as_of : the clock; nothing measured after it is looked at.
    gauge_out : take the gauge's variance (`gauge_sd` of the plan) out of both sigmas.

    Raises
    ------
    NoMonthError
    """
    window = month_window(month, as_of, bay.settings.bay.zone)
    timed = timed_excursions(connection, as_of, window.as_of_us)
    stores = Stores(ContextStore(connection), LayoutStore(connection))
    names = {
        number: one.name
        for one in bay.plan.characteristic
        for number in records.streams_of(connection, one.name, window.as_of_us).values()
    }
    rung = rung_charts(connection, bay, names, window)
    units: list[ReviewUnit] = []
    tools: list[ReviewUnit] = []
    notes: list[str] = []
    plan = bay.plan.characteristic
    # With the gauge's share taken out the figures are others than those that were kept.
    kept = {} if gauge_out else aggregation.studies_of(connection, window.months)
    book = LogBook(connection, window, tuple({p for one in plan for p in one.parameters}))
    for done, one in enumerate(plan):
        progress(one.name, done, len(plan))
        readings = read_months(connection, stores, one, book)
        ask = Ask.of(one, gauge_out)
        room = _Room(connection, one, window, readings, rung, timed, ask, kept)
        units += room.units()
        tools += room.tools()
        notes += readings.notes
        notes += notes_of(one, room.states, kept, bay)
        if gauge_out and not one.gauge_sd:
            notes.append(f"{one.name}: the plan has no gauge_sd, so the gauge is still in it")
    progress("done", len(plan), len(plan))
    span = window.starts_us[-2:]
    on_month = tuple(t for t in timed if t.lies_on((span[0], span[1])))
    return MonthReview(
        window.months[-1],
        window.months,
        tuple(units),
        tuple(tools),
        on_month,
        tuple(dict.fromkeys(notes)),
    )


class _Room:
    """One characteristic under review."""

    def __init__(
        self,
        connection: Connection,
        one: Characteristic,
        window: Window,
        readings: Readings,
        rung: Mapping[StreamMonth, Rung],
        timed: list[TimedExcursion],
        ask: Ask,
        kept: Mapping[StudyKey, KeptStudy],
    ) -> None:
        self._one, self._window, self._readings, self._ask = one, window, readings, ask
        self._kept = kept
        self.states: dict[str, str] = {}  # of months without site values, see `kept_studies`
        known = records.streams_of(connection, one.name, window.as_of_us)
        self._ids = [known.get(key) for key in readings.keys]
        self._rung = rung
        self._timed = [t for t in timed if any(name == one.name for name, _ in t.streams)]

    def units(self) -> list[ReviewUnit]:
        """The whole and every stream, in every month."""
        readings, months = self._readings, len(self._window.months)
        every = list(range(len(readings.keys)))
        labels = readings.stream * months + readings.month
        whole = self._studies(readings, readings.month, lambda m: (WHOLE, m))
        streams = self._studies(
            readings, labels, lambda label: (readings.keys[label // months], label % months)
        )
        out = [self._unit({}, every, whole.get)]
        for s in every:
            found = {m: streams[s * months + m] for m in range(months) if s * months + m in streams}
            context = json.loads(readings.keys[s])
            ordered = {name: context[name] for name in self._one.stream_by if name in context}
            out.append(self._unit(ordered, [s], found.get))
        return out

    def tools(self) -> list[ReviewUnit]:
        """The tools in the last month, where a tool has several streams."""
        if "tool" not in self._one.stream_by or len(self._one.stream_by) < 2:
            return []
        contexts = [json.loads(key) for key in self._readings.keys]
        names = sorted({c["tool"] for c in contexts})
        if len(names) < 2:
            return []
        code = np.array([names.index(c["tool"]) for c in contexts], np.int64)
        last = len(self._window.months) - 1
        now = narrowed(self._readings, self._readings.month == last)
        found = self._studies(now, code[now.stream], lambda i: (tool_key(names[i]), last))
        out = []
        for i, name in enumerate(names):
            mine = np.flatnonzero(code == i).tolist()
            of_month = {last: found[i]} if i in found else {}
            out.append(self._unit({"tool": name}, mine, of_month.get))
        return out

    def _studies(
        self, readings: Readings, labels: IntArray, meaning: Callable[[int], tuple[str, int]]
    ) -> dict[int, tuple[UnitStudy | None, str]]:
        """Study of each label, and where its figures come from.

        `meaning` gives the context (JSON) and the number of the month of a label.
        """
        if not len(labels):
            return {}
        units, behind = units_of(labels)
        counts = wafers_of(readings, labels)
        out = {}
        studies = study_units(readings, units, self._ask)
        for label, study in zip(behind.tolist(), studies, strict=True):
            context, m = meaning(label)
            key = (self._one.name, context, self._window.months[m])
            out[label] = chosen(self._kept, key, self._one, counts[label], study)
            state = out[label][1]
            if state == SUMS or (state != READ and context == WHOLE):
                # Of one month: that some figures are from sums is said before all else.
                self.states[key[2]] = SUMS if SUMS in (state, self.states.get(key[2])) else state
        return out

    def _unit(
        self,
        context: dict[str, str],
        streams: list[int],
        of_month: Callable[[int], tuple[UnitStudy | None, str] | None],
    ) -> ReviewUnit:
        rows: dict[str, dict[str, Any]] = {}
        study, verdict = None, Stability(None)
        for m, month in enumerate(self._window.months):
            study, source = of_month(m) or (None, READ)
            verdict = self._stability(streams, m, bool(context), study is not None)
            row = _row(self._one, context, month, study, verdict)
            rows[month] = row | {"site_values": source}
        return ReviewUnit(self._one, context, rows, study, verdict)

    def _stability(self, streams: list[int], m: int, narrow: bool, known: bool) -> Stability:
        span = (self._window.starts_us[m], self._window.starts_us[m + 1])
        keys = {(self._one.name, self._readings.keys[s]) for s in streams}
        touching = [t for t in self._timed if t.lies_on(span) and (not narrow or keys & t.streams)]
        numbers = [self._ids[s] for s in streams]
        rung = [self._rung[n, m] for n in numbers if n is not None and (n, m) in self._rung]
        return stability(rung, touching, known)


def narrowed(readings: Readings, wanted: NDArray[np.bool_]) -> Readings:
    """The same with some of the wafers only."""
    number = np.cumsum(wanted) - 1
    sites = wanted[readings.wafer]
    by_wafer = ("stream", "month", "lot", "lot_wafer", "bare_n", "bare_mean", "bare_squares")
    return replace(
        readings,
        **{name: getattr(readings, name)[wanted] for name in by_wafer},
        wafer=number[readings.wafer[sites]],
        site=readings.site[sites],
        value=readings.value[sites],
    )


def _row(
    one: Characteristic,
    context: dict[str, str],
    month: str,
    study: UnitStudy | None,
    verdict: Stability,
) -> dict[str, Any]:
    """One row of the contract, with extras behind."""
    numbers = empty_row() if study is None else study.row
    words = "no estimate" if study is None else study.ppk_verdict
    return {
        "characteristic": one.name,
        "context": context,
        "month": month,
        "unit": one.unit,
        **numbers,
        "stable": verdict.stable,
        "verdict": with_stability(words, verdict.stable),
        "excursions": list(verdict.excursions),
        "signal_events": verdict.rung.events,
        "signal_events_expected": verdict.rung.expected,
        "signalled_lots": verdict.rung.signalled,
        "signals_expected": verdict.rung.expected_signals,
        "monitored_points": verdict.rung.points,
        "target": one.target,
        "lower_spec": one.lower_spec,
        "upper_spec": one.upper_spec,
    }

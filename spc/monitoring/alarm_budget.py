"""Expected false alarms of a bay: what its rules would ring if nothing ever went wrong.

Counts are of points, as `nightly` counts them: a *false signal* is a point of one chart (stream
and statistic) that completes a rule while the process is in control; a *false excursion* here is
the first point of a row of such signals on one chart. Each rule is also counted by itself: a point
may complete several rules, so those add up to more than the total.

`spc.monitoring.chart_rates` says how each kind of chart is reckoned. A chart whose autocorrelation
is not sure by itself takes the mean one of all baselines of its characteristic and statistic, where
at least MEAN_PHI_CHARTS of them set it apart from zero; else none.
"""

from __future__ import annotations

import json
import math
from collections import defaultdict
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from sqlalchemy import Connection, func, select

from config.control_plan import Characteristic
from config.load import Bay
from spc.monitoring.chart_rates import Chart, Rates, chart_rates
from spc.monitoring.limit_sets import kind_of
from spc.records import limits
from spc.records.tables import points, streams
from spc.stats.false_signals import DesignChoice, least_delay_designs
from spc.stats.rules import parse_rules

DAY_US = 86_400_000_000
HISTORY_DAYS = 14.0
SHIFT = 1.0  # sigmas of the plotted point that the designs are to see
MEAN_PHI_CHARTS = 5
_MEAN_PHI_SIGMAS = 2.33  # each bound by itself is then a 99 % one
_RATE_RANGE = (1e-9, 0.05)  # what `least_delay_designs` takes

ChartKey = tuple[int, str]  # id of the set of limits, statistic


# ---- charts of a bay ----------------------------------------------------------------------------


def expected_tonight(
    connection: Connection, bay: Bay, as_of_us: int, points_since_us: int | None
) -> float:
    """Expected false signals among the monitoring points of a pass.

    Parameters
    ----------
    points_since_us : clock of the pass before (us); points measured after it, up to `as_of_us`,
        are counted. None on the first pass: all of them.
    """
    query = _counted(as_of_us).where(points.c.phase == "monitoring", points.c.z.is_not(None))
    if points_since_us is not None:
        query = query.where(points.c.measured_us > points_since_us)
    counts = {
        (int(row.baseline_id), row.statistic, row.characteristic): row.n
        for row in connection.execute(query)
        if row.baseline_id is not None and bay.plan.named(row.characteristic) is not None
    }
    charts = _charts(connection, bay, {key[:2]: key[2] for key in counts})
    return math.fsum(n * chart_rates(charts[key[:2]]).signals for key, n in counts.items())


def _counted(until_us: int, *columns: Any) -> Any:
    """Points by set of limits, statistic and characteristic (and more columns), with `n`."""
    keys = (points.c.baseline_id, points.c.statistic, streams.c.characteristic, *columns)
    return (
        select(*keys, func.count().label("n"))
        .join(streams, streams.c.id == points.c.stream_id)
        .where(points.c.measured_us <= until_us)
        .group_by(*keys)
    )


def _charts(
    connection: Connection, bay: Bay, wanted: Mapping[ChartKey, str]
) -> dict[ChartKey, Chart]:
    """The chart of each set of limits and statistic (with the name of its characteristic)."""
    rows = {row.id: row for row in limits.by_ids(connection, {key[0] for key in wanted})}
    entries: dict[ChartKey, Mapping[str, Any]] = {}
    for number, row in rows.items():
        for statistic, entry in json.loads(row.payload)["statistics"].items():
            if (number, statistic) in wanted:
                entries[number, statistic] = entry
    pooled = _mean_phi(entries, wanted)
    out = {}
    for key, name in wanted.items():
        one = bay.plan.named(name)
        assert one is not None  # the caller asks for characteristics of the plan
        entry = entries.get(key, {})
        sure = bool(entry.get("correlated"))
        phi = float(entry["phi"]) if sure else pooled.get((name, key[1]), 0.0)
        n = _points_behind(one, key[1], entry, rows[key[0]].n_points)
        out[key] = Chart(parse_rules(one.rules), kind_of(key[1]), n, _step(phi), sure)
    return out


def _mean_phi(
    entries: Mapping[ChartKey, Mapping[str, Any]], wanted: Mapping[ChartKey, str]
) -> dict[tuple[str, str], float]:
    """Mean autocorrelation by characteristic and statistic, where it is surely not zero."""
    found: dict[tuple[str, str], list[float]] = defaultdict(list)
    for key, entry in entries.items():
        if entry.get("phi") is not None:
            found[wanted[key], key[1]].append(float(entry["phi"]))
    out = {}
    for name, values in found.items():
        if len(values) >= MEAN_PHI_CHARTS:
            error = float(np.std(values, ddof=1)) / math.sqrt(len(values))
            mean = float(np.mean(values))
            if abs(mean) > _MEAN_PHI_SIGMAS * error:
                out[name] = mean
    return out


def _points_behind(
    one: Characteristic, statistic: str, entry: Mapping[str, Any], n_points: int
) -> int:
    """Independent points that know the centre as well as the baseline does, at least 3.

    Wafer points share their lots: theirs is sigma^2 over the squared standard error of the centre.
    """
    n = int(entry.get("n") or n_points)
    own = entry.get("components")
    if one.point == "wafer" and kind_of(statistic) == "mean" and own and own["mean_se"]:
        sites = max(own["n_sites"] / max(own["n_wafers"], 1), 1.0)
        variance = own["lot"] + own["wafer"] + own["site"] / sites
        n = min(n, round(variance / own["mean_se"] ** 2))
    return max(n, 3)


def _step(phi: float) -> float:
    """Autocorrelation in steps of 0.1, so that few rates serve many charts."""
    return float(np.clip(round(phi, 1), -0.9, 0.9)) + 0.0


# ---- the budget ---------------------------------------------------------------------------------


@dataclass(frozen=True)
class ChartPace:
    """Points a night of one stream and statistic, and what they ring falsely."""

    characteristic: str
    context: dict[str, str]
    statistic: str
    points_per_night: float
    chart: Chart
    expected: Rates  # a night


@dataclass(frozen=True)
class CharacteristicBudget:
    """Points, false signals and events of one characteristic, a night.

    `per_100_points` are those of 100 points of its means, as the control plan alone tells: limits
    from `baseline_points`, independent points.
    """

    name: str
    n_streams: int
    points_per_night: float | None
    expected: Rates | None
    per_100_points: Rates


@dataclass(frozen=True)
class AlarmBudget:
    """The alarm budget of a bay.

    Attributes
    ----------
    nights : nights that the pace is the mean of; 0 where there is no history (then `total`,
        `points_per_night` and the paces are None or empty).
    until_us : end of those nights.
    total : false signals and events a night, all charts.
    points_per_night : points of charts with limits.
    points_without_limits : a night, of streams whose baseline is not complete; not in the total.
    budget : false excursions a night that the settings allow.
    effects_allowed : false `act` excursions a night that triage allows the causes it names.
    false_rate_per_point : budget over points, as the designs were asked to keep.
    designs : that keep it, soonest at `shift` sigmas first; limits known, points independent.
    """

    nights: float
    until_us: int | None
    total: Rates | None
    points_per_night: float | None
    points_without_limits: float
    characteristics: tuple[CharacteristicBudget, ...]
    charts: tuple[ChartPace, ...]
    budget: float
    effects_allowed: float
    false_rate_per_point: float | None
    shift: float
    designs: tuple[DesignChoice, ...]


def budget(
    connection: Connection | None, bay: Bay, as_of_us: int | None, shift: float = SHIFT
) -> AlarmBudget:
    """The alarm budget at a clock, from the pace of the last HISTORY_DAYS days with points.

    Parameters
    ----------
    connection : None where there is no database yet: the plan alone is reckoned with.
    as_of_us : the clock (us); None for no history.
    shift : shift of the mean to be seen, in sigmas of the plotted point.
    """
    from spc.monitoring.book import EFFECT_SHARE

    known = connection is not None and as_of_us is not None
    nights, until = _window(connection, as_of_us) if known else (0.0, None)  # type: ignore[arg-type]
    charts: tuple[ChartPace, ...] = ()
    bare = 0.0
    if until is not None:
        assert connection is not None
        charts, bare = _paces(connection, bay, nights, until)
    total = _sum(c.expected for c in charts) if charts else None
    pace = math.fsum(c.points_per_night for c in charts) if charts else None
    allowed = bay.settings.nightly.false_excursions_per_night
    rate = None if not pace else float(np.clip(allowed / pace, *_RATE_RANGE))
    return AlarmBudget(
        nights=nights,
        until_us=until,
        total=total,
        points_per_night=pace,
        points_without_limits=bare,
        characteristics=tuple(_of_characteristic(one, charts) for one in bay.plan.characteristic),
        charts=charts,
        budget=allowed,
        effects_allowed=min(1.0, EFFECT_SHARE * allowed),
        false_rate_per_point=rate,
        shift=shift,
        designs=() if rate is None else least_delay_designs(rate, shift),
    )


def _window(connection: Connection, as_of_us: int) -> tuple[float, int | None]:
    """Nights (at least 1) of the pace and their end: the clock, or a day after the last point."""
    at = points.c.measured_us
    span = select(func.min(at), func.max(at)).where(at <= as_of_us)
    first, last = connection.execute(span).one()
    if first is None:
        return 0.0, None
    until = min(as_of_us, last + DAY_US)
    return min(max((until - first) / DAY_US, 1.0), HISTORY_DAYS), int(until)


def _paces(
    connection: Connection, bay: Bay, nights: float, until_us: int
) -> tuple[tuple[ChartPace, ...], float]:
    """Pace of every chart, baseline points too, and points a night of streams without limits."""
    query = _counted(until_us, points.c.stream_id, streams.c.context).where(
        points.c.measured_us > until_us - round(nights * DAY_US) - 1
    )
    counts: dict[tuple[int, str], int] = defaultdict(int)
    newest: dict[tuple[int, str], int] = {}
    about: dict[int, tuple[str, str]] = {}
    bare = 0
    for row in connection.execute(query):
        if bay.plan.named(row.characteristic) is None:
            continue
        if row.baseline_id is None:
            bare += row.n
            continue
        key = (row.stream_id, row.statistic)
        counts[key] += row.n
        newest[key] = max(newest.get(key, 0), row.baseline_id)
        about[row.stream_id] = (row.characteristic, row.context)
    wanted = {(number, key[1]): about[key[0]][0] for key, number in newest.items()}
    charts = _charts(connection, bay, wanted)
    paces = []
    for (stream, statistic), n in sorted(counts.items()):
        name, context = about[stream]
        chart = charts[newest[stream, statistic], statistic]
        expected = chart_rates(chart).times(n / nights)
        paces.append(ChartPace(name, json.loads(context), statistic, n / nights, chart, expected))
    return tuple(paces), bare / nights


def _of_characteristic(one: Characteristic, charts: tuple[ChartPace, ...]) -> CharacteristicBudget:
    mine = [c for c in charts if c.characteristic == one.name]
    hundred = chart_rates(Chart(parse_rules(one.rules), n=one.baseline_points)).times(100.0)
    return CharacteristicBudget(
        one.name,
        len({json.dumps(c.context, sort_keys=True) for c in mine}),
        math.fsum(c.points_per_night for c in mine) if charts else None,
        _sum(c.expected for c in mine) if charts else None,
        hundred,
    )


def _sum(parts: Iterable[Rates]) -> Rates:
    total = Rates()
    for part in parts:
        total = total.plus(part)
    return total

"""The alarm budget against closed forms, published run lengths and simulated charts."""

from __future__ import annotations

import json
import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.stats import chi2, norm
from scipy.stats import t as student
from sqlalchemy import Engine

from config.load import Bay
from spc.monitoring.alarm_budget import DAY_US, budget, expected_tonight
from spc.monitoring.chart_rates import Chart, chart_rates
from spc.monitoring.serial import CONFIDENCE
from spc.records.sessions import reading
from spc.records.tables import baselines, passes, points, streams
from spc.stats.autocorrelation import ar1_baseline, lag1, residual_chart
from spc.stats.rules import WESTERN_ELECTRIC, evaluate, first_of_run
from spc.stats.run_length import run_length
from tests.monitoring.bench import bay_with

PLAIN = WESTERN_ELECTRIC[:1]
THICKNESS = {"name": "thickness", "parameter": "resist_thickness", "unit": "nm"}
NOW = 1_780_000_000_000_000


@dataclass(frozen=True)
class Line:
    """Points of one chart: how many nights before NOW each was measured."""

    tool: str
    nights_ago: Sequence[float]
    characteristic: str = "thickness"
    statistic: str = "mean"
    phase: str = "monitoring"
    z: float | None = 0.0
    n: int = 30
    entry: dict[str, Any] = field(default_factory=dict)
    limits: bool = True


def store(engine: Engine, lines: Sequence[Line], now: int = NOW) -> None:
    """Streams, limits and points straight into the records, and a finished pass."""
    with engine.begin() as connection:
        for line in lines:
            stream = connection.execute(
                streams.insert().values(
                    characteristic=line.characteristic, context=json.dumps({"tool": line.tool})
                )
            ).inserted_primary_key[0]
            number = None
            if line.limits:
                kept = {"statistics": {line.statistic: {"n": line.n, **line.entry}}}
                row = {"stream_id": stream, "status": "automatic", "payload": json.dumps(kept)}
                row |= {"from_us": 0, "first_us": 0, "last_us": 0, "n_points": line.n}
                row |= {"made_us": 0, "made_by": "yellowbay", "reason": "test"}
                number = connection.execute(baselines.insert().values(**row)).inserted_primary_key[
                    0
                ]
            rows = [
                {
                    "stream_id": stream,
                    "statistic": line.statistic,
                    "lot": f"L{i}",
                    "layer": "",
                    "wafer": "",
                    "at_us": now - round(ago * DAY_US),
                    "measured_us": now - round(ago * DAY_US),
                    "value": 0.0,
                    "n_wafers": 1,
                    "n_sites": 1,
                    "effective_sites": 1.0,
                    "df": 1.0,
                    "baseline_id": number,
                    "phase": line.phase,
                    "z": line.z,
                }
                for i, ago in enumerate(line.nights_ago)
            ]
            connection.execute(points.insert(), rows)
        connection.execute(passes.insert().values(as_of_us=now, finished=1))


def tonight(engine: Engine, bay: Bay, since: int | None = NOW - DAY_US, now: int = NOW) -> float:
    with reading(engine) as connection:
        return expected_tonight(connection, bay, now, since)


class TestChartRates:
    def test_known_limits(self) -> None:
        """Rule 1: Champ & Woodall 1987 give a run length of 370.40; the set: 1.646 per 100."""
        one = chart_rates(Chart(PLAIN))
        assert one.signals == pytest.approx(1 / 370.40, rel=2e-5)
        assert one.signals == one.known == one.independent
        found = chart_rates(Chart(WESTERN_ELECTRIC))
        assert found.signals == pytest.approx(0.01646, abs=5e-6)
        # Fresh starts after a signal, as in the published 91.75, signal less often than a chart
        # that goes on and more often than its rows of signals begin.
        assert 1 / 91.75 < found.events < found.signals

    def test_thirty_points(self) -> None:
        """Student's t with 29 df over sqrt(1 + 1/30) for rule 1."""
        one = chart_rates(Chart(PLAIN, n=30))
        assert one.signals == pytest.approx(2 * student.sf(3 / math.sqrt(1 + 1 / 30), 29), rel=1e-7)
        found = chart_rates(Chart(WESTERN_ELECTRIC, n=30))
        assert found.signals == pytest.approx(0.03080, abs=5e-6)
        assert found.known == pytest.approx(0.01646, abs=5e-6)

    def test_simulated_baselines_of_thirty(self) -> None:
        """N(0, 1) charts, limits from 30 points, counted through the evaluator."""
        rng = np.random.default_rng(2026)
        past, new = rng.standard_normal((6000, 30)), rng.standard_normal((6000, 68))
        z = (new - past.mean(axis=1, keepdims=True)) / past.std(axis=1, ddof=1, keepdims=True)
        compare(Chart(WESTERN_ELECTRIC, n=30), evaluate(z, WESTERN_ELECTRIC).hits)

    def test_simulated_spreads(self) -> None:
        """Sds of 24 df against a sigma pooled from 28 of them, scored as the limits score them."""
        rng = np.random.default_rng(5)
        charts, df, n = 6000, 24, 28
        sigma2 = rng.chisquare(df * n, (charts, 1)) / (df * n)
        square = rng.chisquare(df, (charts, 68)) / sigma2
        z = norm.isf(chi2.sf(square, df))
        hits = evaluate(z, WESTERN_ELECTRIC).hits
        compare(Chart(WESTERN_ELECTRIC, "spread", n), hits, slack=0.03)

    def test_simulated_residual_charts(self) -> None:
        """AR(1) charts, limits and phi from 60 points: rule 1 on the points, the others
        on residuals. Only the totals are promised."""
        rng = np.random.default_rng(6)
        charts, n, phi = 3000, 60, 0.5
        noise = rng.standard_normal((charts, n + 100))
        noise[:, 1:] *= math.sqrt(1 - phi**2)
        for i in range(1, noise.shape[1]):
            noise[:, i] += phi * noise[:, i - 1]
        found = lag1(
            noise[:, :n].ravel(), stream=np.repeat(np.arange(charts), n), confidence=CONFIDENCE
        )
        sure, lean = found.low > 0, found.phi[found.low > 0]
        past, new = noise[sure, :n], noise[sure, n:]
        bias = ar1_baseline(lean, np.full(lean.size, n)).variance_bias
        sd = past.std(axis=1, ddof=1, keepdims=True) / np.sqrt(bias)[:, None]
        z = (new - past.mean(axis=1, keepdims=True)) / sd
        stream, wide = np.repeat(np.arange(lean.size), 100), np.repeat(lean, 100)
        free = residual_chart(z.ravel(), 0.0, wide, stream=stream).z.reshape(z.shape)
        hits = evaluate(free, WESTERN_ELECTRIC).hits
        hits[0] = evaluate(z, PLAIN).hits[0]
        seen, rates = hits.any(axis=0), chart_rates(Chart(WESTERN_ELECTRIC, "mean", n, 0.5, True))
        assert seen[:, 8:].mean() == pytest.approx(rates.signals, rel=0.1)
        assert first_of_run(seen)[:, 8:].mean() == pytest.approx(rates.events, rel=0.1)

    def test_distances_count_upwards_alone(self) -> None:
        found = chart_rates(Chart(WESTERN_ELECTRIC, "distance", 30))
        by_rule = {name: signals for name, signals, _ in found.by_rule}
        assert by_rule["beyond-3s"] == pytest.approx(norm.sf(3), rel=1e-9)
        assert by_rule["8-one-side"] == pytest.approx(2**-8, rel=1e-9)
        assert found.signals == pytest.approx(chart_rates(Chart(WESTERN_ELECTRIC)).signals / 2)

    def test_no_rule_no_signal(self) -> None:
        assert chart_rates(Chart(())).signals == 0.0


def compare(chart: Chart, hits: NDArray[np.bool_], slack: float = 0.0) -> None:
    """Counted signals and events of charts (rules, charts, points) against the reckoned ones."""
    found, lead = chart_rates(chart), 8
    any_rule = hits.any(axis=0)
    pairs = [(any_rule, found.signals), (first_of_run(any_rule), found.events)]
    for i, (_, signals, events) in enumerate(found.by_rule):
        pairs += [(hits[i], signals), (first_of_run(hits[i]), events)]
    for seen, rate in pairs:
        part = seen[:, lead:].mean(axis=1)
        error = part.std(ddof=1) / math.sqrt(len(part))
        assert abs(part.mean() - rate) < 4 * error + slack * rate


class TestTonight:
    def test_ten_streams_of_two_points(self, engine: Engine) -> None:
        """20 points by hand: 0.0062087 each with rule 1 and 30 baseline points, 1/370.40 without
        the error of the limits; 20 times 0.0308 with all four rules."""
        store(engine, [Line(f"T{i}", [0.2, 0.7]) for i in range(10)])
        one = bay_with({**THICKNESS, "rules": ["beyond-3s"]})
        assert tonight(engine, one) == pytest.approx(20 * 0.0062087, rel=1e-4)
        assert tonight(engine, bay_with(THICKNESS)) == pytest.approx(20 * 0.03080, rel=2e-4)
        with reading(engine) as connection:
            total = budget(connection, one, NOW).total
        assert total is not None
        assert total.known == pytest.approx(20 / 370.40, rel=1e-4)

    def test_only_points_of_this_pass(self, engine: Engine) -> None:
        store(
            engine,
            [
                Line("in", [0.0, 0.999]),
                Line("before", [1.0, 5.0]),
                Line("after", [-0.1]),
                Line("baseline", [0.5], phase="baseline"),
                Line("no score", [0.5], z=None),
                Line("no plan", [0.5], characteristic="gone"),
                Line("no limits", [0.5], limits=False, z=None),
            ],
        )
        bay = bay_with({**THICKNESS, "rules": ["beyond-3s"]})
        assert tonight(engine, bay) == pytest.approx(2 * 0.0062087, rel=1e-4)
        assert tonight(engine, bay, since=None) == pytest.approx(4 * 0.0062087, rel=1e-4)
        assert tonight(engine, bay, since=NOW + DAY_US, now=NOW + 2 * DAY_US) == 0.0

    def test_each_baseline_has_its_own_error(self, engine: Engine) -> None:
        store(engine, [Line("short", [0.5], n=10), Line("long", [0.5, 0.6], n=100)])
        bay = bay_with({**THICKNESS, "rules": ["beyond-3s"]})
        by_hand = sum(
            count * 2 * student.sf(3 / math.sqrt(1 + 1 / n), n - 1)
            for count, n in ((1, 10), (2, 100))
        )
        assert tonight(engine, bay) == pytest.approx(by_hand, rel=1e-6)

    def test_wafers_of_one_lot_know_less_than_their_number(self, engine: Engine) -> None:
        """Lot and wafer variance 1 each, standard error of the centre 0.4: 2 / 0.16 = 12.5."""
        own = {"lot": 1.0, "wafer": 1.0, "site": 0.0, "mean_se": 0.4, "n_sites": 30}
        entry = {"components": {**own, "n_wafers": 30, "n_lots": 10}}
        store(engine, [Line("A", [0.5], entry=entry)])
        bay = bay_with({**THICKNESS, "rules": ["beyond-3s"], "point": "wafer"})
        expected = chart_rates(Chart(PLAIN, n=12)).signals
        assert tonight(engine, bay) == pytest.approx(expected)

    def test_sure_and_shared_autocorrelation(self, engine: Engine) -> None:
        """Run rules of a surely correlated chart see residuals; what five unsure charts agree on
        is reckoned with as it is."""
        sure = {"phi": 0.62, "correlated": True}
        store(engine, [Line("S", [0.5], entry=sure, statistic="within-wafer")])
        store(
            engine,
            [Line(f"U{i}", [0.5], entry={"phi": 0.2 + 0.01 * i}) for i in range(5)],
            now=NOW + 1,
        )
        bay = bay_with(THICKNESS)
        alone = chart_rates(Chart(WESTERN_ELECTRIC, "spread", 30, 0.6, True)).signals
        shared = chart_rates(Chart(WESTERN_ELECTRIC, "mean", 30, 0.2)).signals
        assert tonight(engine, bay, now=NOW + 1) == pytest.approx(alone + 5 * shared)
        assert shared > 1.3 * chart_rates(Chart(WESTERN_ELECTRIC, n=30)).signals

    def test_scattered_estimates_are_no_autocorrelation(self, engine: Engine) -> None:
        phis = (-0.3, 0.3, -0.1, 0.2, 0.0)
        store(engine, [Line(f"U{p}", [0.5], entry={"phi": p}) for p in phis])
        expected = 5 * chart_rates(Chart(WESTERN_ELECTRIC, n=30)).signals
        assert tonight(engine, bay_with(THICKNESS)) == pytest.approx(expected)


class TestBudget:
    def test_pace_and_parts(self, engine: Engine) -> None:
        """28 points in the last 14 nights are 2 a night, whatever came before."""
        recent = [i / 2 + 0.25 for i in range(28)]
        store(
            engine,
            [
                Line("A", [*recent, 20.0, 30.0]),
                Line("B", recent, phase="baseline"),
                Line("C", [0.5] * 14, limits=False, z=None),
                Line("D", recent, characteristic="cd", statistic="within-wafer"),
            ],
        )
        cd = {"name": "cd", "parameter": "cd", "unit": "nm", "rules": ["beyond-3s"]}
        with reading(engine) as connection:
            found = budget(connection, bay_with(THICKNESS, cd), NOW)
        assert found.nights == pytest.approx(14.0)
        assert found.points_per_night == pytest.approx(6.0)
        assert found.points_without_limits == pytest.approx(1.0)
        assert found.total is not None
        first, second = found.characteristics
        assert first.points_per_night == pytest.approx(4.0)
        assert first.n_streams == 2
        assert first.expected is not None
        assert first.expected.signals == pytest.approx(4 * 0.03080, rel=2e-4)
        assert second.expected is not None
        assert found.total.signals == pytest.approx(
            first.expected.signals + second.expected.signals
        )
        rules = {name: signals for name, signals, _ in found.total.by_rule}
        assert list(rules) == [rule.name for rule in WESTERN_ELECTRIC]
        assert rules["beyond-3s"] == pytest.approx(
            4 * 0.0062087 + second.expected.signals, rel=1e-4
        )
        assert sum(rules.values()) > found.total.signals > max(rules.values())
        assert found.total.events < found.total.signals

    def test_designs_keep_the_budget(self, engine: Engine) -> None:
        """0.5 a night of 5 points is 0.1 a point; a chart never gets more than 0.05."""
        store(engine, [Line("A", [i / 5 + 0.1 for i in range(75)])])
        with reading(engine) as connection:
            found = budget(connection, bay_with(THICKNESS), NOW)
        assert found.points_per_night == pytest.approx(5.0)
        assert found.budget == 0.5
        assert found.effects_allowed == 0.5
        assert found.false_rate_per_point == pytest.approx(0.05)
        arls = [choice.arl for choice in found.designs]
        assert arls == sorted(arls)
        for choice in found.designs[:3]:
            assert choice.arl0 >= 20.0
            assert run_length(choice.design, 1.0).arl == pytest.approx(choice.arl)

    def test_idle_bay_is_reckoned_on_its_last_days(self, engine: Engine) -> None:
        store(engine, [Line("A", [100.0 + i for i in range(14)])])
        with reading(engine) as connection:
            found = budget(connection, bay_with(THICKNESS), NOW)
        assert found.until_us == NOW - 99 * DAY_US
        assert found.points_per_night == pytest.approx(1.0)

    def test_without_history(self, engine: Engine) -> None:
        bay = bay_with({**THICKNESS, "baseline_points": 15})
        with reading(engine) as connection:
            empty = budget(connection, bay, NOW)
        for found in (empty, budget(None, bay, None)):
            assert found.total is None
            assert found.points_per_night is None
            assert found.designs == ()
            [one] = found.characteristics
            assert one.expected is None
            expected = 100 * chart_rates(Chart(WESTERN_ELECTRIC, n=15)).signals
            assert one.per_100_points.signals == pytest.approx(expected)

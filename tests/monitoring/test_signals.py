"""Rule hits of points; series and silence."""

from __future__ import annotations

import csv
import io
from datetime import timedelta
from typing import Any

import numpy as np
import pytest
from sqlalchemy import Engine

from spc.monitoring.evaluation import evaluate
from spc.monitoring.series import FIELDS, UnknownCharacteristicError, points_csv, points_json
from spc.monitoring.signals import first_signals, longest_window, rule_hits
from spc.monitoring.silence import silent_streams
from spc.records.columns import Columns, text
from spc.records.plotted import out_of_spec_lots
from spc.records.sessions import reading
from spc.records.stamps import to_us
from spc.stats.rules import WESTERN_ELECTRIC
from tests.monitoring.bench import Wafer, add, bay_with, hours, lots_of

RULES = tuple(rule.name for rule in WESTERN_ELECTRIC)


def series(z: list[float], *, sets: list[int] | None = None, statistic: str = "mean") -> Columns:
    n = len(z)
    return Columns(
        {
            "stream_id": np.ones(n, np.int64),
            "statistic": text(statistic, n),
            "at_us": np.arange(n),
            "lot": np.array([f"L{i}" for i in range(n)], object),
            "layer": text("", n),
            "wafer": text("", n),
            "z": np.array(z, float),
            "baseline_id": np.array(sets or [1] * n, float),
            "phase": text("monitoring", n),
        }
    )


def test_the_four_rules_and_their_first_points() -> None:
    """Western Electric, Statistical Quality Control Handbook (1956): the tests for instability."""
    frame = series([0.0, 3.1, -2.1, 0.3, -2.2, *[0.5] * 9])
    hits = rule_hits(frame, RULES, {})
    assert hits[1] == "beyond-3s"
    assert hits[4] == "2of3-beyond-2s"
    assert list(hits[5:12]) == [""] * 7
    assert list(hits[12:]) == ["8-one-side"] * 2
    first = first_signals(frame.having(rules=hits))
    assert np.flatnonzero(first).tolist() == [1, 4, 12]


def test_no_window_reaches_across_a_change_of_limits() -> None:
    hits = rule_hits(series([1.2] * 5 + [1.2] * 5, sets=[1] * 3 + [2] * 7), RULES, {})
    assert np.flatnonzero(hits != "").tolist() == [6, 7, 8, 9]


def test_baseline_points_complete_no_rule_but_lend_their_place() -> None:
    frame = series([0.4] * 9)
    phases = np.array(["baseline"] * 7 + ["monitoring"] * 2, object)
    hits = rule_hits(frame.having(phase=phases), RULES, {})
    assert list(hits) == [""] * 7 + ["8-one-side"] * 2


def test_runs_of_correlated_points_are_judged_on_residuals() -> None:
    """An AR(1) series in control, phi 0.7: far fewer run signals, the single points as before."""
    rng = np.random.default_rng(4)
    z = np.zeros(4000)
    for i in range(1, z.size):
        z[i] = 0.7 * z[i - 1] + (1 - 0.49) ** 0.5 * rng.standard_normal()
    plain = rule_hits(series(list(z)), RULES, {})
    known = rule_hits(series(list(z)), RULES, {(1, "mean"): 0.7})
    beyond = np.abs(z) > 3
    assert [("beyond-3s" in h) for h in known] == beyond.tolist()
    assert np.mean(plain != "") > 0.08
    # In control the four rules signal at 1 / 91.75 points (Champ & Woodall 1987) and a little
    # more often where later points of a run are counted as well.
    assert np.mean(known != "") == pytest.approx(1 / 91.75 * 1.6, rel=0.4)


def test_a_small_map_distance_means_nothing() -> None:
    hits = rule_hits(series([-3.5] * 9, statistic="map-distance"), RULES, {})
    assert not (hits != "").any()
    hits = rule_hits(series([3.5] * 2, statistic="map-distance"), RULES, {})
    assert "beyond-3s" in hits[0]


def test_the_longest_window() -> None:
    assert longest_window(RULES) == 8
    assert longest_window(("beyond-3s",)) == 1


PLAN: dict[str, Any] = {
    "name": "M1 thickness",
    "parameter": "resist_thickness",
    "unit": "um",
    "stream_by": ("tool", "module"),
    "expected_every": timedelta(hours=36),
    "lower_spec": 1.19,
    "upper_spec": 1.21,
}


def test_points_are_listed_as_the_contract_says(engine: Engine) -> None:
    add(engine, lots_of(np.random.default_rng(1), 6))
    bay = bay_with(PLAN)
    evaluate(engine, bay, hours(1000))
    with reading(engine) as connection:
        points = points_json(connection, bay, "M1 thickness")
        with pytest.raises(UnknownCharacteristicError, match="one of: M1 thickness"):
            points_json(connection, bay, "M2 thickness")
    assert set(points[0]) == set(FIELDS)
    first = points[0]
    assert first["context"] == {"module": "C1", "tool": "TRK1"}
    assert first["at"] == "2026-03-02T06:06:00+00:00"
    assert first["measured_at"] == "2026-03-02T08:12:00+00:00"
    assert first["value"] == pytest.approx(1.2, abs=0.02)
    assert (first["wafer"], first["rules"], first["z"]) == (None, [], None)
    rows = list(csv.DictReader(io.StringIO(points_csv(points))))
    assert len(rows) == len(points)
    assert rows[0]["tool"] == "TRK1"
    assert float(rows[0]["value"]) == first["value"]


def test_summer_time_shows_in_the_offset(engine: Engine) -> None:
    add(engine, lots_of(np.random.default_rng(1), 1, first=400))
    bay = bay_with(PLAN)
    evaluate(engine, bay, hours(10000))
    with reading(engine) as connection:
        assert points_json(connection, bay, "M1 thickness")[0]["at"].endswith("+01:00")


def test_silent_streams_say_since_when(engine: Engine) -> None:
    rng = np.random.default_rng(2)
    add(engine, lots_of(rng, 20) + lots_of(rng, 5, module="C2"))
    bay = bay_with(PLAN)
    evaluate(engine, bay, hours(79))
    with reading(engine) as connection:
        found = silent_streams(connection, bay, hours(79))
    (silent,) = found
    assert silent.context == {"module": "C2", "tool": "TRK1"}
    assert silent.last_measured == hours(4 * 4 + 2 + 0.2)
    assert silent.silent_since_us == to_us(hours(4 * 4 + 2 + 0.2 + 36))
    assert silent.columns["gauge"] == "FILM1"


def test_lots_out_of_specification_are_counted(engine: Engine) -> None:
    wafers = lots_of(np.random.default_rng(3), 4)
    bad = wafers[7]
    wafers[7] = Wafer(**{**bad.__dict__, "values": {**bad.values, "east": 1260.0, "west": 1100.0}})
    add(engine, wafers)
    bay = bay_with({**PLAN, "lower_spec": 1.15, "upper_spec": 1.25})
    evaluate(engine, bay, hours(100))
    with reading(engine) as connection:
        (row,) = out_of_spec_lots(connection, "M1 thickness", to_us(hours(0)), to_us(hours(99)))
        assert (row.lot, row.out_of_spec_wafers, row.out_of_spec_sites) == (bad.lot, 1, 2)
        assert (row.wafers, row.sites) == (3, 21)
        assert not out_of_spec_lots(connection, "M1 thickness", to_us(hours(90)), to_us(hours(99)))

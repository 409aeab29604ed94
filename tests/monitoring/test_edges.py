"""Thin data: one site, one wafer, no spread, no log, sums alone."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from sqlalchemy import Engine, text

from spc.monitoring.evaluation import evaluate
from spc.monitoring.series import points_json
from spc.records.sessions import reading
from tests.monitoring.bench import Step, add, bay_with, hours, lots_of

PLAN: dict[str, Any] = {
    "name": "t",
    "parameter": "resist_thickness",
    "unit": "nm",
    "stream_by": ("tool", "module"),
}


def listed(engine: Engine, plan: dict[str, Any], clock: float = 1000.0) -> list[dict[str, Any]]:
    bay = bay_with(plan)
    evaluate(engine, bay, hours(clock))
    with reading(engine) as connection:
        return points_json(connection, bay, "t")


def test_one_site_a_wafer_and_one_wafer_a_lot_chart_the_mean_alone(engine: Engine) -> None:
    add(engine, lots_of(np.random.default_rng(1), 40, wafers=1, sites=("centre",)))
    points = listed(engine, PLAN)
    assert {p["statistic"] for p in points} == {"mean"}
    values = [p["value"] for p in points[:30]]
    assert points[35]["center"] == pytest.approx(np.mean(values), rel=1e-9)
    # Lot, wafer and site cannot be told apart: sigma is the plain sd of the points.
    assert points[35]["sigma"] == pytest.approx(np.std(values, ddof=1), rel=1e-6)


def test_wafer_points_have_no_wafer_to_wafer_spread(engine: Engine) -> None:
    add(engine, lots_of(np.random.default_rng(2), 20))
    points = listed(engine, {**PLAN, "point": "wafer"})
    assert {p["statistic"] for p in points} == {"mean", "within-wafer", "map-distance"}
    assert sum(p["statistic"] == "mean" for p in points) == 60
    assert {p["n_wafers"] for p in points} == {1}
    assert {p["wafer"] for p in points} == {"01", "02", "03"}


def test_readings_all_alike_do_not_break_anything(engine: Engine) -> None:
    wafers = [
        replace(w, values=dict.fromkeys(w.values, 1200.0))
        for w in lots_of(np.random.default_rng(3), 35)
    ]
    wafers[-1] = replace(wafers[-1], values=dict.fromkeys(wafers[-1].values, 1203.0))
    add(engine, wafers)
    points = [p for p in listed(engine, PLAN) if p["statistic"] == "mean"]
    assert points[30]["sigma"] == 0
    assert [bool(p["rules"]) for p in points[30:]] == [False] * 4 + [True]


def test_sample_sizes_change_the_limits_of_a_point(engine: Engine) -> None:
    rng = np.random.default_rng(4)
    wafers = lots_of(rng, 32)
    few = lots_of(rng, 1, first=32, wafers=1, sites=("centre", "east", "west"))
    add(engine, wafers + few)
    points = [p for p in listed(engine, PLAN) if p["statistic"] == "mean"]
    assert points[31]["sigma"] < points[32]["sigma"]
    assert (points[32]["n_wafers"], points[32]["n_sites"]) == (1, 3)


def test_the_log_places_readings_that_do_not_say_where_they_were_made(engine: Engine) -> None:
    """Without the log the stream has no tool; the late log moves the wafers to theirs."""
    wafers = [
        replace(w, processed=None, context={"layer": "M1"})
        for w in lots_of(np.random.default_rng(5), 4)
    ]
    add(engine, wafers)
    assert {p["context"]["tool"] for p in listed(engine, PLAN)} == {""}
    steps = [
        Step(w.lot, w.wafer, w.measured - (hours(3) - hours(1)), {"layer": "M1", "tool": "TRK9"})
        for w in wafers[:6]
    ]
    add(engine, steps=steps)
    points = [p for p in listed(engine, PLAN, 1001.0) if p["statistic"] == "mean"]
    assert {p["lot"]: p["context"]["tool"] for p in points} == {
        "TRK1C1L0000": "TRK9",
        "TRK1C1L0001": "TRK9",
        "TRK1C1L0002": "",
        "TRK1C1L0003": "",
    }
    assert points[-1]["at"] == points[-1]["processed_at"]


def test_two_steps_that_fit_leave_the_place_open(engine: Engine) -> None:
    wafers = [
        replace(w, processed=None, context={"layer": "M1"})
        for w in lots_of(np.random.default_rng(5), 1)
    ]
    steps = [
        Step(w.lot, w.wafer, w.measured - (hours(h) - hours(0)), {"layer": "M1", **context})
        for w in wafers
        for h, context in (
            (3.0, {"step": "coat", "tool": "TRK9"}),
            (2.0, {"step": "expose", "tool": "EXP1"}),
        )
    ]
    add(engine, wafers, steps)
    assert {p["context"]["tool"] for p in listed(engine, PLAN)} == {""}


def test_the_last_pass_of_a_step_before_the_measurement_counts(engine: Engine) -> None:
    """A wafer coated again: the second coat is the one that was measured."""
    (wafer, *_) = lots_of(np.random.default_rng(6), 1)
    wafer = replace(wafer, processed=None, context={"layer": "M1"})
    steps = [
        Step(wafer.lot, wafer.wafer, hours(h), {"layer": "M1", "step": "coat", "tool": tool})
        for h, tool in ((0.5, "TRK1"), (1.5, "TRK2"), (9.0, "TRK3"))
    ]
    add(engine, [wafer], steps)
    (point, *_) = listed(engine, PLAN)
    assert point["context"]["tool"] == "TRK2"
    assert point["processed_at"] == "2026-03-02T07:30:00+00:00"


def test_wafers_kept_as_sums_alone_keep_their_mean_and_limits(engine: Engine) -> None:
    add(engine, lots_of(np.random.default_rng(7), 40))
    before = {(p["lot"], p["statistic"]): p for p in listed(engine, PLAN)}
    with engine.begin() as connection:
        connection.execute(text("UPDATE measurements SET site_values = NULL WHERE id <= 90"))
    after = listed(engine, {**PLAN, "rules": ("beyond-3s",)})
    assert after
    for point in after:
        known = before[point["lot"], point["statistic"]]
        assert point["value"] == pytest.approx(known["value"], rel=1e-9)
        assert point["upper_limit"] == pytest.approx(known["upper_limit"], rel=1e-9)
    assert sum(p["statistic"] == "mean" for p in after) == 40
    assert sum(p["statistic"] == "within-wafer" for p in after) == 10


def test_readings_of_another_kind_of_unit_are_left_out_and_said_so(engine: Engine) -> None:
    wafers = lots_of(np.random.default_rng(8), 2)
    add(engine, [wafers[0], *(replace(w, unit="kPa") for w in wafers[1:])])
    bay = bay_with(PLAN)
    result = evaluate(engine, bay, hours(1000))
    assert result.notes == ("t: readings in 'kPa' do not convert to 'nm' and are left out",)
    assert result.points_evaluated == 2


def test_streams_can_be_told_apart_by_another_step(engine: Engine) -> None:
    wafers = lots_of(np.random.default_rng(9), 2)
    steps = [
        Step(
            w.lot,
            w.wafer,
            w.measured - (hours(1) - hours(0)),
            {"layer": "M1", "step": "expose", "tool": "EXP" + w.lot[-1]},
        )
        for w in wafers
    ]
    add(engine, wafers, steps)
    points = listed(engine, {**PLAN, "stream_by": ("expose.tool",)})
    assert {p["lot"]: p["context"] for p in points} == {
        "TRK1C1L0000": {"expose.tool": "EXP0"},
        "TRK1C1L0001": {"expose.tool": "EXP1"},
    }

"""The state after an evaluation is a function of the readings, the log, the clock and the limits
approved by hand: the order of files and passes leaves no trace."""

from __future__ import annotations

import json
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from sqlalchemy import Engine, text

from spc.monitoring.evaluation import evaluate
from spc.records.sessions import reading
from tests.monitoring.bench import Step, Wafer, add, bay_with, hours, lots_of

BAY = bay_with(
    {
        "name": "M1 thickness",
        "parameter": "resist_thickness",
        "unit": "nm",
        "where": {"layer": "M1"},
        "stream_by": ("tool", "module"),
        "statistics": ("mean", "within-wafer", "wafer-to-wafer", "bowl", "map-distance"),
        "baseline_points": 12,
        "lower_spec": 1185.0,
        "upper_spec": 1215.0,
    },
    {
        "name": "M1 by gauge",
        "parameter": "resist_thickness",
        "unit": "um",
        "stream_by": ("gauge",),
        "point": "wafer",
        "baseline_points": 25,
    },
)


def history(seed: int) -> tuple[list[Wafer], list[Step]]:
    """Lots on two cups with a shift, wafers measured again, and the log of three steps."""
    rng = np.random.default_rng(seed)
    wafers = lots_of(rng, 16) + lots_of(rng, 8, first=16, shift=12.0)
    wafers += lots_of(rng, 20, module="C2")
    again = [
        replace(w, measured=w.measured + (hours(30) - hours(0)), values=_part(rng, w.values))
        for w in rng.choice(np.array(wafers, dtype=object), 12, replace=False)
    ]
    steps = [
        Step(w.lot, w.wafer, w.processed + (hours(d) - hours(0)), {**c, "layer": "M1"})
        for w in wafers
        if w.processed is not None
        for d, c in (
            (-1.0, {"step": "clean", "tool": "WET1", "bath": "B" + w.lot[-1]}),
            (0.0, {"step": "coat", "tool": "TRK1", "module": w.context["module"], "batch": "R7"}),
            (0.5, {"step": "expose", "tool": "EXP1"}),
        )
    ]
    return wafers + again, steps


def _part(rng: np.random.Generator, values: dict[str, float]) -> dict[str, float]:
    names = rng.choice(sorted(values), 4, replace=False)
    return {str(n): values[str(n)] + 2.0 for n in names}


def state(engine: Engine) -> dict[str, list[Any]]:
    """All that an evaluation leaves behind, without the numbers that rows happen to have."""
    points = """SELECT s.characteristic, s.context, p.statistic, p.lot, p.layer, p.wafer, p.at_us,
        p.measured_us, p.processed_us, p.value, p.n_wafers, p.n_sites, p.effective_sites, p.df,
        p.phase, p.center, p.lower_limit, p.upper_limit, p.sigma, p.z, p.rules, b.payload
        FROM points p JOIN streams s ON s.id = p.stream_id
        LEFT JOIN baselines b ON b.id = p.baseline_id"""
    wafers = """SELECT s.characteristic, s.context, w.lot, w.layer, w.wafer, w.at_us,
        w.measured_us, c.columns, o.columns, w.n_sites, w.mean, w.sum_squares, w.df, w.statistics,
        w.out_of_spec_sites FROM wafer_results w JOIN streams s ON s.id = w.stream_id
        JOIN contexts c ON c.id = w.context_id JOIN contexts o ON o.id = w.step_context_id"""
    sets = """SELECT s.characteristic, s.context, b.from_us, b.first_us, b.last_us, b.n_points,
        b.payload FROM baselines b JOIN streams s ON s.id = b.stream_id
        WHERE b.status = 'automatic'"""
    with reading(engine) as connection:
        found = {
            name: sorted(tuple(map(_plain, row)) for row in connection.execute(text(query)))
            for name, query in (("points", points), ("wafers", wafers), ("sets", sets))
        }
    return found


def _plain(value: Any) -> Any:
    return (
        bytes(value) if isinstance(value, memoryview | bytes) else "" if value is None else value
    ).__repr__()


def fill_at_once(engine: Engine, wafers: list[Wafer], steps: list[Step], clock: float) -> None:
    add(engine, wafers, steps)
    evaluate(engine, BAY, hours(clock))


@pytest.fixture
def reference(tmp_path: Any, _sqlite_template: Any) -> Any:
    """The state after one evaluation of everything, by clock."""
    import shutil

    from spc.records.sessions import open_database

    def make(wafers: list[Wafer], steps: list[Step], clock: float) -> dict[str, list[Any]]:
        file = tmp_path / f"reference{clock}.db"
        shutil.copy(_sqlite_template, file)
        database = open_database(f"sqlite:///{file}")
        fill_at_once(database, wafers, steps, clock)
        found = state(database)
        database.dispose()
        return found

    return make


def assert_same(found: dict[str, list[Any]], expected: dict[str, list[Any]]) -> None:
    for name, rows in expected.items():
        assert len(found[name]) == len(rows), name
        for a, b in zip(found[name], rows, strict=True):
            assert a == b, name


def test_night_by_night_ends_like_all_at_once(engine: Engine, reference: Any) -> None:
    wafers, steps = history(1)
    previous = -100.0
    for clock in (24.0, 54.0, 55.0, 90.0, 200.0):
        low, high = hours(previous), hours(clock)
        add(
            engine,
            [w for w in wafers if low < w.measured <= high],
            [s for s in steps if low < s.processed <= high],
        )
        evaluate(engine, BAY, hours(clock))
        previous = clock
    assert_same(state(engine), reference(wafers, steps, 200.0))


def test_files_in_any_order_end_in_the_same_state(engine: Engine, reference: Any) -> None:
    """Late wafers, a log that comes after the readings, a baseline that changes afterwards."""
    wafers, steps = history(2)
    rng = np.random.default_rng(3)
    wafer_part, step_part = rng.integers(0, 4, len(wafers)), rng.integers(0, 4, len(steps))
    for part in range(4):
        add(
            engine,
            [w for w, p in zip(wafers, wafer_part, strict=True) if p == part],
            [s for s, p in zip(steps, step_part, strict=True) if p == part],
        )
        evaluate(engine, BAY, hours(200 + part))
    assert_same(state(engine), reference(wafers, steps, 203.0))
    with reading(engine) as connection:
        kept = connection.execute(
            text("SELECT decided_reason FROM baselines WHERE status = 'withdrawn'")
        ).all()
    assert kept
    assert all("late" in row[0] for row in kept)


def test_the_clock_can_go_back_and_forth(engine: Engine, reference: Any) -> None:
    wafers, steps = history(4)
    add(engine, wafers, steps)
    for clock in (40.0, 200.0, 75.0):
        evaluate(engine, BAY, hours(clock))
    assert_same(state(engine), reference(wafers, steps, 75.0))


def test_a_night_with_nothing_new_changes_nothing(engine: Engine) -> None:
    wafers, steps = history(5)
    fill_at_once(engine, wafers, steps, 200.0)
    before = state(engine)
    result = evaluate(engine, BAY, hours(201.0))
    assert (result.points_evaluated, result.signals, result.touched) == (0, 0, {})
    assert_same(state(engine), before)


def test_a_wafer_measured_again_supersedes_site_by_site(engine: Engine) -> None:
    wafers = lots_of(np.random.default_rng(9), 3)
    first = wafers[0]
    later = replace(first, measured=hours(40), values={"east": 1234.5, "west": 1200.0})
    add(engine, [later])
    add(engine, wafers)
    evaluate(engine, BAY, hours(30))
    means = [_mean(engine, first)]
    evaluate(engine, BAY, hours(50))
    means.append(_mean(engine, first))
    assert means[0] == pytest.approx(np.mean(list(first.values.values())), rel=1e-12)
    now = {**first.values, **later.values}
    assert means[1] == pytest.approx(np.mean(list(now.values())), rel=1e-12)


def _mean(engine: Engine, wafer: Wafer) -> float:
    query = text(
        "SELECT w.mean FROM wafer_results w JOIN streams s ON s.id = w.stream_id "
        "WHERE s.characteristic = 'M1 thickness' AND w.lot = :lot AND w.wafer = :wafer"
    )
    with reading(engine) as connection:
        return float(
            connection.execute(query, {"lot": wafer.lot, "wafer": wafer.wafer}).scalar_one()
        )


def test_contexts_of_other_steps_are_kept(engine: Engine) -> None:
    wafers, steps = history(6)
    fill_at_once(engine, wafers, steps, 200.0)
    rows = [row for row in state(engine)["wafers"] if row[0] == repr("M1 thickness")]
    own, others = json.loads(eval(rows[0][7])), json.loads(eval(rows[0][8]))
    assert own["batch"] == "R7"
    assert own["step"] == "coat"
    assert others["clean.tool"] == "WET1"
    assert others["expose.tool"] == "EXP1"
    assert not any(name.startswith("coat.") for name in others)

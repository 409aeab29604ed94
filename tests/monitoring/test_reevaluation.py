"""A re-evaluation ends in the very bits that nightly passes end in, whatever stops it.

On PostgreSQL, with real processes and machines: tests/robustness/test_reevaluate.py.
"""

from __future__ import annotations

import shutil
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from sqlalchemy import Engine, text

from config.control_plan import ControlPlan
from config.load import Bay
from spc.monitoring import limits_by_hand as by_hand
from spc.monitoring.evaluation import evaluate
from spc.monitoring.life import Hand
from spc.monitoring.reevaluation import OvertakenError, Report, Wanted, reevaluate
from spc.monitoring.reevaluation_engines import InThisProcess
from spc.monitoring.reevaluation_tasks import (
    Share,
    VersionsDifferError,
    evaluate_share,
    versions,
)
from spc.records.sessions import open_database, reading
from spc.records.stamps import to_us
from tests import on_postgres
from tests.monitoring.bench import Step, Wafer, add, bay_with, hours, lots_of
from tests.monitoring.test_overlay_points import marked
from tests.monitoring.test_replay import assert_same, state

END = 100.0
PARTS = 4  # that they are cut into
BAY = bay_with(
    {
        "name": "M1 thickness",
        "parameter": "resist_thickness",
        "unit": "nm",
        "where": {"layer": "M1"},
        "stream_by": ("tool", "module"),
        "statistics": ("mean", "within-wafer", "map-distance"),
        "baseline_points": 8,
    },
    {
        "name": "M1 overlay",
        "parameter": "overlay",
        "unit": "nm",
        "stream_by": ("tool",),
        "statistics": ("translation-x", "field-scale-x", "residual"),
        "baseline_points": 8,
    },
)
PLAN = BAY.plan


def readings(seed: int) -> tuple[list[Wafer], list[Step]]:
    """Four cups, of which C1 goes on longest and shifts, an overlay stream, a log of two steps."""
    rng = np.random.default_rng(seed)
    wafers = lots_of(rng, 12, wafers=2) + lots_of(rng, 6, first=12, wafers=2, shift=15.0)
    for cup in range(2, 5):
        wafers += lots_of(rng, 12, module=f"C{cup}", wafers=2)
    steps = [
        Step(w.lot, w.wafer, w.processed + (hours(d) - hours(0)), {**c, "layer": "M1"})
        for w in wafers
        if w.processed is not None
        for d, c in (
            (-1.0, {"step": "clean", "tool": "WET1", "bath": "B" + w.lot[-1]}),
            (0.0, {"step": "coat", "tool": "TRK1", "module": w.context["module"]}),
        )
    ]
    for i in range(12):
        wafers += marked(f"O{i:02d}", 4.0 * i, rng.normal(0, 1, 10), lambda: rng.normal(0, 1.5))
    return wafers, steps


def bay_on(engine: Engine, plan: ControlPlan = PLAN, size: int = 48) -> Bay:
    """The bay with its records there, cut into partitions of so many measurements."""
    settings = BAY.settings
    url = engine.url.render_as_string(hide_password=False)
    changed = {
        "database": settings.database.model_copy(update={"url": url}),
        "compute": settings.compute.model_copy(update={"partition_measurements": size}),
    }
    return Bay(BAY.file, settings.model_copy(update=changed), plan)


def with_changes(**changes: Any) -> ControlPlan:
    """The plan with the first characteristic changed."""
    first, *rest = PLAN.characteristic
    return ControlPlan(characteristic=(first.model_copy(update=changes), *rest))


class Stopping(InThisProcess):
    """Dies, as by a kill, when so many partitions are written."""

    def __init__(self, after: int) -> None:
        self._left = after

    def each(self, task: Callable[[Any], Any], items: Sequence[Any]) -> Iterator[Any]:
        for item in items:
            if task is evaluate_share:
                if not self._left:
                    raise KeyboardInterrupt
                self._left -= 1
            yield task(item)


def run(engine: Engine, bay: Bay, wanted: Wanted | None = None, stop: int | None = None) -> Report:
    runner = InThisProcess() if stop is None else Stopping(stop)
    try:
        return reevaluate(
            engine, bay, wanted or Wanted(), runner, lambda _what, _done, _total: None
        )
    finally:
        runner.close()


@pytest.fixture(scope="module")
def template(tmp_path_factory: pytest.TempPathFactory, _sqlite_template: Path) -> Path:
    """After two nightly passes, the second of which had late readings."""
    file = tmp_path_factory.mktemp("passed") / "bay.db"
    shutil.copy(_sqlite_template, file)
    database = open_database(f"sqlite:///{file}")
    wafers, steps = readings(1)
    add(database, [w for i, w in enumerate(wafers) if i % 7], steps)
    evaluate(database, bay_on(database), hours(END - 1))
    add(database, [w for i, w in enumerate(wafers) if i % 7 == 0])
    evaluate(database, bay_on(database), hours(END))
    if database.dialect.name == "sqlite":
        with database.connect() as connection:
            connection.exec_driver_sql("COMMIT")
            connection.exec_driver_sql("PRAGMA wal_checkpoint(TRUNCATE)")
    database.dispose()
    return file


@pytest.fixture
def passed(template: Path, tmp_path: Path) -> Iterator[Engine]:
    """A copy of it."""
    shutil.copy(template, tmp_path / "bay.db")
    on_postgres.copy(template.parent, tmp_path)
    database = open_database(f"sqlite:///{tmp_path / 'bay.db'}")
    yield database
    database.dispose()


def test_the_same_bits_as_the_nightly_passes(passed: Engine) -> None:
    before = state(passed)
    report = run(passed, bay_on(passed))
    assert_same(state(passed), before)
    assert len(before["points"]) == report.points > 180
    assert (report.partitions, report.streams) == (PARTS, 5)
    assert report.signals == report.signals_before > 0
    assert report.new_baselines == 0
    assert report.as_of_us == to_us(hours(END))
    assert report.left_to_nightly == ()


@pytest.mark.parametrize(
    "changes",
    [
        {"rules": ("beyond-2s", "3of4-beyond-1s"), "baseline_points": 10, "upper_spec": 1205.0},
        {"stream_by": ("gauge",), "where": {"layer": "M1", "module": "C1"}},
    ],
    ids=["rules-and-limits", "other-streams"],
)
def test_a_changed_plan_ends_like_a_pass_with_it(passed: Engine, changes: dict[str, Any]) -> None:
    """The nightly pass has then nothing left to evaluate, and would have come to the same."""
    bay = bay_on(passed, with_changes(**changes))
    report = run(passed, bay)
    found = state(passed)
    after = evaluate(passed, bay, hours(END))
    assert (after.points_evaluated, after.new_baselines) == (0, 0)
    assert_same(state(passed), found)
    assert evaluated_anew(passed, bay) == report.points
    assert_same(state(passed), found)
    of_first = {row[1] for row in found["points"] if row[0] == repr("M1 thickness")}
    assert len(of_first) == (1 if "where" in changes else 4), "streams it no longer takes are gone"


def evaluated_anew(engine: Engine, bay: Bay) -> int:
    """Points of a pass that does not know that anything was evaluated before."""
    with engine.begin() as connection:
        connection.execute(text("DELETE FROM evaluations"))
    return evaluate(engine, bay, hours(END)).points_evaluated


def test_the_next_pass_hears_of_it_once(passed: Engine) -> None:
    bay = bay_on(passed)
    assert evaluate(passed, bay, hours(END)).touched == {}
    run(passed, bay)
    first, second = (evaluate(passed, bay, hours(END)).touched for _ in range(2))
    assert len(first) == 5
    assert second == {}


def test_limits_by_hand_are_heeded(passed: Engine) -> None:
    bay, anna = bay_on(passed), Hand("Anna", hours(END))
    with passed.begin() as connection:
        (number,) = by_hand.propose(
            connection, bay, "M1 thickness", by_hand.Window({"module": "C2"}), anna, "new resist"
        )
        by_hand.approve(connection, number, anna, "agreed", hours(40))
    run(passed, bay)
    found = state(passed)
    assert evaluate(passed, bay, hours(END)).points_evaluated == 0
    with reading(passed) as connection:
        held = text("SELECT count(*) FROM points WHERE baseline_id = :n")
        assert connection.scalar(held, {"n": number}) > 0
    evaluated_anew(passed, bay)
    assert_same(state(passed), found)


def test_a_run_that_was_stopped_goes_on_where_it_was(passed: Engine) -> None:
    bay = bay_on(passed, with_changes(rules=("beyond-2s",), baseline_points=9))
    for stop in (1, 1):
        with pytest.raises(KeyboardInterrupt):
            run(passed, bay, stop=stop)
    report = run(passed, bay)
    assert (report.partitions, report.done_before) == (PARTS, 2)
    stopped = state(passed)
    again = run(passed, bay)
    assert (again.partitions, again.done_before) == (PARTS, 0)
    assert again.digest == report.digest
    assert_same(state(passed), stopped)


def test_a_pass_in_between_overtakes_a_run(passed: Engine) -> None:
    bay = bay_on(passed, with_changes(rules=("beyond-2s",)))
    with pytest.raises(KeyboardInterrupt):
        run(passed, bay, stop=2)
    evaluate(passed, bay, hours(END + 1))
    expected = state(passed)
    report = run(passed, bay)
    assert (report.partitions, report.done_before) == (PARTS, 0)
    assert_same(state(passed), expected)


def shares_of(engine: Engine, bay: Bay) -> list[Share]:
    """The partitions of a run that was stopped before the first."""
    found: list[Share] = []

    class Noting(Stopping):
        def each(self, task: Callable[[Any], Any], items: Sequence[Any]) -> Iterator[Any]:
            if task is evaluate_share:
                found.extend(items)
            return super().each(task, items)

    with pytest.raises(KeyboardInterrupt):
        reevaluate(engine, bay, Wanted(), Noting(0), lambda _w, _d, _t: None)
    return found


def test_a_partition_done_by_two_workers_at_once_is_written_once(passed: Engine) -> None:
    bay = bay_on(passed)
    before = state(passed)
    share = shares_of(passed, bay)[0]
    with ThreadPoolExecutor(2) as two:
        first, second = two.map(evaluate_share, [share, share])
    assert first == second
    assert first is not None
    assert evaluate_share(share) == first
    assert run(passed, bay).done_before == 1
    assert_same(state(passed), before)


def test_a_worker_of_an_earlier_epoch_writes_nothing(passed: Engine) -> None:
    """A worker cut off from its coordinator is still at work when the run goes on elsewhere."""
    bay = bay_on(passed, with_changes(rules=("beyond-2s",)))
    before = state(passed)
    old = shares_of(passed, bay)
    shares_of(passed, bay)  # taken over
    assert evaluate_share(old[0]) is None
    assert_same(state(passed), before)
    new = shares_of(passed, bay)
    evaluate(passed, bay, hours(END))  # a pass overtakes it
    expected = state(passed)
    assert evaluate_share(new[0]) is None
    assert_same(state(passed), expected)
    run(passed, bay)
    assert_same(state(passed), expected)


def test_a_run_taken_over_says_so(passed: Engine) -> None:
    bay = bay_on(passed)

    class TakenOver(InThisProcess):
        def each(self, task: Callable[[Any], Any], items: Sequence[Any]) -> Iterator[Any]:
            for number, item in enumerate(items):
                if task is evaluate_share and number == 1:
                    evaluate(passed, bay, hours(END))
                yield task(item)

    with pytest.raises(OvertakenError):
        reevaluate(passed, bay, Wanted(), TakenOver(), lambda _w, _d, _t: None)


def test_a_characteristic_and_a_stamp_narrow_it_down(passed: Engine) -> None:
    """Cup C1 goes on longer than the others."""
    bay = bay_on(passed, with_changes(rules=("beyond-2s",)))
    one = run(passed, bay, Wanted(("M1 overlay",)))
    assert (one.characteristics, one.streams) == (1, 1)
    some = run(passed, bay, Wanted(("M1 thickness",), to_us(hours(60))))
    assert (some.streams, some.left_to_nightly) == (1, ("M1 thickness",))
    mixed = state(passed)
    after = evaluate(passed, bay, hours(END))
    assert after.points_evaluated > some.points, "the pass looks at all of it again"
    assert state(passed) != mixed


def test_other_code_on_a_worker_is_refused(passed: Engine) -> None:
    share = shares_of(passed, bay_on(passed))[0]
    other = replace(share.job, versions={**versions(), "numpy": "1.0"})
    with pytest.raises(VersionsDifferError, match=r"numpy .* \(wanted 1\.0\).*constraints\.txt"):
        evaluate_share(replace(share, job=other))

"""Site values taken away month by month: all that is shown afterwards is as it was, or says so."""

from __future__ import annotations

from dataclasses import replace
from datetime import UTC, datetime
from typing import Any

import numpy as np
import pytest
from sqlalchemy import Engine, delete, func, select, update

from config.control_plan import Characteristic
from config.load import Bay
from config.settings import RetentionSettings
from spc.monitoring import limits_by_hand as by_hand
from spc.monitoring.aggregate import AggregateReport, aggregate_sites, overdue
from spc.monitoring.evaluation import evaluate
from spc.monitoring.life import Hand
from spc.monitoring.limits_by_hand import Window
from spc.monitoring.review import review_month
from spc.monitoring.series import points_json
from spc.records import aggregation
from spc.records.retention_tables import aggregated_months, kept_wafers
from spc.records.sessions import reading
from spc.records.tables import evaluations, measurements
from tests.monitoring.bench import Wafer, add, bay_with, hours, lots_of
from tests.monitoring.test_overlay_points import marked

THICKNESS: dict[str, Any] = {
    "name": "M1 thickness",
    "parameter": "resist_thickness",
    "unit": "nm",
    "stream_by": ("tool", "module"),
    "statistics": (
        "mean",
        "within-wafer",
        "wafer-to-wafer",
        "tilt-x",
        "tilt-y",
        "bowl",
        "map-distance",
    ),
    "target": 1200.0,
    "lower_spec": 1176.0,
    "upper_spec": 1224.0,
}
OVERLAY: dict[str, Any] = {
    "name": "M1 overlay",
    "parameter": "overlay",
    "unit": "nm",
    "stream_by": ("tool",),
    "lower_spec": -15.0,
    "upper_spec": 15.0,
}
NOW = datetime(2026, 7, 1, 6, tzinfo=UTC)  # March and April ended more than 60 days ago


def bay(*characteristics: dict[str, Any], days: float | None = 60.0) -> Bay:
    plain = bay_with(*(characteristics or (THICKNESS, OVERLAY)))
    kept = RetentionSettings(aggregate_sites_after_days=days)
    return replace(plain, settings=plain.settings.model_copy(update={"retention": kept}))


@pytest.fixture
def filled(engine: Engine) -> Engine:
    """Lots of two cups and of overlay from 2 March to 30 May, evaluated."""
    rng = np.random.default_rng(5)
    add(engine, lots_of(rng, 60, every=36.0) + lots_of(rng, 31, module="C2", every=70.0))
    wafers: list[Wafer] = []
    for i in range(32):
        terms = np.zeros(10) + rng.normal(0, [1, 1] + [0.01] * 8)
        wafers += marked(f"O{i:02d}", 66.0 * i, terms.tolist(), lambda: rng.normal(0, 1.5))
    add(engine, wafers)
    evaluate(engine, bay(), NOW)
    return engine


def points(engine: Engine, of: Bay) -> list[dict[str, Any]]:
    with reading(engine) as connection:
        return [one for c in of.plan.characteristic for one in points_json(connection, of, c.name)]


def forget_evaluations(engine: Engine) -> None:
    """As if the plan had changed: everything is made anew at the next evaluation."""
    with engine.begin() as connection:
        connection.execute(delete(evaluations))


def with_sites(engine: Engine) -> int:
    query = select(func.count()).where(measurements.c.site_values.is_not(None))
    with reading(engine) as connection:
        return int(connection.scalar(query) or 0)


def test_nothing_is_taken_away_without_the_setting(filled: Engine) -> None:
    before = with_sites(filled)
    assert aggregate_sites(filled, bay(days=None), NOW) == AggregateReport()
    assert with_sites(filled) == before


def test_whole_months_go_and_their_sums_stay(filled: Engine) -> None:
    rows = select(measurements).order_by(measurements.c.id)
    with reading(filled) as connection:
        before = connection.execute(rows).all()
    report = aggregate_sites(filled, bay(), NOW)
    assert report.months == ("2026-03", "2026-04")
    with reading(filled) as connection:
        after = connection.execute(rows).all()
        months = aggregation.months(connection)
        assert not overdue(connection, bay(), NOW)
    may = datetime(2026, 4, 30, 23, tzinfo=UTC).timestamp() * 1e6  # Dublin is an hour ahead
    gone = [row for row in after if row.site_values is None]
    assert report.measurements == len(gone)
    assert report.site_values == sum(row.n for row in gone)
    assert {row.id for row in gone} == {row.id for row in before if row.measured_us < may}
    for old, new in zip(before, after, strict=True):
        assert old[:13] == new[:13], "n, mean and sum of squares are not touched"
        values = np.frombuffer(old.site_values, "<f8")
        assert new.n == values.size
        assert new.mean == pytest.approx(values.mean(), rel=1e-12)
        assert new.sum_squares == pytest.approx(((values - values.mean()) ** 2).sum(), rel=1e-9)
    assert [(m.month, m.done_us is not None) for m in months] == [
        ("2026-03", True),
        ("2026-04", True),
    ]
    assert aggregate_sites(filled, bay(), NOW) == AggregateReport(), "a second run finds nothing"


def test_points_stay_what_they_were_even_when_they_are_made_anew(filled: Engine) -> None:
    before = points(filled, bay())
    kinds = {(p["characteristic"], p["statistic"]) for p in before}
    assert len(kinds) == 7 + 11, "every statistic of both characteristics is plotted"
    aggregate_sites(filled, bay(), NOW)
    assert points(filled, bay()) == before
    forget_evaluations(filled)
    result = evaluate(filled, bay(), NOW)
    assert result.new_baselines == 0
    assert result.notes == ()
    assert points(filled, bay()) == before, "values, sizes, limits, sigmas and rules, to the bit"
    again = evaluate(filled, bay(), hours(24 * 150))
    assert (again.points_evaluated, again.new_baselines) == (0, 0)


def test_another_unit_and_other_charts_are_served_from_what_was_kept(filled: Engine) -> None:
    before = {(p["context"]["module"], p["lot"], p["statistic"]): p
              for p in points(filled, bay(THICKNESS))}  # fmt: skip
    aggregate_sites(filled, bay(), NOW)
    statistics = ("mean", "within-wafer", "bowl")
    finer = THICKNESS | {"unit": "angstrom", "statistics": statistics}
    finer |= {"target": 12000.0, "lower_spec": 11760.0, "upper_spec": 12240.0}
    result = evaluate(filled, bay(finer, OVERLAY), NOW)
    assert result.new_baselines == 2, "limits in nanometres would be wrong by a factor"
    assert len(result.notes) == 1
    after = [p for p in points(filled, bay(finer)) if p["statistic"] != "within-wafer"]
    assert len(after) == 2 * (60 + 31)
    for one in after:
        old = before[one["context"]["module"], one["lot"], one["statistic"]]
        assert one["value"] == pytest.approx(10 * old["value"], rel=1e-9), one
        assert (one["n_sites"], one["n_wafers"]) == (old["n_sites"], old["n_wafers"])
        if one["statistic"] == "mean":
            assert one["center"] == pytest.approx(10 * old["center"], rel=1e-3)


def test_under_other_limits_a_spread_without_sites_is_not_guessed(filled: Engine) -> None:
    aggregate_sites(filled, bay(), NOW)
    one = bay(THICKNESS)
    before = [p for p in points(filled, one) if p["context"]["module"] == "C1"]
    window = Window({"module": "C1"}, first=hours(24 * 62), holds_from=hours(24 * 40))
    with filled.begin() as connection:
        [number] = by_hand.propose(
            connection, bay(), "M1 thickness", window, Hand("Anna", NOW), "the newer gauge"
        )
        by_hand.approve(connection, number, Hand("Bo", NOW), "agreed")
    result = evaluate(filled, bay(), NOW)
    [note] = result.notes
    assert "the site values of" in note
    assert "M1 thickness" in note
    after = [p for p in points(filled, one) if p["context"]["module"] == "C1"]
    held = {p["lot"]: p for p in after if p["statistic"] == "mean"}
    assert len(held) == 60, "the mean is known from the sums under any limits"
    spread = {p["lot"] for p in after if p["statistic"] == "within-wafer"}
    old = {p["lot"] for p in before if p["statistic"] == "within-wafer" and p["at"] < held[
        "TRK1C1L0027"]["at"]}  # fmt: skip
    assert old <= spread, "under the limits of then it is what it was"
    assert "TRK1C1L0033" not in spread, "its signature is not that of the new limits"
    assert "TRK1C1L0055" in spread, "its sites are still there"


def test_limits_from_sums_say_so(filled: Engine) -> None:
    aggregate_sites(filled, bay(), NOW)
    window = Window({"module": "C2"}, first=hours(0), last=hours(24 * 40))
    with filled.begin() as connection:
        [number] = by_hand.propose(
            connection, bay(), "M1 thickness", window, Hand("Anna", NOW), "why not"
        )
    with reading(filled) as connection:
        shown = by_hand.shown(connection, bay(), number)
    assert [n for n in shown["notes"] if n.endswith("not in the statistics of the sites")]
    assert {row["statistic"] for row in shown["limits"]} <= {"mean", "wafer-to-wafer"}


def review(engine: Engine, of: Bay, month: str, **more: Any) -> Any:
    with reading(engine) as connection:
        return review_month(connection, of, month, NOW, **more)


def test_the_review_of_an_old_month_does_not_change(filled: Engine) -> None:
    before = {m: review(filled, bay(), m) for m in ("2026-03", "2026-04", "2026-05")}
    assert {row["site_values"] for one in before.values() for row in one.rows} == {"read"}
    aggregate_sites(filled, bay(), NOW)
    for month, old in before.items():
        new = review(filled, bay(), month)
        assert without(new.rows, "site_values") == without(old.rows, "site_values"), month
        sources = {row["site_values"] for row in new.rows}
        assert sources == ({"read"} if month == "2026-05" else {"kept"})
        for unit, known in zip((*new.units, *new.tools), (*old.units, *old.tools), strict=True):
            for name in new.months:
                row, then = without([unit.rows[name], known.rows[name]], "site_values")
                assert row == then, (unit.context, name)
        said = [note for note in new.notes if "taken away by the retention rule" in note]
        assert len(said) == {"2026-03": 2, "2026-04": 4, "2026-05": 4}[month]


def without(rows: list[dict[str, Any]], key: str) -> list[dict[str, Any]]:
    return [{k: v for k, v in row.items() if k != key} for row in rows]


def test_what_was_kept_does_not_answer_another_question(filled: Engine) -> None:
    aggregate_sites(filled, bay(), NOW)
    narrow = bay(THICKNESS | {"upper_spec": 1210.0})
    found = review(filled, narrow, "2026-03")
    [note] = [n for n in found.notes if "2026-03" in n]
    assert "come from the sums of wafers" in note
    whole = found.rows[0]
    assert (whole["site_values"], whole["context"]) == ("sums", {})
    assert whole["distribution"] is None
    assert whole["ppm_observed"] is None
    kept = review(filled, bay(THICKNESS), "2026-03").rows[0]
    for name in ("n_lots", "n_wafers", "n_readings"):
        assert whole[name] == kept[name]
    for name in ("mean", "sd_overall"):
        assert whole[name] == pytest.approx(kept[name], rel=1e-9), "sums lose nothing of these"
    gauge = review(filled, bay(THICKNESS | {"gauge_sd": 1.0}), "2026-03", gauge_out=True)
    assert gauge.rows[0]["site_values"] == "sums"


def test_a_lot_with_newer_readings_waits_for_them(engine: Engine) -> None:
    rng = np.random.default_rng(8)
    lots = lots_of(rng, 40, every=36.0)
    late = replace(lots[0], measured=hours(24 * 100))  # measured again in June
    add(engine, [*lots, late])
    only = bay(THICKNESS)
    evaluate(engine, only, NOW)
    assert aggregate_sites(engine, only, NOW).months == ("2026-03", "2026-04")
    query = select(measurements.c.site_values).where(measurements.c.lot == lots[0].lot)
    with reading(engine) as connection:
        assert None not in set(connection.scalars(query))
    much_later = datetime(2026, 10, 1, tzinfo=UTC)
    evaluate(engine, only, much_later)
    assert aggregate_sites(engine, only, much_later).months == ("2026-06",)
    with reading(engine) as connection:
        assert set(connection.scalars(query)) == {None}


def test_readings_that_come_late_are_counted_and_said(filled: Engine) -> None:
    aggregate_sites(filled, bay(), NOW)
    rng = np.random.default_rng(9)
    add(filled, lots_of(rng, 1, first=400, module="C1", every=0.01))  # of 2 March
    evaluate(filled, bay(), hours(24 * 122))
    rows = review(filled, bay(), "2026-03").rows
    by_module = {r["context"].get("module"): r for r in rows if r["characteristic"] != "M1 overlay"}
    assert by_module["C1"]["site_values"] == by_module[None]["site_values"] == "sums"
    assert by_module["C2"]["site_values"] == "kept"
    later = datetime(2026, 8, 5, tzinfo=UTC)
    evaluate(filled, bay(), later)
    report = aggregate_sites(filled, bay(), later)
    assert report.months == ("2026-05",)
    query = select(func.count()).where(
        measurements.c.lot == "TRK1C1L0400", measurements.c.site_values.is_not(None)
    )
    with reading(filled) as connection:
        assert connection.scalar(query) == 0, "they went with the next month"


def test_a_wafer_measured_in_parts_keeps_the_mean_of_all_its_sites(engine: Engine) -> None:
    rng = np.random.default_rng(10)
    lots = lots_of(rng, 40, every=36.0)
    part = {"centre": 1234.0, "east": 1233.0}
    again = replace(
        lots[30], measured=hours(36 * 10 + 5), values=part,
        places={site: (lots[30].places or {})[site] for site in part},
    )  # fmt: skip
    add(engine, [*lots, again])
    only = bay(THICKNESS)
    evaluate(engine, only, NOW)
    before = points(engine, only)
    aggregate_sites(engine, only, NOW)
    forget_evaluations(engine)
    assert evaluate(engine, only, NOW).notes == ()
    assert points(engine, only) == before


def test_cut_after_any_step_the_next_run_goes_on(
    filled: Engine, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("spc.monitoring.aggregate.LOTS_A_STEP", 25)
    before = points(filled, bay())
    steps = 0
    for cut in range(100):
        asked = iter(range(cut % 3 + 1))
        report = aggregate_sites(filled, bay(), NOW, stop=lambda a=asked: next(a, None) is None)  # type: ignore[misc]
        steps += 1
        assert points(filled, bay()) == before
        if report == AggregateReport():
            break
    assert steps > 3
    forget_evaluations(filled)
    evaluate(filled, bay(), NOW)
    assert points(filled, bay()) == before
    with reading(filled) as connection:
        counted = connection.scalar(select(func.sum(aggregated_months.c.measurements)))
        gone = select(func.count()).where(measurements.c.site_values.is_(None))
        assert connection.scalar(gone) == counted


def test_a_failure_in_a_step_undoes_the_step(
    filled: Engine, monkeypatch: pytest.MonkeyPatch
) -> None:
    before = with_sites(filled)

    def fail(*_arguments: Any) -> None:
        raise KeyboardInterrupt

    for name in ("keep_studies", "keep_distances", "add_up"):
        with monkeypatch.context() as patched:
            patched.setattr(aggregation, name, fail)
            with pytest.raises(KeyboardInterrupt):
                aggregate_sites(filled, bay(), NOW)
        assert with_sites(filled) == before
        with reading(filled) as connection:
            assert connection.scalar(select(func.count()).select_from(kept_wafers)) == 0


def test_it_waits_for_an_evaluation(filled: Engine) -> None:
    changed = bay(THICKNESS | {"upper_spec": 1230.0}, OVERLAY)
    [why] = aggregate_sites(filled, changed, NOW).failed
    assert why == "M1 thickness is not evaluated yet: run the pass first"
    with filled.begin() as connection:
        connection.execute(update(evaluations).values(last_measurement_id=3))
    assert aggregate_sites(filled, bay(), NOW).failed
    assert Characteristic(**OVERLAY).is_overlay

"""The attribution engine on the invented bay with known truth, and its score against scipy."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from spc.stats.attribution import AttributionOptions, Effect, Evidence, Level, attribute
from spc.stats.attribution_state import State
from tests.stats.attribution_bay import DAY, FIRST_SCANNER, Bay, Fault

BAY = Bay(days=19.3, lots_a_day=24.0, sampled=(0.6, 0.6, 0.3))
START = 17.3
NOW = 19.23
FILM, WIDTH = (0, "mean"), (1, "mean")
OPTIONS = AttributionOptions(since=(NOW - 2.5) * DAY, null_cells=120_000)


def find(*faults: Fault, seed: int = 8, options: AttributionOptions = OPTIONS) -> list[Effect]:
    evidence = BAY.with_faults(*faults).simulate(seed)
    return list(attribute(evidence, options, NOW * DAY))


def moved(effect: Effect) -> set[tuple[int, str]]:
    return {(s.characteristic, s.statistic) for s in effect.sizes if s.moved}


def covers(effect: Effect, day: float) -> bool:
    return effect.onset.earliest <= day * DAY <= effect.onset.latest


def test_a_resist_batch_on_all_tracks_is_one_effect() -> None:
    fault = Fault({"resist_batch": "B7"}, {FILM: -2.5, WIDTH: 1.5}, start=17.5)
    (effect,) = find(fault)
    assert effect.level == Level(("resist_batch",), ("B7",))
    assert effect.form == "shift"
    assert moved(effect) >= {FILM, WIDTH}
    assert effect.onset.axis == "t_process"
    assert covers(effect, 17.5)
    film = next(s for s in effect.sizes if (s.characteristic, s.statistic) == FILM)
    assert film.low < -2.5 * 1.265 < film.high
    assert effect.p_adjusted < 1e-6


@pytest.mark.parametrize("seed", [9, 10])
def test_streams_that_share_the_noise_of_their_lots_stay_one_effect(seed: int) -> None:
    """Beside each other such streams are told apart by next to nothing: an effect on all of them
    must neither be cut into streams nor leave a part of itself behind."""
    fault = Fault({"resist_batch": "B7"}, {FILM: -2.5}, start=17.5)
    evidence = replace(BAY, shared=0.95).with_faults(fault).simulate(seed)
    (effect,) = attribute(evidence, OPTIONS, NOW * DAY)
    assert effect.level == Level(("resist_batch",), ("B7",))
    lead = effect.sizes[effect.leading]
    sizes = [s for s in effect.series if evidence.family[s.series] == lead.family]
    away = np.array([(s.value - lead.value) / s.se for s in sizes])
    assert len(away) >= 9
    assert np.abs(away).max() < 4.0
    assert np.mean(away**2) < 4.0


@pytest.mark.parametrize("seed", [3, 5])
def test_wafers_of_one_lot_at_different_times_are_not_told_apart_by_an_onset(seed: int) -> None:
    """A window that cut a lot in two would take the lot's common part for an effect."""
    evidence = BAY.simulate(seed)
    later = np.random.default_rng(seed).uniform(0.0, 2400.0, len(evidence.series))
    assert evidence.t_level is not None
    jittered = replace(
        evidence,
        t_process=evidence.t_process + later,
        t_measure=evidence.t_measure + later,
        t_level=evidence.t_level + later[:, None],
    )
    state = State.of(jittered, OPTIONS)
    for column in state.columns:
        whole = jittered.lot * jittered.n_families + jittered.cell_family
        _, at = np.unique(np.stack([whole, column.codes]), axis=1, return_inverse=True)
        first = np.full(at.max() + 1, np.inf)
        np.minimum.at(first, at.ravel(), column.time)
        assert np.array_equal(first[at.ravel()], column.time)
        assert np.all(column.last >= column.time)
    assert attribute(jittered, replace(OPTIONS, alpha=0.02), NOW * DAY + 2400.0) == ()


def test_a_drifting_cup_is_one_drift_of_its_tool_and_module() -> None:
    where = {"coat.tool": "T2", "coat.module": "C3"}
    fault = Fault(where, {FILM: 5.0}, start=15.0, ramp=4.0, form="drift")
    (effect,) = find(fault)
    own = Level(("tool", "module"), ("T2", "C3"))
    assert own in (effect.level, *effect.aliased_with)
    assert effect.level.names == own.names
    assert effect.form == "drift"
    assert effect.drift is not None
    slope, se = effect.drift.per_second * DAY, np.sqrt(effect.drift.covariance[1, 1]) * DAY
    assert abs(slope - 5.0 * 1.265 / 4.0) < 3.0 * se
    # One thing under two names: no lot can tell a tool from itself.
    assert effect.separations == ()


def test_a_gauge_is_told_from_the_tools_it_measures() -> None:
    (effect,) = find(Fault({"gauge": "FB"}, {FILM: 2.0}, start=START))
    assert effect.level == Level(("gauge",), ("FB",))
    assert effect.onset.axis == "t_measure"
    assert covers(effect, START)
    assert any(r.reason == "members-quiet" for r in effect.ruled_out)


def test_two_faults_in_one_night_stay_two() -> None:
    found = find(
        Fault({"gauge": "FB"}, {FILM: 2.5}, start=START),
        Fault({"tool": "S2"}, {(2, "scale-x"): 3.0}, start=START + 0.2),
    )
    assert {e.level for e in found} == {Level(("gauge",), ("FB",)), Level(("tool",), ("S2",))}


def test_one_bad_lot_is_a_spike() -> None:
    fault = Fault({"coat.tool": "T1"}, {FILM: 6.0, WIDTH: 3.0}, start=18.3, lots=1, form="spike")
    (effect,) = find(fault)
    assert effect.form == "spike"
    assert len(effect.lots) == 1
    assert Level(("coat.tool",), ("T1",)) in (effect.level, *effect.aliased_with)


def test_spread_without_a_shift_is_spread_and_a_bowl_is_a_map() -> None:
    cup = {"tool": "T3", "module": "C2"}
    (spread,) = find(Fault(cup, {(0, "within-wafer"): 3.0}, start=16.0))
    assert (spread.form, spread.level) == ("spread", Level(("tool", "module"), ("T3", "C2")))
    (bowl,) = find(Fault(cup, {(0, "bowl"): 3.0, (0, "map-distance"): 2.5}, start=16.0))
    assert bowl.form == "map"
    assert moved(bowl) == {(0, "bowl"), (0, "map-distance")}


def test_a_reticle_moves_its_lots_only() -> None:
    (effect,) = find(Fault({"reticle": "R2"}, {WIDTH: 3.0}, start=16.0))
    assert effect.level == Level(("reticle",), ("R2",))
    assert all(s.points > 0 for s in effect.series)


def test_a_quiet_bay_gives_nothing() -> None:
    assert find(seed=3, options=replace(OPTIONS, alpha=0.02)) == []


def test_an_ended_fault_is_reported_with_its_end() -> None:
    fault = Fault({"coat.tool": "T2"}, {FILM: 3.0, WIDTH: 1.5}, start=14.0, end=17.0)
    options = replace(OPTIONS, since=None)
    (effect,) = find(fault, options=options)
    assert effect.end is not None
    assert 16.0 * DAY < effect.end < 17.5 * DAY


def test_a_continuing_effect_keeps_its_identity() -> None:
    evidence = BAY.with_faults(
        Fault({"coat.tool": "T1"}, {FILM: 2.5, WIDTH: 1.2}, start=16.3)
    ).simulate(2)
    first = attribute(evidence, replace(OPTIONS, since=17.23 * DAY), 18.23 * DAY)
    assert len(first) == 1
    second = attribute(evidence, OPTIONS, NOW * DAY, first)
    assert [e.previous for e in second] == [0]
    assert len(second[0].lots) > len(first[0].lots)
    assert second[0].sizes[second[0].leading].se < first[0].sizes[first[0].leading].se


def test_nothing_measured_later_than_the_clock_is_looked_at() -> None:
    evidence = BAY.with_faults(Fault({"gauge": "FB"}, {FILM: 4.0}, start=18.5)).simulate(1)
    assert attribute(evidence, replace(OPTIONS, since=16.5 * DAY), 18.5 * DAY) == ()


def test_equal_arguments_give_equal_effects() -> None:
    evidence = small_evidence()
    moved_up = replace(evidence, residual=evidence.residual + 4.0 * (np.arange(24) >= 14))
    a, b = (attribute(moved_up, AttributionOptions(), 1e9) for _ in range(2))
    assert [(e.level, e.onset, e.p_adjusted) for e in a] == [
        (e.level, e.onset, e.p_adjusted) for e in b
    ]
    assert [e.level for e in a] == [Level(("tool",), ("T1",))]
    assert a[0].onset.lot == 14


def test_aliased_levels_are_named_together_with_an_experiment() -> None:
    """A batch that only ever ran on the moved tool, from the onset on, cannot be told from it."""
    fault = Fault({"tool": "S1"}, {WIDTH: 3.0}, start=16.0)
    evidence = BAY.with_faults(fault).simulate(7)
    j = evidence.factors.index("resist_batch")
    on = (evidence.t_process >= 16.0 * DAY) & (evidence.levels[:, 0] == FIRST_SCANNER)
    levels = evidence.levels.copy()
    levels[:, j] = np.where(on, 90, levels[:, j])
    effects = attribute(replace(evidence, levels=levels), OPTIONS, NOW * DAY)
    (effect,) = [e for e in effects if (WIDTH in moved(e))]
    names = {effect.level, *effect.aliased_with}
    assert {Level(("tool",), ("S1",)), Level(("resist_batch",), ("B90",))} <= names
    assert {e.instead_of for e in effect.separations} & names
    assert all(e.with_level != e.instead_of for e in effect.separations)


def small_evidence(seed: int = 0, n: int = 24) -> Evidence:
    """One series, one tool, independent points: small enough for dense algebra."""
    rng = np.random.default_rng(seed)
    time = np.sort(rng.uniform(0.0, 10.0, n)) * DAY
    one = np.zeros(n, dtype=np.int64)
    return Evidence(
        series=one, point=np.arange(n), lot=np.arange(n), t_process=time, t_measure=time,
        residual=rng.standard_normal(n) * 1.2, var_own=np.full(n, 0.6), var_lot=np.full(n, 0.9),
        monitoring=np.ones(n, dtype=bool), levels=one[:, None], factors=("tool",),
        level_names=(("T1",),), family=np.array([0]), characteristic=np.array([0]),
        statistic=("mean",), var_center=np.array([0.05]), phi=np.array([0.0]),
    )  # fmt: skip


def test_score_is_the_bayes_factor_of_the_dense_normal_model() -> None:
    """Reference: scipy.stats.multivariate_normal on the whole covariance, written out."""
    from scipy.stats import multivariate_normal

    evidence = small_evidence()
    n = len(evidence.series)
    state = State.of(evidence, AttributionOptions())
    noise = state.noise
    plan = state.plans[0]
    y = state.whitened(evidence.residual)
    step = plan.windows[0]
    total = plan.model.total(np.array([y.sum()]), np.array([y.sum()]))
    base = np.diag(noise.own + noise.lot) + noise.center[0]
    tau2 = (2.5 * noise.sigma[0]) ** 2
    for first in (3, 11, 20):
        x = (np.arange(n) >= first).astype(float)
        expected = multivariate_normal(np.zeros(n), base + tau2 * np.outer(x, x)).logpdf(
            evidence.residual
        ) - multivariate_normal(np.zeros(n), base).logpdf(evidence.residual)
        at = plan.edges.shape[1] - n + first
        score = np.zeros((1, plan.edges.shape[1]))
        score[0, at] = y[first:].sum()
        assert step.terms.log_bayes(score, total)[0, at] == pytest.approx(expected, abs=1e-8)


def test_priors_add_up_to_one() -> None:
    """So that exp(score) bounds the tail (Markov): over columns, levels, onsets and shapes."""
    state = State.of(BAY.simulate(1), AttributionOptions())
    total = sum(float(np.exp(w.prior).sum()) for plan in state.plans for w in plan.windows)
    searched = len(state.plans)
    # The whole characteristic has a tenth of a factor's weight.
    assert total == pytest.approx((searched - 0.9) / searched, rel=1e-6)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"var_own": np.zeros(24)}, "var_own"),
        ({"residual": np.full(24, np.nan)}, "residual: entry 0"),
        ({"phi": np.array([1.0])}, "phi"),
        ({"levels": np.full((24, 1), 5)}, "'tool' has a code without a level name"),
        ({"series": np.full(24, 3)}, "series: code 3"),
        ({"lot": np.arange(5)}, "lot: shape"),
        ({"statistic": ()}, "statistic"),
    ],
)
def test_bad_evidence_is_named(change: dict[str, object], message: str) -> None:
    with pytest.raises(ValueError, match=message):
        replace(small_evidence(), **change)


def test_bad_options_are_named() -> None:
    with pytest.raises(ValueError, match="alpha"):
        AttributionOptions(alpha=0.0)
    with pytest.raises(ValueError, match="conjunctions: 'x'"):
        attribute(small_evidence(), AttributionOptions(conjunctions=(("tool", "x"),)), 1e9)


def test_no_cells_give_no_effects() -> None:
    assert attribute(small_evidence(), AttributionOptions(), -1.0) == ()

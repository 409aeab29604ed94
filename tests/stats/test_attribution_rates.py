"""How the p-values and the search behave over many nights; the long runs are marked slow."""

from __future__ import annotations

import numpy as np
import pytest

from spc.stats.attribution_calibration import Calibration
from tests.benchmarks.bench_attribution import Tally, scenarios, watch
from tests.stats.attribution_bay import Bay


def test_expected_false_effects_fall_with_the_score_and_keep_the_markov_bound() -> None:
    draws = np.sort(-np.random.default_rng(3).exponential(1.0, 4000) - 1.0)[::-1]
    calibration = Calibration(draws, 20)
    scores = np.linspace(-6.0, 12.0, 60)
    expected = np.array([calibration.expected(float(s)) for s in scores])
    assert np.all(np.diff(expected) <= 1e-12)
    p = np.array([calibration.p_value(float(s)) for s in scores])
    assert np.all(p <= np.minimum(1.0, np.exp(-scores)) + 1e-12)
    # Counted where there is something to count: 2000 of 20 draws lie above the median.
    assert calibration.expected(float(np.median(draws))) == pytest.approx(100.0, rel=0.01)
    # Carried on as exp(-score) beyond the last twenty.
    ratio = calibration.expected(5.0) / calibration.expected(6.0)
    assert ratio == pytest.approx(np.e, rel=1e-9)


def test_a_close_look_bounds_the_p_value_too() -> None:
    calibration = Calibration(np.empty(0), 0)
    assert calibration.p_value(2.0, close=5.0) == pytest.approx(np.exp(-5.0))


@pytest.mark.slow
def test_quiet_nights_stay_within_the_rate() -> None:
    tally = Tally()
    alpha = 0.2
    for seed in range(700, 708):
        watch(tally, Bay(), (), seed, 0, alpha)
    # Poisson: mean at most alpha a night; three standard deviations of grace.
    mean = alpha * tally.nights
    assert tally.false <= mean + 3.0 * np.sqrt(mean)


@pytest.mark.slow
@pytest.mark.parametrize("name", ["batch", "track-shift", "bowl", "gauge", "two"])
def test_faults_are_found_named_and_bounded(name: str) -> None:
    tally = Tally()
    for seed in range(800, 810):
        faults = scenarios(np.random.default_rng(seed))[name]
        watch(tally, Bay(), faults, seed, 4, 0.2)
    assert tally.found >= 0.95 * tally.faults
    assert tally.effects <= 1.2 * tally.found
    assert tally.aliased >= 0.9 * tally.found
    assert tally.form >= 0.8 * tally.found
    assert tally.covered >= 0.75 * tally.found  # 95 % in the long run; ten faults tell no more

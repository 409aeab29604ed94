"""Autocorrelation: estimates, run rules and residuals against exact values and simulation."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy import stats

from spc.stats.ar1_chain import ar1_signals, log_factors
from spc.stats.ar1_table import PHI, TABLE
from spc.stats.autocorrelation import (
    ar1_baseline,
    false_signal_factor,
    lag1,
    residual_chart,
)

FOUR = ("beyond-3s", "2of3-beyond-2s", "4of5-beyond-1s", "8-one-side")


def ar1(rng: np.random.Generator, phi: float, shape: tuple[int, int]) -> NDArray[np.float64]:
    """Stationary AR(1) streams of unit variance, one a row."""
    from scipy.signal import lfilter

    noise = rng.normal(size=shape)
    start = noise[:, :1].copy()
    noise[:, 1:] *= np.sqrt(1 - phi**2)
    out, _ = lfilter([1.0], [1.0, -phi], noise[:, 1:], axis=1, zi=phi * start)
    return np.concatenate([start, out], axis=1)


def codes(x: NDArray[np.float64]) -> NDArray[np.int64]:
    return np.repeat(np.arange(x.shape[0]), x.shape[1])


@pytest.mark.parametrize("phi", [-0.4, 0.0, 0.3, 0.6])
@pytest.mark.parametrize("n", [30, 100])
def test_bias_is_removed_and_the_interval_covers(phi: float, n: int) -> None:
    # Kendall (1954), Marriott & Pope (1954), Biometrika 41: E r1 = phi - (1 + 4 phi) / n.
    x = ar1(np.random.default_rng(7), phi, (3000, n))
    found = lag1(x.ravel(), stream=codes(x))
    error = found.raw.std() / np.sqrt(3000)
    assert found.raw.mean() == pytest.approx(phi - (1 + 4 * phi) / n, abs=4 * error + 0.6 / n**1.5)
    assert found.phi.mean() == pytest.approx(phi, abs=4 * error + 0.6 / n**1.5)
    if phi >= 0:
        assert abs(found.phi.mean() - phi) < abs(found.raw.mean() - phi)
    cover = ((found.low <= phi) & (phi <= found.high)).mean()
    assert 0.9 <= cover <= 0.975


def test_lag1_is_the_textbook_ratio_and_agrees_with_statsmodels() -> None:
    from statsmodels.tsa.stattools import acf

    rng = np.random.default_rng(3)
    x = np.cumsum(rng.normal(size=40))
    found = lag1(x)
    assert float(found.raw[0]) == pytest.approx(acf(x, nlags=1, fft=False)[1], rel=1e-12)
    assert float(found.phi[0]) == pytest.approx(min((40 * found.raw[0] + 1) / 36, 0.95))
    assert bool(found.significant[0])


@settings(max_examples=25, deadline=None)
@given(seed=st.integers(0, 10**6), shift=st.floats(-1e3, 1e3), scale=st.floats(1e-2, 1e2))
def test_lag1_does_not_see_shift_scale_or_other_streams(
    seed: int, shift: float, scale: float
) -> None:
    rng = np.random.default_rng(seed)
    x = rng.normal(size=(4, 12))
    many = lag1(x.ravel(), stream=codes(x))
    mixed = rng.permutation(48)
    order = mixed[np.argsort(mixed % 12, kind="stable")]  # streams shuffled, time kept
    again = lag1(-scale * x.ravel()[order] + shift, stream=codes(x)[order])
    np.testing.assert_allclose(again.raw, many.raw, atol=1e-7)
    for i in range(4):
        assert float(lag1(x[i]).phi[0]) == pytest.approx(float(many.phi[i]), abs=1e-12)


def test_short_and_constant_streams_have_no_estimate() -> None:
    assert np.isnan(lag1(np.arange(7.0)).phi[0])
    assert np.isnan(lag1(np.full(20, 1200.1)).phi[0])
    assert not lag1(np.full(20, 1200.1)).significant[0]
    with pytest.raises(ValueError, match="confidence"):
        lag1(np.arange(9.0), confidence=95)
    with pytest.raises(ValueError, match=r"values\[1\] is nan"):
        lag1([1.0, np.nan, 2.0])


@pytest.mark.parametrize("phi", [-0.5, 0.0, 0.4, 0.9])
@pytest.mark.parametrize("m", [2, 5, 30])
def test_baseline_moments_by_full_matrices(phi: float, m: int) -> None:
    effect = ar1_baseline(phi, m)
    lag = np.abs(np.subtract.outer(np.arange(m), np.arange(m)))
    r = np.where(lag == 0, 1.0, phi**lag) if phi else np.eye(m)
    a = np.eye(m) - 1.0 / m
    ar = a @ r
    assert float(effect.variance_bias[0]) == pytest.approx(np.trace(ar) / (m - 1), rel=1e-10)
    assert float(effect.mean_factor[0]) == pytest.approx(r.sum() / m, rel=1e-12)
    assert float(effect.df[0]) == pytest.approx(np.trace(ar) ** 2 / np.trace(ar @ ar), rel=1e-8)
    assert float(effect.df_factor[0]) == pytest.approx(float(effect.df[0]) / (m - 1))


def test_baseline_moments_of_many_streams_at_once() -> None:
    phi, m = np.array([0.2, 0.7, -0.3]), np.array([10, 40, 25])
    many = ar1_baseline(phi, m)
    for i in range(3):
        one = ar1_baseline(phi[i], m[i])
        for name in ("variance_bias", "mean_factor", "df", "df_factor"):
            assert getattr(many, name)[i] == pytest.approx(getattr(one, name)[0], rel=1e-12)
    with pytest.raises(ValueError, match="phi"):
        ar1_baseline(1.0, 30)
    with pytest.raises(ValueError, match="two points"):
        ar1_baseline(0.5, 1)


@pytest.mark.parametrize(
    ("rules", "arl"),
    [
        (FOUR[:1], 370.40),
        (FOUR[:2], 225.44),
        ((FOUR[0], FOUR[2]), 166.05),
        ((FOUR[0], FOUR[3]), 152.73),
        (FOUR, 91.75),
    ],
)
def test_run_rules_without_autocorrelation(rules: tuple[str, ...], arl: float) -> None:
    # Champ & Woodall (1987), Technometrics 29, in-control average run lengths.
    assert ar1_signals(0.0, rules).arl == pytest.approx(arl, abs=0.006)


def test_rule_one_against_an_integral_equation() -> None:
    # Independent route: ARL of |z| > 3 on an AR(1) as a Fredholm equation on [-3, 3], solved by
    # Nystroem's method: L(x) = 1 + integral of k(x, y) L(y), then averaged over the first point.
    node, weight = np.polynomial.legendre.leggauss(80)
    y, w = 3 * node, 3 * weight
    for phi in (-0.4, 0.3, 0.8):
        sd = np.sqrt(1 - phi**2)
        kernel = stats.norm.pdf(y[None, :], phi * y[:, None], sd) * w
        length = np.linalg.solve(np.eye(80) - kernel, np.ones(80))
        arl = 1.0 + float((stats.norm.pdf(y) * w) @ length)
        found = ar1_signals(phi, ("beyond-3s",))
        assert found.arl == pytest.approx(arl, rel=1e-8)
        assert found.rate == pytest.approx(2 * stats.norm.sf(3), rel=1e-8)


def test_all_rules_by_simulation() -> None:
    # The evaluator of the rules on simulated streams, an independent route to both numbers.
    from spc.stats.rules import evaluate, parse_rules

    phi, n, streams = 0.4, 400, 2000
    x = ar1(np.random.default_rng(17), phi, (streams, n))
    hit = evaluate(x, parse_rules(FOUR)).any
    exact = ar1_signals(phi, FOUR)
    share = hit[:, 10:].mean(axis=1)
    assert abs(share.mean() - exact.rate) < 4 * share.std() / np.sqrt(streams)
    first = np.where(hit.any(axis=1), hit.argmax(axis=1) + 1, n)
    assert (first == n).mean() < 1e-3
    assert abs(first.mean() - exact.arl) < 4 * first.std() / np.sqrt(streams)


def test_table_holds_what_its_generator_computes() -> None:
    assert len(TABLE) == 15
    assert PHI[0] == -0.5
    assert PHI[-1] == 0.95
    for key in (("beyond-3s",), tuple(sorted(FOUR))):
        some = (12, 20, 32)
        run, point = log_factors(key, [PHI[i] for i in some])
        np.testing.assert_allclose([TABLE[key][0][i] for i in some], run, atol=6e-6)
        np.testing.assert_allclose([TABLE[key][1][i] for i in some], point, atol=6e-6)


def test_factor_between_the_grid_points_and_ends() -> None:
    calm = ar1_signals(0.0, FOUR)
    for phi in (0.1125, 0.5125):
        exact = ar1_signals(phi, FOUR)
        run = float(false_signal_factor(phi))
        assert run == pytest.approx(calm.arl / exact.arl, rel=2e-3)
        point = float(false_signal_factor(phi, per="point"))
        assert point == pytest.approx(exact.rate / calm.rate, rel=2e-3)
    np.testing.assert_allclose(false_signal_factor([0.0, 0.0]), 1.0)
    assert float(false_signal_factor(0.99)) == float(false_signal_factor(0.95))
    # The order of the rules does not matter, and rule 1 alone keeps its share of points.
    assert float(false_signal_factor(0.5, FOUR[::-1])) == float(false_signal_factor(0.5))
    assert float(false_signal_factor(0.7, ["beyond-3s"], per="point")) == pytest.approx(1.0)
    assert float(false_signal_factor(0.7, ["beyond-3s"])) < 1.0
    with pytest.raises(ValueError, match='"run" or "point"'):
        false_signal_factor(0.1, per="night")
    with pytest.raises(ValueError, match="NaN"):
        false_signal_factor(np.nan)
    with pytest.raises(ValueError, match="compares values"):
        false_signal_factor(0.1, ["6-trending"])


def test_factor_of_rules_outside_the_table(monkeypatch: pytest.MonkeyPatch) -> None:
    from spc.stats import autocorrelation

    monkeypatch.setattr(autocorrelation, "PHI", (-0.2, 0.0, 0.2, 0.4))
    autocorrelation._computed.cache_clear()
    found = float(false_signal_factor(0.4, ["9-one-side"]))
    exact = ar1_signals(0.0, ["9-one-side"]).arl / ar1_signals(0.4, ["9-one-side"]).arl
    assert found == pytest.approx(exact, rel=1e-9)
    autocorrelation._computed.cache_clear()


def test_residuals_are_independent_and_standard() -> None:
    rng = np.random.default_rng(23)
    phi, shape = 0.6, (400, 200)
    sigma = rng.uniform(1.0, 3.0, shape)  # sigma of each point follows its sample size
    x = 50.0 + sigma * ar1(rng, phi, shape)
    chart = residual_chart(x.ravel(), 50.0, phi, sigma=sigma.ravel(), stream=codes(x))
    z = chart.z.reshape(shape)
    assert z.mean() == pytest.approx(0.0, abs=0.01)
    assert z.std() == pytest.approx(1.0, abs=0.01)
    assert (z[:, 1:] * z[:, :-1]).mean() == pytest.approx(0.0, abs=0.01)
    assert chart.first.reshape(shape)[:, 0].all()
    assert chart.first.sum() == 400
    np.testing.assert_allclose((x.ravel() - chart.predicted) / chart.sigma, chart.z, atol=1e-12)
    # False alarms beyond 3 are back at the promised rate.
    rate = (np.abs(z) > 3).mean()
    assert abs(rate - 2 * stats.norm.sf(3)) < 4 * np.sqrt(0.0027 / z.size)


def test_residuals_of_a_shift_and_after_a_gap() -> None:
    x = np.array([0.0, 0.0, 2.0, 2.0, np.nan, 2.0])
    chart = residual_chart(x, 0.0, 0.5)
    unit = np.sqrt(0.75)
    np.testing.assert_allclose(chart.z[:4], [0.0, 0.0, 2.0 / unit, 1.0 / unit])
    assert np.isnan(chart.z[4])
    assert chart.z[5] == 2.0
    np.testing.assert_array_equal(chart.first, [True, False, False, False, False, True])
    # Streams that lie mixed in the input are told apart, in the order given.
    mixed = residual_chart([1.0, 5.0, 2.0, 6.0], 0.0, 0.5, stream=[0, 1, 0, 1])
    np.testing.assert_allclose(mixed.z * [1, 1, unit, unit], [1.0, 5.0, 1.5, 3.5])
    with pytest.raises(ValueError, match="phi"):
        residual_chart([1.0], 0.0, 1.0)
    with pytest.raises(ValueError, match="sigma"):
        residual_chart([1.0], 0.0, 0.5, sigma=0.0)


@pytest.mark.slow
@pytest.mark.parametrize("phi", [-0.3, 0.2, 0.6, 0.9])
@pytest.mark.parametrize("rules", [FOUR[:2], (FOUR[0], FOUR[2]), (FOUR[0], FOUR[3]), FOUR])
def test_factors_by_long_simulation(phi: float, rules: tuple[str, ...]) -> None:
    from spc.stats.rules import evaluate, parse_rules

    n, streams = 4000, 3000
    x = ar1(np.random.default_rng(29), phi, (streams, n))
    hit = evaluate(x, parse_rules(rules)).any
    exact = ar1_signals(phi, rules)
    share = hit[:, 10:].mean(axis=1)
    assert abs(share.mean() - exact.rate) < 4 * share.std() / np.sqrt(streams)
    ended = hit.any(axis=1)
    assert ended.mean() > 0.999
    first = np.where(ended, hit.argmax(axis=1) + 1, n)
    assert abs(first.mean() - exact.arl) < 4.5 * first.std() / np.sqrt(streams) + 0.5

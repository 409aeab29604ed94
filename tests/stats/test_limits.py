"""Limits against closed forms, scipy's distributions, handbook charts and simulated rates."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from spc.stats.autocorrelation import ar1_baseline
from spc.stats.components import Components, WaferSummary, nested_components
from spc.stats.constants import c4
from spc.stats.limits import (
    LimitOptions,
    distance_limit,
    distance_score,
    false_alarm_rate_given_baseline,
    mean_limits,
    spread_limits,
    spread_population,
    spread_score,
    wafer_spread_limits,
    within_limits,
)
from spc.stats.tails import chi2_score, f_score, t_score

WIDE = LimitOptions(widen=True)
ALPHA = 2 * stats.norm.sf(3.0)


def baselines(
    rng: np.random.Generator,
    n_streams: int,
    n_lots: int,
    n_wafers: int = 1,
    n_sites: int = 1,
    sigmas: tuple[float, float, float] = (1.0, 0.0, 0.0),
) -> Components:
    lot = np.repeat(np.arange(n_streams * n_lots), n_wafers)
    mean = sigmas[0] * rng.normal(size=n_streams * n_lots)[lot]
    mean = mean + sigmas[1] * rng.normal(size=lot.size)
    mean = mean + sigmas[2] / np.sqrt(n_sites) * rng.normal(size=lot.size)
    ss = sigmas[2] ** 2 * rng.chisquare(max(n_sites - 1, 1), size=lot.size) * (n_sites > 1)
    sites = np.full(lot.size, n_sites)
    return nested_components(WaferSummary(lot // n_lots, lot, sites, mean, ss))


def test_thirty_points_more_than_double_the_false_alarms() -> None:
    # The t distribution with 29 df and sqrt(1 + 1/30): 0.0062 against 0.0027.
    assert float(false_alarm_rate_given_baseline(30)) == pytest.approx(0.0062, abs=5e-5)
    assert float(false_alarm_rate_given_baseline(np.inf)) == pytest.approx(ALPHA, rel=1e-12)
    t = 3 / np.sqrt(1 + 1 / 30)
    assert float(false_alarm_rate_given_baseline(30)) == pytest.approx(2 * stats.t.sf(t, 29))
    known_sigma = float(false_alarm_rate_given_baseline(30, np.inf))
    assert known_sigma == pytest.approx(2 * stats.norm.sf(t))
    falling = false_alarm_rate_given_baseline([5, 10, 30, 100, 1000])
    assert (np.diff(falling) < 0).all()
    with pytest.raises(ValueError, match="at least one point"):
        false_alarm_rate_given_baseline(0)


def test_rates_of_plain_and_widened_limits_by_simulation() -> None:
    # Each stream sets limits from 30 lots, then sees new lots: the share outside, exact in the
    # mean over baselines, is computed from the normal law for each stream (no second simulation).
    rng = np.random.default_rng(41)
    m, streams = 30, 20_000
    fit = baselines(rng, streams, m)
    at = np.arange(streams)

    def rate(options: LimitOptions) -> tuple[float, float]:
        limits = mean_limits(fit, 1, 1, stream=at, options=options)
        outside = stats.norm.sf(limits.upper) + stats.norm.cdf(limits.lower)
        return float(outside.mean()), float(outside.std() / np.sqrt(streams))

    plain, error = rate(LimitOptions())
    assert abs(plain - float(false_alarm_rate_given_baseline(m))) < 4 * error
    wide, error = rate(WIDE)
    assert abs(wide - ALPHA) < 4 * error
    strict, error = rate(LimitOptions(alpha=0.001, widen=True))
    assert abs(strict - 0.001) < 4 * error


@pytest.mark.parametrize(("lots", "rel"), [(30, 0.1), (12, 0.5)])
@pytest.mark.parametrize("new", [(1, 5), (3, 5), (6, 9)])
def test_widened_limits_follow_the_nested_sample(
    lots: int, rel: float, new: tuple[int, int]
) -> None:
    # Lots of 3 wafers of 5 sites; the new lot is sampled otherwise. Satterthwaite's approximation
    # holds the rate: 0.0025 to 0.0027 after 30 lots, 0.0014 to 0.0033 after 12, where plain
    # limits give up to 0.0068 and 0.018.
    rng = np.random.default_rng(43)
    streams, sigmas = 8_000, (1.0, 0.6, 0.5)
    fit = baselines(rng, streams, lots, 3, 5, sigmas)
    at = np.arange(streams)
    n_w, n_s = new
    true = np.sqrt(1.0 + 0.36 / n_w + 0.25 / (n_w * n_s))
    rates = []
    for options in (LimitOptions(), WIDE):
        limits = mean_limits(fit, n_w, n_s, stream=at, options=options)
        outside = stats.norm.sf(limits.upper / true) + stats.norm.cdf(limits.lower / true)
        rates.append(float(outside.mean()))
    assert rates[0] > 1.6 * ALPHA
    assert rates[1] == pytest.approx(ALPHA, rel=rel)


def test_sigma_follows_each_points_sample_size() -> None:
    fit = baselines(np.random.default_rng(1), 2, 20, 3, 5, (1.0, 0.7, 0.5))
    n_w, n_s = np.array([3, 1, 2]), np.array([5, 9, 4])
    for stream in (0, 1):
        limits = mean_limits(fit, n_w, n_s, stream=stream)
        s2 = fit.lot[stream] + fit.wafer[stream] / n_w + fit.site[stream] / (n_w * n_s)
        np.testing.assert_allclose(limits.sigma, np.sqrt(s2), rtol=1e-13)
        np.testing.assert_allclose(limits.upper - limits.center, 3 * np.sqrt(s2), rtol=1e-12)
        np.testing.assert_allclose(limits.center, fit.mean[stream])
        np.testing.assert_allclose(limits.standardise(limits.upper), 3.0, rtol=1e-12)
        np.testing.assert_allclose(limits.scores(limits.lower), -3.0, rtol=1e-12)
    wafer = mean_limits(fit, 7, 5, options=LimitOptions(point="wafer"))
    assert float(wafer.sigma) ** 2 == pytest.approx(fit.lot[0] + fit.wafer[0] + fit.site[0] / 5)


def test_widened_limits_of_a_plain_sample_are_the_prediction_interval() -> None:
    fit = baselines(np.random.default_rng(2), 1, 25)
    limits = mean_limits(fit, 1, 1, options=WIDE)
    half = stats.t.isf(ALPHA / 2, 24) * np.sqrt(fit.lot[0] * (1 + 1 / 25))
    assert float(limits.upper - limits.center) == pytest.approx(half, rel=1e-9)
    assert float(limits.standardise(limits.upper)) == pytest.approx(3.0, rel=1e-9)
    assert float(limits.scores(limits.upper)) == pytest.approx(3.0, rel=1e-6)
    # The same from the number of baseline points alone.
    other = mean_limits(fit, 1, 1, baseline_lots=25, options=WIDE)
    assert float(other.upper) == pytest.approx(float(limits.upper), rel=1e-9)
    # A centre set by hand has no error of its own.
    hand = mean_limits(fit, 1, 1, center=0.5, options=WIDE)
    half = stats.t.isf(ALPHA / 2, 24) * np.sqrt(fit.lot[0])
    assert float(hand.upper) == pytest.approx(0.5 + half, rel=1e-9)


def test_limits_correct_for_autocorrelation_of_the_baseline() -> None:
    # AR(1) lots, phi 0.5, 30 a baseline: uncorrected limits are too narrow, corrected ones hold.
    rng = np.random.default_rng(47)
    streams, m, phi = 20_000, 30, 0.5
    z = rng.normal(size=(streams, m))
    for t in range(1, m):
        z[:, t] = phi * z[:, t - 1] + np.sqrt(1 - phi**2) * z[:, t]
    lot = np.arange(z.size)
    fit = nested_components(
        WaferSummary(lot // m, lot, np.ones_like(lot), z.ravel(), np.zeros(z.size))
    )
    at = np.arange(streams)
    serial = ar1_baseline(np.full(streams, phi), m)
    plain = mean_limits(fit, 1, 1, stream=at, options=WIDE)
    fixed = mean_limits(fit, 1, 1, stream=at, options=replace(WIDE, serial=serial))
    rates = [
        float((stats.norm.sf(x.upper) + stats.norm.cdf(x.lower)).mean()) for x in (plain, fixed)
    ]
    assert rates[0] > 2 * ALPHA
    assert rates[1] == pytest.approx(ALPHA, rel=0.15)


def test_streams_without_a_lot_component_have_no_limits() -> None:
    fit = baselines(np.random.default_rng(3), 1, 1, 5, 4, (1.0, 0.5, 0.5))
    limits = mean_limits(fit, 3, 4)
    assert np.isnan([limits.sigma, limits.lower, limits.upper]).all()
    with pytest.raises(ValueError, match="at least two points"):
        mean_limits(fit, 3, 4, baseline_lots=1)
    with pytest.raises(ValueError, match="alpha"):
        LimitOptions(alpha=1.5)
    with pytest.raises(ValueError, match="n_sigma"):
        LimitOptions(n_sigma=0)
    with pytest.raises(ValueError, match='"lot" or "wafer"'):
        LimitOptions(point="site")


@settings(max_examples=25, deadline=None)
@given(seed=st.integers(0, 10**6), shift=st.floats(-1e3, 1e3), scale=st.floats(1e-2, 1e2))
def test_limits_move_with_the_data(seed: int, shift: float, scale: float) -> None:
    rng = np.random.default_rng(seed)
    lot = np.repeat(np.arange(10), 2)
    mean, ss = rng.normal(size=10)[lot] + rng.normal(size=20), rng.chisquare(4, size=20)
    sites = np.full(20, 5)
    plain = nested_components(WaferSummary(np.zeros_like(lot), lot, sites, mean, ss))
    moved = nested_components(
        WaferSummary(np.zeros_like(lot), lot, sites, scale * mean + shift, scale**2 * ss)
    )
    for options in (LimitOptions(), WIDE):
        a, b = (mean_limits(c, 2, 5, options=options) for c in (plain, moved))
        span = float(b.upper - b.lower)
        assert float(b.upper) == pytest.approx(scale * float(a.upper) + shift, abs=1e-6 * span)
        assert float(b.lower) == pytest.approx(scale * float(a.lower) + shift, abs=1e-6 * span)


def test_flow_rate_chart_of_the_handbook(shared_reference: Callable[[str], Any]) -> None:
    # NIST/SEMATECH e-Handbook 6.3.2.2: individuals with sigma from the moving range. Our limits of
    # a given centre and sigma are the same arithmetic; sigma = mean moving range / d2(2).
    from spc.stats.constants import d2

    example = shared_reference("handbook_chart_examples.json")["entries"][0]
    x = np.array(example["data"])
    sigma = np.abs(np.diff(x)).mean() / float(d2(2))
    fit = baselines(np.random.default_rng(0), 1, 5)
    known = {"mean": np.array([x.mean()]), "lot": np.array([sigma**2])}
    limits = mean_limits(replace(fit, **known), 1, 1)
    expected = example["computed_with_exact_d2"]
    assert float(limits.upper) == pytest.approx(expected["ucl"], rel=1e-9)
    assert float(limits.lower) == pytest.approx(expected["lcl"], rel=1e-9)


@pytest.mark.parametrize("df", [1, 2, 8, 24, 200])
def test_spread_limits_are_chi_square_limits(df: int) -> None:
    limits = spread_limits(2.0, df)
    upper = 2.0 * np.sqrt(stats.chi2.isf(ALPHA / 2, df) / df)
    lower = 2.0 * np.sqrt(stats.chi2.ppf(ALPHA / 2, df) / df)
    assert float(limits.upper) == pytest.approx(upper, rel=1e-9)
    assert float(limits.lower) == pytest.approx(lower, rel=1e-9)
    assert float(limits.center) == pytest.approx(2.0 * np.sqrt(stats.chi2.median(df) / df))
    assert float(limits.sigma) == pytest.approx(2.0 * np.sqrt(1 - float(c4(df + 1)) ** 2))
    # The scores of the limits and of the centre are those of a normal chart.
    values = [float(limits.lower), float(limits.center), float(limits.upper)]
    np.testing.assert_allclose(spread_score(values, 2.0, df), [-3.0, 0.0, 3.0], atol=1e-8)


def test_streams_without_variation_have_limits_on_the_centre() -> None:
    lot = np.repeat(np.arange(6), 2)
    still = WaferSummary(np.zeros_like(lot), lot, np.full(12, 4), np.full(12, 1200.1), np.zeros(12))
    fit = nested_components(still)
    for options in (LimitOptions(), WIDE):
        limits = mean_limits(fit, 2, 4, options=options)
        assert float(limits.lower) == float(limits.center) == float(limits.upper)
        for score in (limits.standardise, limits.scores):
            np.testing.assert_array_equal(score([limits.center, 0.0, 2e3]), [0.0, -40.0, 40.0])
        within = within_limits(fit, 2, 4, options=options)
        assert float(within.upper) == 0.0
        np.testing.assert_array_equal(within.scores([0.0, 0.1]), [0.0, 40.0])


def test_spread_limits_from_an_estimated_sigma_are_f_limits() -> None:
    limits = spread_limits(1.0, 8, df_sigma=40, options=WIDE)
    assert float(limits.upper) ** 2 == pytest.approx(stats.f.isf(ALPHA / 2, 8, 40), rel=1e-9)
    assert float(limits.lower) ** 2 == pytest.approx(stats.f.ppf(ALPHA / 2, 8, 40), rel=1e-9)
    np.testing.assert_allclose(limits.scores(limits.upper), 3.0, atol=1e-8)
    assert float(spread_limits(1.0, 8, df_sigma=40).upper) < float(limits.upper)


def test_spread_without_degrees_of_freedom() -> None:
    limits = spread_limits([1.0, 1.0], [0, 4])
    assert np.isnan(limits.upper[0])
    assert np.isfinite(limits.upper[1])
    np.testing.assert_array_equal(np.isnan(spread_score([1.0, 1.0], 1.0, [0, 4])), [True, False])
    assert float(spread_score(0.0, 1.0, 8)) == -40.0
    with pytest.raises(ValueError, match="cannot be negative"):
        spread_limits(-1.0, 3)


def test_within_and_wafer_spread_limits_use_the_right_degrees_of_freedom() -> None:
    fit = baselines(np.random.default_rng(5), 1, 30, 3, 9, (1.0, 0.7, 0.5))
    within = within_limits(fit, 3, 9)
    expected = spread_limits(np.sqrt(fit.site[0]), 24)
    assert float(within.upper) == pytest.approx(float(expected.upper))
    shared = within_limits(fit, 3, 9, signature_share=8 / 720)
    assert float(shared.df) == pytest.approx(24 * (1 - 8 / 720))
    assert float(within_limits(fit, 3, 9, options=WIDE).df_expected) == fit.site_df[0]
    wafer = wafer_spread_limits(fit, [3, 1], 9, options=WIDE)
    sigma = np.sqrt(fit.wafer[0] + fit.site[0] / 9)
    assert wafer.expected[0] == pytest.approx(sigma)
    assert wafer.df[0] == 2
    # In a layout like that of the baseline the wafer mean square has 60 degrees of freedom.
    assert wafer.df_expected[0] == pytest.approx(60.0, rel=1e-6)
    assert np.isnan(wafer.upper[1])
    pooled = baselines(np.random.default_rng(5), 1, 30, 1, 9, (1.0, 0.7, 0.5))
    assert np.isnan(float(wafer_spread_limits(pooled, 3, 9).upper))


def test_f_limits_keep_the_rate_when_sigma_is_estimated() -> None:
    rng = np.random.default_rng(51)
    sigma = np.sqrt(rng.chisquare(60, size=40_000) / 60)
    rates = []
    for options in (LimitOptions(), WIDE):
        limits = spread_limits(sigma, 2, df_sigma=60, options=options)
        rate = stats.chi2.sf(2 * limits.upper**2, 2) + stats.chi2.cdf(2 * limits.lower**2, 2)
        rates.append(float(rate.mean()))
    assert rates[0] > 1.15 * ALPHA
    assert rates[1] == pytest.approx(ALPHA, rel=0.02)


@settings(max_examples=40, deadline=None)
@given(z=st.floats(-6.0, 36.0), df=st.integers(1, 400))
def test_scores_invert_the_chi_square_tail(z: float, df: int) -> None:
    x = (
        float(stats.chi2.isf(stats.norm.sf(z), df))
        if z > 0
        else float(stats.chi2.ppf(stats.norm.cdf(z), df))
    )
    if np.isfinite(x) and x > 1e-290:
        assert float(chi2_score(x, df)) == pytest.approx(z, abs=1e-6)


def test_scores_beyond_the_underflow_of_probabilities() -> None:
    # At df 2 the upper tail is exp(-x/2) exactly; at x = 1500 it underflows double precision.
    from scipy.special import ndtri_exp

    for x in (100.0, 1000.0, 1450.0, 1500.0, 1590.0):
        assert float(chi2_score(x, 2)) == pytest.approx(-ndtri_exp(-x / 2), rel=1e-9)
    # No jump where the logarithmic forms take over, in either tail.
    for df in (1, 3, 8, 50):
        x = np.linspace(1200.0, 1500.0, 3001)
        steps = np.diff(chi2_score(x, df))
        assert (steps >= 0).all()
        assert steps.max() < 3 * steps.mean() + 1e-3
        low = chi2_score(np.logspace(-300, -1, 300), df)
        assert (np.diff(low) >= 0).all()
    # F with many denominator degrees of freedom tends to chi-square; t to normal.
    x = np.array([0.01, 0.5, 1.0, 3.0, 20.0, 100.0])
    np.testing.assert_allclose(f_score(x, 6, 1e7), chi2_score(6 * x, 6), atol=3e-2)
    assert float(f_score(900.0, 8, 3000)) == pytest.approx(
        -ndtri_exp(stats.f.logsf(900.0, 8, 3000)), rel=1e-6
    ) or np.isinf(stats.f.logsf(900.0, 8, 3000))
    np.testing.assert_allclose(
        t_score([-4.0, 0.0, 2.0, 9.0], 12),
        [stats.norm.ppf(stats.t.cdf(-4.0, 12)), 0.0, *stats.norm.isf(stats.t.sf([2.0, 9.0], 12))],
        atol=1e-9,
    )
    assert float(t_score(2.5, np.inf)) == 2.5


def test_spreads_that_vary_more_than_chi_square() -> None:
    # Variances from a scaled inverse chi-square law with 20 df (Smyth 2004).
    rng = np.random.default_rng(57)
    n, df, prior = 60_000, 24, 20
    sigma = 3.0 * np.sqrt(prior / rng.chisquare(prior, size=n))
    s = sigma * np.sqrt(rng.chisquare(df, size=n) / df)
    found, found_prior = spread_population(s, df)
    assert float(found[0]) == pytest.approx(3.0, rel=0.01)
    assert float(found_prior[0]) == pytest.approx(prior, rel=0.06)
    limits = spread_limits(found, df, df_sigma=found_prior, options=WIDE)
    outside = ((s > limits.upper) | (s < limits.lower)).mean()
    assert outside == pytest.approx(ALPHA, abs=4 * np.sqrt(ALPHA / n) + 2e-4)
    # Chi-square limits would signal many times as often.
    plain = spread_limits(found, df)
    assert ((s > plain.upper) | (s < plain.lower)).mean() > 6 * ALPHA
    calm = np.sqrt(rng.chisquare(df, size=(50, 40)) / df)
    _, flat = spread_population(calm.ravel(), df, np.repeat(np.arange(50), 40))
    assert np.isinf(flat).sum() > 10  # about half of them: no more variation than chi-square


def test_distance_limits_and_scores() -> None:
    assert float(distance_limit(3)) == pytest.approx(stats.chi2.isf(ALPHA / 2, 3), rel=1e-9)
    # Tracy, Young & Mason (1992): p (m+1)(m-1) / (m (m-p)) F(p, m-p).
    p, m = 3, 30
    factor = p * (m + 1) * (m - 1) / (m * (m - p))
    expected = factor * stats.f.isf(ALPHA / 2, p, m - p)
    assert float(distance_limit(p, m=m)) == pytest.approx(expected, rel=1e-9)
    assert float(distance_score(expected, p, m=m)) == pytest.approx(3.0, abs=1e-8)
    assert float(distance_score(distance_limit(4), 4)) == pytest.approx(3.0, abs=1e-8)
    with pytest.raises(ValueError, match="df of at least p"):
        distance_limit(5, m=4)


def test_distance_rate_by_simulation() -> None:
    rng = np.random.default_rng(61)
    p, m, runs = 2, 15, 60_000
    x = rng.normal(size=(runs, m, p))
    new = rng.normal(size=(runs, p)) - x.mean(axis=1)
    off = x - x.mean(axis=1, keepdims=True)
    covariance = np.einsum("rmi,rmj->rij", off, off) / (m - 1)
    t2 = np.einsum("ri,ri->r", new, np.linalg.solve(covariance, new[:, :, None])[:, :, 0])
    rate = (t2 > float(distance_limit(p, m=m, options=LimitOptions(alpha=0.02)))).mean()
    assert abs(rate - 0.01) < 4 * np.sqrt(0.01 / runs)
    score = distance_score(t2, p, m=m)
    assert score.std() == pytest.approx(1.0, abs=0.02)
    assert score.mean() == pytest.approx(0.0, abs=0.02)


@pytest.mark.slow
def test_rates_of_whole_baselines_by_simulation() -> None:
    # Readings in, rates out: 25 lots of 2 or 3 wafers of 7 to 9 sites with a signature; widened
    # limits of means, within-wafer and wafer-to-wafer sds against later lots of 3 wafers of 9.
    from spc.stats.components import site_signatures, summarise

    rng = np.random.default_rng(71)
    streams, lots = 4000, 25
    wafers = rng.integers(2, 4, streams * lots)
    wafer_lot = np.repeat(np.arange(wafers.size), wafers)
    full = np.tile(np.arange(9), wafer_lot.size)
    wafer = np.repeat(np.arange(wafer_lot.size), 9)
    keep = rng.random(wafer.size) < 0.9
    wafer, site = wafer[keep], full[keep]
    lot = wafer_lot[wafer]
    y = rng.normal(size=wafers.size)[lot] + 0.6 * rng.normal(size=wafer_lot.size)[wafer]
    y = y + 0.5 * rng.normal(size=wafer.size) + np.cos(site)
    shape = site_signatures(lot // lots, wafer, site, y)
    summary = summarise(lot // lots, lot, wafer, shape.residual)
    fit = nested_components(summary, site_df_lost=shape.df)
    at = np.arange(streams)
    means = mean_limits(fit, 3, 9, stream=at, options=WIDE)
    true = np.sqrt(1.0 + 0.36 / 3 + 0.25 / 27)
    rate = (stats.norm.sf(means.upper / true) + stats.norm.cdf(means.lower / true)).mean()
    assert rate == pytest.approx(ALPHA, rel=0.12)
    within = within_limits(fit, 3, 9, stream=at, options=WIDE)
    law = stats.chi2(24)
    rate = (law.sf(24 * within.upper**2 / 0.25) + law.cdf(24 * within.lower**2 / 0.25)).mean()
    assert rate == pytest.approx(ALPHA, rel=0.1)
    between = wafer_spread_limits(fit, 3, 9, stream=at, options=WIDE)
    law, true2 = stats.chi2(2), 0.36 + 0.25 / 9
    rate = (law.sf(2 * between.upper**2 / true2) + law.cdf(2 * between.lower**2 / true2)).mean()
    assert rate == pytest.approx(ALPHA, rel=0.15)

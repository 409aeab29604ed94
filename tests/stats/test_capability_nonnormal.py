"""Laws that are not normal: fits, tests of fit, percentile indices and their intervals."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from spc.stats.capability import StudyOptions, Verdict, capability_study
from spc.stats.capability_indices import Sigma, SpecLimits
from spc.stats.capability_nonnormal import (
    empirical_indices,
    fit_distribution,
    goodness_of_fit,
    percentile_indices,
    percentile_intervals,
    stephens_p_value,
    study_with_law,
)
from spc.stats.distributions import FAMILIES, covariance, maximum_likelihood

LAWS = {
    "normal": stats.norm(10, 2),
    "lognormal": stats.lognorm(0.4, scale=20),
    "gamma": stats.gamma(3, scale=2),
    "weibull": stats.weibull_min(1.7, scale=5),
    "half-normal": stats.halfnorm(scale=4),
    "rayleigh": stats.rayleigh(scale=3),
    "folded-normal": stats.foldnorm(1.5, scale=2),
    "skew-normal": stats.skewnorm(6, loc=3, scale=2),
    "johnson-su": stats.johnsonsu(-1, 1.5, loc=2, scale=3),
}


@pytest.mark.parametrize("name", list(LAWS))
def test_log_density_is_that_of_scipys_law(name: str) -> None:
    family = FAMILIES[name]
    x = LAWS[name].rvs(50, random_state=1)
    theta = family.start(x)
    np.testing.assert_allclose(
        family.log_density(x, theta), family.law(theta).logpdf(x), rtol=1e-9, atol=1e-9
    )


@pytest.mark.parametrize("name", ["folded-normal", "skew-normal", "johnson-su"])
def test_slopes_are_those_of_the_log_density(name: str) -> None:
    family = FAMILIES[name]
    x = LAWS[name].rvs(30, random_state=4)
    theta = family.start(x)
    assert family.slope is not None
    for k, got in enumerate(family.slope(x, theta)):
        step = np.zeros(theta.size)
        step[k] = 1e-5
        rise = family.log_density(x, theta + step) - family.log_density(x, theta - step)
        assert got == pytest.approx(rise.mean() / 2e-5, rel=1e-5, abs=1e-7)


@pytest.mark.parametrize("name", list(LAWS))
def test_maximum_likelihood_beats_the_truth_and_scipys_search(name: str) -> None:
    law = LAWS[name]
    x = law.rvs(400, random_state=2)
    theta, likelihood = maximum_likelihood(FAMILIES[name], x)
    assert likelihood >= law.logpdf(x).sum() - 1e-9
    # No neighbour is better: the gradient vanishes.
    for k in range(theta.size):
        for step in (-1e-3, 1e-3):
            near = theta.copy()
            near[k] += step * max(abs(theta[k]), 1.0)
            assert FAMILIES[name].log_density(x, near).sum() <= likelihood + 1e-6
    if name in ("gamma", "weibull"):
        dist = {"gamma": stats.gamma, "weibull": stats.weibull_min}[name]
        other = dist(*dist.fit(x, floc=0))
        assert likelihood >= other.logpdf(x).sum() - 1e-6


@pytest.mark.parametrize("name", ["lognormal", "gamma", "skew-normal", "johnson-su", "rayleigh"])
def test_family_is_found_and_fits(name: str) -> None:
    x = LAWS[name].rvs(2000, random_state=3)
    fit = fit_distribution(x)
    assert fit.fits, fit
    law = percentile_indices(LAWS[name], SpecLimits(upper=float(LAWS[name].isf(1e-4))))
    mine = percentile_indices(fit.law, SpecLimits(upper=float(LAWS[name].isf(1e-4))))
    assert mine.ppk == pytest.approx(law.ppk, rel=0.12)


def test_normal_readings_stay_normal() -> None:
    rng = np.random.default_rng(4)
    names = [fit_distribution(rng.normal(100, 2, 100)).name for _ in range(25)]
    assert names.count("normal") >= 18


def test_wrong_law_is_found_out() -> None:
    x = stats.lognorm(0.6, scale=20).rvs(300, random_state=5)
    assert not fit_distribution(x, ("normal",)).fits
    two_humps = np.concatenate([x * 0 + 10 + np.random.default_rng(0).normal(size=300), x + 60])
    assert not fit_distribution(two_humps).fits


def test_anderson_darling_agrees_with_statsmodels() -> None:
    from statsmodels.stats.diagnostic import normal_ad

    rng = np.random.default_rng(6)
    for n in (20, 60, 300):
        x = rng.standard_t(6, n)
        law = stats.norm(x.mean(), x.std())
        statistic, p = goodness_of_fit(x, law.cdf)
        other, other_p = normal_ad(x)
        assert statistic == pytest.approx(other, rel=1e-8)
        assert p == pytest.approx(other_p, rel=1e-8)
    assert stephens_p_value(500.0) == 0.0


def test_size_of_the_test_of_fit() -> None:
    rng = np.random.default_rng(7)
    rejected = [not fit_distribution(rng.gamma(4, 2, 80), ("gamma",)).fits for _ in range(400)]
    assert 0.02 < np.mean(rejected) < 0.09


def test_clustered_readings_do_not_reject_a_true_law() -> None:
    """Readings of 9 sites on 40 wafers, most of the variance between wafers."""
    rng = np.random.default_rng(8)
    naive, fair = [], []
    for _ in range(150):
        x = (rng.normal(size=(40, 1)) + 0.3 * rng.normal(size=(40, 9))).ravel()
        law = stats.norm(x.mean(), x.std())
        naive.append(goodness_of_fit(x, law.cdf)[1] < 0.05)
        fair.append(goodness_of_fit(x, law.cdf, n_effective=43)[1] < 0.05)
    assert np.mean(naive) > 0.5
    assert np.mean(fair) < 0.12


def test_interval_of_the_percentile_index_covers() -> None:
    rng = np.random.default_rng(9)
    spec = SpecLimits(8.0, 60.0)
    true = percentile_indices(stats.lognorm(0.3, scale=20), spec)
    hits, ppm_hits, runs = 0, 0, 150
    for _ in range(runs):
        x = rng.lognormal(np.log(20), 0.3, 100)
        fit = fit_distribution(x, ("lognormal",))
        interval = percentile_intervals(fit, x, spec)
        hits += interval.ppk[0] < true.ppk < interval.ppk[1]
        ppm_hits += interval.ppm[0] < true.ppm_expected < interval.ppm[1]
    assert 0.90 < hits / runs < 0.985
    assert 0.90 < ppm_hits / runs < 0.985


def test_covariance_of_a_normal_law_is_the_known_one() -> None:
    x = np.random.default_rng(10).normal(5, 3, 500)
    theta, _ = maximum_likelihood(FAMILIES["normal"], x)
    got = covariance(FAMILIES["normal"], x, theta)
    want = np.diag([x.var() / 500, 1 / 1000])
    np.testing.assert_allclose(got, want, rtol=1e-4, atol=1e-8)


@settings(max_examples=20, deadline=None)
@given(st.integers(0, 2**32 - 1), st.floats(1e-2, 1e3))
def test_indices_do_not_depend_on_the_unit(seed: int, scale: float) -> None:
    x = np.random.default_rng(seed).gamma(4, 2, 60)
    families = ("normal", "lognormal", "gamma", "weibull", "half-normal", "rayleigh")
    here = fit_distribution(x, families)
    there = fit_distribution(scale * x, families)
    assert here.name == there.name
    a = percentile_indices(here.law, SpecLimits(0.5, 40.0))
    b = percentile_indices(there.law, SpecLimits(0.5 * scale, 40.0 * scale))
    assert b.ppk == pytest.approx(a.ppk, rel=1e-7)
    assert b.ppm_expected == pytest.approx(a.ppm_expected, rel=1e-5, abs=1e-9)


def test_values_that_a_law_cannot_hold() -> None:
    x = np.random.default_rng(11).normal(size=50)
    fit = fit_distribution(x)
    assert np.isnan(fit.tried["lognormal"])
    with pytest.raises(ValueError, match="none of the families"):
        fit_distribution(x, ("gamma",))
    with pytest.raises(ValueError, match="at least 8"):
        fit_distribution(x[:5])
    with pytest.raises(ValueError, match="all readings are 3"):
        fit_distribution(np.full(10, 3.0))
    with pytest.raises(ValueError, match="unknown families"):
        fit_distribution(x, ("cauchy",))


def test_sample_percentiles_without_a_law() -> None:
    x = np.random.default_rng(12).normal(size=200000)
    got = empirical_indices(x, SpecLimits(-4, 4), tail=0.00135)
    assert got == pytest.approx(4 / 3, rel=0.02)
    with pytest.raises(ValueError, match="at least 2"):
        empirical_indices([1.0], SpecLimits(-4, 4))


def test_study_takes_its_overall_indices_from_the_law() -> None:
    x = np.random.default_rng(13).lognormal(np.log(20), 0.4, 400)
    spec = SpecLimits(4.0, 90.0)
    sigma = Sigma.independent(x.std(ddof=1), x.size)
    plain = capability_study(x.mean(), sigma, spec, within=sigma, stable=True)
    fit = fit_distribution(x, ("normal", "lognormal"))
    study = study_with_law(plain, fit, x, spec, stable=True)
    true = percentile_indices(stats.lognorm(0.4, scale=20), spec)
    assert study.distribution == "lognormal"
    assert study.ppk == pytest.approx(true.ppk, rel=0.06)
    assert study.ppk_low < true.ppk < study.ppk_high
    assert abs(plain.ppk - true.ppk) > 0.1  # the normal formula is wrong here
    assert study.cpk == plain.cpk
    assert study.verdict in (Verdict.UNDECIDED, Verdict.NOT_CAPABLE)
    normal = study_with_law(plain, fit_distribution(x, ("normal",)), x, spec)
    assert normal.ppk == plain.ppk
    assert normal.fit_p_value < 0.05
    gauge = StudyOptions(gauge=Sigma.of(0.1, 50.0, 1.0))
    removed = capability_study(x.mean(), sigma, spec, options=gauge)
    with pytest.raises(ValueError, match="with their gauge"):
        study_with_law(removed, fit, x, spec)

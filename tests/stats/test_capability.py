"""Capability: coverage of the intervals, nested samples, gauge share, verdicts."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import special, stats

from spc.stats.capability import (
    NestedSample,
    Sigma,
    SpecLimits,
    StudyOptions,
    Verdict,
    capability_study,
    cp,
    cpk,
    df_of_standard_error,
    noncentral_t_interval,
    ppm_expected,
    ppm_interval,
    ppm_observed,
    satterthwaite,
    sd_interval,
    within_sigma,
    without_gauge,
)
from spc.stats.capability_indices import noncentrality
from spc.stats.tolerance import one_sided_factor, two_sided_factor

SPEC = SpecLimits(-5.0, 5.0, 0.0)


def test_specification_must_make_sense() -> None:
    with pytest.raises(ValueError, match="lower or an upper"):
        SpecLimits()
    with pytest.raises(ValueError, match="must be below"):
        SpecLimits(5.0, 5.0)


@pytest.mark.parametrize("df", [1.0, 4.3, 49.0, 5000.0])
@pytest.mark.parametrize("t", [-12.0, -0.4, 0.0, 3.0, 60.0])
@pytest.mark.parametrize("p", [0.025, 0.5, 0.975])
def test_noncentrality_inverts_the_noncentral_t(df: float, t: float, p: float) -> None:
    shift = float(noncentrality(t, df, p))
    cdf = special.nctdtr(df, shift, t) if t >= 0 else 1 - special.nctdtr(df, -shift, -t)
    assert cdf == pytest.approx(p, abs=1e-9)


def test_noncentral_t_law_by_quadrature() -> None:
    """Independent route: integrate the normal probability over the chi law of the sd."""
    df, n, index = 11.0, 7.5, 1.2
    sigma = Sigma.of(1.0, df, n)
    low, high = noncentral_t_interval(index, sigma)
    node, weight = np.polynomial.legendre.leggauss(400)
    ends = np.sqrt(stats.chi2.ppf([1e-15, 1 - 1e-15], df) / df)
    s = ends[0] + (ends[1] - ends[0]) * (node + 1) / 2
    mass = weight * (ends[1] - ends[0]) / 2 * stats.chi2.pdf(df * s**2, df) * 2 * df * s
    t = 3 * np.sqrt(n) * index
    for limit, want in ((low, 0.975), (high, 0.025)):
        got = mass @ special.ndtr(t * s - 3 * np.sqrt(n) * limit)
        assert got == pytest.approx(want, abs=1e-9)


def test_intervals_cover_with_independent_readings() -> None:
    rng = np.random.default_rng(0)
    n, reps, mean = 30, 4000, 1.0
    data = rng.normal(mean, 1.2, (reps, n))
    sigma = Sigma.independent(data.std(axis=1, ddof=1), n)
    study = capability_study(data.mean(axis=1), sigma, SPEC)
    true_pp, true_ppk = 10 / 7.2, 4 / 3.6
    assert np.mean((study.pp_low < true_pp) & (true_pp < study.pp_high)) == pytest.approx(
        0.95, abs=0.012
    )
    assert np.mean((study.ppk_low < true_ppk) & (true_ppk < study.ppk_high)) == pytest.approx(
        0.95, abs=0.012
    )
    true_ppm = float(ppm_expected(mean, 1.2, SPEC)[2])
    covered = (study.ppm_low < true_ppm) & (true_ppm < study.ppm_high)
    assert covered.mean() == pytest.approx(0.95, abs=0.025)


def test_ppm_interval_of_one_limit_is_exact() -> None:
    rng = np.random.default_rng(1)
    spec = SpecLimits(upper=3.0)
    data = rng.normal(size=(4000, 15))
    low, high = ppm_interval(
        data.mean(axis=1), Sigma.independent(data.std(axis=1, ddof=1), 15), spec
    )
    true = 1e6 * stats.norm.sf(3.0)
    assert np.mean((low < true) & (true < high)) == pytest.approx(0.95, abs=0.012)


def nested(
    rng: np.random.Generator,
    shape: tuple[int, int, int, int],
    variances: tuple[float, float, float],
) -> np.ndarray:
    reps, lots, wafers, _ = shape
    lot, wafer, site = (np.sqrt(v) for v in variances)
    return (
        rng.normal(0, lot, (reps, lots, 1, 1))
        + rng.normal(0, wafer, (reps, lots, wafers, 1))
        + rng.normal(0, site, shape)
    )


def components(data: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Balanced analysis of variance, negative components set to zero."""
    _, _, wafers, sites = data.shape
    site = data.var(axis=3, ddof=1).mean(axis=(1, 2))
    ms_wafer = sites * data.mean(axis=3).var(axis=2, ddof=1).mean(axis=1)
    ms_lot = sites * wafers * data.mean(axis=(2, 3)).var(axis=1, ddof=1)
    wafer = np.maximum((ms_wafer - site) / sites, 0)
    lot = np.maximum((ms_lot - ms_wafer) / (sites * wafers), 0)
    return lot, wafer, site


@pytest.mark.parametrize("variances", [(1.0, 0.3, 0.5), (0.2, 0.2, 1.0)])
def test_intervals_cover_with_nested_sampling(variances: tuple[float, float, float]) -> None:
    """The interval must use effective degrees of freedom: with n - 1 of all sites it fails."""
    rng = np.random.default_rng(2)
    lots, wafers, sites = 25, 3, 9
    data = nested(rng, (1500, lots, wafers, sites), variances)
    sample = NestedSample(*components(data), lots, lots * wafers, lots * wafers * sites)
    overall, mean = sample.overall(), data.mean(axis=(1, 2, 3))
    study = capability_study(mean, overall, SPEC, within=sample.within_lot())
    true = 5 / (3 * np.sqrt(sum(variances)))
    covered = np.mean((study.ppk_low < true) & (true < study.ppk_high))
    assert 0.93 < covered < 0.975
    true_pp = 10 / (6 * np.sqrt(sum(variances)))
    assert 0.93 < np.mean((study.pp_low < true_pp) & (true_pp < study.pp_high)) < 0.97
    within = 5 / (3 * np.sqrt(sum(variances[1:])))
    assert 0.93 < np.mean((study.cpk_low < within) & (within < study.cpk_high)) < 0.98
    low, high = sample.mean_interval(mean)
    assert np.mean((low < 0) & (high > 0)) == pytest.approx(0.95, abs=0.02)
    naive = noncentral_t_interval(
        cpk(mean, overall.sd, SPEC), Sigma.independent(overall.sd, data[0].size)
    )
    assert np.mean((naive[0] < true) & (true < naive[1])) < covered - 0.1


def test_nested_sample_of_one_level_is_the_plain_one() -> None:
    sample = NestedSample(4.0, 0.0, 0.0, 20, 20, 20)
    sigma = sample.overall()
    assert sigma.sd == pytest.approx(2.0)
    assert sigma.df == pytest.approx(19.0)
    assert sigma.n_effective == pytest.approx(20.0)


def test_nested_sample_says_when_it_cannot_know() -> None:
    one_lot = NestedSample(0.0, 1.0, 1.0, 1, 3, 27).overall()
    assert np.isnan(one_lot.df)
    study = capability_study(0.0, one_lot, SPEC)
    assert study.verdict == Verdict.NO_ESTIMATE
    with pytest.raises(ValueError, match="lots <= wafers <= readings"):
        NestedSample(1.0, 1.0, 1.0, 5, 3, 30).overall()
    with pytest.raises(ValueError, match="negative"):
        NestedSample(-1.0, 1.0, 1.0, 5, 5, 30).overall()


def test_signature_widens_the_reading_but_is_known_exactly() -> None:
    plain = NestedSample(1.0, 0.3, 0.5, 20, 60, 540).overall()
    shaped = NestedSample(1.0, 0.3, 0.5, 20, 60, 540, signature=2.0).overall()
    assert shaped.sd**2 == pytest.approx(plain.sd**2 + 2.0)
    assert shaped.df > plain.df


def test_satterthwaite_and_standard_errors() -> None:
    assert satterthwaite([3.0, 1.0], [10, 5]) == pytest.approx(16 / (9 / 10 + 1 / 5))
    assert satterthwaite([3.0, 0.0], [10, 0]) == pytest.approx(10.0)
    # A chi-square variance on 8 df has standard error v sqrt(2/8).
    assert df_of_standard_error(2.0, 2.0 * np.sqrt(2 / 8)) == pytest.approx(8.0)


def test_gauge_share_removed() -> None:
    whole = Sigma.of(5.0, 40.0, 30.0)
    left = without_gauge(whole, Sigma.of(3.0, 100.0, 1.0))
    assert left.sd == pytest.approx(4.0)
    assert left.df == pytest.approx(16**2 / (25**2 / 40 + 9**2 / 100))
    assert left.sd**2 / left.n_effective == pytest.approx(whole.sd**2 / whole.n_effective)
    assert np.isnan(without_gauge(Sigma.of(1.0, 9, 9), Sigma.of(1.0, 9, 9)).sd)
    options = StudyOptions(gauge=Sigma.of(3.0, 100.0, 1.0))
    study = capability_study(0.0, whole, SpecLimits(-16, 16), options=options)
    assert study.gauge_removed
    assert study.pp == pytest.approx(32 / 24)


def test_observed_ppm_interval_is_clopper_pearson() -> None:
    share, low, high = ppm_observed([3, 0, 50, 0], [200, 200, 50, 0])
    want = stats.binomtest(3, 200).proportion_ci(method="exact")
    assert [low[0], high[0]] == pytest.approx([1e6 * want.low, 1e6 * want.high], rel=1e-9)
    assert (share[1], low[1]) == (0.0, 0.0)
    assert high[1] == pytest.approx(1e6 * (1 - 0.025 ** (1 / 200)), rel=1e-9)
    assert high[2] == 1e6
    assert np.isnan([share[3], low[3], high[3]]).all()
    wider = ppm_observed(3, 200, n_effective=20)
    assert wider[1] < low[0]
    assert wider[2] > high[0]
    with pytest.raises(ValueError, match="between 0"):
        ppm_observed(5, 4)


def test_verdict_puts_stability_first() -> None:
    sigma = Sigma.of(np.array([1.0, 1.0, 1.3, 3.0]), 100.0, 101.0)
    mean = np.zeros(4)
    stable = np.array([True, False, True, True])
    study = capability_study(mean, sigma, SPEC, stable=stable)
    assert study.verdict.tolist() == [
        Verdict.CAPABLE,
        Verdict.NOT_STABLE,
        Verdict.UNDECIDED,
        Verdict.NOT_CAPABLE,
    ]
    assert capability_study(mean, sigma, SPEC).verdict[0] == Verdict.STABILITY_UNKNOWN
    assert capability_study(0.0, Sigma.of(0.0, 9, 10), SPEC).verdict == Verdict.NO_ESTIMATE


def test_bissell_is_near_the_exact_interval() -> None:
    sigma = Sigma.independent(1.0, 200)
    exact = capability_study(1.0, sigma, SPEC)
    rough = capability_study(1.0, sigma, SPEC, options=StudyOptions(interval="bissell"))
    assert exact.ppk_low == pytest.approx(rough.ppk_low, abs=2e-3)
    assert exact.ppk_high == pytest.approx(rough.ppk_high, abs=2e-3)
    with pytest.raises(ValueError, match="interval"):
        StudyOptions(interval="guess")


@settings(max_examples=40, deadline=None)
@given(st.floats(-2, 2), st.floats(0.2, 3), st.floats(-1e3, 1e3), st.floats(1e-2, 1e3))
def test_indices_have_no_unit(mean: float, sd: float, shift: float, scale: float) -> None:
    here = capability_study(mean, Sigma.independent(sd, 40), SPEC)
    moved = SpecLimits(shift - 5 * scale, shift + 5 * scale, shift)
    there = capability_study(shift + scale * mean, Sigma.independent(scale * sd, 40), moved)
    for name in ("cp", "pp", "ppk", "ppk_low", "ppk_high", "cpm", "cpm_low"):
        assert getattr(there, name) == pytest.approx(
            getattr(here, name), rel=1e-6, abs=1e-6, nan_ok=True
        )
    assert here.ppk <= here.pp + 1e-12


def test_streams_at_once_are_streams_one_by_one() -> None:
    mean, sd = np.array([0.0, 1.0, -2.0]), np.array([1.0, 2.0, 0.5])
    whole = capability_study(mean, Sigma.independent(sd, 25), SPEC, observed=([0, 5, 0], 25))
    for k in range(3):
        one = capability_study(
            mean[k], Sigma.independent(sd[k], 25), SPEC, observed=([0, 5, 0][k], 25)
        )
        for name in ("pp", "ppk_low", "ppm_high", "ppm_observed_high", "cpm_high"):
            assert getattr(one, name) == pytest.approx(getattr(whole, name)[k], rel=1e-10)


def test_one_sided_specification() -> None:
    study = capability_study(1.0, Sigma.independent(1.0, 30), SpecLimits(upper=4.0))
    assert np.isnan(study.pp)
    assert study.ppk == pytest.approx(1.0)
    assert study.ppm_below == 0.0
    assert np.isnan(cp(1.0, SpecLimits(upper=4.0)))
    assert np.isnan(study.cpm)


def test_process_wholly_outside_has_finite_figures() -> None:
    study = capability_study(80.0, Sigma.independent(1.0, 20), SPEC, stable=True)
    assert study.ppm_expected == pytest.approx(1e6)
    assert [study.ppm_low, study.ppm_high] == pytest.approx([1e6, 1e6])
    assert study.ppk == pytest.approx(-25.0)
    assert study.ppk_low < -25 < study.ppk_high
    assert study.verdict == Verdict.NOT_CAPABLE


def test_within_sigma_wants_subgroups() -> None:
    with pytest.raises(ValueError, match="size >= 2"):
        within_sigma(np.ones((3, 1)))
    with pytest.raises(ValueError, match="method"):
        within_sigma(np.ones((3, 2)), "guess")
    low, high = sd_interval(Sigma.independent(2.0, 10))
    # 95 % interval of a sd from 10 readings: 0.688 s to 1.826 s (chi-square table, from memory).
    assert [low, high] == pytest.approx([1.376, 3.651], abs=2e-3)


def test_tolerance_factors_by_simulation_and_bad_input() -> None:
    rng = np.random.default_rng(3)
    data = rng.normal(size=(20000, 10))
    mean, sd = data.mean(axis=1), data.std(axis=1, ddof=1)
    k = two_sided_factor(10, 0.9, 0.95)
    content = special.ndtr(mean + k * sd) - special.ndtr(mean - k * sd)
    assert (content >= 0.9).mean() == pytest.approx(0.95, abs=0.006)
    assert one_sided_factor(10, 0.9, 0.95) < k
    with pytest.raises(ValueError, match="at least 2"):
        two_sided_factor(1, 0.9, 0.95)
    with pytest.raises(ValueError, match="between 0 and 1"):
        one_sided_factor(10, 1.0, 0.95)

"""Variance components against dense algebra, statsmodels, simulation and their symmetries."""

from __future__ import annotations

import warnings

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy import optimize

from spc.stats.anova import nested_anova
from spc.stats.components import (
    Components,
    WaferSummary,
    nested_components,
    point_weights,
    site_signature,
    site_signatures,
    summarise,
)

Array = NDArray[np.float64]
Readings = tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.int64], Array]


def simulate(
    rng: np.random.Generator,
    n_lots: int,
    *,
    sigmas: tuple[float, float, float] = (1.0, 0.7, 0.5),
    most_wafers: int = 4,
    most_sites: int = 6,
    n_tools: int = 1,
    tool_sigma: float = 0.0,
) -> Readings:
    """Unbalanced readings: tool, lot and wafer codes and values."""
    wafers = rng.integers(1, most_wafers + 1, n_lots)
    wafer_lot = np.repeat(np.arange(n_lots), wafers)
    sites = rng.integers(1, most_sites + 1, wafer_lot.size)
    wafer = np.repeat(np.arange(wafer_lot.size), sites)
    lot = wafer_lot[wafer]
    tool = lot % n_tools
    values = (
        10.0
        + tool_sigma * rng.normal(size=n_tools)[tool]
        + sigmas[0] * rng.normal(size=n_lots)[lot]
        + sigmas[1] * rng.normal(size=wafer_lot.size)[wafer]
        + sigmas[2] * rng.normal(size=wafer.size)
    )
    return tool, lot, wafer, values


def dense_loglik(readings: Readings, variance: Array) -> float:
    """Restricted log-likelihood from the full variance matrix (site, wafer, lot, tool)."""
    tool, lot, wafer, y = readings
    n = y.size
    v = variance[0] * np.eye(n)
    for codes, s2 in zip((wafer, lot, tool), variance[1:], strict=True):
        v += s2 * (codes[:, None] == codes[None, :])
    sign, logdet = np.linalg.slogdet(v)
    assert sign > 0
    inverse = np.linalg.inv(v)
    ones = np.ones(n)
    q = ones @ inverse @ ones
    r = y - (ones @ inverse @ y) / q
    return -0.5 * ((n - 1) * np.log(2 * np.pi) + logdet + np.log(q) + float(r @ inverse @ r))


def one_stream(readings: Readings, with_tool: bool = False) -> Components:
    tool, lot, wafer, y = readings
    summary = summarise(np.zeros_like(lot), lot, wafer, y)
    by_wafer = np.zeros(int(wafer.max()) + 1, dtype=np.int64)
    by_wafer[wafer] = tool
    return nested_components(summary, tool=by_wafer if with_tool else None)


@pytest.mark.parametrize("seed", [1, 2])
@pytest.mark.parametrize("with_tool", [False, True])
def test_dense_maximisation_finds_nothing_better(seed: int, with_tool: bool) -> None:
    rng = np.random.default_rng(seed)
    readings = simulate(rng, 12, n_tools=4, tool_sigma=1.5 if with_tool else 0.0)
    fit = one_stream(readings, with_tool)
    at = fit.variances[0]
    assert fit.converged.all()
    # At the solution the reported likelihood is that of the full variance matrix ...
    assert fit.loglik[0] == pytest.approx(dense_loglik(readings, at), abs=1e-9)

    free = [0, 1, 2, 3] if with_tool else [0, 1, 2]

    def loss(root: Array) -> float:
        trial = np.zeros(4)
        trial[free] = root**2
        return -dense_loglik(readings, trial + np.array([1e-12, 0, 0, 0]))

    # ... and a general optimiser started elsewhere does not find a higher one.
    start = np.sqrt([0.4, 0.4, 0.8, 0.5])[: len(free)]
    best = optimize.minimize(loss, start, method="Nelder-Mead", options={"maxiter": 3000})
    assert fit.loglik[0] >= -best.fun - 1e-8
    if at[free].min() > 0:
        np.testing.assert_allclose(best.x**2, at[free], rtol=0.02, atol=0.02)


def test_component_at_the_boundary_is_the_constrained_maximum() -> None:
    # Lots without any lot effect: the analysis of variance turns negative for these seeds.
    negative = 0
    for seed in range(6):
        readings = simulate(np.random.default_rng(seed), 8, sigmas=(0.0, 1.0, 0.5))
        fit = one_stream(readings)
        negative += int(fit.lot[0] == 0)
        assert fit.variances.min() >= 0
        at = fit.variances[0]
        for step in np.eye(4)[:3] * 1e-4:
            assert dense_loglik(readings, at + step) <= fit.loglik[0] + 1e-9
    assert negative >= 2


def test_statsmodels_agrees_on_unbalanced_data() -> None:
    # statsmodels MixedLM (general-purpose library), lots as groups and wafers as a component.
    import pandas as pd
    import statsmodels.formula.api as smf

    readings = simulate(np.random.default_rng(11), 20)
    _, lot, wafer, y = readings
    frame = pd.DataFrame({"y": y, "lot": lot, "wafer": wafer})
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        model = smf.mixedlm(
            "y ~ 1", frame, groups="lot", re_formula="1", vc_formula={"wafer": "0 + C(wafer)"}
        )
        theirs = model.fit(reml=True, method=["lbfgs"])
    ours = one_stream(readings)
    scale = float(theirs.scale)
    expected = [scale, float(theirs.vcomp[0]), float(theirs.cov_re.iloc[0, 0])]
    np.testing.assert_allclose(ours.variances[0, :3], expected, rtol=2e-3)
    assert ours.loglik[0] >= theirs.llf - 1e-6
    assert ours.loglik[0] == pytest.approx(theirs.llf, abs=1e-4)
    assert ours.mean[0] == pytest.approx(float(theirs.fe_params.iloc[0]), rel=1e-4)
    assert ours.mean_se[0] == pytest.approx(float(theirs.bse_fe.iloc[0]), rel=1e-3)


def balanced(
    rng: np.random.Generator, n_lots: int, n_wafers: int, n_sites: int, n_streams: int = 1
) -> WaferSummary:
    n = n_streams * n_lots * n_wafers
    lot = np.repeat(np.arange(n_streams * n_lots), n_wafers)
    mean = rng.normal(size=n_streams * n_lots)[lot] + 0.7 * rng.normal(size=n)
    mean = mean + 0.5 / np.sqrt(n_sites) * rng.normal(size=n)
    ss = 0.25 * rng.chisquare(n_sites - 1, size=n) if n_sites > 1 else np.zeros(n)
    stream = np.repeat(np.arange(n_streams), n_lots * n_wafers)
    return WaferSummary(stream, lot, np.full(n, n_sites), 50.0 + mean, ss)


def test_balanced_reml_is_the_analysis_of_variance() -> None:
    # Searle, Casella & McCulloch (1992), section 6.6.
    summary = balanced(np.random.default_rng(5), 30, 3, 9, n_streams=20)
    fit, anova = nested_components(summary), nested_anova(summary)
    assert anova.balanced.all()
    inside = (anova.variance > 0).all(axis=1)
    assert inside.sum() >= 15
    np.testing.assert_allclose(fit.variances[inside, :3], anova.variance[inside], rtol=1e-9)
    # The lot mean has the between-lot mean square as its variance, with lots - 1 df.
    weights = point_weights(3, 9)
    np.testing.assert_allclose(fit.df_of(weights, np.flatnonzero(inside)), 29.0, rtol=1e-9)
    lot_variance = fit.variance_of(weights, np.flatnonzero(inside))
    np.testing.assert_allclose(lot_variance, anova.ms[inside, 2] / 27.0, rtol=1e-9)
    np.testing.assert_allclose(fit.mean_se[inside] ** 2, lot_variance / 30, rtol=1e-9)


def test_standard_errors_of_a_balanced_layout() -> None:
    # Variances of mean squares are 2 MS^2 / df; the components are linear in them.
    summary = balanced(np.random.default_rng(8), 40, 3, 5)
    fit, anova = nested_components(summary), nested_anova(summary)
    ms, df = anova.ms[0], anova.df[0]
    spread = 2.0 * ms**2 / df
    expected = np.sqrt([spread[0], (spread[0] + spread[1]) / 25, (spread[1] + spread[2]) / 225])
    np.testing.assert_allclose(fit.standard_errors[0, :3], expected, rtol=1e-8)
    assert np.isnan(fit.standard_errors[0, 3])


def test_reml_is_unbiased_where_no_component_is_near_zero() -> None:
    rng = np.random.default_rng(21)
    streams, n_lots = 1500, 20
    wafers = rng.integers(2, 5, streams * n_lots)
    lot = np.repeat(np.arange(wafers.size), wafers)
    sites = rng.integers(4, 10, lot.size)
    mean = rng.normal(size=wafers.size)[lot] + rng.normal(size=lot.size) * np.sqrt(
        0.5 + 0.3 / sites
    )
    summary = WaferSummary(lot // n_lots, lot, sites, mean, 0.3 * rng.chisquare(sites - 1))
    fit = nested_components(summary)
    assert fit.converged.all()
    for found, truth in ((fit.lot, 1.0), (fit.wafer, 0.5), (fit.site, 0.3)):
        assert abs(found.mean() - truth) < 3.5 * found.std() / np.sqrt(streams)
    # The standard errors are those seen over repetitions.
    seen = np.array([fit.site.std(), fit.wafer.std(), fit.lot.std()])
    claimed = np.sqrt((fit.standard_errors[:, :3] ** 2).mean(axis=0))
    np.testing.assert_allclose(claimed, seen, rtol=0.12)


@pytest.mark.parametrize(
    ("lots", "wafers", "sites", "words"),
    [
        (10, 1, 5, "wafer pooled into lot"),
        (10, 3, 1, "site pooled into wafer"),
        (10, 1, 1, "site pooled into wafer"),
        (1, 6, 5, "lot not estimable"),
        (1, 1, 5, "lot not estimable"),
        (10, 3, 5, ""),
    ],
)
def test_levels_that_cannot_be_told_apart(lots: int, wafers: int, sites: int, words: str) -> None:
    summary = balanced(np.random.default_rng(3), lots, wafers, sites)
    fit = nested_components(summary)
    assert words in fit.pooled[0]
    assert (words == "") == (fit.pooled[0] == "")
    lot_means = summary.mean.reshape(lots, wafers).mean(axis=1)
    if lots > 1:
        # Pooled or not, the variance of a lot mean like those seen is their variance.
        got = float(fit.variance_of(point_weights(wafers, sites)))
        assert got == pytest.approx(lot_means.var(ddof=1), rel=1e-8)
        assert float(fit.df_of(point_weights(wafers, sites))) == pytest.approx(lots - 1, rel=1e-8)
    else:
        assert np.isnan(fit.lot[0])
        assert np.isnan(fit.mean_se[0])
    if wafers == 1 and lots > 1:
        assert fit.wafer[0] == 0
    if sites == 1:
        assert fit.site[0] == 0
    else:
        assert fit.site[0] == pytest.approx(summary.ss.sum() / (lots * wafers * (sites - 1)))


def test_signature_that_takes_all_the_site_freedom_pools_the_sites() -> None:
    summary = balanced(np.random.default_rng(4), 4, 1, 3)
    fit = nested_components(summary, site_df_lost=[8])
    assert "site pooled into wafer" in fit.pooled[0]
    assert fit.site[0] == 0
    assert fit.lot[0] == pytest.approx(summary.mean.var(ddof=1))


def test_one_lot_a_tool_pools_lots_into_tools() -> None:
    summary = balanced(np.random.default_rng(6), 8, 3, 4)
    plain = nested_components(summary)
    fit = nested_components(summary, tool=summary.lot)
    assert "lot pooled into tool" in fit.pooled[0]
    assert fit.lot[0] == 0
    assert fit.tool[0] == pytest.approx(plain.lot[0], rel=1e-9)
    one = nested_components(summary, tool=np.zeros_like(summary.lot))
    assert "one tool" in one.pooled[0]
    assert np.isnan(one.tool[0])
    assert one.lot[0] == pytest.approx(plain.lot[0], rel=1e-9)
    assert list(plain.n_tools) == [0]


def test_streams_without_variation() -> None:
    summary = balanced(np.random.default_rng(9), 6, 3, 4, n_streams=4)
    mean, ss = summary.mean.copy(), summary.ss.copy()
    first, second, third = (summary.stream == i for i in range(3))
    mean[first], ss[first] = 1200.1, 0.0  # everything alike
    ss[second] = 0.0  # sites alike
    lot_only = np.arange(6.0)[(summary.lot[third] % 6)]
    mean[third], ss[third] = lot_only, 0.0  # only lots differ
    fit = nested_components(WaferSummary(summary.stream, summary.lot, summary.n_sites, mean, ss))
    np.testing.assert_array_equal(fit.variances[0], 0.0)
    assert fit.mean[0] == pytest.approx(1200.1)
    assert fit.site[1] == 0
    assert fit.wafer[1] > 0
    assert fit.lot[2] == pytest.approx(lot_only.reshape(6, 3).mean(axis=1).var(ddof=1))
    assert fit.wafer[2] == fit.site[2] == 0
    assert np.isnan(fit.loglik[:3]).all()
    assert np.isfinite(fit.loglik[3])


def test_stream_codes_without_rows_and_empty_input() -> None:
    summary = balanced(np.random.default_rng(2), 5, 2, 3)
    moved = WaferSummary(summary.stream + 2, summary.lot, summary.n_sites, summary.mean, summary.ss)
    fit, plain = nested_components(moved), nested_components(summary)
    assert fit.pooled[:2] == ("no data", "no data")
    assert np.isnan(fit.variances[:2]).all()
    np.testing.assert_array_equal(fit.variances[2], plain.variances[0])
    empty = np.zeros(0, dtype=np.int64)
    none = nested_components(WaferSummary(empty, empty, empty, np.zeros(0), np.zeros(0)))
    assert none.pooled == ()


@settings(max_examples=25, deadline=None)
@given(
    seed=st.integers(0, 10**6),
    shift=st.floats(-1e4, 1e4),
    scale=st.floats(1e-3, 1e3),
    flip=st.booleans(),
)
def test_shift_scale_and_order(seed: int, shift: float, scale: float, flip: bool) -> None:
    rng = np.random.default_rng(seed)
    tool, lot, wafer, y = simulate(rng, 8)
    y = np.round(y, 6)
    factor = -scale if flip else scale
    plain = one_stream((tool, lot, wafer, y))
    moved = one_stream((tool, lot, wafer, factor * y + shift))
    total = plain.variances[0].sum()
    digits = 1e-6 * total
    np.testing.assert_allclose(moved.variances / scale**2, plain.variances, atol=digits)
    np.testing.assert_allclose((moved.mean - shift) / factor, plain.mean, atol=1e-6)
    # The order of readings and the numbering of wafers and lots mean nothing.
    order = rng.permutation(y.size)
    new_wafer = rng.permutation(int(wafer.max()) + 1)[wafer]
    new_lot = rng.permutation(int(lot.max()) + 1)[lot]
    mixed = one_stream((tool[order], new_lot[order], new_wafer[order], y[order]))
    np.testing.assert_allclose(mixed.variances, plain.variances, atol=digits)


@settings(max_examples=8, deadline=None)
@given(seed=st.integers(0, 10**6))
def test_batch_equals_one_by_one(seed: int) -> None:
    rng = np.random.default_rng(seed)
    parts = [simulate(rng, int(rng.integers(1, 9)), n_tools=2) for _ in range(5)]
    stream, lot, wafer, tool, y = [], [], [], [], []
    lots = wafers = 0
    for i, (t, a, b, values) in enumerate(parts):
        stream.append(np.full(a.size, i))
        lot.append(a + lots)
        wafer.append(b + wafers)
        tool.append(t)
        y.append(values)
        lots, wafers = lots + int(a.max()) + 1, wafers + int(b.max()) + 1
    codes = [np.concatenate(x) for x in (stream, lot, wafer)]
    summary = summarise(*codes, np.concatenate(y))
    tool_of = np.zeros(wafers, dtype=np.int64)
    tool_of[codes[2]] = np.concatenate(tool)
    many = nested_components(summary, tool=tool_of)
    for i, part in enumerate(parts):
        one = one_stream(part, with_tool=True)
        scale = max(np.nansum(one.variances[0]), 1e-12)
        np.testing.assert_allclose(many.variances[i], one.variances[0], atol=1e-7 * scale)
        assert many.pooled[i] == one.pooled[0]
        np.testing.assert_allclose(many.loglik[i], one.loglik[0], rtol=1e-9, atol=1e-9)


def test_blocks_of_streams_do_not_matter(monkeypatch: pytest.MonkeyPatch) -> None:
    from spc.stats import components

    rng = np.random.default_rng(17)
    _, lot, wafer, y = simulate(rng, 60)
    summary = summarise(lot // 6, lot, wafer, y)
    whole = nested_components(summary)
    monkeypatch.setattr(components, "CELLS_AT_ONCE", 7)
    cut = nested_components(summary)
    np.testing.assert_allclose(cut.variances, whole.variances, rtol=1e-7, atol=1e-9)


def test_summary_is_stable_under_a_large_offset() -> None:
    _, lot, wafer, y = simulate(np.random.default_rng(1), 10)
    y = np.round(y * 2**10) / 2**10  # so that adding 2**30 loses nothing
    plain = summarise(np.zeros_like(lot), lot, wafer, y)
    far = summarise(np.zeros_like(lot), lot, wafer, y + 2.0**30)
    np.testing.assert_allclose(far.ss, plain.ss, rtol=1e-6, atol=1e-9)
    for row, code in enumerate(np.unique(wafer)):
        mine = y[wafer == code]
        assert plain.mean[row] == pytest.approx(mine.mean(), rel=1e-14)
        assert plain.ss[row] == pytest.approx(((mine - mine.mean()) ** 2).sum(), abs=1e-12)


def test_bad_input_is_named() -> None:
    with pytest.raises(ValueError, match=r"values\[1\] is nan"):
        summarise([0, 0], [0, 0], [0, 1], [1.0, np.nan])
    with pytest.raises(ValueError, match="wafer code 0 occurs under two codes of lot"):
        summarise([0, 0], [0, 1], [0, 0], [1.0, 2.0])
    with pytest.raises(ValueError, match="lot code 0 occurs under two codes of stream"):
        summarise([0, 1], [0, 0], [0, 1], [1.0, 2.0])
    with pytest.raises(TypeError, match="integer codes"):
        summarise([0.0, 1.0], [0, 1], [0, 1], [1.0, 2.0])
    with pytest.raises(ValueError, match="codes start at 0"):
        site_signature([1.0], [-1], [0])
    one = np.zeros(1, dtype=np.int64)
    with pytest.raises(ValueError, match=r"ss\[0\] is negative"):
        WaferSummary(one, one, one + 1, np.ones(1), -np.ones(1))
    with pytest.raises(ValueError, match=r"n_sites\[0\] is 0"):
        WaferSummary(one, one, one, np.ones(1), np.ones(1))
    with pytest.raises(ValueError, match="at least one wafer"):
        point_weights(0, 5)
    with pytest.raises(ValueError, match='"lot" or "wafer"'):
        point_weights(1, 5, point="site")


def layout(rng: np.random.Generator, share: float) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    wafer, site = np.divmod(np.arange(12 * 7), 7)
    keep = rng.random(wafer.size) < share
    return wafer[keep], site[keep]


@pytest.mark.parametrize("share", [1.0, 0.7, 0.25])
@pytest.mark.parametrize("seed", [0, 1, 2])
def test_signature_is_the_least_squares_fit(seed: int, share: float) -> None:
    rng = np.random.default_rng(seed)
    wafer, site = layout(rng, share)
    y = rng.normal(size=12)[wafer] + 2.0 * rng.normal(size=7)[site] + rng.normal(size=wafer.size)
    fit = site_signature(y, wafer, site)
    wafers = (wafer[:, None] == np.unique(wafer)).astype(float)
    both = np.hstack([wafers, (site[:, None] == np.unique(site)).astype(float)])
    dense = y - both @ np.linalg.lstsq(both, y, rcond=None)[0]
    # Taking wafer means off the signature-free readings leaves the residuals of the dense fit.
    free = fit.residual
    off = free - (wafers / wafers.sum(axis=0)) @ (wafers.T @ free)
    np.testing.assert_allclose(off, dense, atol=1e-10)
    rank = np.linalg.matrix_rank(both) - np.linalg.matrix_rank(wafers)
    assert fit.df == rank
    assert abs(np.nansum(fit.effect * fit.count)) < 1e-9
    np.testing.assert_allclose(free, y - fit.effect[site], atol=0)
    np.testing.assert_allclose(fit.remove(y, site), free)


def test_disconnected_layout_has_two_groups() -> None:
    # Wafers 0-3 carry sites 0-2, wafers 4-7 sites 3-5: nothing compares the two sets.
    rng = np.random.default_rng(5)
    wafer = np.repeat(np.arange(8), 3)
    site = np.tile(np.arange(3), 8) + 3 * (wafer > 3)
    y = rng.normal(size=24) + 100.0 * (wafer > 3)
    fit = site_signature(y, wafer, site)
    assert (fit.n_groups, fit.df) == (2, 4)
    for mine in (site < 3, site >= 3):
        alone = site_signature(y[mine], wafer[mine], site[mine])
        np.testing.assert_allclose(fit.residual[mine], alone.residual, atol=1e-12)
        assert abs(fit.effect[np.unique(site[mine])].sum()) < 1e-12


def test_repeated_sites_and_single_readings() -> None:
    # A site read twice on a wafer, and wafers with one reading, which say nothing on the map.
    wafer = np.array([0, 0, 0, 1, 1, 2, 3])
    site = np.array([0, 0, 1, 0, 1, 1, 2])
    y = np.array([1.0, 1.2, 3.0, 2.0, 4.2, 9.0, 5.0])
    fit = site_signature(y, wafer, site)
    # Differences of site 1 from site 0 on wafers 0 and 1, by least squares within wafers.
    within = np.array([1.9 * 2 / 3, 2.2 * 0.5]).sum() / (2 / 3 + 0.5)
    assert fit.effect[1] - fit.effect[0] == pytest.approx(within)
    assert fit.effect[2] == 0
    assert (fit.df, fit.n_groups) == (1, 2)


def test_signatures_of_many_streams_are_those_of_each() -> None:
    rng = np.random.default_rng(12)
    rows = []
    for i in range(6):
        wafer, site = layout(rng, [1.0, 0.6, 0.3][i % 3])
        keep = site < 7 - i % 2
        rows.append((np.full(keep.sum(), i), wafer[keep] + 12 * i, site[keep]))
    stream, wafer, site = (np.concatenate(x) for x in zip(*rows, strict=True))
    y = rng.normal(size=stream.size) + site * 0.3
    many = site_signatures(stream, wafer, site, y)
    for i in range(6):
        mine = stream == i
        one = site_signature(y[mine], wafer[mine], site[mine])
        np.testing.assert_allclose(many.residual[mine], one.residual, atol=1e-12)
        assert many.df[i] == one.df
    np.testing.assert_allclose(y - many.effect[many.row], many.residual)
    order = rng.permutation(y.size)
    again = site_signatures(stream[order], wafer[order], site[order], y[order])
    np.testing.assert_allclose(again.effect, many.effect, atol=1e-12)
    assert site_signatures([], [], [], []).effect.size == 0


def test_signature_out_leaves_the_site_noise() -> None:
    # Signature of sd 2 over noise 0.5: with it in, the site component is eight times too large.
    rng = np.random.default_rng(31)
    n_lots, sites = 60, 9
    lot = np.repeat(np.arange(n_lots), 2 * sites)
    wafer = np.repeat(np.arange(2 * n_lots), sites)
    site = np.tile(np.arange(sites), 2 * n_lots)
    y = rng.normal(size=n_lots)[lot] + 2.0 * np.cos(site) + 0.5 * rng.normal(size=site.size)
    stream = np.zeros_like(lot)
    raw = nested_components(summarise(stream, lot, wafer, y))
    fit = site_signature(y, wafer, site)
    clean = nested_components(summarise(stream, lot, wafer, fit.residual), site_df_lost=[fit.df])
    assert raw.site[0] > 4 * clean.site[0]
    assert abs(clean.site[0] - 0.25) < 4 * clean.standard_errors[0, 0]
    assert clean.site_df[0] == 2 * n_lots * (sites - 1) - (sites - 1)

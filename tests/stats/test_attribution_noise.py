"""The noise model of the attribution engine against closed forms, dense algebra and simulation."""

from __future__ import annotations

import numpy as np
import pytest

from spc.stats.attribution_candidates import build_columns, default_conjunctions, usual_offsets
from spc.stats.attribution_estimates import estimate_noise
from spc.stats.attribution_evidence import AttributionOptions, Evidence, statistic_class
from spc.stats.attribution_noise import ar1_inflation
from tests.stats.attribution_bay import Bay


@pytest.fixture(scope="module")
def evidence() -> Evidence:
    return Bay(days=12.0, lots_a_day=6.0, baseline_days=6.0).simulate(5)


def dense_covariance(evidence: Evidence) -> np.ndarray:
    """The covariance the noise model stands for, entry by entry."""
    noise = estimate_noise(evidence, evidence.residual)
    same_point = noise.point[:, None] == noise.point[None, :]
    same_group = noise.group[:, None] == noise.group[None, :]
    own = np.where(same_point, noise.lot_own[:, None], 0.0)
    shared = np.where(same_group, noise.lot_shared[:, None], 0.0)
    # The model has one lot variance a point and one a group: their means.
    own_mean = own.sum(1) / same_point.sum(1)
    shared_mean = shared.T.sum(1) / same_group.sum(1)
    return (
        np.diag(noise.own)
        + np.where(same_point, own_mean[:, None], 0.0)
        + np.where(same_group, shared_mean[:, None], 0.0)
    )


def test_whitening_is_the_inverse_of_the_dense_covariance(evidence: Evidence) -> None:
    noise = estimate_noise(evidence, evidence.residual)
    r = np.random.default_rng(1).standard_normal(len(evidence.series))
    expected = np.linalg.solve(dense_covariance(evidence), r)
    np.testing.assert_allclose(noise.whiten(r), expected, rtol=1e-8, atol=1e-10)


def test_information_of_a_level_is_its_quadratic_form(evidence: Evidence) -> None:
    noise = estimate_noise(evidence, evidence.residual)
    inverse = np.linalg.inv(dense_covariance(evidence))
    codes = evidence.levels[:, evidence.factors.index("coat.module")]
    info, share = noise.information(codes)
    for level in range(4):
        x = (codes == level).astype(float)
        assert info[codes == level].sum() == pytest.approx(x @ inverse @ x, rel=1e-8)
        touched = len(np.unique(evidence.point[codes == level]))
        assert share[codes == level].sum() == pytest.approx(touched, rel=1e-9)
    assert np.all(info[codes < 0] == 0.0)


def test_center_information_is_the_cross_product_with_the_ones(evidence: Evidence) -> None:
    noise = estimate_noise(evidence, evidence.residual)
    inverse = np.linalg.inv(dense_covariance(evidence))
    family = evidence.cell_family
    cells = np.flatnonzero((evidence.levels[:, 0] == 1) & (family == 0))
    members = np.unique(evidence.series[cells])
    tells = noise.center_information(
        cells, np.zeros(len(cells), dtype=np.int64), np.zeros_like(members), members
    )
    ones = np.isin(evidence.series, members).astype(float)
    np.testing.assert_allclose(tells, (inverse @ ones)[cells], rtol=1e-8)


def test_ar1_inflation_against_the_sum_it_closes_and_against_simulation() -> None:
    m, phi = 7, 0.45
    k = np.arange(1, m)
    by_sum = 1.0 + 2.0 * np.sum((1.0 - k / m) * phi**k)
    assert ar1_inflation(np.array([7.0]), np.array([phi]))[0] == pytest.approx(by_sum, rel=1e-12)
    from scipy.signal import lfilter

    rng = np.random.default_rng(11)
    e = rng.standard_normal((40_000, m + 60))
    z = lfilter([np.sqrt(1.0 - phi**2)], [1.0, -phi], e, axis=1)[:, -m:]
    # The standard error of a variance from 40 000 draws is 0.7 %.
    assert z.mean(1).var() * m == pytest.approx(by_sum, rel=0.03)


def test_noise_is_recovered_from_a_quiet_bay() -> None:
    bay = Bay(days=24.0, flyers=0.0, offsets=0.0, batch_sigma=0.0, phi=0.0, variance_df=1e6)
    evidence = bay.simulate(2)
    noise = estimate_noise(evidence, evidence.residual)
    film = 0
    assert noise.kappa[film] == pytest.approx(bay.shared, abs=0.2)
    mean = np.array([s == "mean" for s in evidence.statistic])
    assert np.median(noise.phi[mean]) < 0.1
    ratio = noise.own / evidence.var_own
    assert np.median(ratio) == pytest.approx(1.0, abs=0.1)


def test_usual_offsets_are_found_and_absent_ones_are_not_invented() -> None:
    for size, found in ((0.8, True), (0.0, False)):
        bay = Bay(days=24.0, flyers=0.0, offsets=size, batch_sigma=0.0)
        evidence = bay.simulate(4)
        columns = build_columns(evidence, AttributionOptions())
        noise = estimate_noise(evidence, evidence.residual)
        offsets = usual_offsets(evidence, noise, columns)
        width = (evidence.characteristic[evidence.series] == 1) & (
            np.array(evidence.statistic)[evidence.series] == "mean"
        )
        spread = offsets.total[width].std()
        assert spread > 0.4 if found else spread < 0.15


def test_wild_cell_is_held_and_a_lot_that_moves_as_one_is_not(evidence: Evidence) -> None:
    noise = estimate_noise(evidence, evidence.residual)
    tilt = np.array([s == "tilt-x" for s in evidence.statistic])[evidence.series]
    three = np.bincount(noise.point)[noise.point] == 3
    point = noise.point[np.flatnonzero(tilt & three)[0]]
    cells = np.flatnonzero(noise.point == point)
    alone = np.zeros(len(evidence.series))
    alone[cells[0]] = 50.0
    together = np.zeros(len(evidence.series))
    together[cells] = 2.5
    sigma = np.sqrt(noise.own[cells[0]])
    assert noise.clip(alone)[cells[0]] <= 4.0 * sigma + 1e-9
    np.testing.assert_allclose(noise.clip(together)[cells], 2.5)


def test_statistics_fall_into_classes() -> None:
    assert statistic_class("mean") == statistic_class("rotation-x") == "mean"
    assert statistic_class("within-wafer") == statistic_class("residual") == "spread"
    assert statistic_class("bowl") == statistic_class("map-distance") == "map"


def test_conjunctions_pair_tool_and_module_of_a_step() -> None:
    factors = ("tool", "gauge", "module", "coat.tool", "coat.module", "etch.tool")
    assert default_conjunctions(factors) == (("tool", "module"), ("coat.tool", "coat.module"))

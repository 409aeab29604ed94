"""Wafer maps: terms on any layout, robust fits, distance from a baseline."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from spc.stats.wafer_map import (
    RobustFit,
    coordinate_free_basis,
    fit_basis,
    fit_maps,
    map_distance,
    map_reference,
    map_terms,
    site_distance,
    site_reference,
    wafer_radius,
)

RADIUS = 150.0


def spiral(n_sites: int) -> tuple[np.ndarray, np.ndarray]:
    """A layout without symmetry that fills the wafer."""
    k = np.arange(n_sites)
    reach, angle = 145 * np.sqrt((k + 0.3) / n_sites), k * 2.39996
    return reach * np.cos(angle), reach * np.sin(angle)


def grid(n_side: int) -> tuple[np.ndarray, np.ndarray]:
    line = np.linspace(-140, 140, n_side)
    x, y = (a.ravel() for a in np.meshgrid(line, line))
    inside = np.hypot(x, y) <= 145
    return x[inside], y[inside]


def test_coefficients_read_in_the_value_unit_off_the_wafer() -> None:
    x, y = spiral(25)
    tilted = 1200 + 3.0 * x / RADIUS - 2.0 * y / RADIUS
    bowl = 5.0 * (np.hypot(x, y) / RADIUS) ** 2  # edge minus centre is 5
    fit = fit_maps(tilted + bowl, x, y, RADIUS)
    assert fit.term("tilt-x")[0] == pytest.approx(3.0, abs=1e-9)
    assert fit.term("tilt-y")[0] == pytest.approx(-2.0, abs=1e-9)
    assert fit.term("bowl")[0] == pytest.approx(5.0, abs=1e-9)
    # The mean of rho^2 over the disc is a half.
    assert fit.term("mean")[0] == pytest.approx(1202.5, abs=1e-9)
    assert fit.residual_ss[0] == pytest.approx(0.0, abs=1e-15 * 1200**2 * 25)


def test_five_sites_on_a_cross_name_what_they_cannot_tell_apart() -> None:
    x = np.array([0.0, 100, -100, 0, 0])
    y = np.array([0.0, 0, 0, 100, -100])
    basis = map_terms(x, y, RADIUS, 3)
    assert basis.names == ("mean", "tilt-x", "tilt-y", "bowl", "astigmatism-0")
    reasons = {d.name: d for d in basis.dropped}
    assert reasons["astigmatism-45"].reason.startswith("astigmatism-45 is zero at every site")
    assert reasons["coma-x"].confounded == ("tilt-x", "coma-x")
    assert reasons["trefoil-y"].confounded == ("tilt-y", "trefoil-y")
    fit = fit_maps(np.arange(5.0), x, y, RADIUS, 3)
    with pytest.raises(KeyError, match="coma-x cannot be told from tilt-x"):
        fit.term("coma-x")


def test_one_ring_of_sites_cannot_tell_the_bowl_from_the_mean() -> None:
    angle = np.arange(8) * np.pi / 4
    basis = map_terms(100 * np.cos(angle), 100 * np.sin(angle), RADIUS)
    assert basis.names == ("mean", "tilt-x", "tilt-y")
    assert basis.dropped[0].confounded == ("mean", "bowl")
    # A hundredth of a millimetre of stage rounding does not hide the tie.
    x, y = np.round(100 * np.cos(angle), 2), np.round(100 * np.sin(angle), 2)
    assert map_terms(x, y, RADIUS).names == basis.names


def test_single_site_keeps_the_mean_alone() -> None:
    basis = map_terms([10.0], [0.0], RADIUS)
    assert basis.names == ("mean",)
    assert len(basis.dropped) == 3


@pytest.mark.parametrize(
    ("x", "y", "message"),
    [
        ([0.0, np.nan], [0.0, 1.0], "site 1 has no coordinates"),
        ([0.0, 151.0], [0.0, 0.0], "site 1 at"),
        ([0.0], [0.0, 1.0], "one length"),
    ],
)
def test_bad_layouts_are_refused(x: list[float], y: list[float], message: str) -> None:
    with pytest.raises(ValueError, match=message):
        map_terms(x, y, RADIUS)
    with pytest.raises(ValueError, match="is not known"):
        map_terms([0.0], [0.0], RADIUS, ["mean", "saddle"])


def test_wafer_radius_is_the_smallest_standard_one() -> None:
    assert wafer_radius([0, 147.0], [0, 0]) == 150.0
    assert wafer_radius([0, 90.0], [0, 30]) == 100.0
    with pytest.raises(ValueError, match="no site"):
        wafer_radius([np.nan], [np.nan])


def test_fit_agrees_with_plain_least_squares_and_statsmodels_errors() -> None:
    import statsmodels.api as sm

    rng = np.random.default_rng(3)
    x, y = spiral(17)
    basis = map_terms(x, y, RADIUS, 2)
    values = rng.normal(1000, 3, (4, 17))
    values[2, [1, 5]] = np.nan
    fit = fit_basis(values, basis)
    for k, row in enumerate(values):
        here = np.isfinite(row)
        other = sm.OLS(row[here], basis.design[here]).fit()
        np.testing.assert_allclose(fit.coefficients[k], other.params, rtol=1e-9, atol=1e-9)
        np.testing.assert_allclose(fit.standard_errors[k], other.bse, rtol=1e-9)
        assert fit.residual_ss[k] == pytest.approx(other.ssr, rel=1e-9)
        assert fit.df[k] == other.df_resid
    assert np.isnan(fit.residuals[2, 1])


def test_wafer_with_too_few_sites_is_said_not_guessed() -> None:
    x, y = spiral(9)
    values = np.random.default_rng(0).normal(size=(2, 9))
    values[1, 3:] = np.nan
    fit = fit_maps(values, x, y, RADIUS)
    assert fit.estimable.tolist() == [True, False]
    assert np.isnan(fit.coefficients[1]).all()
    assert fit.df[1] == 0


@settings(max_examples=25, deadline=None)
@given(
    st.integers(0, 2**32 - 1),
    st.floats(-1e4, 1e4),
    st.floats(1e-2, 1e3),
)
def test_shift_scale_order_and_batch(seed: int, shift: float, scale: float) -> None:
    rng = np.random.default_rng(seed)
    x, y = spiral(13)
    values = rng.normal(size=(5, 13))
    whole = fit_maps(values, x, y, RADIUS)
    moved = fit_maps(shift + scale * values, x, y, RADIUS)
    want = scale * whole.coefficients
    want[:, 0] += shift
    close = 1e-9 * (abs(shift) + 10 * scale)
    np.testing.assert_allclose(moved.coefficients, want, atol=close)
    order = rng.permutation(5)
    np.testing.assert_allclose(
        fit_maps(values[order], x, y, RADIUS).coefficients, whole.coefficients[order], atol=1e-12
    )
    sites = rng.permutation(13)
    shuffled = fit_maps(values[:, sites], x[sites], y[sites], RADIUS)
    np.testing.assert_allclose(shuffled.coefficients, whole.coefficients, atol=1e-11)
    one = fit_maps(values[2], x, y, RADIUS)
    np.testing.assert_allclose(one.coefficients[0], whole.coefficients[2], atol=1e-12)


def test_huber_fit_minimises_the_huber_loss() -> None:
    """Independent route: scipy minimises the loss that the reweighting should minimise."""
    from scipy.optimize import minimize

    rng = np.random.default_rng(5)
    x, y = spiral(30)
    basis = map_terms(x, y, RADIUS)
    value = rng.standard_t(2, size=30)
    ours = fit_basis(value, basis, robust=RobustFit(loss="huber", scale=1.0, refit=False))

    def loss(c: np.ndarray) -> float:
        r = np.abs(value - basis.design @ c)
        return float(np.where(r < 1.345, r**2 / 2, 1.345 * r - 1.345**2 / 2).sum())

    best = minimize(loss, np.zeros(4), tol=1e-12, method="Nelder-Mead", options={"maxiter": 8000})
    np.testing.assert_allclose(ours.coefficients[0], best.x, atol=1e-5)


@pytest.mark.parametrize("n_sites", [9, 13, 25])
def test_flyer_sites_do_not_move_the_terms(n_sites: int) -> None:
    rng = np.random.default_rng(n_sites)
    x, y = spiral(n_sites)
    clean = rng.normal(size=(400, n_sites))
    dirty = clean.copy()
    at = rng.integers(0, n_sites, 400)
    dirty[np.arange(400), at] += rng.choice([-25.0, 25.0], 400)
    truth = fit_maps(clean, x, y, RADIUS)
    # The residual sigma known from the baseline makes the flyer certain even with nine sites.
    robust = fit_maps(dirty, x, y, RADIUS, robust=RobustFit(scale=1.0))
    found = robust.flyers[np.arange(400), at]
    assert found.mean() > 0.97
    worst = np.abs(robust.coefficients - truth.coefficients)[found]
    assert np.quantile(worst, 0.95) < 3.0
    blind = fit_maps(dirty, x, y, RADIUS, robust=RobustFit())
    plain = fit_maps(dirty, x, y, RADIUS)

    def error(fit: object) -> float:
        return float(np.abs(fit.coefficients - truth.coefficients).mean())  # type: ignore[attr-defined]

    assert error(blind) < 0.5 * error(plain)


def test_clean_wafers_keep_their_least_squares_fit() -> None:
    rng = np.random.default_rng(11)
    x, y = spiral(25)
    values = rng.normal(size=(500, 25))
    plain = fit_maps(values, x, y, RADIUS)
    robust = fit_maps(values, x, y, RADIUS, robust=RobustFit())
    clean = ~robust.flyers.any(axis=1)
    assert clean.mean() > 0.97
    np.testing.assert_allclose(robust.coefficients[clean], plain.coefficients[clean], atol=1e-9)


def lots(
    rng: np.random.Generator, n_lots: int, x: np.ndarray, y: np.ndarray, n_wafers: int = 3
) -> tuple[np.ndarray, np.ndarray]:
    """Maps that vary by lot and by wafer in their terms, and by site noise of 1."""
    codes = np.repeat(np.arange(n_lots), n_wafers)
    design = map_terms(x, y, RADIUS).design
    lot = rng.normal(size=(n_lots, 4)) * [8, 1, 1, 1.5]
    wafer = rng.normal(size=(codes.size, 4)) * 0.5
    fixed = 3 * np.cos(x / 40)
    return 1000 + fixed + (lot[codes] + wafer) @ design.T + rng.normal(
        size=(codes.size, x.size)
    ), codes


@pytest.mark.parametrize(("n_sites", "n_lots"), [(5, 12), (9, 20), (25, 30)])
def test_in_control_score_is_standard_normal(n_sites: int, n_lots: int) -> None:
    """Simulation against the F and Box laws: mean 0, sd 1, 2.3 % beyond two sigmas."""
    rng = np.random.default_rng(n_sites)
    x, y = spiral(n_sites)
    scores, own = [], []
    for _ in range(30):
        maps, codes = lots(rng, n_lots, x, y)
        reference = map_reference(maps, x, y, RADIUS, groups=codes)
        own.append(map_distance(reference, maps, groups=codes, baseline=True).z)
        maps, codes = lots(rng, 60, x, y)
        scores.append(map_distance(reference, maps, groups=codes).z)
    z = np.concatenate(scores)
    assert abs(z.mean()) < 0.1
    assert 0.92 < z.std() < 1.08
    assert 0.012 < (z > 2).mean() < 0.035
    mine = np.concatenate(own)
    assert abs(mine.mean()) < 0.1
    assert (mine > 2).mean() < 0.035


def test_lot_of_another_size_keeps_the_promise() -> None:
    rng = np.random.default_rng(8)
    x, y = spiral(13)
    z = []
    for _ in range(30):
        maps, codes = lots(rng, 25, x, y, 3)
        reference = map_reference(maps, x, y, RADIUS, groups=codes)
        maps, codes = lots(rng, 60, x, y, 1)
        result = map_distance(reference, maps, groups=codes)
        assert (result.n_wafers == 1).all()
        z.append(result.z)
    assert (np.concatenate(z) > 2).mean() < 0.04
    assert abs(np.concatenate(z).mean()) < 0.12


def test_a_changed_map_with_an_unchanged_mean_is_seen() -> None:
    rng = np.random.default_rng(2)
    x, y = grid(5)
    maps, codes = lots(rng, 30, x, y)
    reference = map_reference(maps, x, y, RADIUS, groups=codes)
    later, codes = lots(rng, 40, x, y)
    ring = np.cos(3 * np.pi * np.hypot(x, y) / RADIUS)
    changed = later + 3 * (ring - ring.mean())
    np.testing.assert_allclose(changed.mean(axis=1), later.mean(axis=1))
    result = map_distance(reference, changed, groups=codes)
    assert (result.z > 3).mean() > 0.9
    # A change of level alone is no change of the map.
    np.testing.assert_allclose(
        map_distance(reference, later + 50, groups=codes).distance,
        map_distance(reference, later, groups=codes).distance,
        rtol=1e-6,
    )
    rms = float(np.sqrt(np.mean((3 * (ring - ring.mean())) ** 2)))
    assert np.median(result.excess_rms) == pytest.approx(rms, rel=0.15)


def test_missing_sites_and_missing_wafers() -> None:
    rng = np.random.default_rng(4)
    x, y = spiral(13)
    z = []
    for _ in range(25):
        maps, codes = lots(rng, 30, x, y, 1)
        maps[rng.random(maps.shape) < 0.05] = np.nan
        reference = map_reference(maps, x, y, RADIUS, groups=codes)
        maps, codes = lots(rng, 60, x, y, 1)
        maps[:, [0, 7]] = np.nan
        maps[0] = np.nan
        result = map_distance(reference, maps, groups=codes)
        assert np.isnan(result.z[0])
        z.append(result.z[1:])
    assert (np.concatenate(z) > 2).mean() < 0.04
    assert abs(np.concatenate(z).mean()) < 0.15


def test_sites_without_coordinates() -> None:
    rng = np.random.default_rng(9)
    signature = np.array([0.0, 2, -1, 4, 1, 1, -3])
    z = []
    for _ in range(30):
        reference = site_reference(signature + rng.normal(size=(25, 7)) + rng.normal(size=(25, 1)))
        z.append(site_distance(reference, signature + 5 + rng.normal(size=(40, 7))).z)
    assert abs(np.concatenate(z).mean()) < 0.1
    assert (np.concatenate(z) > 2).mean() < 0.035
    swapped = signature.copy()
    swapped[[1, 3]] = swapped[[3, 1]] + [3, -3]
    assert site_distance(reference, swapped).z[0] > 3
    assert coordinate_free_basis(7).names == ("mean",)


def test_too_short_a_baseline_falls_back_and_says_so() -> None:
    rng = np.random.default_rng(1)
    x, y = spiral(9)
    maps = rng.normal(size=(5, 9))
    reference = map_reference(maps, x, y, RADIUS)
    assert reference.terms == ()
    assert any("too few" in note for note in reference.notes)
    assert np.isfinite(map_distance(reference, maps).z).all()
    with pytest.raises(ValueError, match="at least 3"):
        map_reference(maps[:2], x, y, RADIUS)
    with pytest.raises(ValueError, match="do not differ"):
        map_reference(np.ones((6, 9)), x, y, RADIUS)
    with pytest.raises(ValueError, match="do not match"):
        map_distance(reference, np.ones((2, 8)))


def test_huge_changes_give_finite_scores() -> None:
    rng = np.random.default_rng(1)
    x, y = spiral(9)
    reference = map_reference(rng.normal(size=(40, 9)), x, y, RADIUS)
    result = map_distance(reference, 1e6 * x / RADIUS)
    assert np.isfinite(result.z).all()
    assert result.z[0] > 8


@settings(max_examples=15, deadline=None)
@given(st.integers(0, 2**32 - 1), st.floats(1e-3, 1e3))
def test_distance_does_not_depend_on_unit_or_order(seed: int, scale: float) -> None:
    rng = np.random.default_rng(seed)
    x, y = spiral(9)
    maps, codes = lots(rng, 12, x, y)
    new, _ = lots(rng, 4, x, y)
    plain = map_distance(map_reference(maps, x, y, RADIUS, groups=codes), new)
    order = rng.permutation(len(maps))
    again = map_distance(
        map_reference(scale * maps[order], x, y, RADIUS, groups=codes[order]), scale * new
    )
    np.testing.assert_allclose(again.z, plain.z, rtol=1e-6, atol=1e-6)

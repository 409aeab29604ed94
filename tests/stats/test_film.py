"""Film: the spin law and its trim, the swing's effect on CD, image scales."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from spc.stats.film import (
    I_LINE_NM,
    SpinLaw,
    Swing,
    cd_change,
    depth_of_focus,
    fit_spin_law,
    resolution,
    spin_slope,
    spin_thickness,
    spin_trim,
    swing_period,
    swing_ratio,
    thinned_film,
    thinned_limit,
    worst_cd_change,
    worst_slope,
)


def test_i_line_is_365_nm() -> None:
    assert I_LINE_NM == 365.0  # common practice, no source


def test_fitted_exponent_agrees_with_statsmodels() -> None:
    import statsmodels.api as sm

    rng = np.random.default_rng(0)
    rpm = np.repeat([1500.0, 2000, 2500, 3000, 4000], 2)
    film = 1200 * (2500 / rpm) ** 0.47 * np.exp(0.003 * rng.normal(size=10))
    law = fit_spin_law(rpm, film)
    other = sm.OLS(np.log(film), sm.add_constant(np.log(rpm))).fit()
    assert law.fitted
    assert law.exponent == pytest.approx(-other.params[1], rel=1e-10)
    assert law.exponent_se == pytest.approx(other.bse[1], rel=1e-10)
    assert law.residual_sigma == pytest.approx(np.sqrt(other.mse_resid), rel=1e-10)
    assert abs(law.exponent - 0.47) < 3 * law.exponent_se


@pytest.mark.parametrize(
    ("rpm", "film", "reason"),
    [
        ([2000.0, 3000.0], [1200.0, 1000.0], "too few"),
        ([2000.0, 2000, 2000], [1200.0, 1201, 1199], "too few"),
        ([2000.0, 2100, 2200], [1000.0, 1100, 1200], "does not fall"),
        ([2000.0, 2010, 2020], [1200.0, 1150, 1190], "unsure"),
    ],
)
def test_data_that_do_not_allow_a_fit_keep_the_half(
    rpm: list[float], film: list[float], reason: str
) -> None:
    law = fit_spin_law(rpm, film)
    assert not law.fitted
    assert law.exponent == 0.5
    assert reason in law.reason


def test_trim_returns_the_film_to_target() -> None:
    trim = spin_trim(1212.0, 0.0, 1200.0, 2500.0, law=SpinLaw(0.5, 0.0))
    assert trim.rpm == pytest.approx(2500 * 1.01**2)
    assert trim.thickness_nm == pytest.approx(1200.0)
    assert trim.rpm_low == pytest.approx(trim.rpm_high)
    # One per cent of film is two per cent of speed: slope -0.24 nm a rpm here.
    assert spin_slope(1200.0, 2500.0) == pytest.approx(-0.24)
    numeric = (spin_thickness(1200.0, 2500.0, 2501.0) - 1200.0) / 1.0
    assert spin_slope(1200.0, 2500.0) == pytest.approx(numeric, rel=1e-3)


def test_trim_stays_in_the_allowed_range_and_says_so() -> None:
    trim = spin_trim([1212.0, 1400.0], 1.0, 1200.0, 2500.0, allowed_rpm=(2000.0, 3000.0))
    assert trim.allowed.tolist() == [True, False]
    assert trim.rpm[1] == 3000.0
    assert trim.thickness_nm[1] == pytest.approx(1400 * np.sqrt(2500 / 3000))
    assert trim.change_rpm[1] == 500.0


def test_trim_intervals_cover_by_simulation() -> None:
    rng = np.random.default_rng(1)
    runs, a, se_a, se_t = 20000, 0.48, 0.03, 2.0
    exponent = a + se_a * rng.normal(size=runs)
    measured = 1230.0 + se_t * rng.normal(size=runs)
    right = 2500 * (1230.0 / 1200.0) ** (1 / a)
    inside = after = 0
    for k in range(400):
        law = SpinLaw(float(exponent[k]), se_a)
        trim = spin_trim(measured[k], se_t, 1200.0, 2500.0, law=law)
        inside += bool(trim.rpm_low < right < trim.rpm_high)
        true_film = 1230.0 * (2500.0 / trim.rpm) ** a
        after += bool(trim.thickness_low < true_film < trim.thickness_high)
    assert 0.92 < inside / 400 < 0.98
    assert 0.92 < after / 400 < 0.98


def test_thinning_solves_its_differential_equation() -> None:
    from scipy.integrate import solve_ivp

    rho, eta, rpm, h0 = 1050.0, 0.02, 3000.0, 5e-5
    k = 2 * rho * (rpm * 2 * np.pi / 60) ** 2 / (3 * eta)
    end = solve_ivp(lambda _, h: -k * h**3, (0, 20), [h0], rtol=1e-11, atol=1e-16).y[0, -1]
    got = thinned_film(h0, 20.0, rpm, density_kg_m3=rho, viscosity_pa_s=eta)
    assert got == pytest.approx(end, rel=1e-7)
    assert thinned_film(h0, 0.0, rpm, density_kg_m3=rho, viscosity_pa_s=eta) == h0
    limit = thinned_limit(20.0, rpm, density_kg_m3=rho, viscosity_pa_s=eta)
    thick = thinned_film(1.0, 20.0, rpm, density_kg_m3=rho, viscosity_pa_s=eta)
    assert thick == pytest.approx(limit, rel=1e-9)


@settings(max_examples=50, deadline=None)
@given(st.floats(0, 30), st.floats(800, 1500), st.floats(-200, 200))
def test_worst_case_bounds_every_phase(amplitude: float, film: float, step: float) -> None:
    swing = Swing(107.35, amplitude, maximum_nm=1010.0, bulk_slope=0.02)
    change = abs(cd_change(swing, film, film + step))
    assert change <= worst_cd_change(swing, step) + 1e-9
    phases = np.linspace(0, 107.35, 4001)
    over = np.abs(cd_change(Swing(107.35, amplitude, maximum_nm=0.0), phases, phases + step))
    plain = worst_cd_change(Swing(107.35, amplitude), step)
    if abs(step) <= 107.35 / 2:
        assert over.max() == pytest.approx(plain, rel=1e-5, abs=1e-9)
    else:
        assert over.max() <= plain + 1e-9


def test_swing_of_one_period_is_nothing_and_half_is_all() -> None:
    period = float(swing_period(I_LINE_NM, 1.7))
    swing = Swing(period, 5.0, maximum_nm=1000.0)
    assert cd_change(swing, 1000.0, 1000.0 + period) == pytest.approx(0.0, abs=1e-9)
    assert cd_change(swing, 1000.0, 1000.0 + period / 2) == pytest.approx(-10.0)
    assert worst_slope(swing) == pytest.approx(worst_cd_change(swing, 1e-4) / 1e-4, rel=1e-6)
    with pytest.raises(ValueError, match="no phase"):
        cd_change(Swing(period, 5.0), 1000.0, 1001.0)


def test_more_aperture_resolves_more_and_holds_focus_less() -> None:
    na = np.array([0.5, 0.6, 0.7])
    assert (np.diff(resolution(I_LINE_NM, na, 0.6)) < 0).all()
    np.testing.assert_allclose(
        depth_of_focus(I_LINE_NM, na, 1.0) * na**2, np.full(3, I_LINE_NM), rtol=1e-12
    )


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: resolution(0.0, 0.6, 0.6), "wavelength must be positive"),
        (lambda: spin_thickness(-1.0, 2000, 3000), "thickness must be positive"),
        (lambda: spin_trim(1.0, 0.1, 1.0, 2000.0, allowed_rpm=(3.0, 2.0)), "low and a higher"),
        (lambda: spin_trim(1.0, -0.1, 1.0, 2000.0), "cannot be negative"),
        (lambda: swing_ratio(1.2, 0.1, 0.0, 1.0), "between 0 and 1"),
        (lambda: Swing(100.0, -1.0), "amplitude"),
        (lambda: SpinLaw(-0.5), "exponent"),
        (lambda: fit_spin_law([1.0, 2.0], [1.0]), "one length"),
        (
            lambda: thinned_film(1e-4, -1.0, 2000.0, density_kg_m3=1.0, viscosity_pa_s=1.0),
            "time cannot",
        ),
    ],
)
def test_bad_input_is_named(call: object, message: str) -> None:
    with pytest.raises(ValueError, match=message):
        call()  # type: ignore[operator]

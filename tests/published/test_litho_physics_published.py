"""Overlay, film and image physics against the reference values (litho_physics.json).

Sources are named in that file entry by entry: Perloff (1978) and Armitage & Kirk (1988) for the
overlay model, Brunner (1991) and Mack (2007) for the swing, Lin (1987) for Rayleigh scaling,
Emslie, Bonner & Peck (1958) and Meyerhofer (1978) for spinning.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from spc.stats.film import (
    depth_of_focus,
    resolution,
    spin_slope,
    spin_thickness,
    swing_period,
    swing_ratio,
    thinned_film,
    thinned_limit,
)
from spc.stats.overlay import OVERLAY_TERMS, fit_overlay, symmetric_terms

SHORT = {
    "translation-x": "Tx",
    "translation-y": "Ty",
    "scale-x": "Sx",
    "scale-y": "Sy",
    "rotation-x": "Rx",
    "rotation-y": "Ry",
    "field-scale-x": "mx",
    "field-scale-y": "my",
    "field-rotation-x": "rx",
    "field-rotation-y": "ry",
}


@pytest.fixture(scope="module")
def entries(shared_reference: Callable[[str], Any]) -> list[dict[str, Any]]:
    return list(shared_reference("litho_physics.json")["visible"])


def of_kind(entries: list[dict[str, Any]], kind: str) -> list[dict[str, Any]]:
    found = [e for e in entries if e["kind"].startswith(kind)]
    assert found, f"the reference file has no entry of kind {kind!r}"
    return found


def test_overlay_terms_are_recovered(entries: list[dict[str, Any]]) -> None:
    for entry in of_kind(entries, "overlay linear model"):
        table = np.array(entry["inputs"]["marks"])
        fit = fit_overlay(*table[:, :4].T, table[:, 4], table[:, 5])
        values = entry["values"]
        want = values.get("recovered") or values["fitted"]
        got = dict(zip(OVERLAY_TERMS, fit.terms[0], strict=True))
        for name, short in SHORT.items():
            assert got[name] == pytest.approx(want[short], rel=1e-8, abs=1e-8), entry["name"]


def test_overlay_symmetric_forms(entries: list[dict[str, Any]]) -> None:
    ours = {
        "mean_wafer_scale_ppm": "wafer_scale",
        "wafer_scale_difference_ppm": "asymmetric_scale",
        "wafer_rotation_urad": "wafer_rotation",
        "non_orthogonality_urad": "non_orthogonality",
        "field_magnification_ppm": "field_magnification",
        "asymmetric_magnification_ppm": "asymmetric_magnification",
        "field_rotation_urad": "field_rotation",
        "asymmetric_rotation_urad": "asymmetric_rotation",
    }
    checked = 0
    for entry in of_kind(entries, "overlay linear model"):
        if "derived" not in entry["values"]:
            continue
        table = np.array(entry["inputs"]["marks"])
        forms = symmetric_terms(fit_overlay(*table[:, :4].T, table[:, 4], table[:, 5]))
        for theirs, mine in ours.items():
            want = entry["values"]["derived"][theirs]
            assert getattr(forms, mine)[0] == pytest.approx(want, abs=1e-9)
            checked += 1
    assert checked >= 16


def test_overlay_residuals(entries: list[dict[str, Any]]) -> None:
    for entry in of_kind(entries, "overlay linear model with residual"):
        table, want = np.array(entry["inputs"]["marks"]), entry["values"]
        fit = fit_overlay(*table[:, :4].T, table[:, 4], table[:, 5])
        for k, axis in enumerate("xy"):
            residual = (fit.residual_x, fit.residual_y)[k][0]
            sigma = (fit.residual_sigma_x, fit.residual_sigma_y)[k][0]
            assert sigma == pytest.approx(want[f"residual_sd_{axis}"], rel=1e-8)
            rms = np.sqrt(np.mean(residual**2))
            assert rms == pytest.approx(want[f"residual_rms_{axis}"], rel=1e-8)
            assert np.abs(residual).max() == pytest.approx(want[f"max_abs_residual_{axis}"])
            assert fit.raw_m3s[0, k] == pytest.approx(
                want[f"abs_mean_plus_3sigma_{axis}"], rel=1e-8
            )


def test_overlay_one_mark_a_field_is_not_estimable(entries: list[dict[str, Any]]) -> None:
    (entry,) = of_kind(entries, "overlay identifiability")
    x, y = (a.ravel() for a in np.meshgrid([-26.0, 0, 26], [-33.0, 0, 33]))
    u = np.full_like(x, entry["inputs"]["u_mm"])
    v = np.full_like(x, entry["inputs"]["v_mm"])
    fit = fit_overlay(x, y, u, v, x, y)
    estimable = np.isfinite(fit.terms[0])
    assert estimable[["-x" in n for n in OVERLAY_TERMS]].sum() == entry["values"]["rank_x"]
    assert estimable[["-y" in n for n in OVERLAY_TERMS]].sum() == entry["values"]["rank_y"]
    assert set(fit.dropped) == {n for n in OVERLAY_TERMS if n.startswith("field")}


def test_swing_curve(entries: list[dict[str, Any]]) -> None:
    for entry in of_kind(entries, "swing curve"):
        given, want = entry["inputs"], entry["values"]
        period = swing_period(given["wavelength_nm"], given["resist_index"])
        assert period == pytest.approx(want["period_nm"], rel=1e-9)
        assert period / 2 == pytest.approx(want["max_to_min_nm"], rel=1e-9)


def test_swing_ratio(entries: list[dict[str, Any]]) -> None:
    for entry in of_kind(entries, "swing ratio"):
        g, want = entry["inputs"], entry["values"]
        what = (g["R_top"], g["R_bottom"], g["absorbance_per_nm"], g["thickness_nm"])
        assert swing_ratio(*what) == pytest.approx(
            want["swing_ratio_full_reflection_sum"], rel=1e-9
        )
        assert swing_ratio(*what, first_order=True) == pytest.approx(
            want["swing_ratio_first_order"], rel=1e-9
        )


def test_rayleigh(entries: list[dict[str, Any]]) -> None:
    for entry in of_kind(entries, "Rayleigh"):
        g, want = entry["inputs"], entry["values"]
        assert resolution(g["wavelength_nm"], g["NA"], g["k1"]) == pytest.approx(
            want["resolution_nm"], rel=1e-9
        )
        assert depth_of_focus(g["wavelength_nm"], g["NA"], g["k2"]) == pytest.approx(
            want["depth_of_focus_nm"], rel=1e-9
        )


def test_spin_thinning(entries: list[dict[str, Any]]) -> None:
    for entry in of_kind(entries, "spin thinning"):
        g, want = entry["inputs"], entry["values"]
        liquid = {"density_kg_m3": g["density_kg_m3"], "viscosity_pa_s": g["viscosity_pa_s"]}
        film = thinned_film(g["h0_m"], g["time_s"], g["spin_rpm"], **liquid)
        limit = thinned_limit(g["time_s"], g["spin_rpm"], **liquid)
        assert film == pytest.approx(want["h_m"], rel=1e-9)
        assert limit == pytest.approx(want["long_time_limit_m"], rel=1e-9)


def test_spin_speed_exponent(entries: list[dict[str, Any]]) -> None:
    for entry in of_kind(entries, "spin speed exponent"):
        g, want = entry["inputs"], entry["values"]
        film = spin_thickness(g["thickness_nm"], g["rpm_from"], g["rpm_to"])
        assert film == pytest.approx(want["thickness_nm_at_new_speed"], rel=1e-9)
        slope = spin_slope(g["thickness_nm"], g["rpm_from"])
        assert slope == pytest.approx(want["slope_nm_per_rpm_at_start"], rel=1e-9)
        share = slope * g["rpm_from"] / g["thickness_nm"]
        assert share == pytest.approx(want["percent_change_per_percent_speed"], rel=1e-9)

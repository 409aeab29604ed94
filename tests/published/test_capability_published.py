"""Capability against the reference values (capability.json, furnace_reference.json).

The files name the source of every entry: NIST/SEMATECH e-Handbook 3.5.1 and 6.1.6; Kane (1986);
Chou, Owen & Borrego (1990); Bissell (1990); Chan, Cheng & Spiring (1988); Boyles (1991);
ISO 22514-2; Howe (1969) and Odeh & Owen (1980) for tolerance factors.
"""

from __future__ import annotations

import csv
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from scipy import stats

from spc.stats.capability import (
    Sigma,
    SpecLimits,
    bissell_interval,
    capability_study,
    cp,
    cp_interval,
    cpk,
    cpm,
    cpm_df,
    cpm_interval,
    noncentral_t_interval,
    off_centre,
    one_sided,
    ppm_expected,
    sd_interval,
    within_sigma,
)
from spc.stats.capability_nonnormal import (
    empirical_indices,
    fit_distribution,
    percentile_indices,
)
from spc.stats.tolerance import howe_factor, one_sided_factor, two_sided_factor

Load = Callable[[str], Any]


@pytest.fixture(scope="module")
def reference(shared_reference: Load) -> dict[str, Any]:
    return dict(shared_reference("capability.json"))


def of_kind(reference: dict[str, Any], kind: str) -> list[dict[str, Any]]:
    found = [e for e in reference["visible"] if e["kind"].startswith(kind)]
    assert found, f"no entry of kind {kind!r}"
    return found


def test_normal_indices_and_intervals(reference: dict[str, Any]) -> None:
    for entry in of_kind(reference, "normal, overall sd"):
        want, rel = entry["values"], entry["tolerance_relative"]
        spec = SpecLimits(entry["lsl"], entry["usl"], entry["target"])
        mean, sigma = entry["mean"], Sigma.independent(entry["sd"], entry["n"])
        low, high = one_sided(mean, sigma.sd, spec)
        index = cpk(mean, sigma.sd, spec)
        assert index == pytest.approx(want["Cpk"], rel=rel)
        sides = {"Cpl": low, "Cpu": high}
        for name, side in sides.items():
            if want[name] is None:
                assert np.isnan(side)
                continue
            assert side == pytest.approx(want[name], rel=rel)
            exact = noncentral_t_interval(side, sigma)
            assert exact == pytest.approx(want[f"{name}_ci_exact"], rel=rel, abs=1e-8)
        assert bissell_interval(index, sigma) == pytest.approx(want["Cpk_ci_bissell"], rel=rel)
        nearest = noncentral_t_interval(index, sigma)
        assert nearest == pytest.approx(want["Cpk_nearest_side_ci_noncentral_t"], rel=rel)
        one = noncentral_t_interval(index, sigma, 0.90)[0]
        assert one == pytest.approx(want["Cpk_lower_one_sided_noncentral_t"], rel=rel)
        bissell = bissell_interval(index, sigma, 0.90)[0]
        assert bissell == pytest.approx(want["Cpk_lower_bissell_one_sided"], rel=rel)
        ppm = ppm_expected(mean, sigma.sd, spec)
        for got, name in zip(ppm, ("ppm_below", "ppm_above", "ppm_total"), strict=True):
            assert got == pytest.approx(want[name], rel=1e-9)
        if "Cp" not in want:
            assert np.isnan(cp(sigma.sd, spec))
            continue
        assert cp(sigma.sd, spec) == pytest.approx(want["Cp"], rel=rel)
        assert cp_interval(want["Cp"], sigma.df) == pytest.approx(want["Cp_ci"], rel=rel)
        lower = cp_interval(want["Cp"], sigma.df, 0.90)[0]
        assert lower == pytest.approx(want["Cp_lower_one_sided"], rel=rel)
        assert cpm(mean, sigma.sd, spec) == pytest.approx(want["Cpm"], rel=rel)
        assert cpm_df(mean, sigma, entry["target"]) == pytest.approx(want["Cpm_boyles_nu"])
        assert cpm_interval(mean, sigma, spec) == pytest.approx(want["Cpm_ci_boyles"], rel=rel)


def test_centred_ppm_table(reference: dict[str, Any]) -> None:
    for row in reference["centred_ppm_table"]["rows"]:
        half = 3.0 * row["Cp"]
        below, _, both = ppm_expected(0.0, 1.0, SpecLimits(-half, half))
        assert both == pytest.approx(row["ppm_two_sided"], rel=1e-8)
        assert below == pytest.approx(row["ppm_one_side"], rel=1e-8)


def test_subgroups(reference: dict[str, Any]) -> None:
    for entry in of_kind(reference, "subgrouped"):
        want, data = entry["values"], np.array(entry["data"])
        spec = SpecLimits(entry["lsl"], entry["usl"], entry["target"])
        mean = data.mean()
        for method, sd_name, label in (
            ("pooled", "sd_within_pooled", "pooled"),
            ("range", "sd_within_rbar_d2", "rbar"),
            ("sd", "sd_within_sbar_c4", "sbar"),
        ):
            sigma = within_sigma(data, method)
            assert sigma.sd == pytest.approx(want[sd_name], rel=1e-8)
            assert cp(sigma.sd, spec) == pytest.approx(want[f"Cp_{label}"], rel=1e-8)
            if f"Cpk_{label}" in want:
                assert cpk(mean, sigma.sd, spec) == pytest.approx(want[f"Cpk_{label}"], rel=1e-8)
        pooled = within_sigma(data)
        assert pooled.df == want["df_pooled"]
        assert cp_interval(want["Cp_pooled"], pooled.df) == pytest.approx(want["Cp_pooled_ci"])
        overall = Sigma.independent(data.std(ddof=1), data.size)
        study = capability_study(mean, overall, spec, within=pooled)
        assert study.sd_overall == pytest.approx(want["sd_overall"], rel=1e-8)
        assert study.pp == pytest.approx(want["Pp"], rel=1e-8)
        assert study.ppk == pytest.approx(want["Ppk"], rel=1e-8)
        assert [study.pp_low, study.pp_high] == pytest.approx(want["Pp_ci"], rel=1e-8)
        assert study.cpm == pytest.approx(want["Cpm"], rel=1e-8)


def test_handbook_worked_example(reference: dict[str, Any]) -> None:
    """e-Handbook 6.1.6: Cp 1.0, Cpk 0.6667, k 0.3333."""
    for entry in of_kind(reference, "published example"):
        if "k" not in entry["values"]:
            continue
        spec = SpecLimits(entry["lsl"], entry["usl"])
        assert cp(entry["sd"], spec) == pytest.approx(entry["published"]["Cp"], abs=5e-5)
        assert cpk(entry["mean"], entry["sd"], spec) == pytest.approx(
            entry["published"]["Cpk"], abs=5e-5
        )
        assert off_centre(entry["mean"], spec) == pytest.approx(entry["published"]["k"], abs=5e-5)


LAWS: dict[str, Callable[[dict[str, float]], Any]] = {
    "normal": lambda d: stats.norm(d["mean"], d["sd"]),
    "lognormal": lambda d: stats.lognorm(d["sd_log"], scale=np.exp(d["mu_log"])),
    "Rayleigh": lambda d: stats.rayleigh(scale=d["sigma"]),
    "half-normal": lambda d: stats.halfnorm(scale=d["sigma"]),
}


def test_percentile_method(reference: dict[str, Any]) -> None:
    checked = 0
    for entry in of_kind(reference, "non-normal, percentile method"):
        law = LAWS[entry["distribution"]["family"]](entry["distribution"])
        spec = SpecLimits(entry["lsl"], entry["usl"])
        for variant, tail in (("z3", None), ("literal_0.135_percent", 0.00135)):
            want = entry["values"][variant]
            got = (
                percentile_indices(law, spec)
                if tail is None
                else percentile_indices(law, spec, tail=tail)
            )
            for name, attribute in (
                ("X_low", "x_low"),
                ("X_mid", "x_mid"),
                ("X_high", "x_high"),
                ("Pp", "pp"),
                ("Ppk", "ppk"),
                ("Ppk_upper", "ppk_upper"),
                ("Ppk_lower", "ppk_lower"),
            ):
                if name in want:
                    assert getattr(got, attribute) == pytest.approx(want[name], rel=1e-8)
                    checked += 1
            assert got.ppm_below == pytest.approx(entry["values"]["ppm_below"], rel=1e-7)
            assert got.ppm_above == pytest.approx(entry["values"]["ppm_above"], rel=1e-7)
    assert checked > 30


def test_fitted_lognormal(reference: dict[str, Any]) -> None:
    for entry in of_kind(reference, "non-normal, fitted lognormal"):
        want, spec = entry["values"], SpecLimits(entry["lsl"], entry["usl"])
        fit = fit_distribution(entry["data"], ("lognormal",))
        assert fit.theta[0] == pytest.approx(want["mu_log"], rel=1e-9)
        assert np.exp(fit.theta[1]) == pytest.approx(want["sd_log_mle"], rel=1e-9)
        got = percentile_indices(fit.law, spec)
        assert got.x_low == pytest.approx(want["X_low"], rel=1e-6)
        assert got.x_high == pytest.approx(want["X_high"], rel=1e-6)
        assert got.pp == pytest.approx(want["Pp"], rel=1e-6)
        assert got.ppk == pytest.approx(want["Ppk"], rel=1e-6)


def test_tolerance_factors(reference: dict[str, Any]) -> None:
    for entry in of_kind(reference, "normal tolerance factor"):
        what = entry["n"], entry["content"], entry["confidence"]
        want = entry["values"]
        assert one_sided_factor(*what) == pytest.approx(want["k_one_sided"], rel=1e-8)
        assert two_sided_factor(*what) == pytest.approx(want["k_two_sided_exact"], rel=1e-8)
        assert howe_factor(*what) == pytest.approx(want["k_two_sided_howe"], rel=1e-8)


def furnace(shared_reference: Load) -> np.ndarray:
    with open(shared_reference("furnace_oxide.csv"), newline="") as f:
        return np.array([float(row["thickness_angstrom"]) for row in csv.DictReader(f)])


def test_furnace_case(shared_reference: Load) -> None:
    """e-Handbook 3.5.1: Cp 1.31313, Cpk 1.27327, Cpm 1.30384 and their intervals."""
    file = shared_reference("furnace_reference.json")
    data, limits = furnace(shared_reference), file["spec"]
    spec = SpecLimits(limits["lsl"], limits["usl"], limits["target"])
    sigma = Sigma.independent(data.std(ddof=1), data.size)
    study = capability_study(data.mean(), sigma, spec)
    bissell = bissell_interval(study.ppk, sigma)
    sd_low, sd_high = sd_interval(sigma)
    got = {
        "mean": data.mean(),
        "standard deviation": sigma.sd,
        "sd, 95% lower": sd_low,
        "sd, 95% upper": sd_high,
        "Cp": study.pp,
        "Cpk": study.ppk,
        "Cpm": study.cpm,
        "Cp 95% lower (chi-square)": study.pp_low,
        "Cp 95% upper (chi-square)": study.pp_high,
        "Cpk 95% lower (Bissell)": bissell[0],
        "Cpk 95% upper (Bissell)": bissell[1],
        "Cpm 95% lower": study.cpm_low,
        "Cpm 95% upper": study.cpm_high,
        "percent below LSL (normal)": study.ppm_below / 1e4,
        "percent above USL (normal)": study.ppm_above / 1e4,
        "percent outside (normal)": study.ppm_expected / 1e4,
    }
    seen = 0
    for row in file["published"]:
        if row["quantity"] in got:
            assert got[row["quantity"]] == pytest.approx(row["published"], abs=row["tolerance"])
            seen += 1
    assert seen == len(got)
    low, high = noncentral_t_interval(study.ppk, sigma)
    # The exact interval is near Bissell's with 168 readings.
    assert [low, high] == pytest.approx([1.12771, 1.41882], abs=5e-3)


def test_furnace_without_a_law(shared_reference: Load) -> None:
    """e-Handbook 3.5.1.2: Cnpk 1.35762 from the sample's own percentiles."""
    file = shared_reference("furnace_reference.json")
    spec = SpecLimits(file["spec"]["lsl"], file["spec"]["usl"])
    want = file["nonparametric_cnpk"]
    got = empirical_indices(furnace(shared_reference), spec)
    assert got == pytest.approx(want["value_published"], abs=want["tolerance"])

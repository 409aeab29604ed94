"""Overlay: recovery, layouts, missing marks, errors of the terms."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from spc.stats.overlay import (
    FIELD_TERMS,
    OVERLAY_TERMS,
    TERM_UNITS,
    axis_terms,
    field_centres,
    fit_overlay,
    mean_plus_3sigma,
    model_overlay,
    overlay_layout,
    symmetric_terms,
)

Marks = tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]


def marks(n_fields: int = 9, corners: bool = True) -> Marks:
    """Fields of 26 x 33 mm on a square grid; four corner marks and the centre, or the centre."""
    side = int(np.sqrt(n_fields))
    steps = np.arange(side) - (side - 1) / 2
    fx, fy = (a.ravel() for a in np.meshgrid(steps * 26, steps * 33))
    place = np.array([[0, 0], [-12, -15], [12, -15], [-12, 15], [12, 15]] if corners else [[0, 0]])
    u, v = np.tile(place.astype(float), (fx.size, 1)).T
    return np.repeat(fx, len(place)), np.repeat(fy, len(place)), u, v


def test_names_are_the_contracts() -> None:
    assert len(set(OVERLAY_TERMS)) == 10
    assert TERM_UNITS["translation-x"] == "nm"
    assert TERM_UNITS["field-scale-y"] == "ppm"
    assert TERM_UNITS["rotation-x"] == "urad"


@settings(max_examples=25, deadline=None)
@given(st.lists(st.floats(-5, 5), min_size=10, max_size=10))
def test_exact_recovery_of_any_terms(terms: list[float]) -> None:
    layout = marks()
    dx, dy = model_overlay(terms, *layout)
    fit = fit_overlay(*layout, dx, dy)
    np.testing.assert_allclose(fit.terms[0], terms, atol=1e-10)
    assert np.abs(fit.residual_x).max() < 1e-10
    np.testing.assert_allclose(axis_terms(symmetric_terms(fit)), fit.terms[:, 2:], atol=1e-12)


def test_field_centre_is_the_mark_less_its_place_in_the_field() -> None:
    x, y = field_centres([30.0, 10.0], [5.0, 5.0], [4.0, -2.0], [1.0, 0.0])
    assert x.tolist() == [26.0, 12.0]
    assert y.tolist() == [4.0, 5.0]


def test_missing_marks_and_standard_errors_against_statsmodels() -> None:
    import statsmodels.api as sm

    rng = np.random.default_rng(6)
    x, y, u, v = marks()
    dx, dy = rng.normal(size=(2, 6, x.size))
    dx[rng.random(dx.shape) < 0.1] = np.nan
    dy[rng.random(dy.shape) < 0.1] = np.nan
    fit = fit_overlay(x, y, u, v, dx, dy)
    design = np.column_stack([np.ones_like(x), x, -y, u, -v])
    for k, row in enumerate(dx):
        here = np.isfinite(row)
        other = sm.OLS(row[here], design[here]).fit()
        columns = [OVERLAY_TERMS.index(n) for n in OVERLAY_TERMS if n.endswith("-x")]
        np.testing.assert_allclose(fit.terms[k, columns], other.params, rtol=1e-8, atol=1e-12)
        np.testing.assert_allclose(fit.standard_errors[k, columns], other.bse, rtol=1e-8)
        assert fit.residual_sigma_x[k] == pytest.approx(np.sqrt(other.mse_resid), rel=1e-10)
        assert fit.n_marks[k, 0] == here.sum()
        assert fit.df[k, 0] == other.df_resid
    pooled = (fit.residual_sigma_x**2 * fit.df[:, 0] + fit.residual_sigma_y**2 * fit.df[:, 1]) / (
        fit.df.sum(axis=1)
    )
    np.testing.assert_allclose(fit.residual_sigma**2, pooled, rtol=1e-12)
    np.testing.assert_allclose(fit.residual_3sigma[:, 0], 3 * fit.residual_sigma_x)


def test_wafers_at_once_are_wafers_one_by_one() -> None:
    rng = np.random.default_rng(1)
    layout = marks()
    dx, dy = rng.normal(size=(2, 4, layout[0].size))
    whole = fit_overlay(*layout, dx, dy)
    for k in range(4):
        one = fit_overlay(*layout, dx[k], dy[k])
        np.testing.assert_allclose(one.terms[0], whole.terms[k], atol=1e-13)
        np.testing.assert_allclose(one.corrected_m3s[0], whole.corrected_m3s[k], rtol=1e-12)


def test_one_mark_a_field_gives_the_wafer_terms_and_says_why() -> None:
    layout = marks(corners=False)
    truth = np.array([1.0, 2, 0.1, 0.2, 0.3, 0.4, 9, 9, 9, 9])
    fit = fit_overlay(*layout, *model_overlay(truth, *layout))
    np.testing.assert_allclose(fit.terms[0, :6], truth[:6], atol=1e-12)
    assert np.isnan(fit.terms[0, 6:]).all()
    assert set(fit.dropped) == set(FIELD_TERMS)
    assert "field-scale-x cannot be estimated" in fit.dropped["field-scale-x"]
    assert "one place of their fields" in fit.dropped["field-rotation-y"]
    assert np.isnan(symmetric_terms(fit).field_rotation).all()


def test_marks_along_one_line_of_the_field() -> None:
    x, y, u, _ = marks()
    layout = overlay_layout(x, y, u, np.zeros_like(u))
    assert layout.terms[0] == ("translation-x", "scale-x", "rotation-x", "field-scale-x")
    assert set(layout.dropped) == {"field-rotation-x", "field-scale-y"}


def test_field_terms_tied_to_each_other_drop_one_with_the_reason() -> None:
    x, y, u, _ = marks()
    layout = overlay_layout(x, y, u, 1.25 * u)
    assert (
        "field-rotation-x cannot be told from field-scale-x" in layout.dropped["field-rotation-x"]
    )
    assert "field-scale-x" not in layout.dropped


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (lambda x, y, u, v: (x, y, 0.1 * x, v), "field-scale-x cannot be told from scale-x"),
        (lambda x, y, u, v: (x, y, 0.1 * y + 3, v), "field-scale-x cannot be told from rotation-x"),
        (lambda x, y, u, v: (0 * x, y, u, v), "scale-x cannot be told from translation-x"),
        (lambda x, y, u, v: (x, 2 * x + 1, u, v), "rotation-x cannot be told from"),
        (lambda x, y, u, v: (x[:1], y[:1], u[:1], v[:1]), "scale-x cannot be told from"),
        (lambda x, y, u, v: (x[:3], y, u, v), "one length"),
        (lambda x, y, u, v: (np.where(x > 0, np.nan, x), y, u, v), "has no place"),
    ],
)
def test_layouts_that_mix_terms_are_refused_by_name(change: object, message: str) -> None:
    with pytest.raises(ValueError, match=message):
        overlay_layout(*change(*marks()))  # type: ignore[operator]


def test_wafer_with_too_few_marks() -> None:
    layout = marks()
    dx = np.zeros((2, layout[0].size))
    dx[1, 4:] = np.nan
    fit = fit_overlay(*layout, dx, np.zeros_like(dx))
    assert fit.estimable.tolist() == [True, False]
    assert np.isnan(fit.term("scale-x")[1])
    assert np.isnan(fit.residual_sigma_x[1])
    with pytest.raises(ValueError, match="must both be"):
        fit_overlay(*layout, dx[:, :3], dx[:, :3])


def test_coverage_of_the_standard_errors() -> None:
    """95 % t intervals hold the truth 95 % of the time (binomial sd 0.5 %)."""
    from scipy.stats import t

    rng = np.random.default_rng(12)
    layout = marks()
    dx, dy = rng.normal(0, 2, (2, 2000, layout[0].size))
    fit = fit_overlay(*layout, dx, dy)
    df = np.where(["-x" in n for n in OVERLAY_TERMS], fit.df[:, :1], fit.df[:, 1:])
    inside = np.abs(fit.terms) < t.ppf(0.975, df) * fit.standard_errors
    assert ((inside.mean(axis=0) > 0.935) & (inside.mean(axis=0) < 0.965)).all()


def test_mean_plus_3sigma_leaves_missing_out() -> None:
    values = np.array([[1.0, 2, np.nan, 3], [-1, -2, -3, np.nan], [1, np.nan, np.nan, np.nan]])
    np.testing.assert_allclose(mean_plus_3sigma(values), [5.0, 5.0, np.nan])

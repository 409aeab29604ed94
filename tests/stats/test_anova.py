"""Analysis of variance against scipy and against the expectations of its mean squares."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from spc.stats.anova import nested_anova, one_way_anova
from spc.stats.constants import c4, d2, d3
from spc.stats.wafer_summary import summarise


@settings(max_examples=30, deadline=None)
@given(seed=st.integers(0, 10**6), groups=st.integers(2, 6))
def test_one_way_agrees_with_scipy(seed: int, groups: int) -> None:
    rng = np.random.default_rng(seed)
    sizes = rng.integers(2, 7, groups)
    code = np.repeat(np.arange(groups), sizes)
    y = rng.normal(size=code.size) + code
    ours = one_way_anova(code, y)
    theirs = stats.f_oneway(*(y[code == i] for i in range(groups)))
    assert ours.f == pytest.approx(theirs.statistic, rel=1e-10)
    assert ours.p == pytest.approx(theirs.pvalue, rel=1e-8, abs=1e-300)
    assert ours.ss_between + ours.ss_within == pytest.approx(((y - y.mean()) ** 2).sum())


def test_one_way_survives_a_large_offset() -> None:
    rng = np.random.default_rng(4)
    code = np.repeat(np.arange(4), 5)
    y = np.round((rng.normal(size=20) + code) * 1024) / 1024
    assert one_way_anova(code, y + 2.0**40).f == pytest.approx(one_way_anova(code, y).f, rel=1e-12)


def test_one_way_refuses_what_it_cannot_answer() -> None:
    with pytest.raises(ValueError, match="at least two groups"):
        one_way_anova([0, 0], [1.0, 2.0])
    with pytest.raises(ValueError, match="at least two groups"):
        one_way_anova([0, 1], [1.0, 2.0])
    with pytest.raises(ValueError, match="finite"):
        one_way_anova([0, 0, 1], [1.0, np.nan, 2.0])
    assert one_way_anova([0, 0, 1, 1], [1.0, 1.0, 2.0, 2.0]).f == np.inf


def test_nested_components_solve_the_expected_mean_squares() -> None:
    # The expectation of each sum of squares is the trace of its projection times the variance
    # matrix; the components must reproduce the observed sums exactly.
    rng = np.random.default_rng(7)
    wafer_lot = np.repeat(np.arange(6), rng.integers(1, 4, 6))
    wafer = np.repeat(np.arange(wafer_lot.size), rng.integers(1, 5, wafer_lot.size))
    lot = wafer_lot[wafer]
    y = rng.normal(size=wafer.size) + 3.0 * rng.normal(size=6)[lot]
    found = nested_anova(summarise(np.zeros_like(lot), lot, wafer, y))

    def projection(codes: np.ndarray) -> np.ndarray:
        design = (codes[:, None] == np.unique(codes)).astype(float)
        return design @ np.linalg.pinv(design)

    everyone = np.full((y.size, y.size), 1.0 / y.size)
    steps = [
        np.eye(y.size) - projection(wafer),
        projection(wafer) - projection(lot),
        projection(lot) - everyone,
    ]
    same = [np.eye(y.size), wafer[:, None] == wafer, lot[:, None] == lot]
    for i, step in enumerate(steps):
        assert found.df[0, i] == pytest.approx(np.trace(step))
        assert found.ss[0, i] == pytest.approx(float(y @ step @ y))
        expected = sum(v * np.trace(step @ s) for v, s in zip(found.variance[0], same, strict=True))
        assert expected == pytest.approx(found.ss[0, i])
    assert not found.balanced[0]
    assert found.mean[0] == pytest.approx(y.mean())


def test_nested_without_degrees_of_freedom_is_nan() -> None:
    found = nested_anova(summarise([0, 0, 1], [0, 1, 2], [0, 1, 2], [1.0, 2.0, 3.0]))
    assert np.isnan(found.variance[0, :2]).all()
    assert np.isnan(found.variance[1]).all()
    assert found.ms[0, 2] == pytest.approx(0.5)


def test_range_constants_by_simulation_and_closed_form() -> None:
    # Closed forms: d2(2) = 2/sqrt(pi), d3(2)^2 = 2 - 4/pi, d2(3) = 3/sqrt(pi), c4(2) = sqrt(2/pi).
    assert float(d2(2)) == pytest.approx(2 / np.sqrt(np.pi), rel=1e-11)
    assert float(d3(2)) == pytest.approx(np.sqrt(2 - 4 / np.pi), rel=1e-11)
    assert float(d2(3)) == pytest.approx(3 / np.sqrt(np.pi), rel=1e-11)
    assert float(c4(2)) == pytest.approx(np.sqrt(2 / np.pi), rel=1e-13)
    x = np.random.default_rng(1).normal(size=(40_000, 7))
    assert np.ptp(x, axis=1).mean() == pytest.approx(float(d2(7)), abs=0.02)
    assert np.ptp(x, axis=1).std() == pytest.approx(float(d3(7)), abs=0.02)
    assert x.std(axis=1, ddof=1).mean() == pytest.approx(float(c4(7)), abs=0.006)
    assert d2([[2, 3], [3, 2]]).shape == (2, 2)
    with pytest.raises(ValueError, match="at least 2"):
        d2(1)
    with pytest.raises(ValueError, match="above 1"):
        c4(1)

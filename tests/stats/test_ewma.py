"""EWMA charts against the plain recursion, exact variances and simulated points."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from spc.stats.designs import EwmaDesign
from spc.stats.ewma import ewma, ewma_chart, limit_factors

POINTS = st.lists(st.floats(-5.0, 5.0), min_size=1, max_size=60)
WEIGHTS = st.floats(0.02, 1.0)


def plain(z: np.ndarray, lam: float, start: float = 0.0) -> np.ndarray:
    out = []
    for value in z:
        start = lam * value + (1.0 - lam) * start
        out.append(start)
    return np.array(out)


@given(POINTS, WEIGHTS, st.floats(-3.0, 3.0))
@settings(max_examples=60, derandomize=True, deadline=None)
def test_plain_recursion(z: list[float], lam: float, start: float) -> None:
    np.testing.assert_allclose(ewma(z, lam, start), plain(np.array(z), lam, start), atol=1e-13)


@given(POINTS, WEIGHTS, st.integers(0, 60))
@settings(max_examples=40, derandomize=True, deadline=None)
def test_batch_equals_incremental(z: list[float], lam: float, cut: int) -> None:
    cut = min(cut, len(z) - 1)
    first = ewma(z[:cut], lam)
    carried = first[-1] if cut else 0.0
    both = np.concatenate((first, ewma(z[cut:], lam, carried)))
    np.testing.assert_allclose(both, ewma(z, lam), atol=1e-13)


@given(POINTS, WEIGHTS, st.floats(-5.0, 5.0), st.floats(0.1, 10.0))
@settings(max_examples=40, derandomize=True, deadline=None)
def test_shift_and_scale(z: list[float], lam: float, shift: float, scale: float) -> None:
    points = np.array(z)
    moved = ewma_chart(scale * points + shift, EwmaDesign(lam, 3.0), shift, scale)
    fixed = ewma_chart(points, EwmaDesign(lam, 3.0))
    np.testing.assert_allclose(moved.value, scale * fixed.value + shift, atol=1e-10)
    np.testing.assert_allclose(moved.upper, scale * fixed.upper + shift, atol=1e-10)
    np.testing.assert_allclose(moved.lower, scale * fixed.lower + shift, atol=1e-10)


def test_pandas_ewm() -> None:
    """pandas starts its average at the first point: so does ours, started there."""
    z = np.random.default_rng(1).standard_normal((3, 4000))
    ours = ewma(z, 0.1, z[:, 0])
    theirs = pd.DataFrame(z.T).ewm(alpha=0.1, adjust=False).mean().to_numpy().T
    np.testing.assert_allclose(ours, theirs, rtol=0.0, atol=1e-13)


def test_long_rows_with_a_small_weight() -> None:
    z = np.random.default_rng(2).standard_normal(30_000) + 1.0
    np.testing.assert_allclose(ewma(z, 0.001), plain(z, 0.001), rtol=0.0, atol=1e-12)


def test_segments_and_gaps_start_and_carry() -> None:
    z = np.array([1.0, 2.0, np.nan, 4.0, 1.0, 3.0])
    found = ewma(z, 0.5, 0.0, [0, 0, 0, 0, 1, 1], missing="skip")
    np.testing.assert_allclose(found, [0.5, 1.25, np.nan, 2.625, 0.5, 1.75])
    chart = ewma_chart(
        z, EwmaDesign(0.5, 3.0, time_varying=True), 0, 1, [0, 0, 0, 0, 1, 1], missing="skip"
    )
    np.testing.assert_allclose(chart.value, found)
    one, two = 0.25, 0.25 + 0.25 * 0.25
    three = 0.25 + 0.25 * two
    np.testing.assert_allclose(chart.sigma**2, [one, two, np.nan, three, one, two])
    assert not chart.signal[2]


def test_a_start_for_each_stream() -> None:
    z = np.zeros((3, 2))
    np.testing.assert_allclose(ewma(z, 0.5, [4.0, 0.0, -4.0])[:, 1], [1.0, 0.0, -1.0])
    with pytest.raises(ValueError, match="each of 3 streams"):
        ewma(z, 0.5, [1.0, 2.0])


def test_limits_follow_unequal_sigmas() -> None:
    """Variance of the EWMA as the sum over its weights, lam^2 (1-lam)^(2j) sigma^2 (algebra)."""
    rng = np.random.default_rng(4)
    sigma = rng.uniform(0.5, 2.0, size=40)
    lam = 0.25
    chart = ewma_chart(np.zeros(40), EwmaDesign(lam, 2.7, time_varying=True), 0.0, sigma)
    weights = lam * (1.0 - lam) ** np.subtract.outer(np.arange(40), np.arange(40)).clip(0)
    exact = np.sqrt(np.tril(weights) ** 2 @ sigma**2)
    np.testing.assert_allclose(chart.sigma, exact, rtol=1e-13)
    np.testing.assert_allclose(chart.upper, 2.7 * exact, rtol=1e-13)


def test_limits_follow_unequal_sigmas_in_simulated_points() -> None:
    rng = np.random.default_rng(5)
    sigma = np.tile([0.5, 2.0, 1.0], 10)
    points = rng.standard_normal((40_000, 30)) * sigma
    chart = ewma_chart(points, EwmaDesign(0.2, 3.0, time_varying=True), 0.0, sigma)
    ratio = chart.value.std(axis=0) / chart.sigma[0]
    np.testing.assert_allclose(ratio, 1.0, atol=0.02)


def test_fixed_limits_with_equal_sigmas() -> None:
    chart = ewma_chart(np.zeros(30), EwmaDesign(0.2, 2.962), 10.0, 2.0)
    np.testing.assert_allclose(chart.upper, 10.0 + 2.0 * 2.962 / 3.0, rtol=1e-14)
    np.testing.assert_allclose(limit_factors(EwmaDesign(0.2, 2.962), [1, 5]), 1.0)


def test_time_varying_factor() -> None:
    """sqrt(1 - (1 - lam)^(2 t)), Lucas & Saccucci (1990)."""
    t = np.arange(1, 50)
    found = limit_factors(EwmaDesign(0.1, 2.814, time_varying=True), t)
    np.testing.assert_allclose(found, np.sqrt(1.0 - 0.9 ** (2 * t)), rtol=1e-13)
    assert limit_factors(EwmaDesign(1.0, 3.0, time_varying=True), [1])[0] == 1.0


def test_fast_start_opens_by_point_twenty() -> None:
    """Steiner (1999): half the width at point 1, 99 % of it at point 20 (from memory)."""
    narrow = limit_factors(EwmaDesign(0.2, 3.0, fast_start=0.5), [1, 20])
    wide = limit_factors(EwmaDesign(0.2, 3.0, time_varying=True), [1, 20])
    np.testing.assert_allclose(narrow / wide, [0.5, 0.99], rtol=1e-12)
    chart = ewma_chart(np.zeros(20), EwmaDesign(0.2, 3.0, fast_start=0.5))
    settled = 3.0 * np.sqrt(0.2 / 1.8)
    np.testing.assert_allclose(chart.upper[[0, 19]], settled * narrow, rtol=1e-12)


def test_signal_is_strict_and_has_a_side() -> None:
    design = EwmaDesign(1.0, 3.0)
    assert ewma_chart([3.0, 3.1, -3.0, -3.1], design).side.tolist() == [0, 1, 0, -1]


def test_one_centre_and_sigma_a_stream_or_a_point() -> None:
    rng = np.random.default_rng(6)
    x = rng.standard_normal((3, 40))
    design = EwmaDesign(0.3, 2.5, fast_start=0.5)
    centre, sigma = np.array([[1.0], [0.0], [-2.0]]), np.array([[1.0], [0.5], [2.0]])
    short = ewma_chart(x, design, centre, sigma)
    full = ewma_chart(x, design, np.tile(centre, 40), np.tile(sigma, 40))
    for name in ("value", "sigma", "center", "lower", "upper", "side"):
        np.testing.assert_allclose(getattr(short, name), getattr(full, name), atol=1e-13)
    with pytest.raises(ValueError, match="sigma of shape"):
        ewma_chart(x, design, 0.0, np.ones(7))


@pytest.mark.parametrize("shape", [(0,), (1,), (3, 0), (0, 4), (2, 1)])
def test_small_shapes(shape: tuple[int, ...]) -> None:
    assert ewma(np.ones(shape), 0.5).shape == shape
    assert ewma_chart(np.ones(shape), EwmaDesign(0.5, 3.0)).side.shape == shape
    assert ewma_chart(np.ones(shape), EwmaDesign(0.5, 3.0), np.zeros(shape)).side.shape == shape


@pytest.mark.parametrize("lam", [0.0, -0.1, 1.1, np.nan])
def test_weight_out_of_range(lam: float) -> None:
    with pytest.raises(ValueError, match="lambda"):
        ewma([1.0], lam)


@pytest.mark.parametrize("sigma", [0.0, -1.0, np.inf, np.nan])
def test_sigma_out_of_range(sigma: float) -> None:
    with pytest.raises(ValueError, match="sigma"):
        ewma_chart([1.0], EwmaDesign(0.2, 3.0), 0.0, sigma)

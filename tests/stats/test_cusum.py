"""CUSUM charts against the plain recursion of their definition."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from spc.stats.cusum import cusum
from spc.stats.designs import CusumDesign

POINTS = st.lists(st.floats(-4.0, 4.0), min_size=1, max_size=60)
DESIGNS = st.builds(
    lambda k, h, share: CusumDesign(k, h, share * h),
    st.floats(0.0, 1.5),
    st.floats(0.5, 8.0),
    st.floats(0.0, 1.0),
)


def plain(z: np.ndarray, k: float, start: float) -> np.ndarray:
    out = []
    for value in z:
        start = max(0.0, start + value - k)
        out.append(start)
    return np.array(out)


@given(POINTS, DESIGNS)
@settings(max_examples=80, derandomize=True, deadline=None)
def test_plain_recursion(z: list[float], design: CusumDesign) -> None:
    path = cusum(z, design)
    points = np.array(z)
    upper = plain(points, design.k, design.head_start)
    lower = plain(-points, design.k, design.head_start)
    np.testing.assert_allclose(path.upper, upper, atol=1e-12)
    np.testing.assert_allclose(path.lower, lower, atol=1e-12)
    clear = (np.abs(upper - design.h) > 1e-9) & (np.abs(lower - design.h) > 1e-9)
    expected = (upper > design.h) | (lower > design.h)
    assert (path.signal == expected)[clear].all()


@given(POINTS, DESIGNS)
@settings(max_examples=40, derandomize=True, deadline=None)
def test_sign_flip_swaps_the_sides(z: list[float], design: CusumDesign) -> None:
    path, mirror = cusum(z, design), cusum([-value for value in z], design)
    assert (path.upper == mirror.lower).all()
    assert (path.lower == mirror.upper).all()


@given(POINTS, DESIGNS, st.integers(1, 60))
@settings(max_examples=40, derandomize=True, deadline=None)
def test_batch_equals_incremental(z: list[float], design: CusumDesign, cut: int) -> None:
    cut = min(cut, len(z))
    first = cusum(z[:cut], design)
    rest = cusum(z[cut:], design, start=(first.upper[-1], first.lower[-1]))
    whole = cusum(z, design)
    np.testing.assert_allclose(np.r_[first.upper, rest.upper], whole.upper, atol=1e-12)
    np.testing.assert_allclose(np.r_[first.lower, rest.lower], whole.lower, atol=1e-12)


def test_streams_segments_and_gaps_are_separate_charts() -> None:
    rng = np.random.default_rng(8)
    z = rng.standard_normal((20, 80))
    z[rng.random(z.shape) < 0.1] = np.nan
    codes = np.cumsum(rng.random(z.shape) < 0.05, axis=1)
    design = CusumDesign(0.5, 4.0, 2.0)
    path = cusum(z, design, codes, missing="skip")
    for row in range(20):
        for code in np.unique(codes[row]):
            chosen = (codes[row] == code) & ~np.isnan(z[row])
            alone = plain(z[row, chosen], 0.5, 2.0)
            np.testing.assert_allclose(path.upper[row, chosen], alone, atol=1e-12)
    assert np.isnan(path.upper[np.isnan(z)]).all()
    assert not path.signal[np.isnan(z)].any()


def test_long_rows_keep_their_digits() -> None:
    z = np.random.default_rng(9).standard_normal(100_000)
    np.testing.assert_allclose(
        cusum(z, CusumDesign(0.5, 4.0)).upper, plain(z, 0.5, 0.0), rtol=0, atol=1e-9
    )


class TestOnset:
    def test_point_after_the_last_zero(self) -> None:
        z = np.r_[np.zeros(10), np.full(6, 2.0)]
        path = cusum(z, CusumDesign(0.5, 4.0))
        assert np.flatnonzero(path.signal)[0] == 12
        assert path.onset(1)[12] == 10
        assert path.onset(-1)[12] == 12
        # Page's estimate: k + S / N is the mean of the points since the onset.
        assert path.shift_estimate(1)[12] == pytest.approx(2.0)

    def test_downward(self) -> None:
        z = np.r_[np.zeros(5), np.full(6, -1.5)]
        path = cusum(z, CusumDesign(0.5, 2.5))
        first = int(np.flatnonzero(path.signal)[0])
        assert path.side[first] == -1
        assert path.onset(-1)[first] == 5
        assert path.shift_estimate(-1)[first] == pytest.approx(-1.5)

    def test_no_zero_means_the_start_of_the_segment(self) -> None:
        path = cusum(np.full(6, 3.0), CusumDesign(0.5, 4.0), [0, 0, 0, 1, 1, 1])
        assert path.onset(1).tolist() == [0, 0, 0, 3, 3, 3]

    def test_gaps(self) -> None:
        z = np.array([[np.nan, 0.0, np.nan, 2.0, np.nan, 2.0]])
        path = cusum(z, CusumDesign(0.5, 2.0), missing="skip")
        assert path.onset(1)[0, 5] == 3
        assert path.shift_estimate(1)[0, 5] == pytest.approx(2.0)

    def test_other_sides_are_refused(self) -> None:
        with pytest.raises(ValueError, match="side"):
            cusum([1.0], CusumDesign(0.5, 4.0)).onset(0)


@pytest.mark.parametrize("shape", [(0,), (1,), (3, 0), (0, 4), (2, 1)])
def test_small_shapes(shape: tuple[int, ...]) -> None:
    path = cusum(np.ones(shape), CusumDesign(0.5, 4.0))
    assert path.upper.shape == path.side.shape == shape
    if path.upper.size:
        assert path.onset(1).shape == shape


def test_larger_sum_decides_the_side() -> None:
    path = cusum([0.0], CusumDesign(0.0, 1.0), start=(2.0, 3.0))
    assert path.side.tolist() == [-1]


@pytest.mark.parametrize(("k", "h", "head"), [(-1, 4, 0), (0.5, 0, 0), (0.5, 4, 5), (0.5, 4, -1)])
def test_designs_out_of_range(k: float, h: float, head: float) -> None:
    with pytest.raises(ValueError, match="CUSUM"):
        CusumDesign(k, h, head)


def test_start_out_of_range() -> None:
    with pytest.raises(ValueError, match="start"):
        cusum([1.0], CusumDesign(0.5, 4.0), start=(-1.0, 0.0))
    with pytest.raises(ValueError, match="start"):
        cusum(np.zeros((3, 2)), CusumDesign(0.5, 4.0), start=([1.0, 2.0], 0.0))

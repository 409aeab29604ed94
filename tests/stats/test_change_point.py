"""Change points: brute force, coverage, choice of shape, correlated and unequal noise."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from spc.stats.change_models import mixture_interval, prepare, ramp_profile
from spc.stats.change_point import (
    ChangeOptions,
    Noise,
    classify_change,
    crossing,
    drift_change,
    log_likelihood_profile,
    spike_change,
    spread_change,
    step_change,
)

N = 40


def ar1(rng: np.random.Generator, phi: float, n: int = N) -> np.ndarray:
    e = rng.normal(size=n)
    for t in range(1, n):
        e[t] = phi * e[t - 1] + np.sqrt(1 - phi**2) * e[t]
    return e


def shape(kind: str, onset: int, size: float, n: int = N) -> np.ndarray:
    t = np.arange(n)
    return {
        "shift": size * (t >= onset),
        "drift": size * np.maximum(t - onset + 1, 0),
        "spike": size * (t == onset),
        "ended shift": size * ((t >= onset) & (t < onset + 6)),
    }[kind]


@pytest.mark.parametrize("phi", [0.0, 0.6, -0.3])
@pytest.mark.parametrize("mean_se", [0.0, 0.4, None])
def test_profiles_against_the_dense_likelihood(phi: float, mean_se: float | None) -> None:
    """Independent route: multivariate normal density with the full covariance, size maximised."""
    rng = np.random.default_rng(1)
    n = 15
    sigma = rng.uniform(0.5, 2, n)
    x = 10 + sigma * ar1(rng, phi, n) + shape("shift", 9, 2.0, n)
    lag = np.abs(np.subtract.outer(np.arange(n), np.arange(n)))
    cov = np.outer(sigma, sigma) * phi**lag
    if mean_se is not None:
        noise = Noise(sigma, 10.0, mean_se, phi)
        # An unsure baseline mean adds the same error to every point.
        wide = cov + mean_se**2
        fixed = np.empty((n, 0))
    else:
        noise, wide, fixed = Noise(sigma, None, 0.0, phi), cov, np.ones((n, 1))
    inverse = np.linalg.inv(wide)

    def gain(column: np.ndarray) -> tuple[float, float]:
        def rss(design: np.ndarray) -> tuple[float, np.ndarray]:
            b = np.linalg.lstsq(design.T @ inverse @ design, design.T @ inverse @ z, rcond=None)[0]
            r = z - design @ b
            return float(r @ inverse @ r), b

        z = x - 10.0
        before = rss(fixed)[0] if fixed.size else float(z @ inverse @ z)
        after, b = rss(np.column_stack([fixed, column]))
        return 0.5 * (before - after), float(b[-1])

    step, drift = step_change(x, noise), drift_change(x, noise)
    base = step.profile.max() - step.gain
    for i in range(1, n):
        want, size = gain((np.arange(n) >= i).astype(float))
        assert step.profile[i] - base == pytest.approx(want, abs=1e-8)
        if i == step.onset:
            assert step.magnitude == pytest.approx(size, rel=1e-8)
        want, slope = gain(np.maximum(np.arange(n) - i + 1.0, 0))
        assert drift.profile[i] - base == pytest.approx(want, abs=1e-8)
        if i == drift.onset:
            assert drift.slope == pytest.approx(slope, rel=1e-8)
    spike = spike_change(x, noise, width=2)
    best = max(
        gain(((np.arange(n) >= i) & (np.arange(n) < i + w)).astype(float))[0]
        for w in (1, 2)
        for i in range(n - w + 1)
    )
    assert spike.gain == pytest.approx(best, abs=1e-8)


COVERAGE = [
    ("shift", 1.0, 0.0, 0.0),
    ("shift", 1.5, 0.0, 0.0),
    ("shift", 2.0, 0.5, 0.0),
    ("shift", 1.5, 0.0, 0.3),
    ("drift", 0.2, 0.0, 0.0),
    ("drift", 0.3, 0.4, 0.0),
]


def coverage(kind: str, size: float, phi: float, se: float, runs: int) -> tuple[float, float]:
    rng = np.random.default_rng(7)
    sigma = np.where(np.arange(N) % 3 == 0, 1.6, 1.0)
    onset, hits, sizes = 28, 0, 0
    find = step_change if kind == "shift" else drift_change
    true = size if kind == "shift" else size * (N - onset)
    for _ in range(runs):
        x = sigma * ar1(rng, phi) + shape(kind, onset, size) + se * rng.normal()
        fit = find(x, Noise(sigma, 0.0, se, phi))
        hits += bool(fit.confidence_set[onset])
        sizes += fit.low < true < fit.high
    return hits / runs, sizes / runs


@pytest.mark.parametrize(("kind", "size", "phi", "se"), COVERAGE)
def test_coverage(kind: str, size: float, phi: float, se: float) -> None:
    onset, magnitude = coverage(kind, size, phi, se, 150)
    assert 0.90 <= onset <= 1.0
    assert 0.88 <= magnitude <= 1.0


@pytest.mark.slow
@pytest.mark.parametrize(("kind", "size", "phi", "se"), COVERAGE)
def test_coverage_long(kind: str, size: float, phi: float, se: float) -> None:
    onset, magnitude = coverage(kind, size, phi, se, 3000)
    assert 0.93 <= onset <= 0.985
    assert 0.92 <= magnitude <= 0.98


@pytest.mark.parametrize("size", [1.5, 2.5])
def test_coverage_when_cut_at_the_first_signal(size: float) -> None:
    """What happens in use: the series ends where a chart first signalled."""
    rng = np.random.default_rng(3)
    hits, runs = 0, 120
    for _ in range(runs):
        x = rng.normal(size=120) + shape("shift", 40, size, 120)
        two = np.convolve(x > 2, np.ones(3), "full")[:120] >= 2
        signal = np.flatnonzero(((np.abs(x) > 3) | two) & (np.arange(120) >= 40))
        last = int(signal[0]) if signal.size else 119
        hits += bool(step_change(x[: last + 1], Noise(1.0, 0.0)).confidence_set[40])
    assert hits / runs >= 0.90


def test_coverage_of_a_growth_of_spread() -> None:
    rng = np.random.default_rng(4)
    hits, ratios, runs = 0, 0, 120
    for _ in range(runs):
        x = rng.normal(size=60) * np.where(np.arange(60) >= 40, 2.5, 1.0)
        fit = spread_change(x, Noise(1.0, 0.0))
        hits += bool(fit.confidence_set[40])
        ratios += fit.low < 1.5 < fit.high
        assert fit.magnitude == pytest.approx(fit.sd_ratio - 1.0)
    assert 0.9 <= hits / runs <= 1.0
    assert 0.88 <= ratios / runs <= 1.0


@pytest.mark.parametrize(
    ("kind", "onset", "size", "least"),
    [
        ("shift", 28, 2.0, 0.85),
        ("drift", 20, 0.25, 0.75),
        ("spike", 28, 6.0, 0.9),
        ("spike", 39, 6.0, 0.7),
        ("ended shift", 20, 3.0, 0.9),
    ],
)
def test_shape_is_told(kind: str, onset: int, size: float, least: float) -> None:
    rng = np.random.default_rng(5)
    found = [
        classify_change(rng.normal(size=N) + shape(kind, onset, size), Noise(1.0, 0.0))
        for _ in range(50)
    ]
    right = [c for c in found if c.pattern == kind]
    assert len(right) / len(found) >= least
    if kind == "ended shift":
        ends = [c.best.end for c in right if c.best]
        assert abs(np.median(ends) - (onset + 6)) <= 1
    assert all(c.evidence >= 0 for c in found)


def test_spread_is_told_from_a_shift() -> None:
    rng = np.random.default_rng(6)
    wide = np.where(np.arange(N) >= 22, 3.5, 1.0)
    found = [classify_change(wide * rng.normal(size=N), Noise(1.0, 0.0)).pattern for _ in range(60)]
    assert found.count("spread") >= 50


def test_correlation_ignored_is_a_false_change() -> None:
    """Whitening matters: at phi 0.6 the naive model finds changes that are not there."""
    rng = np.random.default_rng(8)
    naive = fair = 0
    only = ChangeOptions(patterns=("shift", "drift"))
    for _ in range(100):
        x = ar1(rng, 0.6)
        naive += classify_change(x, Noise(1.0, 0.0), options=only).pattern != "none"
        fair += classify_change(x, Noise(1.0, 0.0, phi=0.6), options=only).pattern != "none"
    assert fair <= 15
    assert naive >= 3 * fair


def test_missing_points_and_times() -> None:
    rng = np.random.default_rng(9)
    x = 0.2 * rng.normal(size=30) + shape("shift", 20, 3.0, 30)
    x[[5, 19, 25]] = np.nan
    fit = step_change(x, Noise(0.2, 0.0))
    assert fit.onset == 20
    assert fit.probability[19] == 0.0
    assert np.isneginf(fit.profile[5])
    assert fit.end == 30
    assert fit.n_changed == 9
    days = np.cumsum(rng.uniform(0.2, 3, 30))
    drift = 0.05 * rng.normal(size=30) + 0.5 * np.maximum(days - days[14], 0)
    found = drift_change(drift, Noise(0.05, 0.0), days)
    assert found.onset == 15
    assert found.slope == pytest.approx(0.5, abs=0.02)
    assert found.magnitude == pytest.approx(0.5 * (days[-1] - days[14]), rel=0.05)


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 2**32 - 1), st.floats(-1e3, 1e3), st.floats(1e-2, 1e3))
def test_shift_and_scale(seed: int, offset: float, scale: float) -> None:
    rng = np.random.default_rng(seed)
    x = rng.normal(size=25) + shape("shift", 15, 2.0, 25)
    a = classify_change(x, Noise(1.0, 0.0, 0.2, 0.3))
    b = classify_change(offset + scale * x, Noise(scale, offset, 0.2 * scale, 0.3))
    for name, fit in a.fits.items():
        assert b.fits[name].gain == pytest.approx(fit.gain, rel=1e-6, abs=1e-6)
        assert b.fits[name].magnitude == pytest.approx(scale * fit.magnitude, rel=1e-6)
        assert b.fits[name].earliest == fit.earliest
    np.testing.assert_allclose(a.fits["shift"].probability.sum(), 1.0)


def test_forecast_of_a_drift() -> None:
    rng = np.random.default_rng(10)
    t = np.arange(40.0)
    inside, runs = 0, 80
    for _ in range(runs):
        x = rng.normal(size=40) + 0.3 * np.maximum(t - 20, 0)
        expected, earliest, latest = crossing(x, Noise(1.0, 0.0), 10.0)
        assert earliest <= expected <= latest
        inside += earliest <= 20 + 10 / 0.3 <= latest
    assert 0.88 <= inside / runs <= 1.0
    # A drift that leads away from the limit never arrives for certain.
    assert np.isinf(crossing(x, Noise(1.0, 0.0), -10.0)[0])
    with pytest.raises(ValueError, match="baseline mean"):
        crossing(x, Noise(1.0), 10.0)


def test_mixture_of_one_is_the_normal_interval() -> None:
    low, high = mixture_interval(np.ones(1), np.array([2.0]), np.array([0.5]), 0.95)
    assert [low, high] == pytest.approx([2 - 0.97998, 2 + 0.97998], abs=1e-4)


def test_constant_series_and_same_times() -> None:
    x = np.zeros(10)
    assert classify_change(x, Noise(1.0, 0.0)).pattern == "none"
    assert np.isfinite(log_likelihood_profile(x, Noise(1.0, 0.0))).all()
    profile = ramp_profile(prepare(x, Noise(1.0, 0.0), np.zeros(10)))
    assert np.isfinite(profile.gain[0])
    assert np.isneginf(profile.gain[1:]).all()


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: Noise(0.0), "sigma must be positive"),
        (lambda: Noise(1.0, phi=1.0), "between -1 and 1"),
        (lambda: Noise(1.0, mean_se=-1.0), "negative"),
        (lambda: step_change([1.0, np.nan], Noise(1.0, 0.0)), "at least 2"),
        (lambda: step_change([1.0, 2.0], Noise(1.0)), "at least 3"),
        (lambda: step_change(np.ones((2, 3)), Noise(1.0)), "one series"),
        (lambda: drift_change(np.ones(3), Noise(1.0, 0.0), [3, 2, 1]), "in the order"),
        (lambda: drift_change(np.ones(3), Noise(1.0, 0.0), [3, 2]), "shape"),
        (lambda: step_change(np.ones(4000), Noise(1.0, 0.0)), "the last 3000"),
        (lambda: step_change(np.ones(9), Noise(1.0, 1.0, sigma_known=False)), "are equal"),
        (lambda: ChangeOptions(patterns=("wobble",)), "unknown patterns"),
        (lambda: ChangeOptions(spike_width=0), "at least 1"),
    ],
)
def test_bad_input_is_named(make: object, message: str) -> None:
    with pytest.raises(ValueError, match=message):
        make()  # type: ignore[operator]

"""Gauge study: coverage of its intervals, offsets between gauges, bad input."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from spc.stats.gauge import GaugeOptions, gauge_offset, gauge_study


def crossed(
    rng: np.random.Generator, shape: tuple[int, int, int], sds: tuple[float, float, float, float]
) -> np.ndarray:
    """sds: part, gauge, interaction, repeatability."""
    parts, gauges, _ = shape
    part, gauge, both, error = sds
    return (
        rng.normal(0, part, (parts, 1, 1))
        + rng.normal(0, gauge, (1, gauges, 1))
        + rng.normal(0, both, (parts, gauges, 1))
        + rng.normal(0, error, shape)
    )


def test_intervals_cover() -> None:
    rng = np.random.default_rng(0)
    sds = (2.0, 0.3, 0.1, 0.4)
    measurement = np.sqrt(0.3**2 + 0.1**2 + 0.4**2)
    true = {
        "sd_repeatability": 0.4,
        "sd_measurement": measurement,
        "sd_part": 2.0,
        "sd_total": np.sqrt(4 + measurement**2),
        "precision_to_tolerance": 6 * measurement / 12,
        "percent_of_study_sd": 100 * measurement / np.sqrt(4 + measurement**2),
        "signal_to_noise": np.sqrt(2) * 2 / measurement,
    }
    hits = dict.fromkeys(true, 0)
    runs = 100
    for _ in range(runs):
        study = gauge_study(
            crossed(rng, (10, 4, 3), sds),
            lower_spec=-6,
            upper_spec=6,
            options=GaugeOptions(interaction="keep"),
        )
        for name, value in true.items():
            low, high = study.intervals[name]
            hits[name] += low <= value <= high
    for name, count in hits.items():
        assert 0.88 <= count / runs <= 1.0, (name, count / runs)


def test_interval_of_the_gauge_agrees_with_the_modified_large_sample_one() -> None:
    """Independent route: Graybill & Wang (1980) interval of a sum of mean squares."""
    data = crossed(np.random.default_rng(2), (10, 3, 3), (2.0, 0.3, 0.2, 0.4))
    study = gauge_study(data, options=GaugeOptions(interaction="keep"))
    rows = {row.source: row for row in study.anova}
    parts, _, repeats = data.shape
    weights = {"gauge": 1, "part x gauge": parts - 1, "repeatability": parts * (repeats - 1)}
    terms = {name: w * rows[name].ms / (parts * repeats) for name, w in weights.items()}
    centre = sum(terms.values())
    assert centre == pytest.approx(study.sd_measurement**2)
    low = centre - np.sqrt(
        sum(
            ((1 - rows[n].df / stats.chi2.ppf(0.975, rows[n].df)) * t) ** 2
            for n, t in terms.items()
        )
    )
    high = centre + np.sqrt(
        sum(
            ((rows[n].df / stats.chi2.ppf(0.025, rows[n].df) - 1) * t) ** 2
            for n, t in terms.items()
        )
    )
    got = study.intervals["sd_measurement"]
    assert got[0] ** 2 == pytest.approx(low, rel=0.1)
    assert got[1] ** 2 == pytest.approx(high, rel=0.1)


def test_repeatability_interval_is_the_exact_chi_square() -> None:
    data = crossed(np.random.default_rng(3), (8, 3, 2), (1.0, 0.2, 0.2, 0.4))
    study = gauge_study(data, options=GaugeOptions(interaction="keep"))
    row = next(r for r in study.anova if r.source == "repeatability")
    want = np.sqrt(row.ss / stats.chi2.ppf([0.975, 0.025], row.df))
    assert study.intervals["sd_repeatability"] == pytest.approx(want, rel=2e-3)
    again = gauge_study(data, options=GaugeOptions(interaction="keep"))
    assert repr(again.intervals) == repr(study.intervals)


def test_one_repeat_pools_the_interaction() -> None:
    data = crossed(np.random.default_rng(4), (8, 3, 1), (1.0, 0.2, 0.0, 0.4))
    study = gauge_study(data, options=GaugeOptions(interaction="keep"))
    assert not study.interaction_kept
    assert [row.source for row in study.anova] == ["part", "gauge", "repeatability", "total"]
    assert np.isnan(study.precision_to_tolerance)
    assert np.isnan(study.intervals["precision_to_tolerance"]).all()


def test_anova_agrees_with_statsmodels() -> None:
    import pandas as pd
    from statsmodels.formula.api import ols
    from statsmodels.stats.anova import anova_lm

    data = crossed(np.random.default_rng(5), (6, 3, 2), (1.0, 0.2, 0.2, 0.4))
    part, gauge, _ = np.indices(data.shape)
    frame = pd.DataFrame({"y": data.ravel(), "p": part.ravel(), "g": gauge.ravel()})
    table = anova_lm(ols("y ~ C(p) * C(g)", frame).fit())
    rows = gauge_study(data, options=GaugeOptions(interaction="keep")).anova
    np.testing.assert_allclose([r.ss for r in rows[:4]], table["sum_sq"], rtol=1e-9)
    np.testing.assert_allclose([r.df for r in rows[:4]], table["df"])


@settings(max_examples=20, deadline=None)
@given(st.integers(0, 2**32 - 1), st.floats(-1e3, 1e3), st.floats(1e-2, 1e3))
def test_shift_scale_and_order(seed: int, shift: float, scale: float) -> None:
    rng = np.random.default_rng(seed)
    data = crossed(rng, (5, 3, 2), (1.0, 0.3, 0.1, 0.2))
    keep = GaugeOptions(interaction="keep")
    here = gauge_study(data, options=keep)
    moved = gauge_study(shift + scale * data[rng.permutation(5)], options=keep)
    assert moved.sd_measurement == pytest.approx(scale * here.sd_measurement, rel=1e-6)
    assert moved.percent_of_study_sd == pytest.approx(here.percent_of_study_sd, rel=1e-6)
    np.testing.assert_allclose(
        moved.gauge_offsets, scale * here.gauge_offsets, rtol=1e-6, atol=1e-9 * abs(shift)
    )


def test_perfect_repeats_are_no_failure() -> None:
    data = np.zeros((4, 2, 2)) + np.arange(4.0)[:, None, None]
    study = gauge_study(data)
    assert study.sd_measurement == 0.0
    assert study.distinct_categories == 1000
    assert study.percent_of_study_sd == 0.0


@pytest.mark.parametrize(
    ("data", "message"),
    [
        (np.ones((1, 2, 2)), "two parts and gauges"),
        (np.ones((3, 2, 2)), "all readings are equal"),
        (np.where(np.arange(12).reshape(3, 2, 2) == 7, np.nan, 1.0), "part 1, gauge 1, repeat 1"),
    ],
)
def test_bad_studies_are_named(data: np.ndarray, message: str) -> None:
    with pytest.raises(ValueError, match=message):
        gauge_study(data)
    with pytest.raises(ValueError, match="must be below"):
        gauge_study(np.arange(8.0).reshape(2, 2, 2), lower_spec=3, upper_spec=1)
    with pytest.raises(ValueError, match="interaction"):
        GaugeOptions(interaction="perhaps")


def two_gauges(
    rng: np.random.Generator, n_both: int, n_one: int, offset: float
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    wafer = np.concatenate([np.repeat(np.arange(n_both), 2), n_both + np.arange(2 * n_one)])
    first = np.concatenate([np.tile([True, False], n_both), np.arange(2 * n_one) % 2 == 0])
    level = rng.normal(100, 1.0, n_both + 2 * n_one)
    return level[wafer] + offset * first + rng.normal(0, 0.4, wafer.size), wafer, first


@pytest.mark.parametrize(
    ("both", "one", "method"), [(8, 0, "paired"), (0, 12, "unpaired"), (5, 30, "mixed")]
)
def test_offset_interval_covers(both: int, one: int, method: str) -> None:
    rng = np.random.default_rng(both)
    hits, runs = 0, 150
    for _ in range(runs):
        found = gauge_offset(*two_gauges(rng, both, one, 0.7))
        assert found.method == method
        hits += found.low < 0.7 < found.high
    assert 0.90 <= hits / runs <= 1.0


def test_paired_offset_is_the_paired_t_interval() -> None:
    rng = np.random.default_rng(6)
    values, wafer, first = two_gauges(rng, 12, 0, 0.5)
    found = gauge_offset(values, wafer, first)
    other = stats.ttest_rel(values[first], values[~first]).confidence_interval(0.95)
    assert [found.low, found.high] == pytest.approx([other.low, other.high], rel=1e-9)
    assert found.sd_difference == pytest.approx((values[first] - values[~first]).std(ddof=1))
    # Sites of a wafer are averaged, not counted: doubling the readings changes nothing.
    doubled = gauge_offset(np.tile(values, 2), np.tile(wafer, 2), np.tile(first, 2))
    assert doubled.high == pytest.approx(found.high)
    assert doubled.df == found.df


def test_mixed_offset_is_surer_than_its_parts() -> None:
    rng = np.random.default_rng(7)
    values, wafer, first = two_gauges(rng, 6, 60, 0.5)
    mixed = gauge_offset(values, wafer, first)
    only = wafer < 6
    paired = gauge_offset(values[only], wafer[only], first[only])
    assert (mixed.n_paired, mixed.n_first, mixed.n_second) == (6, 60, 60)
    assert mixed.high - mixed.low < paired.high - paired.low


def test_offset_that_grows_with_the_level_is_seen() -> None:
    rng = np.random.default_rng(8)
    level = rng.uniform(90, 110, 30)
    values = np.concatenate([1.03 * level, level]) + 0.05 * rng.normal(size=60)
    found = gauge_offset(values, np.tile(np.arange(30), 2), np.repeat([True, False], 30))
    assert found.slope_low < 0.03 / 1.015 < found.slope_high
    assert found.slope_low > 0
    assert found.agreement[0] < found.offset < found.agreement[1]


def test_offset_needs_wafers() -> None:
    with pytest.raises(ValueError, match="1 wafers on both gauges"):
        gauge_offset([1.0, 2.0], [1, 1], [True, False])
    with pytest.raises(ValueError, match="one length"):
        gauge_offset([1.0, 2.0], [1], [True, False])
    named = gauge_offset([1.0, 2.0, 3.0, 5.0, np.nan], ["a", "a", "b", "b", "c"], [1, 0, 1, 0, 1])
    assert named.offset == pytest.approx(-1.5)

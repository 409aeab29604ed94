"""Rows of the review: specifications that lack a side, laws, gauges, overlay, intervals."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from scipy import stats
from sqlalchemy import Engine

from config.control_plan import Characteristic
from spc.monitoring.review_rows import Ask, UnitStudy, study_units
from spc.monitoring.review_sites import Readings
from spc.monitoring.review_units import Units, unit_statistics, units_of
from spc.stats.capability import capability_study
from tests.monitoring.bench import Wafer, add, hours, lots_of
from tests.monitoring.test_review import THICKNESS, rows_of


def readings_of(values: np.ndarray) -> tuple[Readings, Units]:
    """Readings of (units, lots, wafers, sites), or more axes behind; sites without a pattern."""
    units, lots, wafers, sites = values.shape[:4]
    n = units * lots * wafers
    unit = np.repeat(np.arange(units), lots * wafers)
    lot = np.repeat(np.arange(units * lots), wafers)
    readings = Readings(
        keys=tuple(f'{{"tool": "{i}"}}' for i in range(units)),
        stream=unit,
        month=np.zeros(n, np.int64),
        lot=lot,
        lot_wafer=np.arange(n),
        bare_n=np.zeros(n, np.int64),
        bare_mean=np.full(n, np.nan),
        bare_squares=np.zeros(n),
        wafer=np.repeat(np.arange(n), sites),
        site=np.arange(n * sites),
        value=values.reshape(n * sites, -1),
    )
    return readings, units_of(unit)[0]


def plan(**changes: Any) -> Characteristic:
    return Characteristic(**{**THICKNESS, **changes})


def nested(rng: np.random.Generator, shape: tuple[int, ...], sd: tuple[float, ...]) -> np.ndarray:
    return sum(  # type: ignore[return-value]
        s * rng.standard_normal(shape[: 2 + i] + (1,) * (2 - i)) for i, s in enumerate(sd)
    )


def studied(values: np.ndarray, gauge_out: bool = False, **changes: Any) -> list[UnitStudy]:
    readings, units = readings_of(values)
    return study_units(readings, units, Ask.of(plan(**changes), gauge_out))


def test_intervals_hold_the_truth_as_often_as_they_say() -> None:
    """3000 simulated months of 25 lots x 2 wafers x 5 sites: coverage of 95 % intervals.

    The n - 1 sd of 25 lots lies about 1 % below the sd of the process: a little of the coverage
    of Pp and Ppk goes with it.
    """
    shape, sd = (3000, 25, 2, 5), (3.0, 2.0, 3.0)
    readings, units = readings_of(1203.0 + nested(np.random.default_rng(11), shape, sd))
    found = unit_statistics(readings, units)
    ask = Ask.of(plan(), gauge_out=False)
    assert ask.spec is not None
    study = capability_study(found.mean, found.overall, ask.spec, within=found.within)
    overall, within = np.sqrt(22.0), np.sqrt(13.0)
    truth = {"pp": 8 / overall, "ppk": 7 / overall, "cp": 8 / within, "cpk": 7 / within}
    for name, value in truth.items():
        low, high = getattr(study, f"{name}_low"), getattr(study, f"{name}_high")
        assert 0.925 < np.mean((low <= value) & (value <= high)) < 0.965, name
    held = (found.mean_low <= 1203.0) & (found.mean_high >= 1203.0)
    assert np.mean(held) == pytest.approx(0.95, abs=0.015)


def test_normal_readings_are_called_so() -> None:
    """The test of the law is one of 5 %; clustered readings must not be taken for skew ones."""
    values = 1200 + nested(np.random.default_rng(15), (150, 20, 2, 5), (3.0, 2.0, 3.0))
    named = [study.row["distribution"] for study in studied(values)]
    assert named.count("normal") >= 145


def test_intervals_that_take_sites_for_independent_would_be_too_narrow() -> None:
    rng = np.random.default_rng(12)
    row = studied(1200 + nested(rng, (1, 20, 3, 9), (5.0, 1.0, 1.0)))[0].row
    naive = row["pp"] * np.sqrt(stats.chi2.ppf(0.025, 20 * 27 - 1) / (20 * 27 - 1))
    assert row["pp_low"] < naive - 0.1 * row["pp"]
    assert row["n_effective"] == pytest.approx(20, rel=0.3)


def test_lacking_specifications_give_nulls() -> None:
    values = 1200 + nested(np.random.default_rng(1), (1, 12, 2, 5), (3.0, 1.0, 2.0))
    bare = studied(values, lower_spec=None, upper_spec=None, target=None)[0]
    for name in ("cp", "cpk", "pp", "ppk", "cpm"):
        assert bare.row[name] is None
        assert bare.row[f"{name}_low"] is None
    assert bare.row["ppm_expected"] is None
    assert bare.row["ppm_observed"] is None
    assert bare.row["sd_overall"] == pytest.approx(values.std(ddof=1))
    upper = studied(values, lower_spec=None, target=None)[0].row
    assert upper["pp"] is None
    assert upper["cp"] is None
    assert upper["cpm"] is None
    assert upper["ppk"] == pytest.approx((1224 - values.mean()) / (3 * values.std(ddof=1)))
    assert upper["ppk_low"] < upper["ppk"] < upper["ppk_high"]
    aimless = studied(values, target=None)[0].row
    assert aimless["cpm"] is None
    assert aimless["pp"] is not None


def test_degenerate_months_are_rows_too() -> None:
    constant = studied(np.full((1, 6, 2, 3), 1200.0))[0].row
    assert constant["sd_overall"] == pytest.approx(0.0)
    assert constant["pp"] is None
    assert constant["ppm_observed"] == 0.0
    single = studied(np.full((1, 1, 1, 1), 1201.0))[0].row
    assert (single["n_readings"], single["mean"], single["sd_overall"]) == (1, 1201.0, None)
    assert single["components"]["lot"] is None
    one_lot = studied(1200 + nested(np.random.default_rng(2), (1, 1, 3, 5), (1.0, 1.0, 1.0)))[0]
    assert one_lot.row["pp"] is not None
    assert one_lot.row["pp_low"] is None  # how lots differ is not known
    assert one_lot.row["cp_low"] is not None


def test_one_wafer_a_lot_is_pooled_and_said_so() -> None:
    row = studied(1200 + nested(np.random.default_rng(5), (1, 30, 1, 9), (3.0, 2.0, 2.0)))[0].row
    assert "pooled" in row["pooled"]
    assert row["components"]["wafer"] == 0.0
    assert row["sd_within"] == pytest.approx(2.0, rel=0.15)
    assert row["df_within"] == pytest.approx(30 * 8)


def test_a_skew_law_is_named_and_gives_the_ppm() -> None:
    """Independent lognormal readings: Ppk by percentiles of the true law (ISO 22514-2)."""
    law = stats.lognorm(0.5, scale=10.0)
    values = law.rvs(size=(1, 1500, 1, 1), random_state=7)
    row = studied(values, lower_spec=None, target=None, upper_spec=45.0)[0].row
    assert row["distribution"] == "lognormal"
    mid, high = law.ppf(0.5), law.isf(stats.norm.sf(3))
    assert row["ppk"] == pytest.approx((45 - mid) / (high - mid), rel=0.05)
    assert row["ppk_low"] < (45 - mid) / (high - mid) < row["ppk_high"]
    assert row["ppm_expected_low"] < 1e6 * law.sf(45) < row["ppm_expected_high"]
    normal = stats.norm(values.mean(), values.std(ddof=1))
    assert row["ppm_expected"] > 10 * 1e6 * normal.sf(45)
    assert row["pp"] is None


def test_the_gauge_is_told_and_taken_out() -> None:
    values = 1200 + nested(np.random.default_rng(7), (1, 30, 2, 5), (3.0, 1.0, 2.0))
    plain = studied(values, gauge_sd=1.5)[0].row
    freed = studied(values, gauge_out=True, gauge_sd=1.5)[0].row
    sd = values.std(ddof=1)
    assert plain["gauge_share"] == pytest.approx(1.5**2 / sd**2)
    assert plain["gauge_removed"] is False
    assert freed["gauge_removed"] is True
    assert freed["sd_overall"] == pytest.approx(np.sqrt(sd**2 - 1.5**2))
    assert freed["pp"] == pytest.approx(48 / (6 * np.sqrt(sd**2 - 1.5**2)))


def test_overlay_takes_the_worse_axis(engine: Engine) -> None:
    rng = np.random.default_rng(9)
    x = 2.0 + nested(rng, (1, 15, 2, 8), (2.0, 1.0, 2.0))
    y = 9.0 + nested(rng, (1, 15, 2, 8), (2.0, 1.0, 3.0))
    sites = [f"m{s}" for s in range(8)]
    wafers = [
        Wafer(
            f"L{lot:02d}",
            str(w),
            hours(4 * lot + 0.1 * w),
            dict(zip(sites, values[0, lot, w].tolist(), strict=True)),
            {"layer": "M1", "tool": "EXP1", "module": "S1"},
            parameter=f"overlay_{axis}",
        )
        for axis, values in (("x", x), ("y", y))
        for lot in range(15)
        for w in range(2)
    ]
    add(engine, wafers)
    plan_ = {**THICKNESS, "parameter": "overlay", "target": 0.0}
    plan_ |= {"lower_spec": -25.0, "upper_spec": 25.0, "name": "M1 overlay"}
    for row in rows_of(engine, plan_):
        assert row["axis"] == "y"
        assert row["n_readings"] == 2 * x.size
        assert row["n_wafers"] == 30
        assert row["mean"] == pytest.approx(y.mean())
        assert row["ppk"] == pytest.approx((25 - y.mean()) / (3 * y.std(ddof=1)))
        for axis, values in (("x", x), ("y", y)):
            found = row["axes"][axis]["mean_plus_3sigma"]
            assert found == pytest.approx(abs(values.mean()) + 3 * values.std(ddof=1))


def test_sums_stand_in_for_sites_that_the_retention_rule_took_away() -> None:
    values = 1200 + nested(np.random.default_rng(10), (1, 12, 2, 5), (3.0, 1.0, 2.0))
    readings, units = readings_of(values)
    full = unit_statistics(readings, units)
    wafer = values.reshape(24, 5)
    bare = replace(
        readings,
        bare_n=np.full(24, 5),
        bare_mean=wafer.mean(axis=1),
        bare_squares=((wafer - wafer.mean(axis=1, keepdims=True)) ** 2).sum(axis=1),
        wafer=readings.wafer[:0],
        site=readings.site[:0],
        value=readings.value[:0],
    )
    sums = unit_statistics(bare, units)
    assert sums.overall.sd[0] == pytest.approx(values.std(ddof=1), rel=1e-12)
    assert sums.components.lot[0] == pytest.approx(full.components.lot[0], rel=1e-6)
    assert sums.n_readings[0] == 120
    assert not sums.complete[0]


def test_far_from_zero_nothing_is_lost() -> None:
    """NIST's SmLs09 lesson: a large common level must not eat the digits of the spread."""
    values = nested(np.random.default_rng(13), (1, 20, 2, 5), (3.0, 1.0, 2.0))
    bare = {"target": None, "lower_spec": None, "upper_spec": None}
    near, far = (studied(values + level, **bare)[0].row for level in (1200.0, 1e9))
    assert far["sd_overall"] == pytest.approx(near["sd_overall"], rel=1e-7)
    assert far["components"]["lot"] == pytest.approx(near["components"]["lot"], rel=1e-5)


def test_order_of_lots_is_irrelevant(engine: Engine) -> None:
    wafers = lots_of(np.random.default_rng(14), 10)
    add(engine, list(reversed(wafers)))
    backwards = rows_of(engine, THICKNESS)[1]
    values = np.array([list(w.values.values()) for w in wafers])
    assert backwards["mean"] == pytest.approx(values.mean(), rel=1e-14)
    assert backwards["sd_overall"] == pytest.approx(values.std(ddof=1), rel=1e-12)

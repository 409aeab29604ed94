"""Points of an overlay characteristic, and of map terms."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import pytest
from sqlalchemy import Engine

from spc.monitoring.evaluation import evaluate
from spc.monitoring.series import points_json
from spc.records.sessions import reading
from tests.monitoring.bench import Wafer, add, bay_with, hours, lots_of

FIELDS = [(x, y) for x in (-60.0, 0.0, 60.0) for y in (-50.0, 0.0, 50.0)]
MARKS = [(-10.0, -8.0), (10.0, 8.0), (10.0, -8.0)]
TERMS = (
    "translation-x",
    "translation-y",
    "scale-x",
    "scale-y",
    "rotation-x",
    "rotation-y",
    "field-scale-x",
    "field-scale-y",
    "field-rotation-x",
    "field-rotation-y",
)


def marked(lot: str, at: float, terms: Sequence[float], noise: Any) -> list[Wafer]:
    """Two wafers of overlay_x and overlay_y with these terms, by the model of the contract:
    dx = Tx + Sx X - Rx Y + mx u - rx v, dy = Ty + Sy Y + Ry X + my v + ry u."""
    tx, ty, sx, sy, rx, ry, mx, my, qx, qy = terms
    out = []
    for wafer in ("1", "2"):
        places, dx, dy = {}, {}, {}
        for f, (big_x, big_y) in enumerate(FIELDS):
            for m, (u, v) in enumerate(MARKS):
                name = f"F{f}M{m}"
                places[name] = (big_x + u, big_y + v, u, v)
                dx[name] = tx + sx * big_x - rx * big_y + mx * u - qx * v + noise()
                dy[name] = ty + sy * big_y + ry * big_x + my * v + qy * u + noise()
        for parameter, values in (("overlay_x", dx), ("overlay_y", dy)):
            context = {"layer": "M1", "tool": "EXP1"}
            out.append(Wafer(lot, wafer, hours(at), values, context, None, parameter, "nm", places))
    return out


BAY = bay_with(
    {
        "name": "M1 overlay",
        "parameter": "overlay",
        "unit": "nm",
        "stream_by": ("tool",),
        "lower_spec": -15.0,
        "upper_spec": 15.0,
    }
)


def test_terms_come_back_with_their_signs_and_the_residual_is_the_noise(engine: Engine) -> None:
    rng = np.random.default_rng(1)
    truth = np.array([3.0, -2.0, 0.05, -0.04, 0.03, 0.06, 0.2, -0.15, 0.1, -0.12])
    wafers = []
    for i in range(34):
        terms = truth + rng.normal(0, [1, 1] + [0.01] * 8)
        wafers += marked(f"L{i:02d}", 4.0 * i, terms, lambda: rng.normal(0, 1.5))
    add(engine, wafers)
    evaluate(engine, BAY, hours(1000))
    with reading(engine) as connection:
        points = points_json(connection, BAY, "M1 overlay")
    by_statistic = {name: [p for p in points if p["statistic"] == name] for name in TERMS}
    for name, expected in zip(TERMS, truth, strict=True):
        values = [p["value"] for p in by_statistic[name]]
        assert len(values) == 34
        # 34 lots: four standard errors of the mean of the lots
        assert np.mean(values) == pytest.approx(expected, abs=4 * np.std(values) / 34**0.5)
        assert by_statistic[name][33]["center"] == pytest.approx(np.mean(values[:30]), rel=1e-6)
    residual = [p for p in points if p["statistic"] == "residual"]
    assert np.mean([p["value"] for p in residual]) == pytest.approx(1.5, rel=0.03)
    assert residual[0]["n_sites"] == 2 * 27
    units = {p["statistic"]: p["unit"] for p in points}
    assert (units["translation-x"], units["scale-y"]) == ("nm", "ppm")
    assert (units["field-rotation-x"], units["residual"]) == ("urad", "nm")


def test_one_wafer_without_noise_gives_the_terms_exactly(engine: Engine) -> None:
    truth = [3.0, -2.0, 0.05, -0.04, 0.03, 0.06, 0.2, -0.15, 0.1, -0.12]
    add(engine, marked("L1", 1.0, truth, lambda: 0.0))
    evaluate(engine, BAY, hours(2))
    with reading(engine) as connection:
        points = points_json(connection, BAY, "M1 overlay")
    found = {p["statistic"]: p["value"] for p in points}
    assert [found[name] for name in TERMS] == pytest.approx(truth, abs=1e-9)
    assert found["residual"] == pytest.approx(0.0, abs=1e-9)


def test_a_layout_that_lacks_field_terms_gives_the_wafer_terms(engine: Engine) -> None:
    """One mark a field, in its middle: translation, scale and rotation remain."""
    truth = [3.0, -2.0, 0.05, -0.04, 0.03, 0.06, 0.0, 0.0, 0.0, 0.0]
    wafers = [
        Wafer(
            **{
                **w.__dict__,
                "values": {k: v for k, v in w.values.items() if k.endswith("M0")},
                "places": {
                    k: (p[0] - p[2], p[1] - p[3], 0.0, 0.0)
                    for k, p in (w.places or {}).items()
                    if k.endswith("M0")
                },
            }
        )
        for w in marked("L1", 1.0, truth, lambda: 0.0)
    ]
    add(engine, wafers)
    evaluate(engine, BAY, hours(2))
    with reading(engine) as connection:
        points = points_json(connection, BAY, "M1 overlay")
    found = {p["statistic"]: p["value"] for p in points}
    assert set(found) == {*TERMS[:6], "residual"}
    assert [found[name] for name in TERMS[:6]] == pytest.approx(truth[:6], abs=1e-9)


def test_marks_without_places_are_said_to_give_no_terms(engine: Engine) -> None:
    wafers = marked("L1", 1.0, [1.0] * 10, lambda: 0.0)
    add(engine, [Wafer(**{**w.__dict__, "places": None}) for w in wafers])
    result = evaluate(engine, BAY, hours(2))
    assert result.points_evaluated == 0
    assert any("has no place" in note for note in result.notes)


def test_tilt_and_bowl_in_the_edge_scale(engine: Engine) -> None:
    """A plane of 4 nm from centre to edge along x and a bowl of 6 nm edge minus centre (radius
    150 mm); one flyer site, once there are limits, does not reach the terms."""
    rng = np.random.default_rng(2)
    bay = bay_with(
        {
            "name": "map",
            "parameter": "resist_thickness",
            "unit": "nm",
            "stream_by": ("tool",),
            "statistics": ("tilt-x", "tilt-y", "bowl", "within-wafer"),
        }
    )
    wafers = []
    for one in lots_of(rng, 31):
        assert one.places is not None
        level = rng.normal(1200, 3)
        values = {
            name: level
            + 4.0 * x / 150
            + 6.0 * (x * x + y * y) / 150**2
            + rng.normal(0, 0.05)
            + (30.0 if one.lot.endswith("L0030") and one.wafer == "01" and name == "east" else 0.0)
            for name, (x, y) in one.places.items()
        }
        wafers.append(Wafer(**{**one.__dict__, "values": values}))
    add(engine, wafers)
    evaluate(engine, bay, hours(1000))
    with reading(engine) as connection:
        points = points_json(connection, bay, "map")
    last = {p["statistic"]: p["value"] for p in points if p["lot"].endswith("L0030")}
    assert last["tilt-x"] == pytest.approx(4.0, abs=0.3)
    assert last["tilt-y"] == pytest.approx(0.0, abs=0.3)
    assert last["bowl"] == pytest.approx(6.0, abs=0.3)
    # The spread is that of all sites, flyer and all.
    hit = next(p for p in points if p["statistic"] == "within-wafer" and p["rules"])
    assert hit["lot"].endswith("L0030")


def test_flyers_are_listed(engine: Engine) -> None:
    from spc.monitoring.flyers import flyers_of

    bay = bay_with({"name": "t", "parameter": "resist_thickness", "unit": "nm"})
    wafers = lots_of(np.random.default_rng(3), 31)
    bad = wafers[-1]
    wafers[-1] = Wafer(
        **{**bad.__dict__, "values": {**bad.values, "west": bad.values["west"] + 40.0}}
    )
    add(engine, wafers)
    evaluate(engine, bay, hours(1000))
    with reading(engine) as connection:
        (found,) = flyers_of(connection, bay, 1, [bad.lot])
    assert (found.wafer, found.site) == (bad.wafer, "west")
    assert found.sigmas == pytest.approx(40.0 / 3.0, rel=0.35)

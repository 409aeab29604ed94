"""Figures: an honest time axis, points by sample size, limits that step, words beside colours."""

from __future__ import annotations

import json
import re
import struct
import zlib
from dataclasses import replace
from datetime import UTC, datetime, timedelta
from itertools import pairwise
from typing import Any
from zoneinfo import ZoneInfo

import pytest

from reports import figures, render
from reports.chart_frame import event_letter, spread_apart
from reports.live import live_spec
from reports.model import ChartSeries, RunLength
from reports.model_pages import MonthIndex
from reports.style import PALETTE, light
from reports.time_axis import DAY, HOUR, axis_over, pieces
from tests.reports import samples, samples_pages

EDITION = samples.EDITION


def _spec(**changes: Any) -> tuple[ChartSeries, dict[str, Any]]:
    series = samples.series(**changes)
    return series, figures.control_chart(series, EDITION)


def _layers(spec: dict[str, Any], kind: str, **look: Any) -> list[list[dict[str, Any]]]:
    """Rows of the layers of a kind of mark with a look."""
    return [
        spec["datasets"][layer["data"]["name"]]
        for layer in spec["layer"]
        if layer["mark"]["type"] == kind
        and all(layer["mark"].get(key) == value for key, value in look.items())
    ]


def _words(spec: dict[str, Any]) -> list[str]:
    return [row["w"] for rows in _layers(spec, "text") for row in rows]


# ---- the control chart --------------------------------------------------------------------------


def test_every_point_is_drawn_once_in_the_look_of_its_kind() -> None:
    series, spec = _spec()
    baseline = _layers(spec, "point", fill=light("sheet"))[0]
    monitoring = _layers(spec, "point", fill=light("data"))[0]
    hits = _layers(spec, "point", shape="diamond")[0]
    assert len(baseline) == sum(p.phase == "baseline" for p in series.points)
    assert len(hits) == sum(bool(p.rules) for p in series.points)
    assert len(baseline) + len(monitoring) + len(hits) == len(series.points)


def test_points_grow_with_their_readings() -> None:
    series, spec = _spec()
    rows = _layers(spec, "point", fill=light("data"))[0]
    by_value = {p.value: p.n_sites for p in series.points}
    areas = {by_value[row["v"]]: row["n"] for row in rows}
    # area is proportional to the readings: 39 against 13 sites
    assert areas[39] / areas[13] == pytest.approx(3, rel=0.05)


def test_limits_step_with_each_point_and_break_where_nothing_ran() -> None:
    series, spec = _spec()
    band = _layers(spec, "area")[0]
    assert len(band) == 2 * len(series.points)
    drawn = {round(row["hi"], 6) for row in band}
    assert drawn == {round(p.upper_limit, 6) for p in series.points if p.upper_limit}
    assert len({row["g"] for row in band}) > 1
    # inside a piece the steps meet, so the band has no holes
    for left, right in zip(band[1::2], band[2::2], strict=False):
        assert left["g"] != right["g"] or left["t"] == right["t"]


def test_no_line_crosses_a_gap() -> None:
    _, spec = _spec()
    trace = _layers(spec, "line", color=light("trace"))[0]
    for a, b in pairwise(trace):
        if b["t"] - a["t"] > 3 * DAY:
            assert a["g"] != b["g"]


def test_a_gap_is_five_usual_steps_and_a_day() -> None:
    steady = [i * 6 * HOUR for i in range(10)]
    assert len(set(pieces(steady))) == 1
    assert len(set(pieces([*steady, steady[-1] + 31 * HOUR]))) == 2
    hourly = [i * HOUR for i in range(10)]
    assert len(set(pieces([*hourly, hourly[-1] + 20 * HOUR]))) == 1, "a night off is no gap"
    weekly = [i * 7 * DAY for i in range(6)]
    assert len(set(pieces(weekly))) == 1, "a rare stream is whole"
    assert pieces([]) == []


def test_rules_lines_and_phases_are_named_in_words() -> None:
    _, spec = _spec()
    words = _words(spec)
    assert {"baseline", "began", "beyond 3 sigma", "target 1200.0"} <= set(words)
    assert sum(word.startswith("limit ") for word in words) == 2
    assert any("spec 1176" in word for word in words), "a spec off the chart is named at its edge"


def test_events_stand_on_the_axis_by_time() -> None:
    series, spec = _spec()
    letters = next(rows for rows in _layers(spec, "text") if rows[0]["w"] == "A")
    assert [row["w"] for row in letters] == ["A", "B"]
    assert letters[0]["t"] < letters[1]["t"]
    assert [event_letter(i) for i in (0, 25, 26, 27)] == ["A", "Z", "AA", "AB"]
    bare = figures.control_chart(replace(series, events=()), EDITION)
    assert not _layers(bare, "point", shape="triangle-up")


def test_a_point_tells_its_lot_and_sample() -> None:
    _, spec = _spec(lots=("<b>&lot",))
    said = [row["d"] for row in _layers(spec, "point", shape="diamond")[0]]
    assert any("lot <b>&lot" in words and "beyond 3 sigma" in words for words in said)
    assert all("nm" in words for words in said)
    drawing = render.svg(spec, "f", "chart")
    assert "<b>" not in drawing
    assert "&lt;b&gt;&amp;lot" in drawing


def test_a_series_without_limits_or_with_one_point_is_drawn() -> None:
    series = samples.series(n=4, days=2)
    bare = tuple(
        replace(p, lower_limit=None, upper_limit=None, center=None, sigma=None)
        for p in series.points[:1]
    )
    spec = figures.control_chart(replace(series, points=bare, onset=None), EDITION)
    assert not _layers(spec, "area")
    assert render.svg(spec, "f", "chart").startswith("<svg")
    with pytest.raises(ValueError, match="no points"):
        figures.control_chart(replace(series, points=()), EDITION)


def test_one_sided_limits_reach_the_edge() -> None:
    series = samples.series(n=20, days=4)
    one_sided = tuple(replace(p, lower_limit=None) for p in series.points)
    spec = figures.control_chart(replace(series, points=one_sided), EDITION)
    band = _layers(spec, "area")[0]
    assert len({row["lo"] for row in band}) == 1
    assert sum(word.startswith("limit ") for word in _words(spec)) == 1


def test_names_move_apart_and_stay_inside() -> None:
    places = spread_apart([10, 11, 12, 195, 196], 14, 200)
    assert all(b - a >= 14 for a, b in pairwise(places))
    assert max(places) <= 200
    assert spread_apart([], 14, 200) == []


# ---- the time axis ------------------------------------------------------------------------------


@pytest.mark.parametrize("zone", ["Europe/Dublin", "America/New_York", "Asia/Kolkata", "UTC"])
def test_ticks_stand_at_local_midnight_across_the_change(zone: str) -> None:
    place = ZoneInfo(zone)
    as_of = datetime(2026, 11, 6, 5, 30, tzinfo=UTC)
    axis = axis_over([as_of - timedelta(days=20), as_of], place, as_of)
    ticks, labels = axis.ticks(8)
    assert 4 <= len(ticks) <= 8
    for tick, label in zip(ticks, labels, strict=True):
        # the outside route: the standard library's own zone arithmetic
        back = datetime.fromtimestamp(tick / 1000 - axis.offset.total_seconds(), place)
        assert (back.hour, back.minute) == (0, 0)
        assert label.split()[0] == str(back.day)


def test_hours_are_local_on_a_short_span() -> None:
    as_of = datetime(2026, 7, 6, 5, 30, tzinfo=UTC)
    axis = axis_over([as_of - timedelta(hours=9), as_of], samples.ZONE, as_of)
    _, labels = axis.ticks(10)
    assert "02:00" in labels
    assert "Mon 6 Jul" in labels


def test_a_live_label_knows_the_change_of_the_clock() -> None:
    as_of = datetime(2026, 11, 6, 5, 30, tzinfo=UTC)
    axis = axis_over([as_of - timedelta(days=20), as_of], samples.ZONE, as_of)
    found = re.search(r"datum\.value<(\d+)\?(-?\d+)", axis.live_label())
    assert found
    # IANA: Ireland went back at 01:00 UTC on 25 October 2026; labels before it are an hour later
    change = datetime(2026, 10, 25, 1, 0, tzinfo=UTC).timestamp() * 1000
    assert abs(int(found[1]) - change) <= 60_000
    assert int(found[2]) == HOUR


def test_live_charts_free_the_span_and_keep_the_rest() -> None:
    series, spec = _spec()
    axis = axis_over([p.at for p in series.points], samples.ZONE, samples.AS_OF)
    live = live_spec(spec, axis, "chart")
    raw = json.dumps(live)
    assert not any(colours[0] in raw for colours in PALETTE.values())
    assert {param["name"] for param in live["params"]} == {"from", "to"}
    assert '"domainMin": {"expr": "from"}' in raw


# ---- all figures --------------------------------------------------------------------------------


def _all() -> dict[str, dict[str, Any]]:
    row = samples_pages.capability_row("M1 CD", {}, 6, 400.0, 2.4)
    lengths = [RunLength(d, s, 370.0 / (1 + 3 * s)) for d in ("a", "b") for s in (0.0, 1.0, 3.0)]
    return {
        "chart": figures.control_chart(samples.series(), EDITION),
        "narrow": figures.control_chart(samples.series(), EDITION, figures.NARROW),
        "map": figures.wafer_map(samples.wafer_map()),
        "map of 41 sites": figures.wafer_map(samples.wafer_map(5), upright=True),
        "overlay": figures.overlay_vectors(samples.overlay_vectors()),
        "components": figures.component_bars(row.components, "nm", gauge_share=0.06),
        "distribution": figures.distribution(row),
        "months": figures.month_by_month(row.history, 1.33),
        "effects": figures.effect_by_level(samples_pages.investigation(n_streams=0).effects),
        "run lengths": figures.run_length(lengths),
    }


@pytest.fixture(scope="module")
def specs() -> dict[str, dict[str, Any]]:
    return _all()


def test_every_figure_compiles_and_names_its_ids(specs: dict[str, dict[str, Any]]) -> None:
    for name, spec in specs.items():
        drawing = render.svg(spec, "fig-7", f'the <{name}> "figure"')
        head = drawing.split(">", 1)[0]
        assert 'role="img"' in head
        assert "&lt;" in head
        assert all(own.startswith("fig-7-") for own in re.findall(r'\bid="([^"]+)"', drawing))
        assert all(own.startswith("fig-7-") for own in re.findall(r"url\(#([^)]+)\)", drawing))
        assert not any(colours[0] in drawing for colours in PALETTE.values()), name


def test_the_same_values_give_the_same_figure(specs: dict[str, dict[str, Any]]) -> None:
    again = _all()
    for name, spec in specs.items():
        assert json.dumps(spec) == json.dumps(again[name]), name
    assert render.svg(specs["chart"], "f", "x") == render.svg(again["chart"], "f", "x")


def test_a_png_is_whole_and_packed_without_loss(specs: dict[str, dict[str, Any]]) -> None:
    import vl_convert

    solid = {**specs["months"], "background": light("sheet")}
    plain = bytes(vl_convert.vegalite_to_png(solid, vl_version="6.1", scale=2.0))
    packed = render.png(specs["months"])

    def pixels(picture: bytes) -> bytes:
        body, place = b"", 8
        while place < len(picture):
            (length,) = struct.unpack(">I", picture[place : place + 4])
            kind, data = picture[place + 4 : place + 8], picture[place + 8 : place + 8 + length]
            (crc,) = struct.unpack(">I", picture[place + 8 + length : place + 12 + length])
            assert crc == zlib.crc32(kind + data)
            body += data if kind == b"IDAT" else b""
            place += 12 + length
        return zlib.decompress(body)

    assert pixels(packed) == pixels(plain)
    assert render.png_size(packed) == render.png_size(plain)
    assert len(packed) <= len(plain)
    with pytest.raises(ValueError, match="not a PNG"):
        render.png_size(b"GIF89a")


def test_differences_have_signs_and_directions() -> None:
    spec = figures.wafer_map(samples.wafer_map())
    rows = next(rows for rows in spec["datasets"].values() if "s" in rows[0])
    for row in rows:
        assert row["s"] == ("triangle-up" if row["v"] >= 0 else "triangle-down")
        assert row["w"][0] in "+−0"


def test_arrows_point_where_the_mark_went() -> None:
    spec = figures.overlay_vectors(samples.overlay_vectors())
    before, after = samples.overlay_vectors().panels
    rows = [rows for rows in spec["datasets"].values() if "turn" in rows[0] and "d" in rows[0]]
    assert [len(r) for r in rows] == [len(before.vectors), len(after.vectors)]
    scales = {
        round((row["x2"] - row["x"]) / v.dx, 1)
        for row, v in zip(rows[1], after.vectors, strict=True)
        if abs(v.dx) > 1
    }
    assert len(scales) <= 2, "one scale for all arrows"


def test_empty_figures_are_refused_by_name() -> None:
    for call in (
        lambda: figures.wafer_map(replace(samples.wafer_map(), sites=())),
        lambda: figures.overlay_vectors(replace(samples.overlay_vectors(), panels=())),
        lambda: figures.component_bars({"lot": None}, "nm"),
        lambda: figures.effect_by_level([]),
        lambda: figures.run_length([]),
        lambda: figures.month_by_month(
            [MonthIndex("2026-10", None, None, None, None, None, None, None, 0)], None
        ),
    ):
        with pytest.raises(ValueError, match="to draw"):
            call()


def test_live_json_cannot_leave_its_script() -> None:
    raw = render.live_json({"a": "</script><!--&\u2028"})
    assert "<" not in raw
    assert "\u2028" not in raw
    assert json.loads(raw) == {"a": "</script><!--&\u2028"}

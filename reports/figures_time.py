"""The control chart: what was measured, where it may wander, what broke a rule, and when it began.

Colour never stands alone: the baseline is hollow and set on its own ground with its name, points
that broke a rule are diamonds and the rule is written beside the first, limits, target and spec
differ by line and carry their names and values at the right end, events are lettered.
"""

from __future__ import annotations

from typing import Any

from reports.chart_frame import WIDE, Frame, Size, completed, frame_of, specs_of
from reports.chart_words import broken_rules, event_marks, line_names, say, word_above
from reports.drawing import Drawing
from reports.model import ChartSeries, Edition
from reports.numbers import LocalClock, count, quantity
from reports.sentences import series_name
from reports.style import light
from reports.texts import plural, text
from reports.time_axis import TimeAxis, pieces

Row = dict[str, Any]


def control_chart(
    series: ChartSeries, edition: Edition, size: Size = WIDE, axis: TimeAxis | None = None
) -> dict[str, Any]:
    """Vega-Lite spec of one stream over time. `axis` is given where charts share one.

    Raises ValueError for a series without points.
    """
    if not series.points:
        raise ValueError(f"no points of {series.characteristic} to draw")
    frame = frame_of(series, edition, size, axis)
    clock = LocalClock(edition.zone, edition.as_of)
    with Drawing() as alt:
        layers = [
            *_baseline(alt, frame),
            *_levels(alt, frame),
            *_onset(alt, frame),
            *_marks(alt, frame, clock),
            *line_names(alt, frame),
        ]
        return completed(alt.finish_layers(layers, size.width, size.height, size.font), frame)


# ---- layers -------------------------------------------------------------------------------------


def _baseline(alt: Any, frame: Frame) -> list[Any]:
    """The ground that sets the baseline apart, with its word, and where new limits begin."""
    charts: list[Any] = []
    points = frame.series.points
    based = [p for p in points if p.phase == "baseline"]
    if based:
        after = [p for p in points if p.phase != "baseline" and p.at > based[-1].at]
        start = max(frame.axis.place(based[0].at), frame.axis.start)
        end = frame.axis.place(based[-1].at)
        end = (end + frame.axis.place(after[0].at)) / 2 if after else end
        if end > start:
            charts += [
                alt.rows([{"a": start, "b": end}])
                .mark_rect(color=light("calm"), aria=False, clip=True)
                .encode(x=alt.X("a:T"), x2=alt.X2("b:T")),
                word_above(alt, frame, start, text("chart.baseline"), "base"),
            ]
    for limits in frame.series.limit_sets:
        at = frame.axis.place(limits.since)
        if limits.status != "automatic" and frame.axis.start < at < frame.axis.end:
            charts.append(word_above(alt, frame, at, text("chart.limits"), "edge"))
    return charts


def _onset(alt: Any, frame: Frame) -> list[Any]:
    """The band from the earliest to the latest onset, the line of the best estimate, its word."""
    onset = frame.series.onset
    if onset is None:
        return []
    first = max(frame.axis.place(onset.earliest), frame.axis.start)
    charts = [
        alt.rows([{"a": first, "b": frame.axis.place(onset.latest)}])
        .mark_rect(color=light("onset"), opacity=0.8, aria=False, clip=True)
        .encode(x=alt.X("a:T"), x2=alt.X2("b:T"))
    ]
    at = frame.axis.place(onset.estimate)
    if at >= frame.axis.start:
        charts += [
            alt.rows([{"t": at}])
            .mark_rule(color=light("began"), strokeWidth=1.5, aria=False, clip=True)
            .encode(x=alt.X("t:T")),
            word_above(alt, frame, at, text("chart.began"), "began"),
        ]
    return charts


def _levels(alt: Any, frame: Frame) -> list[Any]:
    """The band between the limits, stepping with sample size and set; center, target, spec."""
    rows = _limit_rows(frame)
    charts: list[Any] = []
    if rows:
        base = alt.rows(rows)
        charts.append(
            base.mark_area(color=light("band"), aria=False, clip=True).encode(
                x=alt.X("t:T"), y=alt.Y("lo:Q"), y2=alt.Y2("hi:Q"), detail=alt.Detail("g:N")
            )
        )
        lines = [
            {"t": row["t"], "v": row[field], "g": f"{row['g']} {field}"}
            for field in ("lower", "upper", "c")
            for row in rows
            if row[field] is not None
        ]
        charts.append(
            alt.rows(lines)
            .mark_line(color=light("edge"), strokeWidth=1, aria=False, clip=True, opacity=0.9)
            .encode(x=alt.X("t:T"), y=alt.Y("v:Q"), detail=alt.Detail("g:N"))
        )
    straight: list[tuple[float | None, list[int], str]] = [
        (spec, [7, 4], "spec") for spec in specs_of(frame.series)
    ]
    if frame.series.statistic == "mean":
        straight.append((frame.series.target, [1, 3], "aim"))
    for value, dash, role in straight:
        if frame.inside(value):
            charts.append(
                alt.rows([{"v": value}])
                .mark_rule(color=light(role), strokeDash=dash, strokeWidth=1.4, aria=False)
                .encode(y=alt.Y("v:Q"))
            )
    return charts


def _limit_rows(frame: Frame) -> list[Row]:
    """Corners of the stepping limits: each point's own from half-way to half-way."""
    points = [p for p in frame.series.points if p.lower_limit is not None or p.upper_limit]
    places = [frame.axis.place(p.at) for p in points]
    numbers = pieces(places)
    rows: list[Row] = []
    for i, point in enumerate(points):
        alone = 0.012 * (frame.axis.end - frame.axis.start)
        left = places[i] - alone
        right = places[i] + alone
        if i and numbers[i - 1] == numbers[i]:
            left = (places[i - 1] + places[i]) / 2
        if i + 1 < len(points) and numbers[i + 1] == numbers[i]:
            right = (places[i] + places[i + 1]) / 2
        lower, upper = point.lower_limit, point.upper_limit
        row = {
            "lo": frame.low if lower is None else lower,
            "hi": frame.high if upper is None else upper,
            "lower": lower,
            "upper": upper,
            "c": point.center,
            "g": numbers[i],
        }
        rows += [{**row, "t": left}, {**row, "t": right}]
    return rows


def _marks(alt: Any, frame: Frame, clock: LocalClock) -> list[Any]:
    """The trace, the points (sized by their readings) and the rules they broke."""
    points = frame.series.points
    places = [frame.axis.place(p.at) for p in points]
    numbers = pieces(places)
    most = max(p.n_sites for p in points)
    rows: list[Row] = [
        {
            "t": place,
            "v": p.value,
            "g": f"{piece} {p.phase}",
            "n": _area(p.n_sites, most, frame.size),
            "d": say(p, frame, clock),
            "k": "hit" if p.rules else p.phase,
        }
        for p, place, piece in zip(points, places, numbers, strict=True)
    ]
    x, y = alt.X("t:T"), alt.Y("v:Q")
    charts = [
        alt.rows(rows)
        .mark_line(color=light("trace"), strokeWidth=1, aria=False, clip=True)
        .encode(x=x, y=y, detail=alt.Detail("g:N"))
    ]
    looks: dict[str, Row] = {
        "baseline": {"fill": light("sheet"), "stroke": light("base"), "strokeWidth": 1.3},
        "monitoring": {"fill": light("data"), "stroke": light("sheet"), "strokeWidth": 0.6},
        "hit": {
            "fill": light("alert"),
            "stroke": light("sheet"),
            "strokeWidth": 0.8,
            "shape": "diamond",
        },
    }
    for kind, look in looks.items():
        own = [{k: v for k, v in row.items() if k in "tvnd"} for row in rows if row["k"] == kind]
        if kind == "hit":
            own = [{**row, "n": float(row["n"]) * 1.9} for row in own]
        if own:
            charts.append(
                alt.rows(own)
                .mark_point(filled=True, opacity=1, clip=True, **look)
                .encode(
                    x=x, y=y, size=alt.Size("n:Q", scale=None), description=alt.Description("d:N")
                )
            )
    return [*charts, *broken_rules(alt, frame, places), *event_marks(alt, frame)]


def _area(n_sites: int, most: int, size: Size) -> float:
    """Area of a point, proportional to its readings, never too small to see."""
    largest = 46.0 if size.width > 300 else 30.0
    return round(max(largest * n_sites / most, 9.0), 1)


def chart_label(series: ChartSeries) -> str:
    """What the picture shows, for those who do not see it."""
    hits = sum(bool(p.rules) for p in series.points)
    return text(
        "chart.label",
        name=series_name(series.characteristic, series.statistic),
        points=plural("n.points", len(series.points), count=count(len(series.points))),
        hits=plural("n.hits", hits, count=count(hits)) if hits else text("n.hits.none"),
        first=quantity(series.points[0].value, series.unit) if series.points else "",
        last=quantity(series.points[-1].value, series.unit) if series.points else "",
    )

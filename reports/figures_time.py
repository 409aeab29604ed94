"""The control chart: what was measured, where it may wander, what broke a rule, and when it began.

Colour never stands alone: the baseline is hollow and set on its own ground with its name, points
that broke a rule are diamonds and the rule is written beside the first, limits, target and spec
differ by line and carry their names and values at the right end, events are lettered.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from reports.chart_frame import (
    WIDE,
    Frame,
    Size,
    event_letter,
    frame_of,
    ordered_events,
    specs_of,
    spread_apart,
)
from reports.model import ChartPoint, ChartSeries, Edition
from reports.numbers import LocalClock, count, number, quantity, with_unit
from reports.sentences import rule_words, rules_words, series_name
from reports.style import figure_config, light
from reports.texts import plural, text
from reports.time_axis import TimeAxis, pieces

Row = dict[str, Any]


def control_chart(
    series: ChartSeries, edition: Edition, size: Size = WIDE, axis: TimeAxis | None = None
) -> dict[str, Any]:
    """Vega-Lite spec of one stream over time. `axis` is given where charts share one.

    Raises ValueError for a series without points.
    """
    import altair as alt

    if not series.points:
        raise ValueError(f"no points of {series.characteristic} to draw")
    frame = frame_of(series, edition, size, axis)
    clock = LocalClock(edition.zone, edition.as_of)
    with alt.utils.schemapi.debug_mode(False):
        layers = [
            *_baseline(alt, frame),
            *_levels(alt, frame),
            *_onset(alt, frame),
            *_marks(alt, frame, clock),
            *_names(alt, frame),
        ]
        chart = alt.layer(*layers).properties(width=size.width, height=size.height)
        spec: dict[str, Any] = chart.to_dict(validate=False)
    spec["config"] = figure_config(size.font)
    return spec


# ---- layers -------------------------------------------------------------------------------------


def _time(alt: Any, frame: Frame, field: str = "t", **more: Any) -> Any:
    scale = alt.Scale(type="utc", domain=[frame.axis.start, frame.axis.end], nice=False)
    return alt.X(f"{field}:T", scale=scale, axis=alt.Axis(**frame.axis.axis(frame.size.ticks)))


def _scale(alt: Any, frame: Frame) -> Any:
    return alt.Scale(domain=[frame.low, frame.high], nice=False, zero=False)


def _value(alt: Any, frame: Frame, field: str = "v") -> Any:
    axis = alt.Axis(
        title=with_unit("", frame.series.unit).strip() or None,
        titleY=-10,
        titleX=-34,
        tickCount=5,
        format=f".{frame.digits}~f",
        minExtent=30,
        domain=False,
        ticks=False,
    )
    return alt.Y(f"{field}:Q", scale=_scale(alt, frame), axis=axis)


def _rows(alt: Any, rows: Sequence[Row]) -> Any:
    return alt.Chart(alt.Data(values=list(rows)))


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
                _rows(alt, [{"a": start, "b": end}])
                .mark_rect(color=light("calm"), aria=False, clip=True)
                .encode(x=_time(alt, frame, "a"), x2="b:T"),
                _word(alt, frame, start, text("chart.baseline"), "base"),
            ]
    for limits in frame.series.limit_sets:
        at = frame.axis.place(limits.since)
        if limits.status != "automatic" and frame.axis.start < at < frame.axis.end:
            charts.append(_word(alt, frame, at, text("chart.limits"), "edge"))
    return charts


def _onset(alt: Any, frame: Frame) -> list[Any]:
    """The band from the earliest to the latest onset, the line of the best estimate, its word."""
    onset = frame.series.onset
    if onset is None:
        return []
    first = max(frame.axis.place(onset.earliest), frame.axis.start)
    charts = [
        _rows(alt, [{"a": first, "b": frame.axis.place(onset.latest)}])
        .mark_rect(color=light("onset"), opacity=0.8, aria=False, clip=True)
        .encode(x=_time(alt, frame, "a"), x2="b:T")
    ]
    at = frame.axis.place(onset.estimate)
    if at >= frame.axis.start:
        charts += [
            _rows(alt, [{"t": at}])
            .mark_rule(color=light("began"), strokeWidth=1.5, aria=False, clip=True)
            .encode(x=_time(alt, frame)),
            _word(alt, frame, at, text("chart.began"), "began"),
        ]
    return charts


def _word(alt: Any, frame: Frame, at: float, word: str, role: str) -> Any:
    """A word above the plot, at a place in time."""
    late = (at - frame.axis.start) > 0.8 * (frame.axis.end - frame.axis.start)
    return (
        _rows(alt, [{"t": at, "w": word}])
        .mark_text(
            align="right" if late else "left",
            dx=-4 if late else 4,
            y=-6,
            fontSize=frame.size.font,
            fontStyle="italic",
            color=light(role),
            aria=False,
        )
        .encode(x=_time(alt, frame), text="w:N")
    )


def _levels(alt: Any, frame: Frame) -> list[Any]:
    """The band between the limits, stepping with sample size and set; center, target, spec."""
    rows = _limit_rows(frame)
    charts: list[Any] = []
    if rows:
        base = _rows(alt, rows)
        y = _value(alt, frame, "lo")
        charts.append(
            base.mark_area(color=light("band"), aria=False, clip=True).encode(
                x=_time(alt, frame), y=y, y2="hi:Q", detail="g:N"
            )
        )
        for field, width in (("lower", 1.0), ("upper", 1.0), ("c", 0.8)):
            charts.append(
                base.mark_line(
                    color=light("edge"), strokeWidth=width, aria=False, clip=True, opacity=0.9
                ).encode(x=_time(alt, frame), y=_value(alt, frame, field), detail="g:N")
            )
    straight: list[tuple[float | None, list[int], str]] = [
        (spec, [7, 4], "spec") for spec in specs_of(frame.series)
    ]
    if frame.series.statistic == "mean":
        straight.append((frame.series.target, [1, 3], "aim"))
    for value, dash, role in straight:
        if frame.inside(value):
            charts.append(
                _rows(alt, [{"v": value}])
                .mark_rule(color=light(role), strokeDash=dash, strokeWidth=1.4, aria=False)
                .encode(y=_value(alt, frame))
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
            "d": _say(p, frame, clock),
            "k": "hit" if p.rules else p.phase,
        }
        for p, place, piece in zip(points, places, numbers, strict=True)
    ]
    x, y = _time(alt, frame), _value(alt, frame)
    charts = [
        _rows(alt, rows)
        .mark_line(color=light("trace"), strokeWidth=1, aria=False, clip=True)
        .encode(x=x, y=y, detail="g:N")
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
                _rows(alt, own)
                .mark_point(filled=True, opacity=1, clip=True, **look)
                .encode(x=x, y=y, size=alt.Size("n:Q", scale=None), description="d:N")
            )
    return [*charts, *_rule_words(alt, frame, places), *_events(alt, frame)]


def _area(n_sites: int, most: int, size: Size) -> float:
    """Area of a point, proportional to its readings, never too small to see."""
    largest = 46.0 if size.width > 300 else 30.0
    return round(max(largest * n_sites / most, 9.0), 1)


def _say(point: ChartPoint, frame: Frame, clock: LocalClock) -> str:
    """What a point says when it is pointed at."""
    name = point.lot if not point.wafer else text("say.wafer", lot=point.lot, wafer=point.wafer)
    parts = [
        text("say.lot", lot=name),
        clock.moment(point.at),
        with_unit(number(point.value, frame.digits + 1), frame.series.unit),
        text(
            "say.sample",
            wafers=plural("n.wafers", point.n_wafers, count=count(point.n_wafers)),
            sites=plural("n.sites", point.n_sites, count=count(point.n_sites)),
        ),
    ]
    if point.phase == "baseline":
        parts.append(text("say.baseline"))
    if point.rules:
        parts.append(rules_words(point.rules))
    return " \u00b7 ".join(parts)


def _rule_words(alt: Any, frame: Frame, places: Sequence[float]) -> list[Any]:
    """The first point of each rule gets the rule written beside it: three at the most."""
    seen: dict[str, int] = {}
    for i, point in enumerate(frame.series.points):
        for rule in point.rules:
            seen.setdefault(rule, i)
    groups: dict[int, list[str]] = {}
    for rule, i in seen.items():
        groups.setdefault(i, []).append(rule)
    charts: list[Any] = []
    used: list[float] = []
    for i, rules in sorted(groups.items())[:3]:
        point = frame.series.points[i]
        at = (places[i] - frame.axis.start) / (frame.axis.end - frame.axis.start)
        above = point.center is not None and point.value >= point.center
        side = -9 if at > 0.62 else 9 if at < 0.38 else 0
        y = frame.y(point.value) + (0 if side else -15 if above else 16)
        y = min(max(y, 8), frame.size.height - (28 if frame.series.events else 8))
        while any(abs(y - other) < frame.size.font + 2 for other in used):
            y += (frame.size.font + 2) * (-1 if above and y > 24 else 1)
        used.append(y)
        words = {"t": places[i], "w": " + ".join(rule_words(rule) for rule in rules[:2])}
        align = "right" if side < 0 else "left" if side else "center"
        look = {"align": align, "dx": side, "y": y, "fontSize": frame.size.font, "aria": False}
        base = _rows(alt, [words])
        halo = {"stroke": light("sheet"), "strokeWidth": 3.5, "color": light("sheet")}
        for paint in (halo, {"color": light("alert"), "fontWeight": 600}):
            charts.append(
                base.mark_text(clip=True, **look, **paint).encode(x=_time(alt, frame), text="w:N")
            )
    return charts


def _events(alt: Any, frame: Frame) -> list[Any]:
    """Lettered marks on the axis; the letters are explained under the figure."""
    rows = [
        {"t": frame.axis.place(event.at), "w": event_letter(i)}
        for i, event in enumerate(ordered_events(frame.series))
        if frame.axis.start <= frame.axis.place(event.at) <= frame.axis.end
    ]
    if not rows:
        return []
    base, foot = _rows(alt, rows), frame.size.height
    x = _time(alt, frame)
    rule = {"strokeDash": [2, 3], "strokeWidth": 0.8, "aria": False, "clip": True}
    return [
        base.mark_rule(color=light("soft"), y=foot * 0.5, y2=foot, **rule).encode(x=x),
        base.mark_point(
            shape="triangle-up",
            filled=True,
            color=light("ink"),
            size=70,
            opacity=1,
            clip=True,
            aria=False,
        ).encode(x=x, y=alt.value(foot - 5)),
        base.mark_text(
            y=foot - 17,
            fontSize=frame.size.font,
            fontWeight=600,
            color=light("ink"),
            clip=True,
            aria=False,
        ).encode(x=x, text="w:N"),
    ]


def _names(alt: Any, frame: Frame) -> list[Any]:
    """Names and values of the lines at their right ends, moved apart where they would collide."""
    last = next((p for p in reversed(frame.series.points) if p.center is not None), None)
    wanted: list[tuple[float, str, str]] = []
    if last is not None:
        limit = ((last.upper_limit, "chart.limit"), (last.lower_limit, "chart.limit"))
        for value, key in (*limit, (last.center, "chart.center")):
            if value is not None and frame.inside(value):
                wanted.append((value, key, "edge"))
    target = frame.series.target if frame.series.statistic == "mean" else None
    if target is not None:
        wanted = [
            w for w in wanted if w[1] != "chart.center" or abs(w[0] - target) >= 10**-frame.digits
        ]
        wanted.append((target, "chart.target", "aim"))
    for spec in specs_of(frame.series):
        key = "chart.spec.inside" if frame.inside(spec) else _beyond(spec, frame)
        wanted.append((spec, key, "spec"))
    gap = frame.size.font + 2
    placed: list[tuple[float, str, str]] = []
    for value, key, role in sorted(wanted, reverse=True):
        y = min(max(frame.y(value), 4.0), frame.size.height - 4.0)
        placed.append((y, text(key, value=number(value, frame.digits)), role))
    ys = spread_apart([y for y, _, _ in placed], gap, frame.size.height)
    return [
        _rows(alt, [{"w": word}])
        .mark_text(
            align="left",
            x={"expr": "width + 6"},
            y=round(y, 1),
            fontSize=frame.size.font,
            color=light(role),
            aria=False,
        )
        .encode(text="w:N")
        for y, (_, word, role) in zip(ys, placed, strict=True)
    ]


def _beyond(spec: float, frame: Frame) -> str:
    return "chart.spec.above" if spec > frame.high else "chart.spec.below"


def chart_label(series: ChartSeries) -> str:
    """What the picture shows, for those who do not see it."""
    hits = sum(bool(p.rules) for p in series.points)
    return text(
        "chart.label",
        name=series_name(series.characteristic, series.statistic),
        points=plural("n.points", len(series.points), count=count(len(series.points))),
        hits=plural("n.hits", hits, count=count(hits)),
        first=quantity(series.points[0].value, series.unit) if series.points else "",
        last=quantity(series.points[-1].value, series.unit) if series.points else "",
    )

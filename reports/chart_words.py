"""The words in a chart: names of lines, broken rules, events, and what a point says."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from reports.chart_frame import Frame, event_letter, ordered_events, specs_of, spread_apart
from reports.model import ChartPoint
from reports.numbers import LocalClock, count, number, with_unit
from reports.sentences import rule_words, rules_words
from reports.style import light
from reports.texts import plural, shown, text

_BOLD = 0.56  # mean width of a bold letter, in sizes of the type


def word_above(alt: Any, frame: Frame, at: float, word: str, role: str) -> Any:
    """A word above the plot, at a place in time."""
    late = (at - frame.axis.start) > 0.8 * (frame.axis.end - frame.axis.start)
    return (
        alt.rows([{"t": at, "w": word}])
        .mark_text(
            align="right" if late else "left",
            dx=-4 if late else 4,
            y=-6,
            fontSize=frame.size.font,
            fontStyle="italic",
            color=light(role),
            aria=False,
        )
        .encode(x=alt.X("t:T"), text=alt.Text("w:N"))
    )


def say(point: ChartPoint, frame: Frame, clock: LocalClock) -> str:
    """What a point says when it is pointed at."""
    name = shown(point.lot)
    if point.wafer:
        name = text("say.wafer", lot=name, wafer=shown(point.wafer))
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


def broken_rules(alt: Any, frame: Frame, places: Sequence[float]) -> list[Any]:
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
    for i, rules in sorted(groups.items())[: 3 if frame.size.height > 150 else 1]:
        point = frame.series.points[i]
        at = (places[i] - frame.axis.start) / (frame.axis.end - frame.axis.start)
        above = point.center is not None and point.value >= point.center
        side = -9 if at > 0.62 else 9 if at < 0.38 else 0
        y = frame.y(point.value) + (0 if side else -15 if above else 16)
        y = min(max(y, 8), frame.size.height - (28 if frame.series.events else 8))
        step = frame.size.font + 2
        free = (y + k * step * sign for k in range(6) for sign in ((-1, 1) if above else (1, -1)))
        y = next((c for c in free if c > 4 and all(abs(c - o) >= step for o in used)), y)
        used.append(y)
        room = {-9: at, 9: 1.0 - at}.get(side, 2.0 * min(at, 1.0 - at)) * frame.size.width - 9
        words = {"t": places[i], "w": _fitting(rules, room / (_BOLD * frame.size.font))}
        align = "right" if side < 0 else "left" if side else "center"
        look = {"align": align, "dx": side, "y": y, "fontSize": frame.size.font, "aria": False}
        base = alt.rows([words])
        halo = {"stroke": light("sheet"), "strokeWidth": 3.5, "color": light("sheet")}
        for paint in (halo, {"color": light("alert"), "fontWeight": 600}):
            charts.append(
                base.mark_text(clip=True, **look, **paint).encode(
                    x=alt.X("t:T"), text=alt.Text("w:N")
                )
            )
    return charts


def _fitting(rules: Sequence[str], letters: float) -> str:
    """Two rules in words, one, or one in short, whichever there is room for."""
    forms = (
        " + ".join(rule_words(rule) for rule in rules[:2]),
        rule_words(rules[0]),
        rule_words(rules[0], short=True),
    )
    return next((form for form in forms if len(form) <= letters), forms[-1])


def event_marks(alt: Any, frame: Frame) -> list[Any]:
    """Lettered marks on the axis; the letters are explained under the figure."""
    rows = [
        {"t": frame.axis.place(event.at), "w": event_letter(i)}
        for i, event in enumerate(ordered_events(frame.series))
        if frame.axis.start <= frame.axis.place(event.at) <= frame.axis.end
    ]
    if not rows:
        return []
    base, foot = alt.rows(rows), frame.size.height
    x = alt.X("t:T")
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
        ).encode(x=x, text=alt.Text("w:N")),
    ]


def line_names(alt: Any, frame: Frame) -> list[Any]:
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
    rows = [
        {"w": word, "v": frame.value(y), "k": light(role)}
        for y, (_, word, role) in zip(ys, placed, strict=True)
    ]
    return [
        alt.rows(rows)
        .mark_text(align="left", x={"expr": "width + 6"}, fontSize=frame.size.font, aria=False)
        .encode(
            y=alt.Y("v:Q"), text=alt.Text("w:N"), color=alt.Color("k:N", scale=None, legend=None)
        )
    ]


def _beyond(spec: float, frame: Frame) -> str:
    return "chart.spec.above" if spec > frame.high else "chart.spec.below"

"""What all pages share: the templates, figures placed in a page, and the frame around both.

A page is one file. Its styles and scripts stand in it, a content security policy forbids any
request and any script but its own (by hash), and nothing in it depends on a clock or on chance.
"""

from __future__ import annotations

import base64
import hashlib
from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from functools import cache
from pathlib import Path
from typing import Any

from jinja2 import Environment, FileSystemLoader, StrictUndefined
from markupsafe import Markup

from reports import figures, render
from reports.chart_frame import event_letter, ordered_events
from reports.model import BayEvent, ChartSeries, Edition, OverlayVectors, WaferMapPicture
from reports.numbers import LocalClock
from reports.style import HEAD_FONT, TEXT_FONT, css_variables
from reports.texts import LANGUAGE, plural, shown, text
from reports.time_axis import TimeAxis

TEMPLATES = Path(__file__).with_name("templates")
Spec = dict[str, Any]


@cache
def environment() -> Environment:
    """The Jinja environment: everything is escaped, an unknown name is an error."""
    made = Environment(
        loader=FileSystemLoader(TEMPLATES),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
    )
    made.globals.update(t=text, plural=plural, language=LANGUAGE)
    return made


def link(address: str | None) -> str | None:
    """An address for a page: relative, http or https; anything else is no link."""
    if not address:
        return None
    head = address.split("/", 1)[0].split("?", 1)[0].split("#", 1)[0]
    if ":" in head and not address.lower().startswith(("http://", "https://")):
        return None
    return None if address.startswith(("//", "\\")) else address


@dataclass(frozen=True)
class Figure:
    """A figure in a page: one drawing for wide screens and paper, one for narrow screens."""

    name: str
    label: str
    wide: render.Picture
    narrow: render.Picture | None
    events: tuple[tuple[str, str], ...] = ()
    key: str = ""
    note: str = ""


def drawn(name: str, label: str, wide: Spec, narrow: Spec | None = None) -> Figure:
    """A figure from its specs; without a narrow one the wide one serves both."""
    small = None if narrow is None else render.Picture(narrow, f"{name}-n", label)
    return Figure(name, label, render.Picture(wide, f"{name}-w", label), small)


@dataclass(frozen=True)
class TimeLook:
    """How a chart over time stands in a page: its two sizes, its axis, and how many points."""

    wide: figures.Size = figures.WIDE
    narrow: figures.Size = figures.NARROW
    axis: TimeAxis | None = None
    most_points: int = 200


def time_figure(
    name: str, series: ChartSeries, edition: Edition, look: TimeLook = TimeLook()
) -> tuple[Figure, Spec]:
    """The control chart of a series with the words of its events, and the spec it is made of.

    Of a long series the newest points are drawn, and the key says so.
    """
    recent = newest(series, look.most_points)
    label = figures.chart_label(recent)
    wide = figures.control_chart(recent, edition, look.wide, look.axis)
    narrow = figures.control_chart(recent, edition, look.narrow, look.axis)
    made = drawn(name, label, wide, narrow)
    events = series_events(recent, LocalClock(edition.zone, edition.as_of))
    note = ""
    if len(recent.points) < len(series.points):
        note = text("chart.newest", count=len(recent.points), all=len(series.points))
    figure = Figure(name, label, made.wide, made.narrow, events, text("chart.key"), note)
    return figure, wide


def newest(series: ChartSeries, most: int) -> ChartSeries:
    """The series with its newest points only."""
    if len(series.points) <= most:
        return series
    return replace(series, points=series.points[-most:])


def series_events(series: ChartSeries, clock: LocalClock) -> tuple[tuple[str, str], ...]:
    """Letters and words of the events that stand on the axis of a series."""
    start = series.points[0].at
    return tuple(
        (event_letter(i), event_words(event, clock))
        for i, event in enumerate(ordered_events(series))
        if event.at >= start
    )


def map_figure(name: str, picture: WaferMapPicture) -> Figure:
    """The wafer maps before, after and their difference."""
    made = drawn(
        name,
        figures.map_label(picture),
        figures.wafer_map(picture),
        figures.wafer_map(picture, 250, upright=True),
    )
    return Figure(made.name, made.label, made.wide, made.narrow, (), text("map.key"))


def overlay_figure(name: str, picture: OverlayVectors) -> Figure:
    """The overlay vectors."""
    upright = figures.overlay_vectors(picture, 270, upright=True)
    side = 330 if len(picture.panels) < 3 else 230
    wide = figures.overlay_vectors(picture, side)
    made = drawn(name, figures.overlay_label(picture), wide, upright)
    return Figure(made.name, made.label, made.wide, made.narrow, (), text("overlay.key"))


def event_words(event: BayEvent, clock: LocalClock) -> str:
    """`Tue 19:28 maintenance TRK2 CUP1: nozzle changed`."""
    place = " ".join(shown(part) for part in (event.tool, event.module) if part)
    head = " ".join(part for part in (clock.moment(event.at), shown(event.kind), place) if part)
    return text("event.words", head=head, text=shown(event.text)) if event.text else head


@cache
def _own(name: str) -> str:
    return (TEMPLATES / name).read_text("utf-8")


@cache
def page_css() -> str:
    """The style sheet of pages: colours of both themes, then the rules."""
    fonts = f"--text-font:{TEXT_FONT};--head-font:{HEAD_FONT};"
    dark = f"@media screen and (prefers-color-scheme:dark){{:root{{{css_variables(1)}}}}}"
    root = f":root{{color-scheme:light dark;{fonts}{css_variables(0)}}}"
    return f"{root}\n{dark}\n{_own('page.css')}"


def _hash(script: str) -> str:
    digest = hashlib.sha256(script.encode("utf-8")).digest()
    return f"'sha256-{base64.b64encode(digest).decode('ascii')}'"


def page(
    template: str,
    edition: Edition,
    title: str,
    values: Mapping[str, Any],
    *,
    links: Mapping[str, str | None] | None = None,
    scripts: tuple[str, ...] = (),
) -> str:
    """A whole page. `scripts` stand behind the page's own one; `links` in its masthead."""
    bodies = (_own("page.js"), *scripts)
    policy = (
        "default-src 'none'; img-src data: blob:; style-src 'unsafe-inline'; "
        f"script-src {' '.join(_hash(body) for body in bodies)}; "
        "base-uri 'none'; form-action 'none'"
    )
    words = {name: text(f"tools.{name}") for name in ("picked", "copied", "not_copied")}
    clock = LocalClock(edition.zone, edition.as_of)
    safe: Callable[[str], Markup] = Markup
    shared = {
        "title": title,
        "bay": shown(edition.bay),
        "policy": policy,
        "css": safe(page_css()),
        "scripts": [safe(body) for body in bodies],
        "words": safe(render.live_json(words)),
        "links": {k: link(v) for k, v in (links or {}).items() if link(v)},
        "as_of": clock.full(edition.as_of),
        "zone": clock.zone_name(),
    }
    return environment().get_template(template).render({**shared, **values})

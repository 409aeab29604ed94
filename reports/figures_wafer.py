"""Wafer maps and overlay vectors: a disc with its notch, sites where they are.

A site shows its value as colour and, where there is room, as a number. In the difference, gains
point up and losses point down, and the size of the mark follows the size of the change, so that
the picture reads without colour.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

from reports.drawing import Drawing
from reports.model import OverlayPanel, OverlayVectors, WaferMapPicture
from reports.numbers import half_width, number, quantity, with_unit
from reports.style import DIVERGING, SEQUENTIAL, light
from reports.texts import text

Row = dict[str, Any]
_NUMBERED_SITES = 29  # more do not leave room for their numbers


def _disc(radius: float) -> list[Row]:
    """The edge of the wafer with its notch at the bottom, as a closed line."""
    # from the right side of the notch all round to its left side, then in and out again
    around = [math.radians(3 + 354 * i / 120) for i in range(121)]
    points = [(radius * math.sin(a), -radius * math.cos(a)) for a in around]
    points += [(0.0, -radius * 0.94), points[0]]
    return [{"x": round(x, 1), "y": round(y, 1), "i": i} for i, (x, y) in enumerate(points)]


def _plane(alt: Any, radius: float, x: str = "x", y: str = "y") -> tuple[Any, Any]:
    scale = alt.Scale(domain=[-radius * 1.04, radius * 1.04], nice=False, zero=False)
    return alt.X(f"{x}:Q", scale=scale, axis=None), alt.Y(f"{y}:Q", scale=scale, axis=None)


def _wafer(alt: Any, radius: float) -> Any:
    x, y = _plane(alt, radius)
    return (
        alt.rows(_disc(radius))
        .mark_line(color=light("soft"), strokeWidth=1.2, fill=light("calm"), aria=False)
        .encode(x=x, y=y, order=alt.Order("i:Q"))
    )


def wafer_map(
    picture: WaferMapPicture, side: int = 236, *, upright: bool = False
) -> dict[str, Any]:
    """Vega-Lite spec of the mean wafer before, after and the difference.

    `upright` stacks the three for narrow screens. Raises ValueError without sites.
    """
    if not picture.sites:
        raise ValueError(f"no sites of {picture.characteristic} to draw")
    both = [v for s in picture.sites for v in (s.before, s.after) if v is not None]
    span = (min(both), max(both)) if both else (0.0, 1.0)
    reach = max((abs(s.difference) for s in picture.sites if s.difference is not None), default=1)
    decimals = _decimals(reach)
    panels = []
    with Drawing() as alt:
        for name, n in (("before", picture.n_wafers_before), ("after", picture.n_wafers_after)):
            title = text(f"map.{name}", n=n)
            panels.append(_values(alt, picture, name, span, decimals, side).properties(title=title))
        panels.append(
            _differences(alt, picture, reach or 1.0, decimals, side).properties(
                title=text("map.difference", unit=with_unit("", picture.unit).strip())
            )
        )
        chart = alt.vconcat(*panels) if upright else alt.hconcat(*panels, spacing=14)
        chart = chart.resolve_scale(color="independent", size="independent")
        return alt.finish(chart)


def _decimals(reach: float) -> int:
    return 0 if reach >= 20 else 1 if reach >= 2 else 2


def _values(
    alt: Any,
    picture: WaferMapPicture,
    field: str,
    span: tuple[float, float],
    decimals: int,
    side: int,
) -> Any:
    x, y = _plane(alt, picture.radius_mm)
    rows = []
    size = _site_area(side, len(picture.sites))
    for site in picture.sites:
        value = getattr(site, field)
        if value is None:
            continue
        written = with_unit(number(value, decimals), picture.unit)
        rows.append(
            {
                "x": round(site.x_mm, 2),
                "y": round(site.y_mm, 2),
                "yw": _beside(site.y_mm, size, picture.radius_mm, side),
                "v": value,
                "w": number(value, decimals),
                "d": text("map.say", site=site.site, value=written),
            }
        )
    scale = alt.Scale(domain=list(span), range=list(SEQUENTIAL), interpolate="lab")
    numbered = len(rows) <= _NUMBERED_SITES
    base = alt.rows(rows)
    legend = alt.Legend(
        title=None, orient="bottom", gradientLength=side - 40, gradientThickness=8, tickCount=3,
        format=f".{decimals}f",
    ) if not numbered else None  # fmt: skip
    dots = base.mark_point(
        filled=True, opacity=1, size=size, stroke=light("soft"), strokeWidth=0.6
    ).encode(
        x=x,
        y=y,
        color=alt.Color("v:Q", scale=scale, legend=legend),
        description=alt.Description("d:N"),
    )
    layers = [_wafer(alt, picture.radius_mm), dots]
    if numbered:
        layers.append(
            base.mark_text(fontSize=10, color=light("ink"), aria=False)
            .encode(x=x, y=_plane(alt, picture.radius_mm, "x", "yw")[1], text=alt.Text("w:N"))
        )  # fmt: skip
    return alt.layer(*layers).properties(width=side, height=side)


def _differences(alt: Any, picture: WaferMapPicture, reach: float, decimals: int, side: int) -> Any:
    x, y = _plane(alt, picture.radius_mm)
    full = _site_area(side, len(picture.sites))
    rows = []
    for site in picture.sites:
        if site.difference is None:
            continue
        written = with_unit(number(site.difference, decimals, sign=True), picture.unit)
        rows.append(
            {
                "x": round(site.x_mm, 2),
                "y": round(site.y_mm, 2),
                "yw": _beside(site.y_mm, full, picture.radius_mm, side),
                "v": site.difference,
                "n": round(1.5 * full * max(abs(site.difference) / reach, 0.12), 1),
                "s": "triangle-up" if site.difference >= 0 else "triangle-down",
                "w": number(site.difference, decimals, sign=True),
                "d": text("map.say", site=site.site, value=written),
            }
        )
    color = alt.Color(
        "v:Q",
        scale=alt.Scale(domain=[-reach, reach], range=list(DIVERGING), interpolate="lab"),
        legend=None,
    )
    base = alt.rows(rows)
    marks = base.mark_point(
        filled=True, opacity=1, stroke=light("ink"), strokeWidth=0.5
    ).encode(
        x=x, y=y, color=color, size=alt.Size("n:Q", scale=None),
        shape=alt.Shape("s:N", scale=None), description=alt.Description("d:N"),
    )  # fmt: skip
    layers = [_wafer(alt, picture.radius_mm), marks]
    if len(rows) <= _NUMBERED_SITES:
        layers.append(
            base.mark_text(fontSize=10, color=light("ink"), aria=False)
            .encode(x=x, y=_plane(alt, picture.radius_mm, "x", "yw")[1], text=alt.Text("w:N"))
        )  # fmt: skip
    return alt.layer(*layers).properties(width=side, height=side)


def _site_area(side: int, n: int) -> float:
    return round(max(min(side * side * 0.16 / max(n, 1), 260.0), 14.0), 1)


def _beside(y_mm: float, area: float, radius: float, side: int) -> float:
    """Where a site's number stands: below it, near the lower edge above it (in mm)."""
    away = (math.sqrt(area / math.pi) + 8) * 2.08 * radius / side
    return round(y_mm + (away if y_mm < -0.55 * radius else -away), 2)


def overlay_vectors(
    picture: OverlayVectors, side: int = 300, *, upright: bool = False
) -> dict[str, Any]:
    """Vega-Lite spec of overlay vectors, all panels at one scale, with a vector of known length.

    Raises ValueError without vectors.
    """
    longest = max(
        (math.hypot(v.dx, v.dy) for panel in picture.panels for v in panel.vectors), default=0.0
    )
    if longest <= 0:
        raise ValueError(f"no vectors of {picture.characteristic} to draw")
    # the longest arrow spans about a ninth of the wafer
    stretch = picture.radius_mm * 0.22 / longest
    with Drawing() as alt:
        panels = [
            _arrows(alt, picture, panel, stretch, side).properties(
                title=text(f"overlay.{panel.name}")
            )
            for panel in picture.panels
        ]
        chart = alt.vconcat(*panels) if upright else alt.hconcat(*panels, spacing=18)
        return alt.finish(chart)


def _arrows(
    alt: Any, picture: OverlayVectors, panel: OverlayPanel, stretch: float, side: int
) -> Any:
    rows = []
    for v in panel.vectors:
        dx = quantity(v.dx, picture.unit, half_width=0.3, sign=True)
        dy = quantity(v.dy, picture.unit, half_width=0.3, sign=True)
        rows.append(
            {
                "x": round(v.x_mm, 2),
                "y": round(v.y_mm, 2),
                "x2": round(v.x_mm + stretch * v.dx, 2),
                "y2": round(v.y_mm + stretch * v.dy, 2),
                "turn": round(90 - math.degrees(math.atan2(v.dy, v.dx)), 1),
                "d": text("overlay.say", x=f"{v.x_mm:.0f}", y=f"{v.y_mm:.0f}", dx=dx, dy=dy),
            }
        )
    x, y = _plane(alt, picture.radius_mm)
    tip_x, tip_y = _plane(alt, picture.radius_mm, "x2", "y2")
    known = _known_length(0.22 * picture.radius_mm / stretch)
    start = -picture.radius_mm
    legend = [
        {"x": start, "x2": start + known * stretch, "y": -picture.radius_mm * 0.99, "turn": 90.0,
         "w": with_unit(number(known), picture.unit)}
    ]  # fmt: skip
    base, key = alt.rows(rows), alt.rows(legend)
    head = {"shape": "triangle-up", "filled": True, "size": 26, "opacity": 1}
    turn = alt.Angle("turn:Q", scale=None)
    return alt.layer(
        _wafer(alt, picture.radius_mm),
        base.mark_rule(color=light("data"), strokeWidth=1.3, aria=False).encode(
            x=x, y=y, x2=alt.X2("x2:Q"), y2=alt.Y2("y2:Q")
        ),
        base.mark_point(color=light("data"), **head).encode(
            x=tip_x, y=tip_y, angle=turn, description=alt.Description("d:N")
        ),
        key.mark_rule(color=light("ink"), strokeWidth=1.3, aria=False).encode(
            x=x, y=y, x2=alt.X2("x2:Q")
        ),
        key.mark_point(color=light("ink"), aria=False, **head).encode(x=tip_x, y=y, angle=turn),
        key.mark_text(align="left", dx=7, color=light("ink"), aria=False).encode(
            x=tip_x, y=y, text=alt.Text("w:N")
        ),
    ).properties(width=side, height=side, title=text(f"overlay.{panel.name}"))


def _known_length(most: float) -> float:
    """The largest of 1, 2, 5 times a power of ten that is not above `most`."""
    power = 10.0 ** math.floor(math.log10(most))
    return next(k * power for k in (5.0, 2.0, 1.0) if k * power <= most * 1.0000001)


def map_label(picture: WaferMapPicture) -> str:
    """What the picture shows, for those who do not see it."""
    moved: Sequence[float] = [s.difference for s in picture.sites if s.difference is not None]
    low, high = (min(moved), max(moved)) if moved else (None, None)
    half = half_width(low, high)
    return text(
        "map.label",
        name=picture.characteristic,
        n=len(picture.sites),
        low=quantity(low, picture.unit, half_width=half and half / 20, sign=True),
        high=quantity(high, picture.unit, half_width=half and half / 20, sign=True),
    )


def overlay_label(picture: OverlayVectors) -> str:
    """What the picture shows, for those who do not see it."""
    panels = [
        text(
            "overlay.longest",
            panel=text(f"overlay.{panel.name}"),
            longest=quantity(
                max(math.hypot(v.dx, v.dy) for v in panel.vectors), picture.unit, half_width=0.3
            ),
        )
        for panel in picture.panels
        if panel.vectors
    ]
    return text("overlay.label", name=picture.characteristic, panels="; ".join(panels))

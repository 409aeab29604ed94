"""Bars, dots and curves: components of variance, distributions, run lengths, effects, months."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

from reports.chart_frame import number_digits
from reports.drawing import Drawing
from reports.model import LevelEffect, RunLength
from reports.model_pages import CapabilityRow, MonthIndex
from reports.numbers import half_width, index, interval, number, percent, quantity, with_unit
from reports.sentences import factor_words
from reports.style import light
from reports.texts import text

Row = dict[str, Any]


def _finish(
    alt: Drawing, layers: Sequence[Any], width: int, height: int, font: int = 12
) -> dict[str, Any]:
    return alt.finish_layers(layers, width, height, font)


def component_bars(
    components: Mapping[str, float | None],
    unit: str,
    width: int = 330,
    gauge_share: float | None = None,
) -> dict[str, Any]:
    """Spec of the components of variance (lot, wafer, site) as shares, with their sd in words.

    `components` are variances in squared units. Raises ValueError where none is known.
    """
    known = {name: value for name, value in components.items() if value is not None}
    total = sum(known.values())
    if not known or total <= 0:
        raise ValueError("no component of variance to draw")
    rows = [
        {
            "name": text(f"component.{name}"),
            "share": value / total,
            "w": text(
                "component.words",
                share=percent(value / total),
                sd=_rounded_sd(value, unit),
            ),
        }
        for name, value in known.items()
    ]
    if gauge_share is not None:
        rows.append(
            {
                "name": text("component.gauge.name"),
                "share": gauge_share,
                "w": text("component.gauge.words", share=percent(gauge_share)),
            }
        )
    names = [str(row["name"]) for row in rows]
    with Drawing() as alt:
        y = alt.Y("name:N", sort=names, title=None, axis=alt.Axis(domain=False, ticks=False))
        x = alt.X("share:Q", scale=alt.Scale(domain=[0, 1.0]), axis=None)
        base = alt.rows(rows)
        bars = base.mark_bar(color=light("data"), height=11, aria=False).encode(x=x, y=y)
        words = base.mark_text(align="left", dx=5, color=light("ink"), aria=False).encode(
            x=x, y=y, text=alt.Text("w:N")
        )
        return _finish(alt, [bars, words], width, 24 * len(rows))


def _rounded_sd(variance: float, unit: str) -> str:
    """An sd at about two digits: months of data do not give more."""
    sd = math.sqrt(max(variance, 0.0))
    return quantity(sd, unit, half_width=0.05 * sd)


def distribution(row: CapabilityRow, width: int = 330, height: int = 150) -> dict[str, Any]:
    """Spec of the histogram of a month with the fitted curve, specs and target.

    Raises ValueError without bars.
    """
    if not row.histogram:
        raise ValueError(f"no distribution of {row.characteristic} to draw")
    bars = [{"a": b.low, "b": b.high, "n": b.count} for b in row.histogram]
    held = [row.histogram[0].low, row.histogram[-1].high]
    lines = [(row.lower_spec, "spec"), (row.target, "aim"), (row.upper_spec, "spec")]
    held += [value for value, _ in lines if value is not None]
    low, high = min(held), max(held)
    room = (high - low) * 0.04
    top = max([float(b.count) for b in row.histogram] + [c.count for c in row.curve]) * 1.08
    with Drawing() as alt:
        scale = alt.Scale(domain=[low - room, high + room], nice=False, zero=False)
        axis = alt.Axis(
            title=None, tickCount=5, grid=False, format=f".{number_digits(high - low)}~f"
        )
        x = alt.X("a:Q", scale=scale, axis=axis)
        y = alt.Y("n:Q", scale=alt.Scale(domain=[0, top], nice=False), axis=None)
        layers = [
            alt.rows(bars)
            .mark_rect(color=light("band"), stroke=light("edge"), strokeWidth=0.6, aria=False)
            .encode(x=x, x2=alt.X2("b:Q"), y=y, y2=alt.datum(0))
        ]
        if row.curve:
            curve = [{"a": c.x, "n": c.count} for c in row.curve]
            layers.append(
                alt.rows(curve)
                .mark_line(color=light("data"), strokeWidth=2, aria=False, clip=True)
                .encode(x=x, y=y)
            )
        for value, role in lines:
            if value is None:
                continue
            word = text(f"distribution.{role}", value=number(value))
            base = alt.rows([{"a": value, "w": word}])
            dash = [7, 4] if role == "spec" else [1, 3]
            layers += [
                base.mark_rule(
                    color=light(role), strokeDash=dash, strokeWidth=1.4, aria=False
                ).encode(x=x),
                base.mark_text(
                    y=-7,
                    color=light(role),
                    aria=False,
                    align=_toward_middle(value, low, high),
                ).encode(x=x, text=alt.Text("w:N")),
            ]
        return _finish(alt, layers, width, height)


def _toward_middle(value: float, low: float, high: float) -> str:
    place = (value - low) / ((high - low) or 1)
    return "left" if place < 0.2 else "right" if place > 0.8 else "center"


def run_length(rows: Sequence[RunLength], width: int = 420, height: int = 230) -> dict[str, Any]:
    """Spec of average run lengths against the shift, a line a design, named at its end.

    Raises ValueError without rows.
    """
    if not rows:
        raise ValueError("no run lengths to draw")
    designs = list(dict.fromkeys(row.design for row in rows))
    dashes = ([1, 0], [6, 3], [2, 2], [9, 3, 2, 3])
    colors = [light(role) for role in ("data", "alert", "edge", "began")]
    shapes = ("circle", "diamond", "square", "triangle-up")
    layers = []
    with Drawing() as alt:
        x = alt.X("s:Q", title=text("runlength.shift"), axis=alt.Axis(grid=False, tickCount=6))
        y = alt.Y(
            "a:Q",
            scale=alt.Scale(type="log", nice=False),
            title=text("runlength.arl"),
            axis=alt.Axis(titleX=-34, titleY=-10, tickCount=4, domain=False, format="~s"),
        )
        for i, design in enumerate(designs):
            own = [
                {
                    "s": row.shift,
                    "a": row.arl,
                    "d": text(
                        "runlength.say", design=design, shift=number(row.shift), arl=number(row.arl)
                    ),
                }
                for row in sorted(rows, key=lambda r: r.shift)
                if row.design == design
            ]
            look = {"color": colors[i % 4]}
            base = alt.rows(own)
            layers += [
                base.mark_line(strokeDash=dashes[i % 4], strokeWidth=1.8, aria=False, **look)
                .encode(x=x, y=y),
                base.mark_point(filled=True, opacity=1, size=36, shape=shapes[i % 4], **look)
                .encode(x=x, y=y, description=alt.Description("d:N")),
                alt.rows([{**own[-1], "w": design}])
                .mark_text(align="left", dx=9, dy=13 * (i - len(designs) // 2), aria=False, **look)
                .encode(x=x, y=y, text=alt.Text("w:N")),
            ]  # fmt: skip
        return _finish(alt, layers, width, height)


_VERDICT_LOOK = {
    "suspect": ("diamond", "alert", True),
    "aliased": ("diamond", "alert", False),
    "moved": ("circle", "data", True),
    "quiet": ("circle", "base", False),
}


def effect_by_level(
    effects: Sequence[LevelEffect], width: int = 420, font: int = 12, most: int = 16
) -> dict[str, Any]:
    """Spec of how far the lots of each level moved, largest first, with 95 % intervals.

    Raises ValueError without effects.
    """
    if not effects:
        raise ValueError("no effects to draw")
    rank = {"suspect": 0, "aliased": 1, "moved": 2, "quiet": 3}
    shown = sorted(effects, key=lambda e: (rank[e.verdict], -abs(e.effect), e.level))[:most]
    unit = shown[0].unit
    rows: list[Row] = []
    for effect in shown:
        half = half_width(effect.low, effect.high)
        size = quantity(effect.effect, unit, half_width=half, sign=True)
        name = text("effect.level", factor=factor_words(effect.factor), level=effect.level)
        rows.append(
            {
                "name": name if len(name) <= 34 else name[:33] + "\u2026",
                "e": effect.effect,
                "a": effect.low,
                "b": effect.high,
                "k": effect.verdict,
                "w": text("effect.words", size=size, n=effect.n_lots),
                "d": text(
                    "effect.say",
                    name=name,
                    size=size,
                    interval=interval(effect.low, effect.high, unit),
                    n=effect.n_lots,
                    verdict=text(f"verdict.{effect.verdict}"),
                ),
            }
        )
    with Drawing() as alt:
        names = [str(row["name"]) for row in rows]
        y = alt.Y(
            "name:N",
            sort=names,
            title=None,
            axis=alt.Axis(domain=False, ticks=False, grid=True, labelLimit=240),
        )
        title = text("effect.axis", unit=with_unit("", unit).strip())
        x = alt.X("e:Q", title=title, axis=alt.Axis(grid=False, tickCount=5))
        base = alt.rows(rows)
        layers = [
            alt.rows([{"z": 0}]).mark_rule(color=light("ink"), aria=False).encode(x=alt.X("z:Q")),
            base.mark_rule(color=light("base"), strokeWidth=1.6, aria=False).encode(
                x=alt.X("a:Q"), x2=alt.X2("b:Q"), y=y
            ),
        ]
        for verdict, (shape, role, filled) in _VERDICT_LOOK.items():
            own = [row for row in rows if row["k"] == verdict]
            if own:
                fill = light(role) if filled else light("sheet")
                layers.append(
                    alt.rows(own)
                    .mark_point(
                        filled=True, opacity=1, size=70, shape=shape, fill=fill,
                        stroke=light(role), strokeWidth=1.5,
                    )
                    .encode(x=x, y=y, description=alt.Description("d:N"))
                )  # fmt: skip
        layers.append(
            base.mark_text(
                align="left", x={"expr": "width + 6"}, fontSize=font, color=light("soft"),
                aria=False,
            ).encode(y=y, text=alt.Text("w:N"))
        )  # fmt: skip
        return _finish(alt, layers, width, 24 * len(rows), font)


def month_by_month(
    months: Sequence[MonthIndex], goal: float | None, width: int = 330, height: int = 120
) -> dict[str, Any]:
    """Spec of Ppk month against month with 95 % intervals; months out of control are hollow.

    Raises ValueError where no month has an index.
    """
    rows = [
        {
            "m": text(f"month.short.{int(month.month[5:])}"),
            "i": i,
            "v": month.ppk,
            "a": month.ppk_low,
            "b": month.ppk_high,
            "k": month.stable is not False,
            "d": text(
                "months.say",
                month=month.month,
                ppk=index(month.ppk),
                interval=text(
                    "number.interval", low=index(month.ppk_low), high=index(month.ppk_high)
                ),
                n=month.n_lots,
                stable=text("stable.yes" if month.stable else "stable.no"),
            ),
        }
        for i, month in enumerate(months)
        if month.ppk is not None
    ]
    if not rows:
        raise ValueError("no month with an index to draw")
    names = {i: text(f"month.short.{int(m.month[5:])}") for i, m in enumerate(months)}
    labels = "[" + ",".join(f"'{name}'" for name in names.values()) + "][datum.value]"
    with Drawing() as alt:
        axis = alt.Axis(
            values=list(names), labelExpr=labels, title=None, grid=False, labelOverlap=True
        )
        scale = alt.Scale(domain=[-0.5, len(months) - 0.5], nice=False)
        x = alt.X("i:Q", axis=axis, scale=scale)
        y_axis = alt.Axis(title=None, tickCount=4, domain=False, ticks=False, minExtent=30)
        y = alt.Y("v:Q", scale=alt.Scale(zero=False), axis=y_axis)
        base = alt.rows(rows)
        layers = [
            base.mark_line(color=light("trace"), strokeWidth=1, aria=False).encode(x=x, y=y),
            base.mark_rule(color=light("base"), strokeWidth=1.4, aria=False).encode(
                x=x, y=alt.Y("a:Q"), y2=alt.Y2("b:Q")
            ),
        ]
        for stable in (True, False):
            own = [row for row in rows if row["k"] is stable]
            fill = light("data") if stable else light("sheet")
            if own:
                layers.append(
                    alt.rows(own)
                    .mark_point(
                        filled=True, opacity=1, size=44, fill=fill, stroke=light("data"),
                        strokeWidth=1.4,
                    )
                    .encode(x=x, y=y, description=alt.Description("d:N"))
                )  # fmt: skip
        if goal is not None:
            mark = alt.rows([{"v": goal, "w": text("months.goal", value=index(goal))}])
            layers += [
                mark.mark_rule(color=light("aim"), strokeDash=[1, 3], strokeWidth=1.4, aria=False)
                .encode(y=y),
                mark.mark_text(
                    align="left", x={"expr": "width + 5"}, color=light("aim"), aria=False
                ).encode(y=y, text=alt.Text("w:N")),
            ]  # fmt: skip
        return _finish(alt, layers, width, height)

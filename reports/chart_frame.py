"""The frame of a chart over time: its size, its ends, and where values stand on it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from reports.model import BayEvent, ChartSeries, Edition
from reports.numbers import with_unit
from reports.time_axis import TimeAxis, axis_over


@dataclass(frozen=True)
class Size:
    """Size of a drawing in CSS pixels: plot, type, most ticks in time."""

    width: int
    height: int
    font: int = 12
    ticks: int = 9


WIDE = Size(700, 240, ticks=10)
NARROW = Size(212, 200, font=11, ticks=4)
MAIL = Size(350, 210, ticks=5)
STRIP = Size(700, 110, ticks=10)
STRIP_NARROW = Size(212, 100, font=11, ticks=4)


@dataclass(frozen=True)
class Frame:
    """What the layers of one chart share."""

    series: ChartSeries
    axis: TimeAxis
    low: float
    high: float
    size: Size
    digits: int

    def y(self, value: float) -> float:
        """Pixel of a value from the top of the plot."""
        return self.size.height * (self.high - value) / (self.high - self.low)

    def value(self, pixel: float) -> float:
        """Value at a pixel from the top of the plot."""
        return self.high - pixel * (self.high - self.low) / self.size.height

    def inside(self, value: float | None) -> bool:
        """Whether the value lies on the chart."""
        return value is not None and self.low <= value <= self.high


def frame_of(series: ChartSeries, edition: Edition, size: Size, axis: TimeAxis | None) -> Frame:
    """The frame that holds a series; its own time axis where none is given."""
    stamps = [point.at for point in series.points]
    if axis is None:
        shown = [stamps[0], stamps[-1]]
        shown += [event.at for event in series.events if stamps[0] <= event.at]
        if series.onset:
            shown += [max(series.onset.earliest, stamps[0]), series.onset.latest]
        axis = axis_over(shown, edition.zone, edition.as_of)
    low, high = _reach(series)
    span = high - low
    digits = number_digits(span)
    return Frame(series, axis, low, high, size, digits)


def number_digits(span: float) -> int:
    """Decimal places that labels of an axis of this span need."""
    for digits in range(6):
        if span * 10**digits >= 40:
            return digits
    return 6


def _reach(series: ChartSeries) -> tuple[float, float]:
    """Ends of the value axis: points, limits and target always, specs where they lie near."""
    held = [p.value for p in series.points]
    for p in series.points:
        held += [v for v in (p.lower_limit, p.upper_limit, p.center) if v is not None]
    if series.target is not None and series.statistic == "mean":
        held.append(series.target)
    low, high = min(held), max(held)
    span = (high - low) or abs(high) * 0.01 or 1.0
    for spec in specs_of(series):
        if low - 0.6 * span <= spec <= high + 0.6 * span:
            held.append(spec)
    low, high = min(held), max(held)
    room = ((high - low) or abs(high) * 0.01 or 1.0) * 0.08
    # events stand on the axis: leave them a strip
    return low - room * (2.2 if series.events else 1.0), high + room


def specs_of(series: ChartSeries) -> list[float]:
    """The spec limits that a chart of this statistic shows: those of the mean."""
    if series.statistic != "mean":
        return []
    return [s for s in (series.lower_spec, series.upper_spec) if s is not None]


def ordered_events(series: ChartSeries) -> list[BayEvent]:
    """The events of a series by time: A is the first."""
    return sorted(series.events, key=lambda event: (event.at, event.kind))


def event_letter(i: int) -> str:
    """A, B, … Z, AA, AB …"""
    letters = ""
    i += 1
    while i:
        i, rest = divmod(i - 1, 26)
        letters = chr(65 + rest) + letters
    return letters


def spread_apart(places: Sequence[float], gap: float, height: float) -> list[float]:
    """Rising places moved so that neighbours are `gap` apart, staying near and inside."""
    out: list[float] = []
    for place in places:
        out.append(max(place, out[-1] + gap) if out else place)
    over = (out[-1] - height) if out else 0.0
    ceiling = float("inf")
    for i in range(len(out) - 1, -1, -1):
        if over > 0 or out[i] > ceiling:
            out[i] = min(out[i], ceiling, height)
        ceiling = out[i] - gap
    return out


def completed(spec: dict[str, Any], frame: Frame) -> dict[str, Any]:
    """The spec with the frame's scales and axes in every layer, where Altair left names alone."""
    unit = with_unit("", frame.series.unit).strip()
    x = {
        "scale": {"type": "utc", "domain": [frame.axis.start, frame.axis.end], "nice": False},
        "axis": frame.axis.axis(frame.size.ticks),
    }
    y = {
        "scale": {"domain": [frame.low, frame.high], "nice": False, "zero": False},
        "axis": {
            "title": unit or None,
            "titleX": -34,
            "titleY": -10,
            "tickCount": 5,
            "format": f".{frame.digits}~f",
            "minExtent": 30,
            "domain": False,
            "ticks": False,
        },
    }
    for layer in spec["layer"]:
        for channel, shared in (("x", x), ("y", y)):
            own = layer.get("encoding", {}).get(channel)
            if own and "field" in own:
                own.update(shared)
    return spec

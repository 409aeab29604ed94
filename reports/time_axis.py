"""An honest time axis: the bay's own clock, real distances, and gaps where nothing ran.

Figures are drawn on a UTC scale with stamps moved by the bay's offset at `as_of`, so that the
browser's or the server's own zone never shows. Where the bay's offset changes inside the picture
(a night in spring or autumn), distances stay true and the labels say the local time.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta, tzinfo
from itertools import pairwise
from statistics import median
from typing import Any

from reports.texts import text

DAY = 86_400_000  # milliseconds, the unit of the axis
HOUR = 3_600_000
_STEPS = tuple(n * HOUR for n in (1, 2, 3, 6, 12, 24, 48, 72, 168, 336, 672))


@dataclass(frozen=True)
class TimeAxis:
    """The axis from `start` to `end` (milliseconds of the moved scale) with ticks and labels."""

    zone: tzinfo
    offset: timedelta
    start: float
    end: float

    def place(self, stamp: datetime) -> float:
        """Where a stamp stands, in milliseconds of the moved scale."""
        return round((stamp.timestamp() + self.offset.total_seconds()) * 1000)

    def ticks(self, most: int) -> tuple[list[float], list[str]]:
        """Places and labels of at most about `most` ticks, at round hours or at midnights."""
        span = self.end - self.start
        step = next((s for s in _STEPS if span / s <= most), _STEPS[-1] * 3)
        places: list[float] = []
        labels: list[str] = []
        # whole weeks count from a Monday: 1970-01-05 was one
        shift = 4 * DAY if step >= 7 * DAY else 0
        at = ((self.start - shift) // step + 1) * step + shift
        while at <= self.end:
            local = self._local(at)
            moved = (local.replace(tzinfo=None) - _EPOCH).total_seconds() * 1000
            places.append(2 * at - moved)
            labels.append(self._label(self._local(2 * at - moved), step))
            at += step
        return places, labels

    def _local(self, place: float) -> datetime:
        return datetime.fromtimestamp(place / 1000 - self.offset.total_seconds(), self.zone)

    def _label(self, local: datetime, step: int) -> str:
        weekday = text(f"weekday.short.{local.isoweekday()}")
        if step < DAY and (local.hour or local.minute):
            return f"{local:%H:%M}"
        key = "axis.day.long" if step < DAY else "axis.day.short"
        month = text(f"month.short.{local.month}")
        return text(key, weekday=weekday, day=local.day, month=month)

    def live_label(self) -> str:
        """Vega expression of a label at any zoom: weekday and clock, at midnight the date."""
        shift = "+".join(f"(datum.value<{at:.0f}?{delta:.0f}:0)" for at, delta in self._changes())
        v = f"(toNumber(datum.value)+{shift})" if shift else "toNumber(datum.value)"
        days = ",".join(f"'{text(f'weekday.short.{n or 7}')}'" for n in range(7))
        months = ",".join(f"'{text(f'month.short.{n}')}'" for n in range(1, 13))
        weekday = f"[{days}][utcday({v})]+' '"
        date = f"utcdate({v})+' '+[{months}][utcmonth({v})]"
        return f"{weekday}+(utchours({v})||utcminutes({v})?utcFormat({v},'%H:%M'):{date})"

    def _changes(self) -> list[tuple[float, float]]:
        """Where the zone's offset changes inside the axis, and by how much labels before differ."""
        found: list[tuple[float, float]] = []
        days = int((self.end - self.start) // DAY) + 1
        for day in range(days):
            left = self.start + day * DAY
            right = min(left + DAY, self.end)
            before, after = (self._local(p).utcoffset() for p in (left, right))
            if before == after or before is None or after is None:
                continue
            while right - left > 60_000:
                middle = (left + right) / 2
                left, right = (
                    (middle, right) if self._local(middle).utcoffset() == before else (left, middle)
                )
            found.append((right, (before - after).total_seconds() * 1000))
        return found

    def axis(self, most: int) -> dict[str, Any]:
        """Vega-Lite axis with these ticks."""
        places, labels = self.ticks(most)
        pairs = ",".join(f"'{p:.0f}':'{t}'" for p, t in zip(places, labels, strict=True))
        return {
            "values": places,
            "labelExpr": f"({{{pairs}}})[''+(+datum.value)] || ''",
            "title": None,
            "grid": False,
            "labelFlush": False,
        }


_EPOCH = datetime(1970, 1, 1)  # noqa: DTZ001 - wall clock of the moved scale


def axis_over(stamps: Sequence[datetime], zone: tzinfo, as_of: datetime) -> TimeAxis:
    """An axis that holds all stamps with a little room at both ends.

    Raises ValueError without stamps.
    """
    if not stamps:
        raise ValueError("a time axis needs at least one stamp")
    offset = as_of.astimezone(zone).utcoffset() or timedelta(0)
    bare = TimeAxis(zone, offset, 0, 0)
    places = [bare.place(stamp) for stamp in stamps]
    first, last = min(places), max(places)
    room = max((last - first) * 0.02, HOUR)
    return TimeAxis(zone, offset, first - room, last + room)


def pieces(places: Sequence[float]) -> list[int]:
    """Number of the unbroken piece each point belongs to; places must rise.

    A gap is a silence of more than five usual distances and of at least a day: there
    nothing ran, and no line is drawn across.
    """
    steps = [b - a for a, b in pairwise(places)]
    if not steps:
        return [0] * len(places)
    longest = max(5 * median(steps), DAY)
    numbers, piece = [0], 0
    for step in steps:
        piece += step > longest
        numbers.append(piece)
    return numbers

"""How numbers and stamps are written: digits by uncertainty, units always, the bay's own clock.

Digits follow the rounding rule of the Particle Data Group (Review of Particle Physics,
introduction, section 5.3): of an uncertainty's three leading digits, 100-354 keep two digits,
355-949 keep one, 950-999 become 1000 and keep two. The value is rounded to the same place.

Separators are narrow no-break spaces (U+202F), so that a number never parts from its unit; `plain`
turns them into ordinary spaces for subjects and text mail. Minus is U+2212. None is written as a
dash, and so is a NaN.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta, tzinfo

from reports.texts import text

THIN = "\u202f"
MINUS = "\u2212"
NOTHING = "\u2013"
_NO_SPACE_UNITS = ("%", "\u00b0")
_WIDEST_DECIMALS = 9


def plain(written: str) -> str:
    """The same with ordinary spaces and without marks that turn the direction of text."""
    return written.replace(THIN, " ").replace("\u00a0", " ")


def decimals_for(uncertainty: float) -> int:
    """Decimal places that an uncertainty deserves (negative: rounded to tens, hundreds, …).

    Raises ValueError where it is not a positive, finite number.
    """
    if not (math.isfinite(uncertainty) and uncertainty > 0):
        raise ValueError(f"an uncertainty is a positive number, not {uncertainty!r}")
    exponent = math.floor(math.log10(uncertainty))
    leading = round(uncertainty / 10.0 ** (exponent - 2))
    # From 950 on it is written 10…: one place further left, and the carry makes it two digits.
    return 1 - exponent if leading <= 354 else -exponent


def number(value: float | None, decimals: int | None = None, *, sign: bool = False) -> str:
    """A number with grouped thousands and a true minus.

    Without `decimals` it gets four significant digits at the most. With `sign` a gain carries +.
    """
    if value is None or not math.isfinite(value):
        return NOTHING
    if decimals is None:
        decimals = _four_digits(value)
    rounded = round(value, decimals)
    digits = f"{abs(rounded):,.{max(decimals, 0)}f}".replace(",", THIN)
    if len(digits.split(".")[0]) == 5:  # four digits stand together: 1200, but 12 000
        digits = digits.replace(THIN, "")
    if rounded < 0:
        return MINUS + digits
    return "+" + digits if sign and rounded > 0 else digits


def _four_digits(value: float) -> int:
    if value == 0:
        return 0
    places = 3 - math.floor(math.log10(abs(value)))
    places = max(0, min(places, _WIDEST_DECIMALS))
    while places > 0 and round(value, places) == round(value, places - 1):
        places -= 1
    return places


def with_unit(written: str, unit: str) -> str:
    """A written number and its unit. The unit `1` and the empty unit are not written."""
    if unit in ("", "1") or written == NOTHING:
        return written
    return written + (unit if unit in _NO_SPACE_UNITS else THIN + unit_name(unit))


def unit_name(unit: str) -> str:
    """How a unit is shown: um and urad with their Greek letter."""
    return {"um": "\u00b5m", "urad": "\u00b5rad", "1": ""}.get(unit, unit)


def quantity(
    value: float | None,
    unit: str,
    *,
    half_width: float | None = None,
    sign: bool = False,
) -> str:
    """A value with its unit, at the digits that its uncertainty (half an interval) deserves."""
    decimals = None
    if half_width is not None and math.isfinite(half_width) and half_width > 0:
        decimals = min(decimals_for(half_width), _WIDEST_DECIMALS)
    return with_unit(number(value, decimals, sign=sign), unit)


def half_width(low: float | None, high: float | None) -> float | None:
    """Half the width of an interval, or None where an end is open or the ends meet."""
    if low is None or high is None or not (math.isfinite(low) and math.isfinite(high)):
        return None
    return abs(high - low) / 2 or None


def interval(low: float | None, high: float | None, unit: str = "", *, sign: bool = False) -> str:
    """`4.7 to 7.1 nm`, both ends at the digits of half the width."""
    half = half_width(low, high)
    decimals = None if half is None else min(decimals_for(half), _WIDEST_DECIMALS)
    return text(
        "number.interval",
        low=number(low, decimals, sign=sign),
        high=with_unit(number(high, decimals, sign=sign), unit),
    )


def count(value: int) -> str:
    """A count with grouped thousands."""
    return number(float(value), 0)


def percent(share: float | None) -> str:
    """A share as per cent; ends are said as such: `< 0.1 %`, `> 99.9 %`."""
    if share is None or not math.isfinite(share):
        return NOTHING
    if 0 < share < 0.001:
        return f"<{THIN}0.1{THIN}%"
    if 0.999 < share < 1:
        return f">{THIN}99.9{THIN}%"
    per_cent = 100 * share
    decimals = 0 if per_cent in (0.0, 100.0) or 10 <= per_cent < 99 else 1
    return number(per_cent, decimals) + THIN + "%"


def probability(p: float | None) -> str:
    """A p-value at one significant digit, two from 0.01 on; small ones as `< 0.0001`."""
    if p is None or not math.isfinite(p):
        return NOTHING
    if p < 1e-4:
        return f"<{THIN}0.0001"
    places = -math.floor(math.log10(p)) + (1 if p >= 0.0095 else 0)
    return number(p, places)


def p_value(p: float | None) -> str:
    """A p-value in a sentence: `p = 0.003`, `p < 0.0001`."""
    written = probability(p)
    if written.startswith("<"):
        return f"p{THIN}{written}"
    return f"p{THIN}={THIN}{written}"


def index(value: float | None) -> str:
    """A capability index: two decimals, no unit."""
    return number(value, 2)


def ppm(value: float | None) -> str:
    """Parts per million at two significant digits, whole above ten."""
    if value is None or not math.isfinite(value):
        return NOTHING
    if 0 < value < 0.01:
        return f"<{THIN}0.01{THIN}ppm"
    decimals = 0 if value >= 9.5 or value == 0 else 1 - math.floor(math.log10(value))
    return number(value, decimals) + THIN + "ppm"


# ---- stamps -------------------------------------------------------------------------------------


def iso(stamp: datetime | None, zone: tzinfo) -> str:
    """ISO 8601 with offset, to the second, in the bay's zone; empty for None."""
    return "" if stamp is None else stamp.astimezone(zone).isoformat(timespec="seconds")


@dataclass(frozen=True)
class LocalClock:
    """Writes stamps in the bay's zone, as seen from `as_of`: near ones by weekday alone."""

    zone: tzinfo
    as_of: datetime

    def moment(self, stamp: datetime | None) -> str:
        """`Tue 22:40` within six days before `as_of`, else with the date (and year, if another)."""
        if stamp is None:
            return NOTHING
        local = stamp.astimezone(self.zone)
        clock = f"{local:%H:%M}" + self._twice(local)
        days = (self.as_of.astimezone(self.zone).date() - local.date()).days
        # a weekday alone is one that has been; what is to come gets its date
        if 0 <= days < 6:
            return text("time.near", weekday=self._weekday(local), clock=clock)
        return text("time.far", weekday=self._weekday(local), date=self.day(stamp), clock=clock)

    def full(self, stamp: datetime | None) -> str:
        """`Tue 3 Nov 2026 22:40 GMT`: nothing left to guess."""
        if stamp is None:
            return NOTHING
        local = stamp.astimezone(self.zone)
        return text(
            "time.full",
            weekday=self._weekday(local),
            day=local.day,
            month=text(f"month.short.{local.month}"),
            year=local.year,
            clock=f"{local:%H:%M}",
            zone=local.tzname() or "",
        )

    def day(self, stamp: datetime) -> str:
        """`3 Nov`, with the year where it is not that of `as_of`."""
        local = stamp.astimezone(self.zone)
        same_year = local.year == self.as_of.astimezone(self.zone).year
        key = "time.day.plain" if same_year else "time.day.year"
        month = text(f"month.short.{local.month}")
        return text(key, day=local.day, month=month, year=local.year)

    def span(self, earliest: datetime, latest: datetime) -> str:
        """`Tue 21:10 to 23:05`: the day is said once where both ends share it."""
        first, last = self.moment(earliest), self.moment(latest)
        ends = earliest.astimezone(self.zone), latest.astimezone(self.zone)
        if ends[0].date() == ends[1].date():
            last = f"{ends[1]:%H:%M}" + self._twice(ends[1])
        return text("time.span", first=first, last=last)

    def zone_name(self) -> str:
        """`Europe/Dublin (GMT)` as of the clock of the page."""
        short = self.as_of.astimezone(self.zone).tzname() or ""
        name = str(self.zone)
        return name if short in ("", name) else f"{name} ({short})"

    def _weekday(self, local: datetime) -> str:
        return text(f"weekday.short.{local.isoweekday()}")

    def _twice(self, local: datetime) -> str:
        """The zone's short name in the hour that happens twice, else nothing."""
        other = local.replace(fold=1 - local.fold)
        same_hour = other.utcoffset() != local.utcoffset()
        real = _exists(local) and _exists(other)
        return f" {local.tzname()}" if same_hour and real else ""


def _exists(local: datetime) -> bool:
    there = local.astimezone(UTC)
    return there.astimezone(local.tzinfo).replace(tzinfo=None) == local.replace(tzinfo=None)


def duration(span: timedelta) -> str:
    """A span of time in its largest fitting unit: `40 min`, `7 h`, `3 days`."""
    minutes = round(abs(span).total_seconds() / 60)
    choices: tuple[tuple[int, int, str], ...] = (
        (90, 1, "duration.minutes"),
        (48 * 60, 60, "duration.hours"),
    )
    for below, unit, key in choices:
        if minutes < below:
            return text(key, n=round(minutes / unit))
    return text("duration.days", n=round(minutes / 1440))

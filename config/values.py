"""Kinds of values that both configuration files use: durations, units, addresses, rule names."""

from __future__ import annotations

import re
from datetime import timedelta
from typing import Annotated, Any

from pydantic import BeforeValidator

EMAIL = re.compile(r"[^@\s<>\"',;]+@[^@\s<>\"',;]+")

# What stands between `user:` and the last `@` of a URL, or behind `password=`.
PASSWORD_IN_URL = re.compile(r"(^[^:]+://[^:@/]*:(?!\d+/))(.+)(?=@)|([?&]password=)[^&]+")

# Names of run rules; the numbers in them are free (`3of4-beyond-1.5s`). The engine reads the same.
RULE_NAME = re.compile(
    r"beyond-\d+(\.\d+)?s|\d+of\d+-beyond-\d+(\.\d+)?s|\d+-one-side|\d+-trending"
    r"|\d+-within-\d+(\.\d+)?s"
)

_DURATION = re.compile(r"(\d+(?:\.\d+)?)\s*(min|h|d|w)")
_DURATION_UNITS = {"min": "minutes", "h": "hours", "d": "days", "w": "weeks"}

# Factors to the unit that the records keep: nanometre for lengths.
LENGTH_NM = {
    "nm": 1.0,
    "um": 1e3,
    "\u00b5m": 1e3,  # micro sign
    "\u03bcm": 1e3,  # Greek mu
    "micron": 1e3,
    "\u00c5": 0.1,  # letter A with ring
    "\u212b": 0.1,  # angstrom sign
    "A": 0.1,
    "angstrom": 0.1,
    "pm": 1e-3,
    "mm": 1e6,
    "m": 1e9,
}


def parse_duration(value: Any) -> timedelta:
    """Read `36h`, `90min`, `2d` or `1w`.

    Raises ValueError for anything else.
    """
    if isinstance(value, timedelta):
        return value
    match = _DURATION.fullmatch(str(value).strip())
    if not match or float(match[1]) <= 0:
        raise ValueError("not a duration; write for example 36h, 90min, 2d or 1w")
    return timedelta(**{_DURATION_UNITS[match[2]]: float(match[1])})


Duration = Annotated[timedelta, BeforeValidator(parse_duration)]


def looks_like_url(value: str) -> bool:
    """Whether the text is a database URL of one of the two kinds that are served."""
    return value.startswith("sqlite:///") or bool(
        re.match(r"postgresql(\+psycopg)?://[^\s]+", value)
    )


def has_password(url: str) -> bool:
    """Whether a password stands in a database URL."""
    return PASSWORD_IN_URL.search(url) is not None


def house_unit(unit: str) -> tuple[str, float]:
    """Unit that the records keep for a given one, and the factor to it.

    Lengths become nanometres; anything else stays as it is written.
    """
    text = unit.strip()
    factor = LENGTH_NM.get(text)
    return (text, 1.0) if factor is None else ("nm", factor)


def unit_factor(given: str, wanted: str) -> float | None:
    """Factor from one unit to the other, or None where they measure different things."""
    (base_given, factor_given), (base_wanted, factor_wanted) = house_unit(given), house_unit(wanted)
    return factor_given / factor_wanted if base_given == base_wanted else None

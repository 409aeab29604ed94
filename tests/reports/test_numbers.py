"""Digits, units and stamps.

Rounding: Particle Data Group, Review of Particle Physics, introduction, section 5.3 (from memory):
0.827 +- 0.119 is written 0.83 +- 0.12 and 0.827 +- 0.367 is written 0.8 +- 0.4.
"""

from __future__ import annotations

from datetime import UTC, datetime, timedelta
from decimal import Decimal
from zoneinfo import ZoneInfo

import pytest
from hypothesis import given
from hypothesis import strategies as st

from reports import numbers
from reports.numbers import MINUS, THIN, LocalClock

DUBLIN = ZoneInfo("Europe/Dublin")


@pytest.mark.parametrize(
    ("value", "uncertainty", "written"),
    [(0.827, 0.119, "0.83"), (0.827, 0.367, "0.8"), (0.827, 0.96, "0.8"), (8270.0, 119.0, "8270")],
)
def test_digits_follow_the_uncertainty(value: float, uncertainty: float, written: str) -> None:
    assert numbers.number(value, numbers.decimals_for(uncertainty)) == written


def test_950_and_more_is_written_as_1000_with_two_digits() -> None:
    # the rule's third case: 0.950 to 0.999 becomes 1.0
    assert numbers.number(0.97, numbers.decimals_for(0.97)) == "1.0"


@given(st.floats(min_value=1e-6, max_value=1e6))
def test_the_uncertainty_keeps_one_or_two_digits(uncertainty: float) -> None:
    decimals = numbers.decimals_for(uncertainty)
    kept = round(Decimal(uncertainty), decimals).normalize()
    digits = len(kept.as_tuple().digits) + max(int(kept.as_tuple().exponent) + decimals, 0)
    assert 1 <= digits <= 2 or kept.as_tuple().digits == (1,)


@pytest.mark.parametrize("bad", [0.0, -1.0, float("nan"), float("inf")])
def test_an_uncertainty_must_be_positive(bad: float) -> None:
    with pytest.raises(ValueError, match="positive"):
        numbers.decimals_for(bad)


def test_units_minus_and_spaces() -> None:
    written = numbers.quantity(-5.93, "nm", half_width=1.2, sign=True)
    assert written == f"{MINUS}5.9{THIN}nm"
    assert numbers.plain(written) == f"{MINUS}5.9 nm"
    assert numbers.quantity(0.5, "urad") == f"0.5{THIN}\u00b5rad"
    assert numbers.quantity(2.5, "1") == "2.5"
    assert numbers.count(61204) == f"61{THIN}204"
    assert numbers.count(1200) == "1200"
    assert numbers.quantity(None, "nm") == numbers.NOTHING
    assert numbers.number(float("nan")) == numbers.NOTHING
    assert numbers.number(-0.04, 1) == "0.0", "no minus in front of nothing"
    assert numbers.interval(-7.08, -4.71, "nm") == f"{MINUS}7.1 to {MINUS}4.7{THIN}nm"


def test_shares_and_probabilities_say_their_ends() -> None:
    assert numbers.percent(0.0004) == f"<{THIN}0.1{THIN}%"
    assert numbers.percent(0.9999) == f">{THIN}99.9{THIN}%"
    assert numbers.percent(1.0) == f"100{THIN}%"
    assert numbers.percent(0.453) == f"45{THIN}%"
    assert numbers.probability(0.00001) == f"<{THIN}0.0001"
    assert [numbers.probability(p) for p in (0.34, 0.034, 0.0034)] == ["0.34", "0.034", "0.003"]
    assert numbers.ppm(0.034) == f"0.034{THIN}ppm"


def test_stamps_are_local_and_say_the_day() -> None:
    clock = LocalClock(DUBLIN, datetime(2026, 7, 10, 4, 30, tzinfo=UTC))
    assert clock.moment(datetime(2026, 7, 7, 21, 40, tzinfo=UTC)) == "Tue 22:40"
    assert clock.moment(datetime(2026, 6, 30, 21, 40, tzinfo=UTC)) == "Tue 30 Jun 22:40"
    assert clock.moment(datetime(2026, 7, 14, 21, 40, tzinfo=UTC)) == "Tue 14 Jul 22:40", "to come"
    assert clock.full(datetime(2025, 12, 30, 21, 40, tzinfo=UTC)) == "Tue 30 Dec 2025 21:40 GMT"
    assert clock.moment(datetime(2025, 12, 30, 21, 40, tzinfo=UTC)) == "Tue 30 Dec 2025 21:40"
    assert clock.zone_name() == "Europe/Dublin (IST)"
    assert numbers.iso(datetime(2026, 7, 7, 21, 40, tzinfo=UTC), DUBLIN) == (
        "2026-07-07T22:40:00+01:00"
    )


def test_the_hour_that_happens_twice_says_which() -> None:
    # Ireland leaves summer time on 2026-10-25 at 01:00 UTC (IANA tz database)
    clock = LocalClock(DUBLIN, datetime(2026, 10, 26, 5, 30, tzinfo=UTC))
    first = datetime(2026, 10, 25, 0, 30, tzinfo=UTC)
    assert clock.moment(first) == "Sun 01:30 IST"
    assert clock.moment(first + timedelta(hours=1)) == "Sun 01:30 GMT"
    assert clock.moment(first + timedelta(hours=2)) == "Sun 02:30"
    # and no mark in the hour after the spring change, which happens once
    spring = LocalClock(DUBLIN, datetime(2026, 3, 30, 5, 30, tzinfo=UTC))
    assert spring.moment(datetime(2026, 3, 29, 1, 30, tzinfo=UTC)) == "Sun 02:30"


def test_a_span_says_a_shared_day_once() -> None:
    clock = LocalClock(DUBLIN, datetime(2026, 7, 10, 4, 30, tzinfo=UTC))
    early = datetime(2026, 7, 7, 16, 10, tzinfo=UTC)
    assert clock.span(early, early + timedelta(hours=6)) == "between Tue 17:10 and 23:10"
    assert clock.span(early, early + timedelta(hours=8)) == "between Tue 17:10 and Wed 01:10"


def test_durations_take_their_largest_fitting_unit() -> None:
    spans = (timedelta(minutes=40), timedelta(hours=7), timedelta(days=3))
    assert [numbers.duration(s) for s in spans] == ["40 min", "7 h", "3 days"]

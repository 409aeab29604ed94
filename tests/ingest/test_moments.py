"""Stamps: ISO 8601 forms, and local time across the changes of the clocks.

The outside reference is the standard library (`datetime.fromisoformat`, `zoneinfo`) and the dates
of the changes in the IANA time zone database: in Dublin the clocks went forward at 01:00 UTC on
2026-03-29 and go back at 01:00 UTC on 2026-10-25.
"""

# ruff: noqa: DTZ001 - local times without a zone are what is tested
from __future__ import annotations

from datetime import UTC, datetime, timedelta, timezone
from zoneinfo import ZoneInfo

import numpy as np
import pyarrow as pa
import pytest
from hypothesis import given
from hypothesis import strategies as st

from ingest.moments import ABSURD, NEVER, NOT_ISO, parse_stamps, to_utc

DUBLIN = ZoneInfo("Europe/Dublin")
ZONES = [DUBLIN, ZoneInfo("America/St_Johns"), ZoneInfo("Australia/Lord_Howe"), UTC]


def parse(*texts: str, form: str | None = None) -> tuple[list[str], dict[str, list[bool]]]:
    stamps, wrong = parse_stamps(pa.array(texts, pa.string()), DUBLIN, form)
    shown = [datetime.fromtimestamp(s / 1e6, UTC).isoformat() for s in stamps.tolist()]
    return shown, {reason: mask.tolist() for reason, mask in wrong.items()}


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("2026-01-05T12:00:00Z", "2026-01-05T12:00:00+00:00"),
        ("2026-01-05 12:00:00Z", "2026-01-05T12:00:00+00:00"),
        ("2026-01-05T12:00:00+02:00", "2026-01-05T10:00:00+00:00"),
        ("2026-01-05T12:00:00-0530", "2026-01-05T17:30:00+00:00"),
        ("2026-01-05T12:00:00+02", "2026-01-05T10:00:00+00:00"),
        ("2026-01-05T12:00:00.25Z", "2026-01-05T12:00:00.250000+00:00"),
        ("2026-01-05T12:00:00,5Z", "2026-01-05T12:00:00.500000+00:00"),
        ("2026-01-05T12:00:00.123456789Z", "2026-01-05T12:00:00.123456+00:00"),
        ("2026-01-05T12:00Z", "2026-01-05T12:00:00+00:00"),
        ("2026-01-05t12:00:00z", "2026-01-05T12:00:00+00:00"),
        ("20260105T120000Z", "2026-01-05T12:00:00+00:00"),
        ("2026-W02-1T12:00:00Z", "2026-01-05T12:00:00+00:00"),
        ("2026-01-05T24:00:00Z", "2026-01-06T00:00:00+00:00"),
        ("2026-01-05", "2026-01-05T00:00:00+00:00"),
        ("2026-07-05T12:00:00", "2026-07-05T11:00:00+00:00"),
        ("2026-07-05 12:00", "2026-07-05T11:00:00+00:00"),
        # the hour that happens twice: the first, in summer time
        ("2026-10-25T01:30:00", "2026-10-25T00:30:00+00:00"),
        ("2026-10-25T00:59:59", "2026-10-24T23:59:59+00:00"),
        ("2026-10-25T02:00:00", "2026-10-25T02:00:00+00:00"),
        ("2026-03-29T00:59:59", "2026-03-29T00:59:59+00:00"),
        ("2026-03-29T02:00:00", "2026-03-29T01:00:00+00:00"),
    ],
)
def test_forms(text: str, expected: str) -> None:
    assert parse(text) == ([expected], {})
    # among others of the usual form it reads the same
    both, wrong = parse("2026-01-05T12:00:00Z", text, "2026-01-05T12:00:00")
    assert both[1] == expected
    assert wrong == {}


@pytest.mark.parametrize(
    ("text", "reason"),
    [
        ("2026-03-29T01:30:00", NEVER),
        ("2026-03-29T01:00:00", NEVER),
        ("", NOT_ISO),
        ("yesterday", NOT_ISO),
        ("2026-13-01T00:00:00Z", NOT_ISO),
        ("2026-02-29T00:00:00Z", NOT_ISO),
        ("2026-01-05T25:00:00Z", NOT_ISO),
        ("2026-01-05T12:00:60Z", NOT_ISO),
        ("2026-01-05x12:00:00Z", NOT_ISO),
        ("05/01/2026 12:00", NOT_ISO),
        ("2026-01-05T12:00:00+99:00", NOT_ISO),
        ("٢٠٢٦-01-05T12:00:00Z", NOT_ISO),
        ("1767614400", NOT_ISO),
        ("46027.5", NOT_ISO),
        ("0001-01-01T00:00:00Z", ABSURD),
        ("1899-12-30T00:00:00", ABSURD),
        ("1970-01-01T00:00:00Z", ABSURD),
        ("2201-01-01T00:00:00Z", ABSURD),
        ("9999-12-31T23:59:59", ABSURD),
        ("9999-12-31T24:00:00", NOT_ISO),
    ],
)
def test_refused(text: str, reason: str) -> None:
    stamps, wrong = parse("2026-01-05T12:00:00Z", text, "2026-01-05T12:00:00")
    assert wrong == {reason: [False, True, False]}
    assert stamps[0] == stamps[2] == "2026-01-05T12:00:00+00:00"


def test_stamp_format() -> None:
    assert parse("05.07.2026 12:00", form="%d.%m.%Y %H:%M")[0] == ["2026-07-05T11:00:00+00:00"]
    assert parse("05.07.2026 12:00 +0200", form="%d.%m.%Y %H:%M %z")[0] == [
        "2026-07-05T10:00:00+00:00"
    ]
    _, wrong = parse("2026-07-05", form="%d.%m.%Y")
    assert list(wrong.values()) == [[True]]
    assert "stamp_format '%d.%m.%Y'" in next(iter(wrong))


def test_no_texts() -> None:
    assert parse() == ([], {})


@given(
    st.lists(st.datetimes(datetime(1991, 1, 1), datetime(2099, 1, 1)), min_size=1, max_size=8),
    st.sampled_from(ZONES),
)
def test_local_times_agree_with_the_standard_library(
    moments: list[datetime], zone: ZoneInfo
) -> None:
    texts = [m.isoformat() for m in moments]
    stamps, wrong = parse_stamps(pa.array(texts, pa.string()), zone)
    for i, moment in enumerate(moments):
        aware = moment.replace(tzinfo=zone)
        there = aware.astimezone(UTC)
        happened = there.astimezone(zone).replace(tzinfo=None) == moment
        assert (NEVER in wrong and bool(wrong[NEVER][i])) == (not happened)
        if happened:
            assert stamps[i] == (there - datetime(1970, 1, 1, tzinfo=UTC)) // timedelta(
                microseconds=1
            )


@given(
    st.datetimes(
        datetime(1991, 1, 1),
        datetime(2099, 1, 1),
        timezones=st.builds(
            timezone, st.integers(-14 * 60, 14 * 60).map(lambda m: timedelta(minutes=m))
        ),
    )
)
def test_offsets_agree_with_the_standard_library(moment: datetime) -> None:
    stamps, wrong = parse_stamps(pa.array([moment.isoformat()], pa.string()), DUBLIN)
    assert wrong == {}
    assert stamps[0] == (moment - datetime(1970, 1, 1, tzinfo=UTC)) // timedelta(microseconds=1)


@given(st.text(max_size=40))
def test_any_text_is_a_stamp_or_not(text: str) -> None:
    array = pa.array([text.encode("utf-8", "replace").decode()], pa.string())
    stamps, wrong = parse_stamps(array, DUBLIN)
    assert (stamps[0] == 0) == bool(wrong)


@pytest.mark.parametrize("zone", ZONES)
def test_every_minute_around_the_changes_of_the_clocks(zone: ZoneInfo) -> None:
    days = [datetime(2026, 3, 7), datetime(2026, 3, 28), datetime(2026, 4, 4)]
    days += [datetime(2026, 10, 3), datetime(2026, 10, 24), datetime(2026, 10, 31)]
    naive = [d + timedelta(minutes=m) for d in days for m in range(0, 2880, 7)]
    local = np.array([(n - datetime(1970, 1, 1)) // timedelta(microseconds=1) for n in naive])
    stamps, never = to_utc(local, zone)
    for n, stamp, missing in zip(naive, stamps.tolist(), never.tolist(), strict=True):
        aware = n.replace(tzinfo=zone)
        back = aware.astimezone(UTC).astimezone(zone).replace(tzinfo=None)
        assert missing == (back != n)
        if not missing:
            assert stamp == int(aware.timestamp()) * 1_000_000

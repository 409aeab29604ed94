"""When the pass is due: across changes of summer time, after a missed night, and for real.

Dates of the changes are those of the IANA time-zone database (package tzdata): Europe/Dublin goes
forward on 2026-03-29 at 01:00 and back on 2026-10-25 at 02:00 local time.
"""

from __future__ import annotations

from datetime import UTC, datetime, timedelta
from itertools import pairwise
from zoneinfo import ZoneInfo

import pytest

from service.schedule import due_at, last_due, missed

DUBLIN = ZoneInfo("Europe/Dublin")


def utc(text: str) -> datetime:
    return datetime.fromisoformat(text).replace(tzinfo=UTC)


@pytest.mark.parametrize(
    ("now", "hour", "minute", "due", "why"),
    [
        ("2026-11-30T12:00", 5, 30, "2026-11-30T05:30", "winter: local time is UTC"),
        ("2026-07-01T12:00", 5, 30, "2026-07-01T04:30", "summer: one hour ahead"),
        ("2026-07-01T04:29", 5, 30, "2026-06-30T04:30", "a minute too early: yesterday's"),
        ("2026-03-29T12:00", 1, 30, "2026-03-29T01:30", "01:30 never happens: moved by the gap"),
        ("2026-10-25T12:00", 1, 30, "2026-10-25T00:30", "01:30 happens twice: the first"),
        ("2026-10-25T01:00", 1, 30, "2026-10-25T00:30", "between the two: the first was due"),
    ],
)
def test_last_due(now: str, hour: int, minute: int, due: str, why: str) -> None:
    assert last_due(utc(now), hour, minute, DUBLIN) == utc(due), why


def test_every_local_day_has_one_due_moment() -> None:
    day = datetime(2026, 1, 1, 12, tzinfo=DUBLIN)
    moments = {due_at(day + timedelta(days=n), 1, 30, DUBLIN) for n in range(365)}
    assert len(moments) == 365
    gaps = [b - a for a, b in pairwise(sorted(moments))]
    assert {g.total_seconds() / 3600 for g in gaps} == {23.0, 24.0, 25.0}


def test_the_scheduler_fires_once_a_night_across_both_changes() -> None:
    """APScheduler's own cron trigger, walked over both changes of summer time."""
    from apscheduler.triggers.cron import CronTrigger

    trigger = CronTrigger(hour=1, minute=30, timezone=DUBLIN)
    for start in ("2026-03-27T12:00", "2026-10-23T12:00"):
        run_nights = set()
        last_pass = None
        now = utc(start)
        fired = None
        for _ in range(5):
            fired = trigger.get_next_fire_time(fired, now)
            assert fired is not None
            now = fired.astimezone(UTC)
            due = last_due(now, 1, 30, DUBLIN)
            if last_pass is None or last_pass < due:
                run_nights.add(due)
                last_pass = now
            now += timedelta(seconds=1)
        assert len(run_nights) in (4, 5)
        ordered = sorted(run_nights)
        assert all((b - a) <= timedelta(hours=25) for a, b in pairwise(ordered))


def test_one_missed_night_is_caught_up_once() -> None:
    now, due = utc("2026-11-30T09:00"), utc("2026-11-30T05:30")
    assert missed(now, utc("2026-11-27T05:30"), due)
    assert not missed(now, utc("2026-11-30T05:31"), due)
    assert not missed(now, None, due), "a new database has missed nothing"

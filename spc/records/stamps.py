"""Between datetimes and the integer stamps of the records (microseconds UTC)."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta, tzinfo

EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
_MICROSECOND = timedelta(microseconds=1)


def to_us(stamp: datetime) -> int:
    """Microseconds since the epoch of an aware datetime.

    Raises ValueError for a naive one: without a zone a stamp says nothing.
    """
    if stamp.tzinfo is None:
        raise ValueError(f"stamp {stamp.isoformat()} has no time zone")
    return (stamp - EPOCH) // _MICROSECOND


def from_us(stamp: int, zone: tzinfo = UTC) -> datetime:
    """Aware datetime of a stamp, in the zone given."""
    return (EPOCH + stamp * _MICROSECOND).astimezone(zone)


def iso(stamp: int | None, zone: tzinfo = UTC) -> str | None:
    """ISO 8601 with offset, or None."""
    if stamp is None:
        return None
    moment = from_us(stamp, zone)
    return moment.isoformat(timespec="microseconds" if moment.microsecond else "seconds")

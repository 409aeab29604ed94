"""What was done in the bay about an onset."""

from __future__ import annotations

from typing import Any

from sqlalchemy import Connection

from spc.records.bay_events import events_between

_MOST_EVENTS = 20
_EVENTS_BEFORE_US = 48 * 3600 * 1_000_000
_EVENTS_AFTER_US = 6 * 3600 * 1_000_000


def events_near(connection: Connection, first_us: int, last_us: int) -> list[dict[str, Any]]:
    """Bay events about an onset, oldest first: an event alone is never a proof."""
    rows = events_between(connection, first_us - _EVENTS_BEFORE_US, last_us + _EVENTS_AFTER_US)
    return [
        {"at_us": at, "kind": kind, "tool": tool, "module": module, "text": text}
        for at, kind, tool, module, text in rows[-_MOST_EVENTS:]
    ]

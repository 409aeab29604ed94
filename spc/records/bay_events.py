"""Questions about bay events."""

from __future__ import annotations

from sqlalchemy import Connection, select

from spc.records.tables import bay_events


def events_between(
    connection: Connection, first_us: int, last_us: int
) -> list[tuple[int, str, str | None, str | None, str | None]]:
    """Bay events of a span: at_us, kind, tool, module, text; oldest first."""
    event = bay_events.c
    query = (
        select(event.at_us, event.kind, event.tool, event.module, event.text)
        .where(event.at_us >= first_us, event.at_us <= last_us)
        .order_by(event.at_us, event.id)
    )
    return [(r[0], r[1], r[2], r[3], r[4]) for r in connection.execute(query)]

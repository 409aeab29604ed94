"""Streams that have fallen silent: nothing measured for longer than the plan expects."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import datetime, timedelta

from sqlalchemy import Connection

from config.load import Bay
from spc.records import plotted
from spc.records.stamps import from_us, to_us


@dataclass(frozen=True)
class SilentStream:
    """A stream without a reading for longer than expected.

    Attributes
    ----------
    stream_id, characteristic, context : which stream.
    last_measured_us, last_at_us : its newest reading, and the point it belongs to.
    silent_since_us : when the next reading was due at the latest.
    expected_every : the plan's longest gap.
    columns : context of its newest wafer (tool, module, gauge, …): streams silent for one reason
        share some of it.
    """

    stream_id: int
    characteristic: str
    context: dict[str, str]
    last_measured_us: int
    last_at_us: int
    silent_since_us: int
    expected_every: timedelta
    columns: dict[str, str]

    @property
    def last_measured(self) -> datetime:
        """Newest reading."""
        return from_us(self.last_measured_us)


def silent_streams(connection: Connection, bay: Bay, as_of: datetime) -> list[SilentStream]:
    """Streams whose newest reading is older than the plan's `expected_every`, at a clock."""
    now = to_us(as_of)
    found = []
    for one in bay.plan.characteristic:
        if one.expected_every is None:
            continue
        gap = one.expected_every // timedelta(microseconds=1)
        for seen in plotted.last_seen(connection, one.name):
            if now - seen.measured_us > gap:
                found.append(
                    SilentStream(
                        seen.stream_id,
                        one.name,
                        seen.context,
                        seen.measured_us,
                        seen.at_us,
                        seen.measured_us + gap,
                        one.expected_every,
                        seen.columns,
                    )
                )
    return found

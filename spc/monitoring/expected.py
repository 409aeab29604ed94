"""How many rule signals noise alone would have given among the points of a pass."""

from __future__ import annotations

from datetime import datetime

from sqlalchemy import Connection

from config.load import Bay
from spc.monitoring.alarm_budget import expected_tonight as _expected
from spc.records import passes
from spc.records.stamps import to_us


def expected_tonight(connection: Connection, bay: Bay, as_of: datetime) -> float:
    """Expected false signals among the points measured since the last pass."""
    now = to_us(as_of)
    return _expected(connection, bay, now, passes.last_before(connection, now))

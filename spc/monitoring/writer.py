"""Where an evaluation puts what it finds: into the records at once, or aside for later."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

from sqlalchemy import Connection, Table

from spc.monitoring import baselines
from spc.monitoring.limit_sets import LimitSet
from spc.records import series
from spc.records.columns import Columns
from spc.records.contexts import ContextStore


class Writer:
    """Writes at once, in the transaction of a connection."""

    def __init__(self, connection: Connection) -> None:
        self.connection = connection
        self.contexts = ContextStore(connection)

    def stream_ids(self, characteristic: str, wanted: Sequence[str]) -> dict[str, int]:
        """Id of each stream of a characteristic by its context (JSON); adds those wanted."""
        known = series.stream_ids(self.connection, characteristic)
        new = [key for key in wanted if key not in known]
        if not new:
            return known
        series.add_streams(self.connection, characteristic, new)
        return series.stream_ids(self.connection, characteristic)

    def clear(self, stream_ids: Iterable[int]) -> None:
        """Take away the points and wafer results of streams."""
        series.clear(self.connection, stream_ids)

    def decide(self, decisions: Sequence[baselines.Decision], as_of_us: int) -> int:
        """Carry out decisions on automatic limits; returns how many sets are new."""
        return len(baselines.carry_out(self.connection, decisions, as_of_us))

    def in_force(self, stream_ids: Iterable[int]) -> list[LimitSet]:
        """Automatic and approved sets of streams, after the decisions."""
        return baselines.in_force(self.connection, stream_ids)

    def insert(self, table: Table, rows: Columns) -> None:
        """Add points or wafer results."""
        series.insert(self.connection, table, rows)

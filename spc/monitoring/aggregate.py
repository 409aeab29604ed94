"""Old site readings summed up: month by month, in steps of a few lots, each a transaction.

Of a month that ended long enough ago the capability is kept first, then lot by lot what the sites
said, while their values go. Cut anywhere, the next run goes on: a step is there whole or not at
all. Lots with newer readings wait until those are old enough too.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta

from sqlalchemy import Connection, Engine

from config.load import Bay
from spc.monitoring.work import digest_of, hand_digests
from spc.records import aggregation, evaluations
from spc.records.aggregation import Month
from spc.records.review import up_to_date
from spc.records.sessions import reading
from spc.records.stamps import from_us, to_us

LOTS_A_STEP = 200
_EARLIEST = datetime(1971, 1, 2, tzinfo=UTC)  # older stamps are mistakes; they go with the first


@dataclass(frozen=True)
class AggregateReport:
    """What was summed up: months finished, measurements and site values; why nothing could be."""

    months: tuple[str, ...] = ()
    measurements: int = 0
    site_values: int = 0
    failed: tuple[str, ...] = ()


def aggregate_sites(
    engine: Engine,
    bay: Bay,
    clock: datetime,
    *,
    stop: Callable[[], bool] = lambda: False,
    progress: Callable[[str], None] = lambda _month: None,
) -> AggregateReport:
    """Take away the site values of months that ended long enough ago.

    Parameters
    ----------
    clock : clock of the pass (aware); the last evaluation must have had it, or none may be missing.
    stop : asked between steps; what is left is done by the next run.

    Raises
    ------
    sqlalchemy.exc.DBAPIError
        When the database fails; the step in hand is undone, those before it hold.
    """
    if bay.settings.retention.aggregate_sites_after_days is None:
        return AggregateReport()
    with reading(engine) as connection:
        waiting = not_evaluated(connection, bay, clock)
    if waiting:
        return AggregateReport(failed=(f"{waiting} is not evaluated yet: run the pass first",))
    done: list[str] = []
    measurements = values = 0
    while not stop():
        with reading(engine) as connection:
            month, before = _next(connection, bay, clock)
        if month is None:
            break
        progress(month.month)
        if not month.started_us:
            _begin(engine, bay, month, clock)
        taken = _step(engine, bay, month, before)
        measurements, values = measurements + taken[0], values + taken[1]
        if taken == (0, 0):
            with engine.begin() as connection:
                newest = aggregation.newest_measurement(connection)
                aggregation.finish(connection, month.month, to_us(clock), newest)
            done.append(month.month)
    return AggregateReport(tuple(done), measurements, values)


def not_evaluated(connection: Connection, bay: Bay, clock: datetime) -> str | None:
    """Name of a characteristic whose results are not those of the readings and plan of now."""
    kept, by_hand = evaluations.all_kept(connection), hand_digests(connection)
    radius = bay.settings.bay.wafer_radius_mm
    for one in bay.plan.characteristic:
        known = kept.get(one.name)
        if known is None or known[0] != digest_of(one, radius, by_hand):
            return one.name
        if not up_to_date(connection, one.name, max(to_us(clock), known[1].as_of_us)):
            return one.name
    return None


def overdue(connection: Connection, bay: Bay, clock: datetime, grace_days: float = 0.0) -> bool:
    """Whether a month that ended long enough ago still has site values."""
    return _next(connection, bay, clock, grace_days)[0] is not None


def _next(
    connection: Connection, bay: Bay, clock: datetime, grace_days: float = 0.0
) -> tuple[Month | None, Month | None]:
    """The month to work on (None: all is done), and the last one that was finished.

    A month that was not begun has no `started_us`.
    """
    days = bay.settings.retention.aggregate_sites_after_days
    if days is None:
        return None, None
    until_us = to_us(clock - timedelta(days=days + grace_days))
    known = aggregation.months(connection)
    finished = [one for one in known if one.done_us is not None]
    before = finished[-1] if finished else None
    for one in known:
        if one.done_us is None:
            return (one if one.ends_us <= until_us else None), before
    oldest = aggregation.oldest_stamp(connection, None if before is None else before.ends_us)
    if oldest is None:
        return None, before
    month = _month_of(max(oldest, to_us(_EARLIEST)), bay)
    return (month if month.ends_us <= until_us else None), before


def _month_of(at_us: int, bay: Bay) -> Month:
    zone = bay.settings.bay.zone
    local = from_us(at_us, zone)
    begins = datetime(local.year, local.month, 1, tzinfo=zone)
    ends = datetime(local.year + local.month // 12, local.month % 12 + 1, 1, tzinfo=zone)
    return Month(f"{local:%Y-%m}", to_us(begins), to_us(ends), 0)


def _begin(engine: Engine, bay: Bay, month: Month, clock: datetime) -> None:
    """Keep the capability of a month while its site values are all there."""
    from spc.monitoring.kept_studies import studies_of_month
    from spc.monitoring.review import month_window

    window = month_window(month.month, clock, bay.settings.bay.zone, count=1)
    with engine.begin() as connection:
        studies = studies_of_month(connection, bay, window, clock)
        aggregation.keep_studies(connection, studies)
        begun = Month(month.month, month.begins_us, month.ends_us, to_us(clock))
        aggregation.begin(connection, begun)


def _step(engine: Engine, bay: Bay, month: Month, before: Month | None) -> tuple[int, int]:
    """Take the values of some lots; (0, 0) where none of the month is left."""
    from spc.monitoring.kept import keep

    with engine.begin() as connection:
        lots = aggregation.lots_to_do(connection, month.ends_us, before, LOTS_A_STEP)
        if not lots:
            return 0, 0
        keep(connection, bay.plan, lots)
        taken = aggregation.take_away(connection, lots)
        aggregation.add_up(connection, month.month, taken)
    return taken

"""Old drops into the archive and old site readings summed up: at the end of a pass, or by hand."""

from __future__ import annotations

import logging
import time
from collections.abc import Callable
from dataclasses import dataclass
from datetime import datetime
from typing import TYPE_CHECKING, Any

from service import clock

if TYPE_CHECKING:
    from ingest.archive import ArchiveReport
    from service.context import Progress, Session
    from spc.monitoring.aggregate import AggregateReport

_LOG = logging.getLogger("yellowbay.retention")

# What is due for longer than this was not managed by the nights since.
GRACE_DAYS = 7.0
_MOST_FAILURES = 5


@dataclass(frozen=True)
class Retained:
    """What one run did."""

    drops: ArchiveReport
    sites: AggregateReport

    @property
    def failed(self) -> tuple[str, ...]:
        """What could not be done, and why; many drops with one reason are summed up."""
        said = (*self.drops.failed, *self.sites.failed)
        more = len(said) - _MOST_FAILURES
        tail = (f"and {more} more",) if more > 0 else ()
        return (*said[:_MOST_FAILURES], *tail)

    def as_json(self) -> dict[str, Any]:
        """`{archived, archived_bytes, due, months, measurements, site_values, failed}`."""
        return {
            "archived": self.drops.archived,
            "archived_bytes": self.drops.bytes,
            "due": self.drops.due,
            "months": list(self.sites.months),
            "measurements": self.sites.measurements,
            "site_values": self.sites.site_values,
            "failed": list(self.failed),
        }


def configured(session: Session) -> bool:
    """Whether anything is to be moved or summed up at all."""
    kept = session.bay.settings.retention
    return (kept.archive_drops_after_days, kept.aggregate_sites_after_days) != (None, None)


def run_retention(
    session: Session,
    as_of: datetime,
    *,
    minutes: float | None,
    stop: Callable[[], bool] = lambda: False,
    progress: Progress = lambda _what, _done, _total: None,
) -> Retained:
    """Do what is due. The caller holds the lock of the pass.

    Parameters
    ----------
    as_of : the clock, at the most the present: a slip in `--as-of` must not take anything away.
    minutes : longest time; what is left is done by the next run. None: until all is done.
    """
    from ingest.archive import ArchiveReport, archive_drops
    from ingest.drops import DropFolderError
    from spc.monitoring.aggregate import aggregate_sites

    as_of = min(as_of, clock.now())
    end = None if minutes is None else time.monotonic() + 60 * minutes

    def enough() -> bool:
        return stop() or (end is not None and time.monotonic() >= end)

    try:
        drops = archive_drops(
            session.engine,
            session.bay,
            as_of,
            stop=enough,
            progress=lambda done, total: progress("archiving drops", done, total),
        )
    except DropFolderError as error:
        drops = ArchiveReport(failed=(str(error),))
    sites = aggregate_sites(
        session.engine,
        session.bay,
        as_of,
        stop=enough,
        progress=lambda month: progress(f"summing up {month}", 0, 1),
    )
    done = Retained(drops, sites)
    _LOG.info("retention", extra={k: v for k, v in done.as_json().items() if k != "failed"})
    return done


def at_the_end_of_a_night(
    session: Session, as_of: datetime, stop: Callable[[], bool], progress: Progress
) -> Retained | None:
    """The retention of a pass, within its minutes; None without the settings."""
    if not configured(session):
        return None
    minutes = session.bay.settings.retention.minutes_a_night
    return run_retention(session, as_of, minutes=minutes, stop=stop, progress=progress)


def state(session: Session) -> dict[str, Any]:
    """What is kept, archived, summed up and due now: reading only.

    `overdue` counts drops, and says of months, what has been due for longer than GRACE_DAYS.
    """
    from ingest.archive import due_drops
    from ingest.drops import DropFolderError
    from spc.monitoring.aggregate import overdue
    from spc.records import aggregation, archived
    from spc.records.sessions import reading

    bay, now = session.bay, clock.now()
    kept = bay.settings.retention
    try:
        due = len(due_drops(session.engine, bay, now))
        late = len(due_drops(session.engine, bay, now, GRACE_DAYS)) if due else 0
    except DropFolderError:
        due = late = 0  # a finding of its own in `health`
    with reading(session.engine) as connection:
        count, size = archived.count(connection)
        months = [one for one in aggregation.months(connection) if one.done_us is not None]
        behind = overdue(connection, bay, now, GRACE_DAYS)
        sites_due = overdue(connection, bay, now)
    return {
        "keeps_everything": not configured(session),
        "drops": {
            "after_days": kept.archive_drops_after_days,
            "folder": str(bay.path(kept.archive)),
            "archived": count,
            "archived_bytes": size,
            "due": due,
            "overdue": late,
        },
        "sites": {
            "after_days": kept.aggregate_sites_after_days,
            "months": [one.month for one in months],
            "measurements": sum(one.measurements for one in months),
            "site_values": sum(one.site_values for one in months),
            "due": sites_due,
            "overdue": behind,
        },
    }


def sentences(found: dict[str, Any]) -> list[str]:
    """The state in words, a line for drops and one for site values."""
    drops, sites = found["drops"], found["sites"]
    lines = []
    if drops["after_days"] is None and not drops["archived"]:
        lines.append("drops stay where they are")
    else:
        after = "kept" if drops["after_days"] is None else f"after {drops['after_days']:g} days"
        lines.append(
            f"drops: {drops['archived']} archived ({drops['archived_bytes'] / 1e6:.1f} MB), "
            f"{drops['due']} due ({after})"
        )
    months = sites["months"]
    if sites["after_days"] is None and not months:
        lines.append("site values stay")
    else:
        gone = f"summed up until {months[-1]}" if months else "none summed up yet"
        more = "; more is due" if sites["due"] else ""
        lines.append(f"site values: {gone}{more}")
    return lines

"""When the pass runs: every night at the bay's local time, with what was missed caught up.

The clock time is the bay's: at the change to summer time a pass at a time that does not exist
runs at the first moment after the gap; at the change back a time that exists twice runs once, at
the first. (APScheduler runs both; the record of passes keeps the second one away.)
"""

from __future__ import annotations

import logging
import signal
import threading
from datetime import UTC, datetime, timedelta
from types import FrameType
from typing import TYPE_CHECKING
from zoneinfo import ZoneInfo

from service import clock

if TYPE_CHECKING:
    from service.context import Session

_LOG = logging.getLogger("yellowbay.schedule")
MAIL_EVERY = timedelta(minutes=1)


def due_at(day: datetime, hour: int, minute: int, zone: ZoneInfo) -> datetime:
    """The moment (UTC) at which the pass of a local calendar day is due.

    A local time that exists twice is the first one; one that never exists is moved by the gap.
    """
    local = datetime(day.year, day.month, day.day, hour, minute, tzinfo=zone)
    return local.astimezone(UTC)


def last_due(now: datetime, hour: int, minute: int, zone: ZoneInfo) -> datetime:
    """The last moment up to `now` at which a pass was due."""
    today = now.astimezone(zone)
    due = due_at(today, hour, minute, zone)
    return due if due <= now else due_at(today - timedelta(days=1), hour, minute, zone)


def missed(now: datetime, last_pass: datetime | None, due: datetime) -> bool:
    """Whether the pass that was due last has not run: it is then caught up, once.

    A database that never saw a pass has missed nothing; its first one comes at the next due time.
    """
    return last_pass is not None and last_pass < due <= now


def serve_forever(session: Session) -> None:
    """Run the schedule until SIGTERM or SIGINT; a pass that runs ends after the file in hand."""
    stop = threading.Event()

    def ask_to_stop(number: int, _frame: FrameType | None) -> None:
        _LOG.info("stopping", extra={"signal": signal.Signals(number).name})
        stop.set()

    for number in (signal.SIGTERM, signal.SIGINT):
        signal.signal(number, ask_to_stop)
    Server(session, stop).run()


class Server:
    """The running service: one scheduler, one pass at a time."""

    def __init__(self, session: Session, stop: threading.Event) -> None:
        self._session = session
        self._stop = stop
        self._hour, self._minute = session.bay.settings.nightly.hour_minute
        self._zone = session.bay.settings.bay.zone

    def run(self) -> None:
        """Start, catch up one missed night, then wait for the nights to come."""
        from apscheduler.schedulers.background import BackgroundScheduler
        from apscheduler.triggers.cron import CronTrigger

        self._catch_up()
        scheduler = BackgroundScheduler(timezone=self._zone)
        scheduler.add_job(
            self._night,
            CronTrigger(hour=self._hour, minute=self._minute, timezone=self._zone),
            id="night",
            coalesce=True,
            max_instances=1,
            misfire_grace_time=None,
        )
        scheduler.add_job(
            self._mail,
            "interval",
            seconds=MAIL_EVERY.total_seconds(),
            id="mail",
            coalesce=True,
            max_instances=1,
        )
        scheduler.start()
        job = scheduler.get_job("night")
        _LOG.info("serving", extra={"next": job.next_run_time.isoformat() if job else None})
        self._stop.wait()
        scheduler.shutdown(wait=True)
        self._session.engine.dispose()
        _LOG.info("stopped")

    def _catch_up(self) -> None:
        from service.night import last_pass

        now = clock.now()
        due = last_due(now, self._hour, self._minute, self._zone)
        if missed(now, last_pass(self._session), due):
            _LOG.info("catching up a missed night", extra={"due": due.isoformat()})
            self._night()

    def _night(self) -> None:
        """One pass now, unless this night has had one: a local time can come twice."""
        from service.failures import explain
        from service.night import last_pass, run_night

        now = clock.now()
        due = last_due(now, self._hour, self._minute, self._zone)
        before = last_pass(self._session)
        if before is not None and before >= due:
            _LOG.info("this night has been run", extra={"last": before.isoformat()})
            return
        try:
            night = run_night(self._session, now, stop=self._stop.is_set)
        except Exception as error:
            # The service outlives a failed night: the next one recovers what this one left.
            text, _status = explain(error)
            _LOG.error("the night failed", extra={"reason": text})
            return
        _LOG.info("the night is done", extra={"result": night.text.splitlines()[0]})
        for reason in night.mail_errors:
            _LOG.warning("mail waits or was refused", extra={"reason": reason})
        for reason in night.retention_errors:
            _LOG.warning("not archived or summed up", extra={"reason": reason})

    def _mail(self) -> None:
        from service.failures import explain
        from service.night import send_mail

        try:
            send_mail(self._session, stop=self._stop.is_set)
        except Exception as error:
            text, _status = explain(error)
            _LOG.error("mail could not be looked after", extra={"reason": text})

"""The one pass, step by step, under its lock.

Drop files -> records -> points and signals -> excursions -> the report -> the outbox -> mail.
Each step can be run again without harm: what was done is found done. The report, the record of
the pass and the messages land in one transaction, after which only sending is left.
"""

from __future__ import annotations

import json
import logging
from collections.abc import Callable
from dataclasses import dataclass, field
from datetime import UTC, datetime
from typing import TYPE_CHECKING, Any

from service import clock
from service.lock import pass_lock

if TYPE_CHECKING:
    from sqlalchemy import Connection

    from ingest.report import IngestReport
    from service.context import Progress, Session

_LOG = logging.getLogger("yellowbay.night")


def _never() -> bool:
    return False


def _silent(_what: str, _done: int, _total: int) -> None:
    return None


@dataclass(frozen=True)
class Night:
    """What one pass did; `as_json` is the contract's document."""

    document: dict[str, Any]
    text: str
    mail_errors: tuple[str, ...] = field(default=())

    def as_json(self) -> dict[str, Any]:
        """The document of `nightly --json`."""
        return self.document


def run_night(
    session: Session,
    as_of: datetime,
    *,
    wait_seconds: float = 600.0,
    stop: Callable[[], bool] = _never,
    progress: Progress = _silent,
) -> Night:
    """Run one pass with the given clock.

    Raises
    ------
    service.lock.BusyError
        When another pass holds the lock for longer than `wait_seconds`.
    """
    from spc.monitoring.evaluation import evaluate
    from spc.monitoring.expected import expected_tonight
    from spc.monitoring.triage import update_excursions

    waiting = _tell_waiting
    with pass_lock(session.engine, wait_seconds, waiting=waiting):
        intake = _take_in(session, as_of, stop, progress)
        _LOG.info("taken in", extra={**intake.drops, "readings": intake.readings["loaded"]})
        if intake.stopped:
            return _stopped(as_of, intake)
        evaluation = evaluate(session.engine, session.bay, as_of, progress)
        _LOG.info(
            "evaluated",
            extra={"points": evaluation.points_evaluated, "streams": evaluation.streams},
        )
        with session.engine.begin() as connection:
            changes = update_excursions(
                connection,
                session.bay,
                as_of,
                progress,
                new_points=bool(evaluation.touched or evaluation.points_evaluated),
            )
            expected = expected_tonight(connection, session.bay, as_of)
        _LOG.info("triaged", extra={"opened": changes.opened, "updated": changes.updated})
        document = {
            "as_of": as_of.astimezone(session.bay.settings.bay.zone).isoformat(),
            "drops": intake.drops,
            "readings": intake.readings,
            "streams": evaluation.streams,
            "points_evaluated": evaluation.points_evaluated,
            "signals": evaluation.signals,
            "expected_false_signals": expected,
            "excursions": {
                "opened": changes.opened,
                "updated": changes.updated,
                "open": changes.n_open,
            },
        }
        return _report_and_send(session, as_of, document, stop, progress)


def _report_and_send(
    session: Session,
    as_of: datetime,
    document: dict[str, Any],
    stop: Callable[[], bool],
    progress: Progress,
) -> Night:
    from reports.outbox import queue, send_due
    from service.pages import write_index, write_night

    progress("writing the report", 0, 1)
    with session.engine.begin() as connection:
        report = write_night(connection, session, as_of, document)
        queued = queue(connection, report.messages, as_of)
        document["report"] = str(report.file)
        _record_pass(connection, as_of, document)
    write_index(session, as_of)
    delivery = send_due(session.engine, carrier(session), clock.now, stop=stop, every=True)
    document["mail"] = {"queued": queued, "sent": delivery.sent, "failed": delivery.failed}
    return Night(document, report.text, delivery.errors)


def take_in_drops(session: Session, as_of: datetime, progress: Progress = _silent) -> IngestReport:
    """Only the first step of the pass, under the same lock."""
    with pass_lock(session.engine, 600.0, waiting=_tell_waiting):
        return _take_in(session, as_of, _never, progress)


def send_mail(session: Session, stop: Callable[[], bool] = _never) -> None:
    """Send what waits in the outbox and is due; a pass that runs does so itself."""
    from reports.outbox import send_due
    from service.lock import BusyError

    try:
        with pass_lock(session.engine, 0):
            send_due(session.engine, carrier(session), clock.now, stop=stop)
    except BusyError:
        _LOG.info("a pass is running and sends the mail itself")


def last_pass(session: Session) -> datetime | None:
    """Clock of the last finished pass up to now, None when there was none."""
    from sqlalchemy import func, select

    from spc.records.sessions import reading
    from spc.records.stamps import from_us, to_us
    from spc.records.tables import passes

    with reading(session.engine) as connection:
        newest = connection.scalar(
            select(func.max(passes.c.as_of_us)).where(
                passes.c.finished == 1, passes.c.as_of_us <= to_us(clock.now())
            )
        )
    return None if newest is None else from_us(newest, UTC)


def carrier(session: Session):  # type: ignore[no-untyped-def]
    """How the mail of this bay leaves."""
    from reports.smtp import Carrier
    from spc.records.sessions import secret

    mail = session.bay.settings.mail
    ca_file = None if mail.ca_file is None else session.bay.path(mail.ca_file)
    settings = mail.model_copy(update={"ca_file": ca_file})
    password = secret("YELLOWBAY_SMTP_PASSWORD")
    return Carrier(settings, session.bay.path(mail.folder), password)


def _take_in(
    session: Session, as_of: datetime, stop: Callable[[], bool], progress: Progress
) -> IngestReport:
    from ingest.load import take_in

    def show(done: int, total: int, what: str) -> None:
        progress(what, done, total)

    return take_in(session.engine, session.bay, as_of, stop=stop, progress=show)


def _tell_waiting() -> None:
    _LOG.warning("another pass is running; waiting for it to end")


def _stopped(as_of: datetime, intake: IngestReport) -> Night:
    """Asked to stop between two files: what is in stays in, the next pass goes on from there."""
    document = {
        "as_of": as_of.isoformat(),
        "drops": intake.drops,
        "readings": intake.readings,
        "stopped": True,
    }
    return Night(document, "Stopped after the file in hand; the next pass goes on from there.")


def _record_pass(connection: Connection, as_of: datetime, document: dict[str, Any]) -> None:
    from spc.records.stamps import to_us
    from spc.records.tables import passes

    stamp = to_us(as_of)
    connection.execute(passes.delete().where(passes.c.as_of_us == stamp))
    connection.execute(
        passes.insert().values(
            as_of_us=stamp,
            finished=1,
            result=json.dumps(document, ensure_ascii=False, sort_keys=True),
            report=document["report"],
        )
    )

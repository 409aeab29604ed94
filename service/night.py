"""The one pass, step by step, under its lock.

Drop files -> records -> points and signals -> excursions -> the report -> the outbox -> mail.
Each step can be run again without harm: what was done is found done. Each file lands in a
transaction of its own; points and excursions land in one; the record of the pass and the messages
land in one, after which only sending is left. A pass is recorded when it begins, so that one that
dies is seen by the next one, which completes its work (`_make_good`).
"""

from __future__ import annotations

import logging
from collections.abc import Callable
from dataclasses import dataclass, field
from datetime import UTC, datetime
from typing import TYPE_CHECKING, Any

from service import clock
from service.lock import pass_lock
from service.retention import Retained, at_the_end_of_a_night, run_retention
from spc.records import passes
from spc.records.sessions import reading
from spc.records.stamps import from_us, to_us

if TYPE_CHECKING:
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
    retention_errors: tuple[str, ...] = field(default=())

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
    tell: bool = True,
) -> Night:
    """Run one pass with the given clock.

    Without `tell` no page is written and nothing is mailed: for proofs of what triage finds.

    Raises
    ------
    service.lock.BusyError
        When another pass holds the lock for longer than `wait_seconds`.
    """
    from reports.outbox import send_due

    stamp = to_us(as_of)
    with pass_lock(session.engine, wait_seconds, waiting=_tell_waiting):
        _make_good(session, stamp, progress)
        with session.engine.begin() as connection:
            passes.begin(connection, stamp)
        intake = _take_in(session, as_of, stop, progress)
        _LOG.info("taken in", extra={**intake.drops, "readings": intake.readings["loaded"]})
        if intake.stopped:
            return _stopped(as_of, intake)
        document = {
            "as_of": as_of.astimezone(session.bay.settings.bay.zone).isoformat(),
            "drops": intake.drops,
            "readings": intake.readings,
        }
        account = _judge(session, as_of, document, progress)
        if not tell:
            with session.engine.begin() as connection:
                passes.keep(connection, stamp, account, finished=True)
            return Night(document, "")
        written = _write(session, as_of, account, progress)
        document["report"] = account["report"]
        document["sentence"] = account["sentence"]
        delivery = send_due(session.engine, carrier(session), clock.now, stop=stop, every=True)
        document["mail"] = {
            "queued": written.queued,
            "sent": delivery.sent,
            "failed": delivery.failed,
        }
        retained = at_the_end_of_a_night(session, as_of, stop, progress)
        if retained is None:
            return Night(document, written.text, delivery.errors)
        document["retention"] = retained.as_json()
        return Night(document, written.text, delivery.errors, retained.failed)


def _judge(
    session: Session, as_of: datetime, document: dict[str, Any], progress: Progress
) -> dict[str, Any]:
    """Points, signals and excursions, in one transaction; completes the document of the pass.

    Returns the account of the night: the same, with the counts of all passes of this clock summed.
    A pass that died, or one run once more, leaves a page that tells the whole night all the same.
    """
    from spc.monitoring.evaluation import evaluate_in
    from spc.monitoring.expected import expected_tonight
    from spc.monitoring.triage import update_excursions

    stamp = to_us(as_of)
    with session.engine.begin() as connection:
        evaluation = evaluate_in(connection, session.bay, as_of, progress)
        _LOG.info(
            "evaluated",
            extra={"points": evaluation.points_evaluated, "streams": evaluation.streams},
        )
        changes = update_excursions(
            connection,
            session.bay,
            as_of,
            progress,
            new_points=bool(evaluation.touched or evaluation.points_evaluated),
        )
        _LOG.info("triaged", extra={"opened": changes.opened, "updated": changes.updated})
        document |= {
            "streams": evaluation.streams,
            "points_evaluated": evaluation.points_evaluated,
            "signals": evaluation.signals,
            "expected_false_signals": expected_tonight(connection, session.bay, as_of),
            "excursions": {
                "opened": changes.opened,
                "updated": changes.updated,
                "open": changes.n_open,
            },
        }
        before, intake = passes.account_of(connection, stamp), passes.intake_of(connection, stamp)
        waiting = {"waiting": document["drops"]["waiting"]}
        account = {**document, "drops": intake["drops"] | waiting, "readings": intake["readings"]}
        if stamp >= (passes.newest(connection) or 0):  # a pass that looks back counts afresh
            for count in ("points_evaluated", "signals"):
                account[count] += before.get(count, 0)
        passes.keep(connection, stamp, account)
    return account


@dataclass(frozen=True)
class _Written:
    text: str
    queued: int


def _write(
    session: Session, as_of: datetime, account: dict[str, Any], progress: Progress
) -> _Written:
    """The page, the record of the pass and the mails; completes the account of the night."""
    from reports.outbox import queue
    from service.pages import write_index, write_night

    progress("writing the report", 0, 1)
    with session.engine.begin() as connection:
        report = write_night(connection, session, as_of, account)
        queued = queue(connection, report.messages, as_of)
        account["report"] = str(report.file)
        passes.keep(connection, to_us(as_of), account, finished=True)
    write_index(session, as_of)
    return _Written(report.text, queued)


def _make_good(session: Session, stamp: int, progress: Progress) -> None:
    """Complete what an earlier pass left when it died.

    One that had its excursions gets its page and its mails, or nobody would hear of what it
    opened. What one had only taken in becomes part of the pass that begins.
    """
    with reading(session.engine) as connection:
        dead = [one for one in passes.left_over(connection) if one.as_of_us != stamp]
    for one in dead:
        _LOG.warning("a pass died; its work is completed", extra={"as_of_us": one.as_of_us})
        if not one.account:
            with session.engine.begin() as connection:
                passes.take_over(connection, one.as_of_us, stamp)
            continue
        try:
            _write(session, from_us(one.as_of_us, UTC), one.account, progress)
        except OSError:
            raise
        except Exception as error:
            # What cannot be told of an old night must not keep tonight from being told.
            _LOG.error("its page cannot be written", extra={"reason": str(error)}, exc_info=error)


def take_in_drops(session: Session, as_of: datetime, progress: Progress = _silent) -> IngestReport:
    """Only the first step of the pass; on PostgreSQL several workers share it, file by file."""
    with pass_lock(session.engine, 600.0, shared=True, waiting=_tell_waiting):
        return _take_in(session, as_of, _never, progress)


def run_retention_alone(
    session: Session, as_of: datetime, progress: Progress = _silent
) -> Retained:
    """Only the last step of the pass, under the same lock and without its limit of time."""
    with pass_lock(session.engine, 600.0, waiting=_tell_waiting):
        return run_retention(session, as_of, minutes=None, progress=progress)


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
    with reading(session.engine) as connection:
        newest = passes.last_before(connection, to_us(clock.now()) + 1)
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

    return take_in(session.engine, session.bay, as_of, now=clock.now(), stop=stop, progress=show)


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

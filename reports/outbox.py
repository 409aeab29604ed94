"""The outbox: messages wait in the database until a server has taken them.

A message is queued in the same transaction as the record of the report it belongs to, and is
known by its Message-ID: queuing it again does nothing, so a night is never mailed twice.

What a crash can do: between the moment the server has said yes and the moment we have written
that down, a kill leaves the message in state `sending`. It is then sent again, with the same
Message-ID (most mail systems show such a pair once): a mail that may come twice is better than
one that never comes. Files kept in a folder replace themselves and cannot double.
"""

from __future__ import annotations

import hashlib
import logging
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta

from sqlalchemy import Connection, Engine, func, select, update

from reports.smtp import Carrier, MailError, MailRefusedError
from spc.records.sessions import reading
from spc.records.stamps import to_us
from spc.records.tables import outbox

_LOG = logging.getLogger("yellowbay.mail")

# 1, 2, 4 … minutes between tries, at most 4 hours, for about three days.
FIRST_WAIT = timedelta(minutes=1)
LONGEST_WAIT = timedelta(hours=4)
MOST_ATTEMPTS = 25


@dataclass(frozen=True)
class Outgoing:
    """One message for one recipient."""

    message_id: str
    recipient: str
    subject: str
    content: bytes


@dataclass(frozen=True)
class Delivery:
    """What one round of sending did."""

    sent: int = 0
    failed: int = 0
    errors: tuple[str, ...] = ()


def queue(connection: Connection, messages: Sequence[Outgoing], as_of: datetime) -> int:
    """Queue messages that are not known yet; returns how many were new.

    Runs in the caller's transaction.
    """
    known = set(
        connection.scalars(
            select(outbox.c.message_id).where(
                outbox.c.message_id.in_([m.message_id for m in messages])
            )
        )
    )
    fresh = [m for m in messages if m.message_id not in known]
    if fresh:
        connection.execute(
            outbox.insert(),
            [
                {
                    "message_id": m.message_id,
                    "as_of_us": to_us(as_of),
                    "recipient": m.recipient,
                    "subject": m.subject,
                    "message": m.content,
                    "state": "queued",
                    "attempts": 0,
                    "next_try_us": 0,
                }
                for m in fresh
            ],
        )
    return len(fresh)


def wait_after(attempts: int) -> timedelta:
    """How long to wait after that many failed tries."""
    return min(FIRST_WAIT * 2 ** min(attempts - 1, 20), LONGEST_WAIT)


def send_due(
    engine: Engine,
    carrier: Carrier,
    now: Callable[[], datetime],
    *,
    stop: Callable[[], bool] = lambda: False,
    every: bool = False,
) -> Delivery:
    """Send what is due.

    Parameters
    ----------
    now : the clock; asked before each message.
    stop : asked before each message; true ends the round.
    every : also those whose next try is later (a pass tries everything once).
    """
    sent, failed, errors = 0, 0, []
    with reading(engine) as connection:
        due = select(outbox.c.id).where(outbox.c.state.in_(("queued", "sending")))
        if not every:
            due = due.where(outbox.c.next_try_us <= to_us(now()))
        ids = list(connection.scalars(due.order_by(outbox.c.id)))
    for row_id in ids:
        if stop():
            break
        error = _send_one(engine, carrier, row_id, now())
        if error is None:
            sent += 1
        else:
            failed += 1
            errors.append(error)
    return Delivery(sent, failed, tuple(dict.fromkeys(errors)))


def _send_one(engine: Engine, carrier: Carrier, row_id: int, now: datetime) -> str | None:
    with engine.begin() as connection:
        connection.execute(update(outbox).where(outbox.c.id == row_id).values(state="sending"))
        row = connection.execute(select(outbox).where(outbox.c.id == row_id)).one()
    error: MailError | None = None
    try:
        carrier.deliver(row.message, row.recipient, file_name(row.message_id))
        values: dict[str, object] = {"state": "sent", "sent_us": to_us(now), "last_error": None}
        _LOG.info("mail sent", extra={"recipient": row.recipient, "message_id": row.message_id})
    except MailError as failure:
        error = failure
        attempts = row.attempts + 1
        final = isinstance(failure, MailRefusedError) or attempts >= MOST_ATTEMPTS
        values = {
            "state": "failed" if final else "queued",
            "attempts": attempts,
            "next_try_us": to_us(now + wait_after(attempts)),
            "last_error": str(failure),
        }
        # Information only: whoever asked gets the error back and says it, once.
        _LOG.info(
            "mail not sent",
            extra={"recipient": row.recipient, "reason": str(failure), "final": final},
        )
    with engine.begin() as connection:
        connection.execute(update(outbox).where(outbox.c.id == row_id).values(**values))
    return None if error is None else str(error)


def file_name(message_id: str) -> str:
    """File name of a kept message: the local part where it is plain, else a digest of the ID."""
    local = message_id.strip("<>").split("@")[0]
    if local and all(c.isalnum() or c in "-._" for c in local) and not local.startswith("."):
        return local[:120]
    return hashlib.sha256(message_id.encode()).hexdigest()[:32]


def states(connection: Connection) -> dict[str, int]:
    """How many messages are in each state."""
    rows = connection.execute(select(outbox.c.state, func.count()).group_by(outbox.c.state))
    return {state: int(count) for state, count in rows}


def trouble(connection: Connection) -> str | None:
    """Last error of the messages that were not delivered yet, None when there is none."""
    return connection.scalar(
        select(outbox.c.last_error)
        .where(outbox.c.last_error.is_not(None), outbox.c.state != "sent")
        .order_by(outbox.c.id.desc())
        .limit(1)
    )

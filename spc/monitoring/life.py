"""The life of an excursion by hand: contain, close, reopen, comment, merge, split.

Every act is kept with name, stamp and text; nothing is taken away.
"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import datetime
from typing import Any

from sqlalchemy import Connection

from spc.records import actions, findings

CLOSINGS = ("cause-found", "false-alarm", "no-cause-found")


class NotPossibleError(ValueError):
    """The act does not fit the state the excursion is in."""


@dataclass(frozen=True)
class Hand:
    """Who acts, and when."""

    who: str
    at: datetime


def comment(connection: Connection, number: int, hand: Hand, text: str) -> None:
    """Say something about an excursion. Raises UnknownExcursionError, NotPossibleError."""
    findings.one(connection, number)
    _need_text(text)
    _record(connection, number, hand, "comment", text)


def contain(connection: Connection, number: int, hand: Hand, text: str = "") -> None:
    """The harm is stopped (lots held, tool taken down), the cause is not yet mended."""
    known = findings.one(connection, number)
    if known.status != "open":
        raise NotPossibleError(
            f"excursion {number} is {known.status}, only an open one is contained"
        )
    findings.set_status(connection, number, "contained")
    _record(connection, number, hand, "contain", text)


def close(
    connection: Connection, number: int, hand: Hand, outcome: str, cause: str = "", text: str = ""
) -> None:
    """Close: with the cause found, as a false alarm, or without a cause.

    Raises NotPossibleError when it is closed already, or a found cause is not named.
    """
    known = findings.one(connection, number)
    if outcome not in CLOSINGS:
        raise NotPossibleError(f"{outcome!r} is no way to close; one of {', '.join(CLOSINGS)}")
    if known.status == "closed":
        raise NotPossibleError(f"excursion {number} is closed already; reopen it first")
    if outcome == "cause-found" and not cause.strip():
        raise NotPossibleError("say what the cause was, in words")
    findings.set_status(connection, number, "closed")
    detail = {"outcome": outcome, "cause": cause.strip()}
    _record(connection, number, hand, "close", text, detail)


def reopen(connection: Connection, number: int, hand: Hand, text: str = "") -> None:
    """Open a closed or contained excursion again."""
    known = findings.one(connection, number)
    if known.status == "open":
        raise NotPossibleError(f"excursion {number} is open already")
    findings.set_status(connection, number, "open")
    _record(connection, number, hand, "reopen", text)


def merge(connection: Connection, number: int, into: int, hand: Hand, text: str = "") -> None:
    """Two excursions are one thing: `number` is shown as part of `into` from now on."""
    part, whole = findings.one(connection, number), findings.one(connection, into)
    if part.id == whole.id:
        raise NotPossibleError("an excursion cannot be merged into itself")
    if part.merged_into is not None:
        raise NotPossibleError(f"excursion {number} is part of {part.merged_into} already")
    if whole.merged_into is not None:
        raise NotPossibleError(f"excursion {into} is itself part of {whole.merged_into}")
    findings.set_merged(connection, number, into)
    _record(connection, number, hand, "merge", text, {"into": into})
    _record(connection, into, hand, "merge", text, {"from": number})


def split(
    connection: Connection, number: int, hand: Hand, streams: list[int], text: str = ""
) -> int:
    """Take streams (numbers in the excursion's list, from 1) out into an excursion of their own.

    Returns the id of the new excursion. A merged one is simply its own again.
    """
    known = findings.one(connection, number)
    if known.merged_into is not None and not streams:
        findings.set_merged(connection, number, None)
        _record(connection, number, hand, "split", text, {"from": known.merged_into})
        return number
    listed = known.payload.get("streams", [])
    wanted = sorted(set(streams))
    if not wanted or wanted[0] < 1 or wanted[-1] > len(listed) or len(wanted) == len(listed):
        raise NotPossibleError(
            f"excursion {number} has streams 1 to {len(listed)}; name some of them, not all"
        )
    gone = [listed[i - 1] for i in wanted]
    stays = [s for i, s in enumerate(listed, 1) if i not in wanted]
    new = findings.opened(
        connection,
        tier=known.tier,
        pattern=known.pattern,
        identity=f"{known.identity}#split",
        as_of=hand.at,
        payload={**known.payload, "streams": gone},
    )
    findings.updated(
        connection,
        known,
        tier=known.tier,
        pattern=known.pattern,
        as_of=hand.at,
        payload={
            **known.payload,
            "streams": stays,
            "split_out": [
                *known.payload.get("split_out", []),
                *(findings.stream_key(s) for s in gone),
            ],
        },
    )
    _record(connection, number, hand, "split", text, {"into": new})
    _record(connection, new, hand, "split", text, {"from": number})
    return new


def _need_text(text: str) -> None:
    if not text.strip():
        raise NotPossibleError("a comment needs words")


def _record(
    connection: Connection,
    number: int,
    hand: Hand,
    action: str,
    text: str,
    detail: dict[str, Any] | None = None,
) -> None:
    subject = findings.subject(number)
    actions.append(connection, actions.Action(hand.at, hand.who, subject, action, text, detail))

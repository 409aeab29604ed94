"""The record of what people did: append-only, each row chained to the one before it by a hash.

A row's hash is the SHA-256 over its own fields and the hash of the row before. Changing, removing
or slipping in a row later breaks the chain from there on, and `verify` says where. What a chain
cannot show is the loss of its newest rows: keep the newest hash elsewhere (the morning mail
carries it) to see that too.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Any

from sqlalchemy import Connection, Row, select

from spc.records.stamps import to_us
from spc.records.tables import actions

START = "0" * 64


@dataclass(frozen=True)
class Action:
    """What one person did to one thing."""

    at: datetime
    who: str
    subject: str
    action: str
    text: str = ""
    detail: dict[str, Any] | None = None


def append(connection: Connection, action: Action) -> int:
    """Add an action at the end of the chain, in the caller's transaction; returns its id."""
    if connection.dialect.name == "postgresql":
        # Two writers must not chain to the same row; SQLite has only one writer anyway.
        connection.exec_driver_sql("LOCK TABLE actions IN SHARE ROW EXCLUSIVE MODE")
    last = connection.scalar(select(actions.c.hash).order_by(actions.c.id.desc()).limit(1))
    detail = json.dumps(action.detail or {}, sort_keys=True, ensure_ascii=False)
    fields = (
        to_us(action.at),
        action.who,
        action.subject,
        action.action,
        action.text,
        detail,
        last or START,
    )
    key = connection.execute(
        actions.insert().values(
            at_us=fields[0],
            who=action.who,
            subject=action.subject,
            action=action.action,
            text=action.text,
            detail=detail,
            previous_hash=fields[6],
            hash=_digest(fields),
        )
    ).inserted_primary_key
    assert key is not None  # an insert of one row has a key
    return int(key[0])


def of(connection: Connection, subject: str) -> Sequence[Row[Any]]:
    """Actions on one subject, oldest first."""
    return connection.execute(
        select(actions).where(actions.c.subject == subject).order_by(actions.c.id)
    ).all()


@dataclass(frozen=True)
class Verdict:
    """Result of checking the chain: how many rows, and the first one that does not fit."""

    rows: int
    newest_hash: str
    broken_at: int | None
    reason: str | None


def verify(connection: Connection) -> Verdict:
    """Check the whole chain."""
    previous, count = START, 0
    for row in connection.execute(select(actions).order_by(actions.c.id)):
        fields = (
            row.at_us,
            row.who,
            row.subject,
            row.action,
            row.text,
            row.detail,
            row.previous_hash,
        )
        if row.previous_hash != previous:
            return Verdict(count, previous, row.id, "does not follow the row before it")
        if row.hash != _digest(fields):
            return Verdict(count, previous, row.id, "was changed after it was written")
        previous, count = row.hash, count + 1
    return Verdict(count, previous, None, None)


def _digest(fields: tuple[Any, ...]) -> str:
    return hashlib.sha256(json.dumps(fields, ensure_ascii=False).encode()).hexdigest()

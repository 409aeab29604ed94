"""The excursions in the database: reading, opening, updating, and their life by hand."""

from __future__ import annotations

import json
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from datetime import datetime, tzinfo
from typing import Any

from sqlalchemy import Connection, Row, func, select, update

from spc.records import actions as action_records
from spc.records.stamps import from_us, iso, to_us
from spc.records.tables import excursion_history, excursions

# What only the triage of the next night needs.
PRIVATE = frozenset({"engine", "split_out"})
STATUSES = ("open", "contained", "closed")


class UnknownExcursionError(LookupError):
    """There is no excursion of that number."""


@dataclass(frozen=True)
class Excursion:
    """One thing that happened. `payload` holds the rest of the contract's JSON, stamps in us."""

    id: int
    status: str
    tier: str
    pattern: str
    identity: str
    opened_us: int
    updated_us: int
    merged_into: int | None
    payload: dict[str, Any]


def listed(
    connection: Connection,
    *,
    statuses: Iterable[str] | None = None,
    merged: bool = False,
    until: datetime | None = None,
) -> list[Excursion]:
    """Excursions, newest first; those merged into another one only on request.

    `until` leaves out what was opened by a pass of a later clock.
    """
    query = select(excursions).order_by(excursions.c.opened_us.desc(), excursions.c.id.desc())
    if statuses is not None:
        query = query.where(excursions.c.status.in_(tuple(statuses)))
    if until is not None:
        query = query.where(excursions.c.opened_us <= to_us(until))
    if not merged:
        query = query.where(excursions.c.merged_into.is_(None))
    return [_excursion(row) for row in connection.execute(query)]


def one(connection: Connection, number: int) -> Excursion:
    """One excursion.

    Raises UnknownExcursionError.
    """
    row = connection.execute(select(excursions).where(excursions.c.id == number)).one_or_none()
    if row is None:
        raise UnknownExcursionError(f"there is no excursion {number}; `yellowbay excursions`")
    return _excursion(row)


def opened(
    connection: Connection,
    *,
    tier: str,
    pattern: str,
    identity: str,
    as_of: datetime,
    payload: dict[str, Any],
) -> int:
    """Open a new excursion; returns its id."""
    stamp = to_us(as_of)
    key = connection.execute(
        excursions.insert().values(
            status="open",
            tier=tier,
            pattern=pattern,
            identity=identity,
            opened_us=stamp,
            updated_us=stamp,
            payload=_dump(payload),
        )
    ).inserted_primary_key
    assert key is not None  # an insert of one row has a key
    number = int(key[0])
    _remember(connection, number, stamp, "opened", tier, pattern, payload)
    return number


def updated(
    connection: Connection,
    known: Excursion,
    *,
    tier: str,
    pattern: str,
    as_of: datetime,
    payload: dict[str, Any],
) -> bool:
    """Write what is known now; returns whether anything is different from before."""
    stamp = to_us(as_of)
    if (tier, pattern, _dump(payload)) == (known.tier, known.pattern, _dump(known.payload)):
        return False
    connection.execute(
        update(excursions)
        .where(excursions.c.id == known.id)
        .values(tier=tier, pattern=pattern, updated_us=stamp, payload=_dump(payload))
    )
    change = "opened" if known.opened_us == stamp else "updated"
    _remember(connection, known.id, stamp, change, tier, pattern, payload)
    return True


def set_status(connection: Connection, number: int, status: str) -> None:
    """Change the status; the caller records who did it and why."""
    connection.execute(update(excursions).where(excursions.c.id == number).values(status=status))


def set_merged(connection: Connection, number: int, into: int | None) -> None:
    """Mark an excursion as part of another one, or as its own again."""
    connection.execute(update(excursions).where(excursions.c.id == number).values(merged_into=into))


def count_open(connection: Connection) -> int:
    """How many are open or contained."""
    asked = select(func.count()).where(
        excursions.c.status.in_(("open", "contained")), excursions.c.merged_into.is_(None)
    )
    return int(connection.scalar(asked) or 0)


def history(connection: Connection, number: int) -> Sequence[Row[Any]]:
    """Every state the excursion was in, oldest first."""
    return connection.execute(
        select(excursion_history)
        .where(excursion_history.c.excursion_id == number)
        .order_by(excursion_history.c.as_of_us)
    ).all()


def changed_at(connection: Connection, as_of: datetime) -> dict[str, list[int]]:
    """Ids of what the pass of that clock opened and updated."""
    changes: dict[str, list[int]] = {"opened": [], "updated": []}
    rows = connection.execute(
        select(excursion_history.c.excursion_id, excursion_history.c.change)
        .where(excursion_history.c.as_of_us == to_us(as_of))
        .order_by(excursion_history.c.excursion_id)
    )
    for number, change in rows:
        changes[change].append(int(number))
    return changes


def as_contract(excursion: Excursion, zone: tzinfo) -> dict[str, Any]:
    """The contract's JSON of one excursion, stamps in the zone given."""
    head = {
        "id": excursion.id,
        "status": excursion.status,
        "tier": excursion.tier,
        "opened_at": iso(excursion.opened_us, zone),
        "updated_at": iso(excursion.updated_us, zone),
        "pattern": excursion.pattern,
    }
    public = {k: v for k, v in excursion.payload.items() if k not in PRIVATE}
    return {**head, **_stamped(public, zone)}


def actions_on(connection: Connection, number: int, zone: tzinfo) -> list[dict[str, Any]]:
    """What people did with an excursion, oldest first."""
    return [
        {
            "at": iso(row.at_us, zone),
            "who": row.who,
            "action": row.action,
            "text": row.text,
            **json.loads(row.detail),
        }
        for row in action_records.of(connection, subject(number))
    ]


def subject(number: int) -> str:
    """Name of an excursion in the record of actions."""
    return f"excursion:{number}"


def stream_key(stream: dict[str, Any], *, statistic: bool = True) -> str:
    """Text that names a stream of a payload, with or without its statistic."""
    parts = [stream["characteristic"], json.dumps(stream["context"], sort_keys=True)]
    return "|".join([*parts, stream["statistic"]] if statistic else parts)


def _stamped(value: Any, zone: tzinfo) -> Any:
    """Replace `<name>_us` by `<name>` with an ISO stamp, at any depth."""
    if isinstance(value, dict):
        return {
            key.removesuffix("_us"): iso(item, zone)
            if key.endswith("_us")
            else _stamped(item, zone)
            for key, item in value.items()
        }
    if isinstance(value, list):
        return [_stamped(item, zone) for item in value]
    return value


def _remember(
    connection: Connection,
    number: int,
    stamp: int,
    change: str,
    tier: str,
    pattern: str,
    payload: dict[str, Any],
) -> None:
    where = (excursion_history.c.excursion_id == number) & (excursion_history.c.as_of_us == stamp)
    connection.execute(excursion_history.delete().where(where))
    connection.execute(
        excursion_history.insert().values(
            excursion_id=number,
            as_of_us=stamp,
            change=change,
            tier=tier,
            pattern=pattern,
            payload=_dump(payload),
        )
    )


def _dump(payload: dict[str, Any]) -> str:
    return json.dumps(payload, sort_keys=True, ensure_ascii=False, allow_nan=False)


def _excursion(row: Row[Any]) -> Excursion:
    return Excursion(
        id=row.id,
        status=row.status,
        tier=row.tier,
        pattern=row.pattern,
        identity=row.identity,
        opened_us=row.opened_us,
        updated_us=row.updated_us,
        merged_into=row.merged_into,
        payload=json.loads(row.payload),
    )


def opened_at(excursion: Excursion, zone: tzinfo) -> datetime:
    """When it was opened, in the zone given."""
    return from_us(excursion.opened_us, zone)

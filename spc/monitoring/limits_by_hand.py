"""Limits that people decide on: proposed from a window of points, approved, withdrawn.

A set that is approved takes the place of the automatic limits of its stream from its stamp on, at
the next evaluation. Every set stays in the records with who, when and why; every act goes to the
chained actions as well.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime, tzinfo
from typing import Any

import numpy as np
from sqlalchemy import Connection, Row

from config.control_plan import Characteristic
from config.load import Bay
from spc.monitoring.baselines import Maker, limit_set
from spc.monitoring.grouping import PointGroups, group_points
from spc.monitoring.life import Hand, NotPossibleError
from spc.monitoring.limit_sets import APPROVED, AUTOMATIC, PROPOSED, WITHDRAWN, LimitSet
from spc.monitoring.point_limits import PointSizes, limits_of
from spc.monitoring.update import Update
from spc.records import actions, evaluations, limits, series
from spc.records.actions import Action
from spc.records.columns import order_of
from spc.records.stamps import iso, to_us

FEWEST_POINTS = 5


@dataclass(frozen=True)
class Window:
    """Points that limits are proposed from.

    context : stream columns and their texts; only streams that have them all. Empty: all streams.
    first, last : stamps of the points, both ends in; None: the newest `baseline_points` points.
    holds_from : first stamp that the limits hold for once approved; None: the first of the window.
    """

    context: Mapping[str, str]
    first: datetime | None = None
    last: datetime | None = None
    holds_from: datetime | None = None


def propose(
    connection: Connection, bay: Bay, characteristic: str, window: Window, hand: Hand, reason: str
) -> list[int]:
    """Estimate limits from a window of points, for one stream or several; returns their ids.

    Raises
    ------
    NotPossibleError
        When there is no such characteristic or stream, the plan was not evaluated yet, or a
        stream has fewer than five points in the window.
    """
    one = _characteristic(bay, characteristic)
    _need(hand.who, "say who proposes the limits")
    _need(reason, "say why the limits are proposed")
    kept = evaluations.all_kept(connection).get(one.name)
    if kept is None:
        raise NotPossibleError(f"{one.name!r} was not evaluated yet: run `yellowbay nightly` first")
    known = series.stream_ids(connection, one.name)
    wanted = {i: key for key, i in known.items() if _has(key, window.context)}
    if not wanted:
        raise NotPossibleError(f"{one.name!r} has no stream with {_said(window.context)}")
    update = Update(connection, bay, kept[1])
    lots = series.lots_between(connection, wanted, _us(window.first), _us(window.last))
    wafers, ids = update.read(one, lots)
    groups = group_points(wafers.table, one.point)
    chosen = _chosen(one, groups, np.isin(ids, list(wanted)), window)
    counts = np.bincount(groups.table["stream"][chosen], minlength=len(ids))
    for code in np.flatnonzero(np.isin(ids, list(wanted))):
        if counts[code] < FEWEST_POINTS:
            raise NotPossibleError(
                f"stream {wafers.keys[code]} has {counts[code]} points in the window; limits need "
                f"at least {FEWEST_POINTS}"
            )
    if not counts.any():
        raise NotPossibleError("there are no points in the window")
    maker = Maker(connection, one, bay.settings.bay.wafer_radius_mm, kept[1].as_of_us)
    payloads, spans = maker.payloads(wafers, groups, chosen)
    return [
        _keep(connection, int(ids[code]), payload, spans[code], window, hand, reason)
        for code, payload in payloads.items()
    ]


def _keep(
    connection: Connection,
    stream: int,
    payload: str,
    span: tuple[int, int, int],
    window: Window,
    hand: Hand,
    reason: str,
) -> int:
    first, last, count = span
    new = limits.NewSet(
        stream_id=stream,
        status=PROPOSED,
        from_us=first if window.holds_from is None else to_us(window.holds_from),
        first_us=first,
        last_us=last,
        n_points=count,
        payload=payload,
        made_us=to_us(hand.at),
        made_by=hand.who,
        reason=reason,
    )
    number = limits.add(connection, new)
    _record(connection, number, hand, "propose", reason, {"stream": stream})
    return number


def _chosen(one: Characteristic, groups: PointGroups, wanted: Any, window: Window) -> Any:
    """Points of the wanted streams in the window."""
    table = groups.table
    stream, at = (table[name] for name in ("stream", "at_us"))
    chosen = wanted[stream]
    if window.first is not None:
        chosen = chosen & (at >= to_us(window.first))
    if window.last is not None:
        chosen = chosen & (at <= to_us(window.last))
    if window.first is None:
        order = order_of([stream, at, table["lot"]])[::-1]
        order = order[chosen[order]]
        rank = np.zeros(len(table), np.int64)
        start = np.r_[True, stream[order][1:] != stream[order][:-1]] if order.size else []
        position = np.arange(order.size)
        rank[order] = position - np.maximum.accumulate(np.where(start, position, 0))
        chosen = chosen & (rank < one.baseline_points)
    return chosen


def approve(
    connection: Connection,
    number: int,
    hand: Hand,
    reason: str,
    holds_from: datetime | None = None,
) -> None:
    """Put a proposed set in force; `holds_from` overrides the stamp of the proposal.

    Raises NotPossibleError when there is no such set or it is not a proposal.
    """
    row = _row(connection, number)
    _need(hand.who, "say who approves the limits")
    _need(reason, "say why the limits are approved")
    if row.status != PROPOSED:
        raise NotPossibleError(f"limits {number} are {row.status}, only proposed ones are approved")
    if holds_from is not None:
        limits.set_from(connection, number, to_us(holds_from))
    limits.decide(connection, number, APPROVED, hand.at, hand.who, reason)
    detail = {"from_us": row.from_us if holds_from is None else to_us(holds_from)}
    _record(connection, number, hand, "approve", reason, detail)


def withdraw(connection: Connection, number: int, hand: Hand, reason: str) -> None:
    """Take a proposed or approved set out of force; what held before it holds again.

    Raises NotPossibleError when there is no such set, it is withdrawn, or it is automatic.
    """
    row = _row(connection, number)
    _need(hand.who, "say who withdraws the limits")
    _need(reason, "say why the limits are withdrawn")
    if row.status == WITHDRAWN:
        raise NotPossibleError(f"limits {number} are withdrawn already")
    if row.status == AUTOMATIC:
        raise NotPossibleError(
            f"limits {number} were set by the first points of the stream; approve others instead"
        )
    limits.decide(connection, number, WITHDRAWN, hand.at, hand.who, reason)
    _record(connection, number, hand, "withdraw", reason, {})


def listed(
    connection: Connection,
    bay: Bay,
    characteristic: str | None = None,
    statuses: Sequence[str] | None = None,
) -> list[dict[str, Any]]:
    """Sets of limits as documents, by characteristic, stream and age."""
    chosen = [characteristic] if characteristic else [c.name for c in bay.plan.characteristic]
    wanted = statuses or (AUTOMATIC, PROPOSED, APPROVED, WITHDRAWN)
    out = []
    for name in chosen:
        one = _characteristic(bay, name)
        keys = {i: key for key, i in series.stream_ids(connection, name).items()}
        for row in limits.of_characteristic(connection, name, wanted):
            out.append(_document(bay, one, keys[row.stream_id], limit_set(row)))
    return out


def shown(connection: Connection, bay: Bay, number: int) -> dict[str, Any]:
    """One set in full: the document of `listed`, its payload and what was done to it.

    Raises NotPossibleError when there is no such set, or its characteristic left the plan.
    """
    found = limit_set(_row(connection, number))
    name, context = limits.stream_of(connection, found.stream_id)
    zone = bay.settings.bay.zone
    done = [
        {"at": iso(a.at_us, zone), "who": a.who, "action": a.action, "text": a.text}
        for a in actions.of(connection, f"baseline:{number}")
    ]
    document = _document(bay, _characteristic(bay, name), context, found)
    return document | {"payload": dict(found.payload), "actions": done}


def _document(bay: Bay, one: Characteristic, context: str, found: LimitSet) -> dict[str, Any]:
    import json

    zone: tzinfo = bay.settings.bay.zone
    return {
        "id": found.id,
        "characteristic": one.name,
        "context": json.loads(context),
        "status": found.status,
        "from": iso(found.from_us, zone),
        "first": iso(found.first_us, zone),
        "last": iso(found.last_us, zone),
        "n_points": found.n_points,
        "limits": _usual_limits(one, found),
        "components": _components(found),
        "wild": [
            {**{k: w[k] for k in ("lot", "layer", "wafer", "statistic", "value", "reason")}}
            | {"at": iso(w["at_us"], zone)}
            for w in found.payload["wild"]
        ],
        "notes": list(found.payload["notes"]),
        "made_at": iso(found.made_us, zone),
        "made_by": found.made_by,
        "reason": found.reason,
        "decided_at": iso(found.decided_us, zone),
        "decided_by": found.decided_by,
        "decided_reason": found.decided_reason,
    }


def _components(found: LimitSet) -> dict[str, float] | None:
    kept = found.payload["components"]
    return None if kept is None else {name: kept[name] for name in ("lot", "wafer", "site")}


def _usual_limits(one: Characteristic, found: LimitSet) -> list[dict[str, Any]]:
    """Limits of each statistic at the usual sample size of the baseline."""
    counts = found.payload["components"]
    out = []
    for name in one.charted:
        entry = found.statistic(name)
        if entry is None:
            continue
        own = entry.get("components") or counts or {}
        lots = max(own.get("n_lots", 1), 1)
        wafers = max(round(own.get("n_wafers", 1) / lots), 1) if one.point == "lot" else 1
        sites = max(own.get("n_sites", 1) / max(own.get("n_wafers", 1), 1), 1.0)
        df = entry.get("df") or 1.0
        df = wafers - 1.0 if name == "wafer-to-wafer" else df / max(entry.get("n", 1), 1)
        one_point = np.ones(1)
        sizes = PointSizes(wafers * one_point, wafers * sites * one_point, df * one_point)
        if name == "map-distance":
            continue  # its limit follows the sites of each point alone
        row = limits_of(name, np.zeros(1), sizes, [entry], np.zeros(1, np.int64))
        out.append(
            {
                "statistic": name,
                "unit": one.unit_of(name),
                "center": _number(row["center"][0]),
                "lower_limit": _number(row["lower_limit"][0]),
                "upper_limit": _number(row["upper_limit"][0]),
                "sigma": _number(row["sigma"][0]),
                "n_wafers": wafers,
                "phi": entry.get("phi"),
                "correlated": bool(entry.get("correlated")),
            }
        )
    return out


def _number(value: float) -> float | None:
    return float(value) if np.isfinite(value) else None


def _characteristic(bay: Bay, name: str) -> Characteristic:
    one = bay.plan.named(name)
    if one is None:
        names = ", ".join(c.name for c in bay.plan.characteristic)
        raise NotPossibleError(f"no characteristic {name!r}; one of: {names}")
    return one


def _row(connection: Connection, number: int) -> Row[Any]:
    row = limits.one(connection, number)
    if row is None:
        raise NotPossibleError(f"there are no limits {number}; `yellowbay baseline list`")
    return row


def _record(
    connection: Connection, number: int, hand: Hand, action: str, text: str, detail: dict[str, Any]
) -> None:
    done = Action(hand.at, hand.who, f"baseline:{number}", action, text, detail)
    actions.append(connection, done)


def _need(text: str, complaint: str) -> None:
    if not text.strip():
        raise NotPossibleError(complaint)


def _has(key: str, context: Mapping[str, str]) -> bool:
    import json

    columns = json.loads(key)
    return all(columns.get(name) == value for name, value in context.items())


def _said(context: Mapping[str, str]) -> str:
    return ", ".join(f"{name}={value}" for name, value in context.items()) or "any context"


def _us(stamp: datetime | None) -> int | None:
    return None if stamp is None else to_us(stamp)

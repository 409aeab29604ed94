"""What an evaluation has to look at again: decided before anything heavy is loaded."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from dataclasses import dataclass

from sqlalchemy import Connection

from config.control_plan import Characteristic
from spc.records import limits
from spc.records.measurements import Changed, Marker

ENGINE = "yellowbay"  # who makes automatic sets of limits
POINTS_VERSION = 1  # raise it when the code makes other points of the same readings
_NO_HAND = "0" * 32


@dataclass(frozen=True)
class Work:
    """What to look at again of one characteristic.

    everything : the plan has changed or the clock went back: all is made anew.
    hand : limits were approved or withdrawn by hand: the streams that have such sets.
    lots : lots with new or changed rows (of any layer).
    """

    everything: bool = False
    hand: bool = False
    lots: frozenset[str] = frozenset()

    @property
    def anything(self) -> bool:
        """Whether there is work at all."""
        return self.everything or self.hand or bool(self.lots)


def plan_digest(one: Characteristic, wafer_radius_mm: float) -> str:
    """32 hexadecimal digits of all of the plan that shapes the points of a characteristic."""
    shape = [
        POINTS_VERSION,
        one.parameter,
        one.unit,
        sorted(one.where.items()),
        one.stream_by,
        one.point,
        one.charted,
        one.rules,
        one.baseline_points,
        one.lower_spec,
        one.upper_spec,
        wafer_radius_mm,
    ]
    return hashlib.sha256(json.dumps(shape).encode()).hexdigest()[:32]


def hand_digests(connection: Connection) -> dict[str, str]:
    """32 hexadecimal digits of the decisions by hand on the limits of each characteristic."""
    texts: dict[str, list[str]] = {}
    for row in limits.decided_by_hand(connection, ENGINE):
        text = f"{row.id} {row.stream_id} {row.status} {row.from_us}"
        texts.setdefault(row.characteristic, []).append(text)
    return {
        name: hashlib.sha256("\n".join(lines).encode()).hexdigest()[:32]
        for name, lines in texts.items()
    }


def digest_of(one: Characteristic, wafer_radius_mm: float, by_hand: Mapping[str, str]) -> str:
    """64 digits: the plan's and those of the decisions by hand."""
    return plan_digest(one, wafer_radius_mm) + by_hand.get(one.name, _NO_HAND)


def work_of(one: Characteristic, digest: str, known: tuple[str, Marker], changed: Changed) -> Work:
    """Work of a characteristic whose plan is as it was and whose clock went on."""
    layer = one.where.get("layer")

    def concerns(row_layer: str) -> bool:
        return layer is None or row_layer in (layer, "")

    lots = {
        lot
        for parameter, row_layer, lot in changed.readings
        if parameter in one.parameters and concerns(row_layer)
    }
    lots |= {lot for row_layer, lot in changed.log if concerns(row_layer)}
    return Work(hand=known[0][32:] != digest[32:], lots=frozenset(lots))

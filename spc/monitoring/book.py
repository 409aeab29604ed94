"""What triage writes: excursions opened and updated, and what it closes or merges by itself."""

from __future__ import annotations

from dataclasses import dataclass, field
from datetime import datetime
from typing import Any

from sqlalchemy import Connection

from config.load import Bay
from spc.records import actions, findings
from spc.records import passes as pass_records
from spc.records.findings import Excursion
from spc.records.stamps import to_us

DAY_US = 86_400_000_000
ENGINE = "yellowbay"  # who acts when the program closes or merges by itself
# The part of the alarm budget that one look for effects may spend. Looks of following nights share
# most of their data, so the rate of new false effects is well below that of one look alone.
EFFECT_SHARE = 1.0
QUIET_DAYS = 3  # a watched stream without a new signal for so long is closed


@dataclass
class Book:
    """The excursions of a bay as a pass of one clock sees and changes them."""

    connection: Connection
    bay: Bay
    as_of: datetime
    touched: set[int] = field(default_factory=set)

    def __post_init__(self) -> None:
        self.now_us = to_us(self.as_of)
        self.before_us = pass_records.last_before(self.connection, self.now_us)

    def has_new_files(self) -> bool:
        """Whether a file was taken in since the last pass: log rows alone touch lots at risk."""
        return pass_records.files_since(self.connection, self.before_us or 0)

    def known(self, *statuses: str, merged: bool = False) -> list[Excursion]:
        """Excursions opened up to the clock, of some statuses or all."""
        return findings.listed(
            self.connection, until=self.as_of, statuses=statuses or None, merged=merged
        )

    def open(self, tier: str, pattern: str, identity: str, payload: dict[str, Any]) -> int:
        """Open an excursion; returns its number."""
        number = findings.opened(
            self.connection,
            tier=tier,
            pattern=pattern,
            identity=identity,
            as_of=self.as_of,
            payload=payload,
        )
        self.touched.add(number)
        return number

    def update(self, one: Excursion, tier: str, pattern: str, payload: dict[str, Any]) -> None:
        """Write what is known now of an excursion that goes on."""
        # What was to act on stays so until a person closes it.
        tier = "act" if "act" in (tier, one.tier) else tier
        gone = one.payload.get("split_out", [])
        if gone:
            kept = [s for s in payload["streams"] if findings.stream_key(s) not in gone]
            payload = {**payload, "streams": kept, "split_out": gone}
        findings.updated(
            self.connection, one, tier=tier, pattern=pattern, as_of=self.as_of, payload=payload
        )

    def act(self, number: int, action: str, text: str, detail: dict[str, Any]) -> None:
        """Record what the program did by itself."""
        subject = findings.subject(number)
        actions.append(
            self.connection, actions.Action(self.as_of, ENGINE, subject, action, text, detail)
        )


def stream_keys(payload: dict[str, Any]) -> set[str]:
    """Names of the streams of an excursion, whatever the statistic."""
    return {findings.stream_key(s, statistic=False) for s in payload["streams"]}

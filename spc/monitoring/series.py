"""Plotted points as people and programs read them: the contract's `points`, and CSV."""

from __future__ import annotations

import csv
import io
import json
from datetime import tzinfo
from functools import lru_cache
from typing import Any

from sqlalchemy import Connection

from config.load import Bay
from spc.records import plotted
from spc.records.plotted import Wanted
from spc.records.stamps import iso

# What is written: the fields of the contract, then ours.
FIELDS = (
    "characteristic",
    "statistic",
    "context",
    "at",
    "lot",
    "wafer",
    "value",
    "n_wafers",
    "n_sites",
    "center",
    "lower_limit",
    "upper_limit",
    "sigma",
    "phase",
    "rules",
    "z",
    "measured_at",
    "processed_at",
    "layer",
    "unit",
)


class UnknownCharacteristicError(LookupError):
    """The control plan has no characteristic of that name."""


def points_json(
    connection: Connection,
    bay: Bay,
    characteristic: str,
    *,
    statistic: str | None = None,
    stream_id: int | None = None,
    since_us: int | None = None,
    until_us: int | None = None,
) -> list[dict[str, Any]]:
    """Points of a characteristic as of the last evaluation, as the contract lists them.

    Stamps are ISO 8601 in the bay's zone; `wafer` is None for the point of a lot; the limits are
    None where the stream has no baseline yet. Order: stream, statistic as in the plan, time.

    Raises
    ------
    UnknownCharacteristicError
    """
    one = bay.plan.named(characteristic)
    if one is None:
        names = ", ".join(c.name for c in bay.plan.characteristic)
        raise UnknownCharacteristicError(f"no characteristic {characteristic!r}; one of: {names}")
    wanted = Wanted(characteristic, statistic, stream_id, since_us, until_us)
    stamp = _stamps(bay.settings.bay.zone)
    contexts: dict[str, dict[str, str]] = {}
    out = []
    for row in plotted.rows(connection, wanted):
        if row.context not in contexts:
            contexts[row.context] = json.loads(row.context)
        out.append(
            {
                "characteristic": characteristic,
                "statistic": row.statistic,
                "context": contexts[row.context],
                "at": stamp(row.at_us),
                "lot": row.lot,
                "wafer": row.wafer or None,
                "value": row.value,
                "n_wafers": row.n_wafers,
                "n_sites": row.n_sites,
                "center": row.center,
                "lower_limit": row.lower_limit,
                "upper_limit": row.upper_limit,
                "sigma": row.sigma,
                "phase": row.phase,
                "rules": row.rules.split(",") if row.rules else [],
                "z": row.z,
                "measured_at": stamp(row.measured_us),
                "processed_at": stamp(row.processed_us),
                "layer": row.layer,
                "unit": one.unit_of(row.statistic),
            }
        )
    turn = {name: i for i, name in enumerate(one.charted)}
    out.sort(key=lambda p: (sorted(p["context"].items()), turn.get(p["statistic"], len(turn))))
    return out


def points_csv(points: list[dict[str, Any]]) -> str:
    """The same as CSV: a column for each column of the stream's context, rules joined by blanks."""
    columns = sorted({name for point in points for name in point["context"]})
    plain = [name for name in FIELDS if name not in ("context", "rules")]
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\n")
    writer.writerow([*plain, *columns, "rules"])
    for point in points:
        cells = [point[name] for name in plain]
        cells += [point["context"].get(name, "") for name in columns]
        writer.writerow([_safe(cell) for cell in cells] + [" ".join(point["rules"])])
    return text.getvalue()


def _safe(cell: object) -> object:
    """Text that a spreadsheet would run as a formula gets an apostrophe in front."""
    if isinstance(cell, str) and cell[:1] in ("=", "+", "-", "@", "\t", "\r"):
        return "'" + cell
    return "" if cell is None else cell


def _stamps(zone: tzinfo) -> Any:
    """ISO 8601 of a stamp; the statistics of a point share it, so it is made once."""

    @lru_cache(maxsize=1 << 16)
    def stamp(us: int | None) -> str | None:
        return iso(us, zone)

    return stamp

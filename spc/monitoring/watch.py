"""Rule hits that no effect explains, and means out of specification: stream by stream.

These are brief: a stream's hits that follow each other closely are one excursion, whatever the
statistics and rules. A mean out of specification is acted on; a rule hit alone is watched.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from sqlalchemy import Connection

from spc.monitoring.effect_lots import finite
from spc.monitoring.effect_payload import spread_change
from spc.monitoring.events import events_near
from spc.monitoring.evidence import Case, stream_context
from spc.monitoring.limit_sets import kind_of
from spc.monitoring.lots_at_risk import Suspicion, lots_at_risk

# Signals further apart than this many points of their stream are two things.
QUIET_POINTS = 10


@dataclass(frozen=True)
class Loose:
    """Signals of one stream that belong together; rows of the case's points, by stamp."""

    stream_id: int
    rows: pd.DataFrame
    out_of_spec: tuple[str, ...]

    @property
    def tier(self) -> str:
        """Act on product out of specification, watch the rest."""
        return "act" if self.out_of_spec else "watch"

    @property
    def first_us(self) -> int:
        """Stamp of the first signal."""
        return int(self.rows["at_us"].min())

    @property
    def last_us(self) -> int:
        """Stamp of the last signal."""
        return int(self.rows["at_us"].max())

    @property
    def identity(self) -> str:
        """What it is known by."""
        return f"stream:{self.stream_id}:{self.first_us}"


def out_of_spec(case: Case) -> Any:
    """Which points are means out of specification."""
    points = case.points
    bad = np.zeros(len(points), bool)
    for plan in case.plan.characteristic:
        mine = (points["characteristic"] == plan.name) & (points["statistic"] == "mean")
        if plan.lower_spec is not None:
            bad |= (mine & (points["value"] < plan.lower_spec)).to_numpy()
        if plan.upper_spec is not None:
            bad |= (mine & (points["value"] > plan.upper_spec)).to_numpy()
    return pd.Series(bad, index=points.index)


def loose_signals(case: Case, explained: pd.Index[int], newer_than_us: int | None) -> list[Loose]:
    """Groups of monitored signals that nothing explains, with something new in each.

    Parameters
    ----------
    explained : rows of the case's points that accepted effects account for.
    newer_than_us : a group is returned when one of its signals was measured after it.
    """
    points = case.points
    bad = out_of_spec(case)
    signal = (points["phase"] == "monitoring") & ((points["rules"] != "") | bad)
    signal &= ~points.index.isin(explained)
    groups: list[Loose] = []
    for stream, rows in points[signal].groupby("stream_id"):
        rows = rows.sort_values(["at_us", "lot", "statistic"])
        for part in _runs(rows, points[points["stream_id"] == stream]):
            if not (part["measured_us"] > newer_than_us).any():
                continue
            lots = tuple(sorted(set(part.loc[bad[part.index], "lot"])))
            groups.append(Loose(int(stream), part, lots))  # type: ignore[arg-type]
    return groups


def _runs(rows: pd.DataFrame, whole: pd.DataFrame) -> list[pd.DataFrame]:
    """Cut a stream's signals where more than QUIET_POINTS of its points lie between two."""
    order = np.unique(whole["at_us"].to_numpy())
    place = np.searchsorted(order, rows["at_us"].to_numpy())
    cut = np.flatnonzero(np.diff(place) > QUIET_POINTS) + 1
    return [rows.iloc[part] for part in np.split(np.arange(len(rows)), cut)]


def pattern_of(rows: pd.DataFrame) -> str:
    """Name what a stream's signals look like, by the statistic with most of them."""
    count = rows["statistic"].value_counts()
    means = [s for s in count.index if kind_of(str(s)) == "mean" and s not in _MAP_TERMS]
    if means:
        mine = rows[rows["statistic"].isin(means)]
        single = mine["rules"].isin(["", "beyond-3s"]).all() and len(mine) <= 2
        return "spike" if single else "shift"
    maps = rows["statistic"].isin([*_MAP_TERMS, "map-distance"]).mean()
    return "map" if maps > 0.5 else "spread"


_MAP_TERMS = ("tilt-x", "tilt-y", "bowl")


def payload_of(connection: Connection, case: Case, loose: Loose, as_of_us: int) -> dict[str, Any]:
    """What is kept of loose signals (see the contract's `excursions`)."""
    rows = loose.rows
    context = stream_context(case, loose.stream_id)
    characteristic = case.plan.named(str(rows["characteristic"].iloc[0]))
    assert characteristic is not None  # the case holds only characteristics of the plan
    first = rows.iloc[0]
    begin = _run_begin(case, rows)
    pattern = pattern_of(rows)
    if pattern in ("spread", "map") and not characteristic.is_overlay:
        magnitude = spread_change(case, rows, characteristic)
    else:
        magnitude = _mean_change(rows, characteristic.unit_of)
    named = {k: v for k, v in context.items() if v}
    lots = []
    if named:
        wanted = {**characteristic.where, **named}
        last = min(as_of_us, int(rows["at_us"].max()))
        cells = np.isin(case.cell_point, rows.index)
        steps = frozenset(case.factors.own_step[cells].astype(str).tolist()) - {""}
        suspicion = Suspicion(tuple(wanted), tuple(wanted.values()), begin, last, steps)
        frame = lots_at_risk(connection, suspicion, characteristic.parameters, as_of_us)
        lots = _lots(frame, characteristic.unit)
    return {
        "streams": _streams(rows, context, _lead(rows, pattern)),
        "onset": {
            "estimate_us": int(first["at_us"]),
            "earliest_us": begin,
            "latest_us": int(first["at_us"]),
            "lot": str(first["lot"]),
        },
        "magnitude": magnitude,
        "suspects": [],
        "lots_at_risk": lots,
        "events": events_near(connection, begin, int(first["at_us"])),
        "forecast": None,
        "end_us": None,
        "out_of_spec": list(loose.out_of_spec),
        "last_signal_us": int(rows["at_us"].max()),
        "n_signals": len(rows),
    }


def _run_begin(case: Case, rows: pd.DataFrame) -> int:
    """Last point before the first signal's longest possible run: the earliest onset."""
    first = rows.iloc[0]
    mine = case.points[
        (case.points["stream_id"] == first["stream_id"])
        & (case.points["statistic"] == first["statistic"])
        & (case.points["at_us"] <= first["at_us"])
    ]
    reach = 1 if set(str(first["rules"]).split(",")) <= {"", "beyond-3s"} else 8
    return int(mine["at_us"].sort_values().iloc[-min(reach, len(mine)) :].iloc[0])


def _mean_change(rows: pd.DataFrame, unit_of: Any) -> dict[str, Any]:
    """Mean departure from the centre of the statistic that departs most."""
    statistic = _lead(rows, "shift")
    mine = rows[rows["statistic"] == statistic]
    change, sigma = (mine["value"] - mine["center"]), mine["sigma"]
    value = float(change.mean())
    error = float(np.sqrt((sigma**2).sum()) / len(mine))
    typical = float(sigma.mean())
    return {
        "value": finite(value),
        "low": finite(value - 1.96 * error),
        "high": finite(value + 1.96 * error),
        "unit": unit_of(statistic),
        "sigmas": finite(value / typical) if typical > 0 else None,
    }


def _lead(rows: pd.DataFrame, pattern: str) -> str:
    """The statistic that departs most, of those that the pattern speaks of."""
    z = rows["z"].abs().groupby(rows["statistic"]).max()
    wanted = {
        "spread": [s for s in z.index if kind_of(str(s)) == "spread"],
        "map": [s for s in z.index if s in (*_MAP_TERMS, "map-distance")],
    }.get(pattern, [s for s in z.index if kind_of(str(s)) == "mean"])
    return str(z[wanted].idxmax() if wanted else z.idxmax())


def _streams(rows: pd.DataFrame, context: Mapping[str, str], lead: str) -> list[dict[str, Any]]:
    out = []
    for statistic, some in rows.groupby("statistic"):
        rules = sorted({rule for text in some["rules"] for rule in text.split(",") if rule})
        out.append(
            {
                "characteristic": str(some["characteristic"].iloc[0]),
                "statistic": str(statistic),
                "context": dict(context),
                "first_signal_at_us": int(some["at_us"].min()),
                "rules": rules,
            }
        )
    out.sort(key=lambda one: (one["statistic"] != lead, one["statistic"]))
    return out


def carried_on(known: Mapping[str, Any], now: dict[str, Any]) -> dict[str, Any]:
    """What is kept of a watched stream that rang again: its beginning stays, its streams add up."""
    streams = {(s["characteristic"], s["statistic"]): s for s in now["streams"]}
    for one in known["streams"]:
        key = (one["characteristic"], one["statistic"])
        new = streams.get(key, one)
        rules = sorted({*one["rules"], *new["rules"]})
        streams[key] = {**new, "rules": rules, "first_signal_at_us": one["first_signal_at_us"]}
    return {
        **now,
        "streams": list(streams.values()),
        "onset": known["onset"],
        "out_of_spec": sorted({*known.get("out_of_spec", ()), *now["out_of_spec"]}),
    }


def _lots(frame: pd.DataFrame, unit: str) -> list[dict[str, Any]]:
    rows: Any = frame.itertuples(index=False)
    return [
        {
            "lot": row.lot,
            "layer": row.layer,
            "wafers": list(row.wafers),
            "measured": bool(row.measured),
            "processed_at_us": int(row.processed_us),
            "predicted": None,
            "unit": unit,
            "p_out_of_spec": None,
        }
        for row in rows
    ]

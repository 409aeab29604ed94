"""Readings and log rows straight into the records, and a bay to evaluate them with."""

from __future__ import annotations

import hashlib
import json
import uuid
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np
from sqlalchemy import Connection, Engine

from config.control_plan import Characteristic, ControlPlan
from config.load import Bay
from config.settings import Settings
from spc.records.contexts import ContextStore
from spc.records.stamps import to_us
from spc.records.tables import files, layouts, measurements, process_log

START = datetime(2026, 3, 2, 6, 0, tzinfo=UTC)


def hours(number: float) -> datetime:
    """So many hours after the start of the invented time."""
    return START + timedelta(hours=number)


def bay_with(*characteristics: dict[str, Any], radius: float = 150.0) -> Bay:
    """A bay with these characteristics."""
    settings = Settings.model_validate(
        {
            "bay": {
                "name": "test bay",
                "time_zone": "Europe/Dublin",
                "control_plan": "control_plan.toml",
                "wafer_radius_mm": radius,
            },
            "mail": {"from": "spc@example.com", "to": ["shift@example.com"]},
        }
    )
    plan = ControlPlan(characteristic=tuple(Characteristic(**one) for one in characteristics))
    return Bay(Path("/nowhere/bay.toml"), settings, plan)


@dataclass(frozen=True)
class Wafer:
    """One measurement: values by site, places by site (x, y, field x, field y)."""

    lot: str
    wafer: str
    measured: datetime
    values: dict[str, float]
    context: dict[str, str]
    processed: datetime | None = None
    parameter: str = "resist_thickness"
    unit: str = "nm"
    places: dict[str, tuple[float, ...]] | None = None


@dataclass(frozen=True)
class Step:
    """One row of the process log."""

    lot: str
    wafer: str
    processed: datetime
    context: dict[str, str]


def add(engine: Engine, wafers: Iterable[Wafer] = (), steps: Iterable[Step] = ()) -> None:
    """Store measurements and log rows as one file would."""
    with engine.begin() as connection:
        file_id = _file(connection)
        store = ContextStore(connection)
        wafers, steps = list(wafers), list(steps)
        known: dict[str, int] = {}
        contexts = store.ids_of([one.context for one in wafers])
        rows = [
            _measurement(connection, file_id, one, number, known)
            for one, number in zip(wafers, contexts, strict=True)
        ]
        if rows:
            connection.execute(measurements.insert(), rows)
        contexts = store.ids_of([one.context for one in steps])
        logged = [
            {
                "file_id": file_id,
                "processed_us": to_us(one.processed),
                "lot": one.lot,
                "wafer": one.wafer,
                "layer": one.context.get("layer", ""),
                "step": one.context.get("step", ""),
                "tool": one.context["tool"],
                "module": one.context.get("module", ""),
                "context_id": number,
            }
            for one, number in zip(steps, contexts, strict=True)
        ]
        if logged:
            connection.execute(process_log.insert(), logged)


def _file(connection: Connection) -> int:
    result = connection.execute(
        files.insert().values(
            content_hash=uuid.uuid4().hex * 2,
            path="drop.csv",
            outcome="loaded",
            bytes=1,
            loaded_us=0,
        )
    )
    return int(result.inserted_primary_key[0])


def _measurement(
    connection: Connection, file_id: int, one: Wafer, context: int, known: dict[str, int]
) -> dict[str, Any]:
    sites = [
        [name, *(one.places[name] if one.places else (None, None)), None, None][:5]
        for name in one.values
    ]
    values = np.array(list(one.values.values()), dtype="<f8")
    return {
        "file_id": file_id,
        "parameter": one.parameter,
        "layer": one.context.get("layer", ""),
        "lot": one.lot,
        "wafer": one.wafer,
        "measured_us": to_us(one.measured),
        "processed_us": None if one.processed is None else to_us(one.processed),
        "context_id": context,
        "layout_id": _layout(connection, json.dumps(sites), len(sites), known),
        "unit": one.unit,
        "n": len(values),
        "mean": float(values.mean()),
        "sum_squares": float(((values - values.mean()) ** 2).sum()),
        "site_values": values.tobytes(),
        "first_line": 2,
        "last_line": 1 + len(values),
    }


def _layout(connection: Connection, text: str, n: int, known: dict[str, int]) -> int:
    if text not in known:
        digest = hashlib.sha256(text.encode()).hexdigest()
        found = connection.scalar(
            layouts.select().with_only_columns(layouts.c.id).where(layouts.c.digest == digest)
        )
        if found is None:
            result = connection.execute(layouts.insert().values(digest=digest, sites=text, n=n))
            found = result.inserted_primary_key[0]
        known[text] = int(found)
    return known[text]


RING = {
    "centre": (0.0, 0.0),
    "east": (60.0, 0.0),
    "north": (0.0, 60.0),
    "west": (-60.0, 0.0),
    "south": (0.0, -60.0),
    "north-east": (85.0, 85.0),
    "south-west": (-85.0, -85.0),
}


def lots_of(
    rng: np.random.Generator,
    count: int,
    *,
    first: int = 0,
    tool: str = "TRK1",
    module: str = "C1",
    wafers: int = 3,
    shift: float = 0.0,
    sites: Sequence[str] = tuple(RING),
    layer: str = "M1",
    every: float = 4.0,
) -> list[Wafer]:
    """Lots of an invented process: lot sd 4, wafer sd 2, site sd 3, bowl of 5 nm, mean 1200 nm."""
    out = []
    for i in range(first, first + count):
        lot = 1200.0 + shift + 4.0 * rng.standard_normal()
        for w in range(wafers):
            level = lot + 2.0 * rng.standard_normal()
            values = {
                s: level
                + 5.0 * ((RING[s][0] ** 2 + RING[s][1] ** 2) / 150.0**2) * 2
                + 3.0 * rng.standard_normal()
                for s in sites
            }
            out.append(
                Wafer(
                    f"{tool}{module}L{i:04d}",
                    f"{w + 1:02d}",
                    hours(every * i + 2 + 0.1 * w),
                    values,
                    {"layer": layer, "tool": tool, "module": module, "gauge": "FILM1"},
                    processed=hours(every * i + 0.05 * w),
                    places={s: RING[s] for s in sites},
                )
            )
    return out

"""Mean wafer maps and overlay vectors before and after the onset of an excursion."""

from __future__ import annotations

import json
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd
from sqlalchemy import select

from config.control_plan import Characteristic
from config.values import unit_factor
from reports import model
from spc.records.contexts import chunks
from spc.records.site_maps import site_maps
from spc.records.stamps import to_us
from spc.records.tables import measurements, wafer_results

if TYPE_CHECKING:
    from reports.views import Reader

_MOST_WAFERS = 60  # each side; more do not make a clearer mean
_MOST_STREAMS = 6


def map_of(reader: Reader, view: model.Excursion) -> model.WaferMapPicture | None:
    """Mean map of the affected streams before the onset, after it, and their difference."""
    plan = _plan(reader, view, overlay=False)
    if plan is None:
        return None
    sites = _sites(reader, view, plan, plan.parameters)
    if sites is None or sites["x_mm"].isna().any():
        return None
    deviations = sites.copy()
    deviations["value"] -= deviations.groupby("wafer")["value"].transform("mean")
    table = (
        deviations.groupby(["site", "after"])
        .agg(value=("value", "mean"), x_mm=("x_mm", "mean"), y_mm=("y_mm", "mean"))
        .reset_index()
    )
    counts = sites.groupby("after")["wafer"].nunique()
    if not {True, False} <= set(counts.index):
        return None
    before = table[~table["after"]].set_index("site")
    after = table[table["after"]].set_index("site")
    both = before.add_suffix("_before").join(after.add_suffix("_after"), how="inner")
    both = both.sort_index()
    return model.WaferMapPicture(
        characteristic=plan.name,
        unit=plan.unit,
        radius_mm=reader.bay.settings.bay.wafer_radius_mm,
        sites=tuple(
            model.MapSite(
                str(site),
                float(row["x_mm_before"]),
                float(row["y_mm_before"]),
                float(row["value_before"]),
                float(row["value_after"]),
                float(row["value_after"] - row["value_before"]),
            )
            for site, row in both.iterrows()
        ),
        n_wafers_before=int(counts[False]),
        n_wafers_after=int(counts[True]),
    )


def overlay_of(reader: Reader, view: model.Excursion) -> model.OverlayVectors | None:
    """Mean overlay vectors before, after, and their difference."""
    plan = _plan(reader, view, overlay=True)
    if plan is None:
        return None
    sites = _sites(reader, view, plan, ("overlay_x", "overlay_y"))
    if sites is None or sites["x_mm"].isna().any():
        return None
    place = ["site", "x_mm", "y_mm"]
    mean = sites.groupby([*place, "parameter", "after"])["value"].mean().unstack("parameter")
    if not {"overlay_x", "overlay_y"} <= set(mean.columns):
        return None
    mean = mean.dropna()
    sides = {
        side: mean.xs(side, level="after")
        for side in (False, True)
        if side in mean.index.get_level_values("after")
    }
    if len(sides) < 2:
        return None
    common = sides[False].index.intersection(sides[True].index)
    before, after = sides[False].loc[common], sides[True].loc[common]
    panels = (("before", before), ("after", after), ("difference", after - before))
    return model.OverlayVectors(
        plan.name,
        plan.unit,
        reader.bay.settings.bay.wafer_radius_mm,
        tuple(model.OverlayPanel(name, _vectors(some)) for name, some in panels),  # type: ignore[arg-type]
    )


def sites_gone(reader: Reader, view: model.Excursion) -> bool:
    """Whether wafers that the maps would show have lost their site values (retention)."""
    ids = {reader.stream_id(s.characteristic, s.context) for s in view.streams} - {None}
    keys = _wafers(reader, view, sorted(i for i in ids if i is not None)[:_MOST_STREAMS])
    m = measurements.c
    for part in chunks(sorted({key[0] for key in keys})):
        query = select(m.lot, m.layer, m.wafer).where(m.lot.in_(part), m.site_values.is_(None))
        if any((r.lot, r.layer, r.wafer) in keys for r in reader.connection.execute(query)):
            return True
    return False


def _vectors(table: pd.DataFrame) -> tuple[model.OverlayVector, ...]:
    places = np.array([(x, y) for _, x, y in table.index], float).reshape(-1, 2)
    values = table[["overlay_x", "overlay_y"]].to_numpy(float)
    return tuple(
        model.OverlayVector(*place, *value)
        for place, value in zip(places.tolist(), values.tolist(), strict=True)
    )


def _plan(reader: Reader, view: model.Excursion, *, overlay: bool) -> Characteristic | None:
    for stream in view.streams:
        plan = reader.bay.plan.named(stream.characteristic)
        if plan is not None and plan.is_overlay == overlay:
            return plan
    return None


def _sites(
    reader: Reader, view: model.Excursion, plan: Characteristic, parameters: tuple[str, ...]
) -> pd.DataFrame | None:
    """Site readings of affected wafers: wafer, site, x_mm, y_mm, value, parameter, after."""
    wanted = [s for s in view.streams if s.characteristic == plan.name]
    ids = {reader.stream_id(s.characteristic, s.context) for s in wanted} - {None}
    keys = _wafers(reader, view, sorted(i for i in ids if i is not None)[:_MOST_STREAMS])
    if not keys:
        return None
    lots = {key[0] for key in keys}
    frames = []
    for row in site_maps(reader.connection, lots, parameters, to_us(reader.as_of)):
        lot, layer, wafer = row.lot, row.layer, row.wafer
        after = keys.get((lot, layer, wafer))
        frame = None if after is None else _frame(row, plan.unit)
        if frame is not None:
            frames.append(frame.assign(wafer=f"{lot}|{layer}|{wafer}", after=after))
    return pd.concat(frames, ignore_index=True) if frames else None


def _frame(row: Any, unit: str) -> pd.DataFrame | None:
    factor = unit_factor(row.unit, unit)
    if factor is None:
        return None
    sites = json.loads(row.sites)
    frame = pd.DataFrame([[str(s[0]), s[1], s[2]] for s in sites], columns=["site", "x_mm", "y_mm"])
    frame["value"] = np.frombuffer(row.site_values, "<f8") * factor
    frame["parameter"] = row.parameter
    return frame


def _wafers(
    reader: Reader, view: model.Excursion, ids: list[int]
) -> dict[tuple[str, str, str], bool]:
    """Wafers of streams about the onset: True after it, False before; the nearest of each side."""
    if not ids:
        return {}
    w = wafer_results.c
    onset, end = to_us(view.onset.estimate), to_us(reader.as_of)
    columns = (w.lot, w.layer, w.wafer)
    mine = w.stream_id.in_(ids)
    before = (
        select(*columns)
        .where(mine, w.at_us < to_us(view.onset.earliest))
        .order_by(w.at_us.desc(), *columns)
        .limit(_MOST_WAFERS)
    )
    after = (
        select(*columns)
        .where(mine, w.at_us >= onset, w.at_us <= end)
        .order_by(w.at_us.desc(), *columns)
        .limit(_MOST_WAFERS)
    )
    found = {(r[0], r[1], r[2]): False for r in reader.connection.execute(before)}
    return found | {(r[0], r[1], r[2]): True for r in reader.connection.execute(after)}

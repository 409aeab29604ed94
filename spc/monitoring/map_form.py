"""Spread or map: what a larger within-wafer spread is, told from the maps themselves."""

from __future__ import annotations

import json
from typing import Any

import numpy as np
import pandas as pd
from sqlalchemy import Connection

from config.control_plan import Characteristic
from config.values import unit_factor
from spc.monitoring.evidence import Case
from spc.monitoring.wafer_statistics import MAP_TERMS
from spc.records.site_maps import site_maps
from spc.stats.attribution import Effect
from spc.stats.map_change import systematic_share

_MOST_WAFERS = 120  # of each side
_KEY = ["stream_id", "lot", "layer", "wafer"]


def form_of(connection: Connection, case: Case, effect: Effect, rows: pd.DataFrame) -> str:
    """Form of an effect, a spread told from a new map by the mean of the maps.

    `rows` are the affected points. Where a term of the map moved it is a map; where the maps are
    not kept, the form is as the statistics tell it.
    """
    if effect.form not in ("spread", "map"):
        return effect.form
    lead = effect.sizes[effect.leading]
    plan = case.plan.characteristic[lead.characteristic]
    if plan.is_overlay or any(s.moved and s.statistic in MAP_TERMS for s in effect.sizes):
        return effect.form
    share = _share(connection, case, plan, rows[rows["characteristic"] == plan.name])
    if not np.isfinite(share):
        return effect.form
    return "map" if share >= 0.5 else "spread"


def _share(connection: Connection, case: Case, plan: Characteristic, rows: pd.DataFrame) -> float:
    wafers = case.wafers[case.wafers["stream_id"].isin(rows["stream_id"].unique())]
    if wafers.empty or rows.empty:
        return float("nan")
    hit = set(zip(rows["stream_id"], rows["lot"], strict=True))
    pairs = zip(wafers["stream_id"], wafers["lot"], strict=True)
    is_after = np.array([pair in hit for pair in pairs], bool)
    is_before = ~is_after & (wafers["at_us"] < rows["at_us"].min()).to_numpy()
    sides = [
        wafers[mask].sort_values("at_us").tail(_MOST_WAFERS)[_KEY] for mask in (is_before, is_after)
    ]
    both = pd.concat(sides, keys=["before", "after"], names=["side"]).reset_index(level="side")
    until = int(case.wafers["measured_us"].max())
    maps = site_maps(connection, both["lot"].unique().tolist(), plan.parameters, until)
    table = _table(maps, plan.unit)
    if table.empty:
        return float("nan")
    sites = both.merge(table, on=["lot", "layer", "wafer"]).set_index([*_KEY, "side"])
    deviation = sites.sub(sites.mean(axis=1), axis=0)
    usual = deviation.xs("before", level="side").groupby("stream_id").mean()
    deviation = deviation - usual.reindex(deviation.index.get_level_values("stream_id")).to_numpy()
    side = deviation.index.get_level_values("side")
    values = deviation.to_numpy(np.float64)
    return systematic_share(values[side == "before"], values[side == "after"])


def _table(maps: list[Any], unit: str) -> pd.DataFrame:
    """One row a wafer, one column a site."""
    frames = []
    for sites, group in pd.DataFrame(maps).groupby("sites") if maps else ():
        names = [str(site[0]) for site in json.loads(str(sites))]
        for own, some in group.groupby("unit"):
            factor = unit_factor(str(own), unit)
            if factor is None:
                continue
            values = np.frombuffer(b"".join(some["site_values"]), "<f8").reshape(len(some), -1)
            keys = some[["lot", "layer", "wafer"]].reset_index(drop=True)
            frames.append(pd.concat([keys, pd.DataFrame(values * factor, columns=names)], axis=1))
    if not frames:
        return pd.DataFrame()
    every = pd.concat(frames, ignore_index=True)
    return every.groupby(["lot", "layer", "wafer"]).last().reset_index()

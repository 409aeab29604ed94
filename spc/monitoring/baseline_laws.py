"""Laws of single statistics in a baseline: map and overlay terms, spreads, the shape of the map."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from spc.monitoring import map_payload
from spc.monitoring.drafts import WILD, Baseline, Draft, Judged, kept_components, list_wild
from spc.monitoring.limit_sets import kind_of, place_keys, rounded
from spc.monitoring.points import point_values
from spc.monitoring.wafer_statistics import WaferStatistics
from spc.monitoring.wafers import Wafers
from spc.stats.components import WaferSummary, nested_components
from spc.stats.homogeneity import bartlett_p
from spc.stats.robust_baseline import robust_baseline, robust_spread_baseline
from spc.stats.spread import spread_population
from spc.stats.wafer_map import map_reference, site_reference

BoolArray = NDArray[np.bool_]

UNEQUAL_SPREADS = 0.01  # p of Bartlett's test below which spreads get a law of their own


def add_terms(base: Baseline, draft: Draft, found: WaferStatistics, keep: BoolArray) -> None:
    """Map and overlay terms: means with one value a wafer, each with its own wild points."""
    groups = base.groups
    stream = base.wafers.table["stream"]
    for statistic in base.characteristic.charted:
        if statistic not in found.terms:
            continue
        per_wafer = found.terms[statistic]
        there = np.isfinite(per_wafer) & keep[groups.of_wafer]
        n = groups.total(there.astype(float))
        points = np.flatnonzero(n > 0)
        if not points.size:
            continue
        value = groups.total(np.where(there, per_wafer, 0.0))
        value = value / np.where(n > 0, n, np.nan)
        judged = robust_baseline(value[points], stream=base.stream[points], **WILD)
        wild = Judged(statistic, value, points, judged, statistic)
        list_wild(base, draft, wild)
        good = there & ~np.isin(groups.of_wafer, wild.wild)
        summary = WaferSummary(
            stream[good],
            base.lot[good],
            np.ones(int(good.sum()), np.int64),
            per_wafer[good],
            np.zeros(int(good.sum())),
        )
        components = nested_components(summary)
        for s in range(summary.n_streams):
            if components.n_lots[s] >= 3 and np.isfinite(components.lot[s]):
                draft.statistics[s][statistic] = {
                    "kind": "mean",
                    "center": rounded(float(components.mean[s])),
                    "components": kept_components(components, s),
                }


def add_spreads(base: Baseline, draft: Draft, found: WaferStatistics, keep: BoolArray) -> None:
    """Laws of the spreads: one sigma where they vary as chance makes them, else a wider law."""
    values = point_values(base.wafers, base.groups, found, base.characteristic)
    for statistic in base.characteristic.charted:
        if kind_of(statistic) != "spread":
            continue
        rows = values.take((values["statistic"] == statistic) & (values["df"] > 0))
        point = rows["point"]
        sd, df = rows["value"], rows["df"]
        if statistic != "within-wafer" and point.size:  # those were judged with the means
            judged = robust_spread_baseline(sd, df, stream=base.stream[point], **WILD)
            whole = np.full(base.groups.n, np.nan)
            whole[point] = sd
            list_wild(base, draft, Judged(statistic, whole, point, judged, statistic))
            point, sd, df = point[judged.keep], sd[judged.keep], df[judged.keep]
        good = keep[point] & (sd > 0)
        point, sd, df = point[good], sd[good], df[good]
        stream = base.stream[point]
        count = np.bincount(stream, minlength=base.n_streams)
        freedom = np.bincount(stream, weights=df, minlength=base.n_streams)
        pooled = np.bincount(stream, weights=df * sd**2, minlength=base.n_streams)
        pooled = np.sqrt(pooled / np.where(freedom > 0, freedom, np.nan))
        typical, prior = spread_population(sd, df, stream)
        p = bartlett_p(sd, df, stream)
        for s in np.flatnonzero(count >= 3):
            unequal = bool(p[s] < UNEQUAL_SPREADS) and np.isfinite(prior[s])
            draft.statistics[s][statistic] = {
                "kind": "spread",
                "sigma": rounded(float(typical[s] if unequal else pooled[s])),
                "df_sigma": rounded(float(prior[s])) if unequal else None,
                "df": rounded(float(freedom[s])),
                "n": int(count[s]),
                "homogeneity_p": rounded(float(p[s])),
                "components": draft.components[s],
            }


def map_references(base: Baseline, draft: Draft, wafers: Wafers, keep: BoolArray) -> list[Any]:
    """Map reference of each stream, None where it has none (the notes say why)."""
    out: list[Any] = [None] * base.n_streams
    if "map-distance" not in base.characteristic.charted:
        return out
    stream = wafers.table["stream"]
    keys = place_keys(wafers.places)
    use = keep[base.groups.of_wafer]
    reading_stream = np.where(use, stream, -1)[wafers.wafer]
    for s in range(base.n_streams):
        mine = np.flatnonzero(reading_stream == s)
        sites = sorted({keys[p] for p in np.unique(wafers.place[mine])}, key=repr)
        if len(sites) < 2:
            draft.notes[s].append("one site a wafer: no map distance")
            continue
        column = {key: i for i, key in enumerate(sites)}
        column_of = np.array([column.get(key, -1) for key in keys], np.int64)
        rows, line = np.unique(wafers.wafer[mine], return_inverse=True)
        maps = np.full((rows.size, len(sites)), np.nan)
        maps[line, column_of[wafers.place[mine]]] = wafers.value[mine, 0]
        points = np.unique(base.groups.of_wafer[rows], return_inverse=True)[1]
        xy = np.full((len(sites), 2), np.nan)
        for place in np.unique(wafers.place[mine]):
            xy[column_of[place]] = wafers.places.coordinates[place, :2]
        try:
            if np.isfinite(xy).all():
                reference = map_reference(
                    maps, xy[:, 0], xy[:, 1], base.wafer_radius_mm, groups=points
                )
            else:
                reference = site_reference(maps, groups=points)
        except ValueError as error:
            draft.notes[s].append(f"no map distance: {error}")
            continue
        out[s] = map_payload.to_payload(reference, sites)
        draft.statistics[s]["map-distance"] = {"kind": "distance", "n": reference.n_points}
    return out

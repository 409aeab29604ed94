"""What a baseline finds out: signature, components, laws of the spreads, map, wild points.

All streams at once. A wild point of the mean or of a spread is kept out of every estimate, a
wild point of another statistic out of that statistic's; each is listed with the reason.
"""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spc.monitoring.baseline_laws import add_spreads, add_terms, map_references
from spc.monitoring.drafts import WILD, Baseline, Draft, Judged, kept_components, list_wild
from spc.monitoring.limit_sets import place_keys, rounded
from spc.monitoring.wafer_statistics import (
    MAP_TERMS,
    SignatureAt,
    WaferStatistics,
    add_map_terms,
    overlay_statistics,
    site_spread,
    without_flyers,
)
from spc.monitoring.wafers import Wafers
from spc.records.columns import order_of
from spc.stats.components import Components, WaferSummary, nested_components, site_signatures
from spc.stats.grouping import centred_sums
from spc.stats.robust_baseline import robust_baseline, robust_spread_baseline

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

WILD_PASSES = 2
# A site on fewer wafers of a baseline is no fixed place of the layout and has no signature.
FEWEST_WAFERS_OF_A_SITE = 3


def estimate(base: Baseline) -> list[dict[str, Any]]:
    """Payload of each stream from the points of its baseline."""
    n = base.n_streams
    draft = Draft([[] for _ in range(n)], [{} for _ in range(n)], [[] for _ in range(n)])
    _note_wafers_without_sites(base, draft)
    keep = np.ones(base.groups.n, bool)
    if base.characteristic.is_overlay:
        found = overlay_statistics(base.wafers)
        draft.signature, draft.components = [{} for _ in range(n)], [None] * n
    else:
        keep, found = _scalar(base, draft)
    add_terms(base, draft, found, keep)
    add_spreads(base, draft, found, keep)
    draft.maps = map_references(base, draft, without_flyers(base.wafers, found), keep)
    return _payloads(base, draft)


def _note_wafers_without_sites(base: Baseline, draft: Draft) -> None:
    """Say of each stream how many wafers have sums alone; their pattern is not taken out."""
    stream = base.wafers.table["stream"]
    bare = np.bincount(base.wafers.wafer, minlength=len(stream)) == 0
    count = np.bincount(stream[bare], minlength=base.n_streams)
    for s in np.flatnonzero(count).tolist():
        draft.notes[s].append(
            f"{count[s]} wafers have no site values any more (retention): they count in the mean, "
            "not in the statistics of the sites"
        )


def _scalar(base: Baseline, draft: Draft) -> tuple[BoolArray, WaferStatistics]:
    """Signature and components without the wild points, which are found on the way."""
    groups, table = base.groups, base.wafers.table
    keep = np.ones(groups.n, bool)
    mean = groups.total(table["mean"]) / groups.table["n_wafers"]
    wafers_of = groups.table["n_wafers"]
    sites_of = groups.table["effective_sites"]
    judged: list[Judged] = []
    for _ in range(WILD_PASSES):
        at, components, found = _fit(base, keep)
        own = np.nan_to_num(components.wafer)[base.stream] / wafers_of
        own = own + np.nan_to_num(components.site)[base.stream] / sites_of
        centre = robust_baseline(mean, stream=base.stream, sampling_variance=own, **WILD)
        judged = [Judged("mean", mean, np.arange(groups.n), centre, "all")]
        keep = centre.keep.copy()
        df = groups.total(found.df)
        some = np.flatnonzero(df > 0)
        if some.size:
            spread = np.sqrt(groups.total(found.squares) / np.where(df > 0, df, np.nan))
            wide = robust_spread_baseline(spread[some], df[some], stream=base.stream[some], **WILD)
            keep[some] &= wide.keep
            judged.append(Judged("within-wafer", spread, some, wide, "all"))
    for one in judged:
        list_wild(base, draft, one)
    at, components, found = _fit(base, keep)
    keys = place_keys(base.wafers.places)
    for s in range(base.n_streams):
        known = np.flatnonzero(np.isfinite(at.effect[s]))
        draft.signature.append(
            {keys[p]: (float(at.effect[s, p]), int(at.count[s, p])) for p in known}
        )
        draft.components.append(kept_components(components, s))
        if components.pooled[s]:
            draft.notes[s].append(components.pooled[s])
    for s in range(base.n_streams):
        entry = {
            "kind": "mean",
            "center": rounded(float(components.mean[s])),
            "components": draft.components[s],
        }
        if "mean" in base.characteristic.charted:
            draft.statistics[s]["mean"] = entry
    if set(base.characteristic.charted) & set(MAP_TERMS):
        add_map_terms(found, base.wafers, base.wafer_radius_mm)
    return keep, found


def _fit(base: Baseline, keep: BoolArray) -> tuple[SignatureAt, Components, WaferStatistics]:
    """Signature and components of the points kept, and the spreads of all wafers under them."""
    wafers, n = base.wafers, base.n_streams
    keep_wafer = keep[base.groups.of_wafer]
    stream = wafers.table["stream"]
    keys = place_keys(wafers.places)
    number = {key: i for i, key in enumerate(dict.fromkeys(keys))}
    code_of = np.array([number[key] for key in keys], np.int64)
    effect, count = np.full((2, n + 1, len(number)), np.nan)
    lost = np.zeros(n, np.int64)
    value, site = wafers.value[:, 0], code_of[wafers.place]
    place_of = stream[wafers.wafer] * len(number) + site
    seen = np.bincount(place_of[keep_wafer[wafers.wafer]], minlength=n * max(len(number), 1))
    fixed = seen[place_of] >= FEWEST_WAFERS_OF_A_SITE
    use = keep_wafer[wafers.wafer] & fixed
    if use.any():
        fit = site_signatures(stream[wafers.wafer[use]], wafers.wafer[use], site[use], value[use])
        effect[fit.stream, fit.site] = fit.effect
        count[fit.stream, fit.site] = fit.count
        lost[: fit.df.size] = fit.df
    none = np.full(n + 1, np.nan)
    at = SignatureAt(effect[:, code_of], count[:, code_of], none, stream, keep_wafer)
    sites, mean, squares = _reduced(wafers, at)
    summary = WaferSummary(
        stream[keep_wafer],
        base.lot[keep_wafer],
        sites[keep_wafer],
        mean[keep_wafer],
        squares[keep_wafer],
    )
    components = nested_components(summary, site_df_lost=lost[: summary.n_streams])
    sigma = none.copy()
    sigma[: components.site.size] = np.sqrt(np.where(components.site > 0, components.site, np.nan))
    return at, components, site_spread(wafers, replace(at, sigma=sigma))


def _reduced(wafers: Wafers, at: SignatureAt) -> tuple[IntArray, FloatArray, FloatArray]:
    """Sites, mean and sum of squares of each wafer with the signature out.

    A wafer with two known sites or more is reduced to those; any other is taken as it stands.
    """
    size = len(wafers.table)
    effect = at.effect[at.set_of[wafers.wafer], wafers.place]
    known = np.isfinite(effect)
    plain = np.bincount(wafers.wafer, weights=known, minlength=size) < 2
    use = known | plain[wafers.wafer]
    rest = wafers.value[:, 0] - np.where(plain[wafers.wafer], 0.0, np.nan_to_num(effect))
    sites, mean, squares = centred_sums(wafers.wafer[use], rest[use], size)
    bare = sites == 0  # kept as sums alone: the signature is still in them
    table = wafers.table
    return (
        np.where(bare, table["n_sites"], sites),
        np.where(bare, table["mean"], mean),
        np.where(bare, table["squares"], squares),
    )


def _payloads(base: Baseline, draft: Draft) -> list[dict[str, Any]]:
    table = base.groups.table
    members = table.take(order_of([table[n] for n in ("stream", "at_us", "lot", "layer", "wafer")]))
    keys = [list(row) for row in members.rows(("lot", "layer", "wafer"))]
    bounds = np.searchsorted(members["stream"], np.arange(base.n_streams + 1)).tolist()
    out = []
    for s in range(base.n_streams):
        signature = sorted(draft.signature[s].items(), key=lambda item: repr(item[0]))
        out.append(
            {
                "version": 1,
                "members": keys[bounds[s] : bounds[s + 1]],
                "wild": sorted(
                    draft.wild[s], key=lambda w: (w["at_us"], w["lot"], w["wafer"], w["statistic"])
                ),
                "sites": [list(key) for key, _ in signature],
                "signature": [rounded(effect) for _, (effect, _) in signature],
                "signature_count": [count for _, (_, count) in signature],
                "components": draft.components[s],
                "statistics": draft.statistics[s],
                "map": draft.maps[s],
                "notes": sorted(set(draft.notes[s])),
            }
        )
    return out

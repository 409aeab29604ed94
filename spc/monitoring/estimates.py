"""What a baseline finds out: signature, components, laws of the spreads, map, wild points.

All streams at once. A wild point of the mean or of a spread is kept out of every estimate, a
wild point of another statistic out of that statistic's; each is listed with the reason.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from config.control_plan import Characteristic
from spc.monitoring import map_payload
from spc.monitoring.grouping import PointGroups
from spc.monitoring.limit_sets import PlaceKey, kind_of, place_keys, rounded
from spc.monitoring.points import point_values
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
from spc.records.columns import order_of, starts_of_groups
from spc.stats.components import Components, WaferSummary, nested_components, site_signatures
from spc.stats.grouping import centred_sums
from spc.stats.homogeneity import bartlett_p
from spc.stats.robust_baseline import robust_baseline, robust_spread_baseline
from spc.stats.spread import spread_population
from spc.stats.wafer_map import map_reference, site_reference

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

WILD_PASSES = 2
# A clean baseline of 30 loses a point once in fifty; a point 6 sigma off is found in more than nine
# cases of ten, as long as a few are (simulated; the fifth of the points is the most that can be).
WILD = {"alpha": 0.02, "max_share": 0.2}
# A site on fewer wafers of a baseline is no fixed place of the layout and has no signature.
FEWEST_WAFERS_OF_A_SITE = 3
UNEQUAL_SPREADS = 0.01  # p of Bartlett's test below which spreads get a law of their own


@dataclass
class Draft:
    """Payloads in the making, one a stream code (see `spc.monitoring.limit_sets`)."""

    wild: list[list[dict[str, Any]]]
    statistics: list[dict[str, dict[str, Any]]]
    notes: list[list[str]]
    signature: list[dict[PlaceKey, tuple[float, int]]] = field(default_factory=list)
    components: list[dict[str, Any] | None] = field(default_factory=list)
    maps: list[Any] = field(default_factory=list)


@dataclass(frozen=True)
class Baseline:
    """Points and wafers that the estimates are made from; stream codes 0 ... n_streams - 1."""

    wafers: Wafers
    groups: PointGroups
    characteristic: Characteristic
    wafer_radius_mm: float

    @property
    def n_streams(self) -> int:
        """Number of streams."""
        return len(self.wafers.keys)

    @property
    def stream(self) -> IntArray:
        """Stream of each point."""
        return self.groups.table["stream"]

    @property
    def lot(self) -> IntArray:
        """Lot code of each wafer, unique over streams and layers."""
        t = self.wafers.table
        keys = [t[name] for name in ("stream", "lot", "layer")]
        return np.asarray(np.cumsum(starts_of_groups(keys)) - 1, np.int64)


def estimate(base: Baseline) -> list[dict[str, Any]]:
    """Payload of each stream from the points of its baseline."""
    n = base.n_streams
    draft = Draft([[] for _ in range(n)], [{} for _ in range(n)], [[] for _ in range(n)])
    keep = np.ones(base.groups.n, bool)
    if base.characteristic.is_overlay:
        found = overlay_statistics(base.wafers)
        draft.signature, draft.components = [{} for _ in range(n)], [None] * n
    else:
        keep, found = _scalar(base, draft)
    _terms(base, draft, found, keep)
    _spreads(base, draft, found, keep)
    draft.maps = _maps(base, draft, without_flyers(base.wafers, found), keep)
    return _payloads(base, draft)


def _scalar(base: Baseline, draft: Draft) -> tuple[BoolArray, WaferStatistics]:
    """Signature and components without the wild points, which are found on the way."""
    groups, table = base.groups, base.wafers.table
    keep = np.ones(groups.n, bool)
    mean = groups.total(table["mean"]) / groups.table["n_wafers"]
    wafers_of = groups.table["n_wafers"]
    sites_of = groups.table["effective_sites"]
    wild: list[tuple[str, FloatArray, Any]] = []
    for _ in range(WILD_PASSES):
        at, components, found = _fit(base, keep)
        own = np.nan_to_num(components.wafer)[base.stream] / wafers_of
        own = own + np.nan_to_num(components.site)[base.stream] / sites_of
        centre = robust_baseline(mean, stream=base.stream, sampling_variance=own, **WILD)
        wild = [("mean", mean, centre)]
        df = groups.total(found.df)
        spread = np.sqrt(groups.total(found.squares) / np.where(df > 0, df, np.nan))
        keep = centre.keep.copy()
        some = np.flatnonzero(df > 0)
        if some.size:
            judged = robust_spread_baseline(
                spread[some], df[some], stream=base.stream[some], **WILD
            )
            keep[some] &= judged.keep
            wild.append(("within-wafer", spread, (some, judged)))
    for statistic, value, verdict in wild:
        points, judged = verdict if isinstance(verdict, tuple) else (np.arange(groups.n), verdict)
        _list_wild(base, draft, statistic, value, points[~judged.keep], judged, "all", points)
    at, components, found = _fit(base, keep)
    keys = place_keys(base.wafers.places)
    for s in range(base.n_streams):
        known = np.flatnonzero(np.isfinite(at.effect[s]))
        draft.signature.append(
            {keys[p]: (float(at.effect[s, p]), int(at.count[s, p])) for p in known}
        )
        draft.components.append(_kept_components(components, s))
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


def _kept_components(components: Components, s: int) -> dict[str, Any]:
    """One stream's components as a payload keeps them."""
    return {
        **{
            name: rounded(float(getattr(components, name)[s]))
            for name in ("mean", "mean_se", "site", "wafer", "lot", "site_df")
        },
        "covariance": [[rounded(float(v)) for v in row] for row in components.covariance[s]],
        **{name: int(getattr(components, name)[s]) for name in ("n_lots", "n_wafers", "n_sites")},
        "pooled": components.pooled[s],
    }


def _terms(base: Baseline, draft: Draft, found: WaferStatistics, keep: BoolArray) -> None:
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
        out = points[~judged.keep]
        _list_wild(base, draft, statistic, value, out, judged, statistic, points)
        good = there & ~np.isin(groups.of_wafer, out)
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
                    "components": _kept_components(components, s),
                }


def _spreads(base: Baseline, draft: Draft, found: WaferStatistics, keep: BoolArray) -> None:
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
            out = point[~judged.keep]
            _list_wild(base, draft, statistic, whole, out, judged, statistic, point)
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


def _list_wild(
    base: Baseline,
    draft: Draft,
    statistic: str,
    value: FloatArray,
    out: IntArray,
    judged: Any,
    excluded: str,
    points: IntArray,
) -> None:
    """Name the wild points of one statistic; `excluded` says what they are kept out of."""
    reason = dict(zip(points.tolist(), judged.reason, strict=True))
    table = base.groups.table
    at_us = table["at_us"]
    for point in out.tolist():
        draft.wild[int(base.stream[point])].append(
            {
                "lot": str(table["lot"][point]),
                "layer": str(table["layer"][point]),
                "wafer": str(table["wafer"][point]),
                "at_us": int(at_us[point]),
                "statistic": statistic,
                "value": rounded(float(value[point])),
                "reason": reason[point],
                "excluded": excluded,
            }
        )


def _maps(base: Baseline, draft: Draft, wafers: Wafers, keep: BoolArray) -> list[Any]:
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

"""Windows of the scan: which onsets, ends and lots are tried, their information and priors."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from spc.stats.attribution_candidates import Column
from spc.stats.attribution_evidence import (
    AttributionOptions,
    BoolArray,
    Evidence,
    FloatArray,
    IntArray,
    sums,
)
from spc.stats.attribution_noise import Noise, ar1_inflation

_WIDTHS = (2, 3, 5, 8, 13, 21, 34)
_TINY = 1e-300
# A batch that is bad is mostly bad from its first lot on.
BORN = 0.8


@dataclass(frozen=True)
class Normal:
    """How far the normal level of each pair is off, (P,): as far as the centres of its series tell
    (`center`) and as far as its own usual offset tells (`own`). See `OffsetModel.total`."""

    center: FloatArray
    own: FloatArray

    def rows(self, pairs: IntArray) -> Normal:
        """Return the pairs' values for given rows."""
        return Normal(self.center[pairs], self.own[pairs])


@dataclass(frozen=True)
class Terms:
    """What a window needs to turn its score sum into a log Bayes factor; arrays of one shape.

    `scale` 1/AR(1) inflation, `center` and `own` what a unit of either normal level adds to the
    score (`own` None: no usual offsets), `gain` 1/(2 (I + 1/tau^2)), `cost` log(1 + I tau^2)/2,
    `info` I.
    """

    scale: FloatArray
    center: FloatArray
    own: FloatArray | None
    gain: FloatArray
    cost: FloatArray
    info: FloatArray

    def net_score(self, score: FloatArray, normal: Normal) -> FloatArray:
        """Return the score with the normal level projected out."""
        shape = (len(score),) + (1,) * (score.ndim - 1)
        out = score * self.scale - self.center * normal.center.reshape(shape)
        if self.own is not None:
            out -= self.own * normal.own.reshape(shape)
        return out

    def log_bayes(self, score: FloatArray, normal: Normal) -> FloatArray:
        """Return log BF_f from the raw score sums and `OffsetModel.total`."""
        return self.gain * self.net_score(score, normal) ** 2 - self.cost


@dataclass(frozen=True)
class Cross:
    """Raw sums of windows: `info` x'V^-1 x, `own` x'V^-1 1 over the level's own cells, `center`
    x'V^-1 1 over all cells of the series, `points` plotted points."""

    info: FloatArray
    own: FloatArray
    center: FloatArray
    points: FloatArray


@dataclass(frozen=True)
class OffsetModel:
    """What is not known of the normal level of each (level, family) pair, arrays (P,).

    Two random offsets are projected out of every window, one after the other: the error of the
    baseline centres, on which all monitored cells of the pair's series tell, and the unknown part
    of the level's own usual offset, on which only the level's cells tell. `center` and `own` are
    c / (1 + c A) of the two (A the information on it), `cross` the information that the level's
    cells share with the centres, `tells` (k,) what each of them tells on the centres. `phi`
    autocorrelation, `series` how many series, `scale` and `series_scale` 1/AR(1) inflation of the
    level's and of its series' totals; `owner`, `member` list the series of each pair.
    """

    center: FloatArray
    own: FloatArray
    cross: FloatArray
    tells: FloatArray
    phi: FloatArray
    series: FloatArray
    scale: FloatArray
    series_scale: FloatArray
    owner: IntArray
    member: IntArray

    def total(self, level_score: FloatArray, series_score: FloatArray) -> Normal:
        """Return what the normal level is off by, from the raw scores of each pair (P,) and of
        all monitored cells of each series (m,)."""
        whole = self.center * self.series_scale
        whole = whole * sums(self.owner, series_score[self.member], len(self.phi))
        own = self.own * (level_score * self.scale - self.cross * whole)
        return Normal(whole - self.center * self.cross * own, own)

    def terms(self, sums_: Cross, prior: FloatArray, pairs: IntArray | None = None) -> Terms:
        """Return the terms of windows (P, ...) for a prior variance of the amplitude; `pairs` if
        the rows are not all pairs in order."""
        rows = slice(None) if pairs is None else pairs
        shape = (len(sums_.info),) + (1,) * (np.ndim(sums_.info) - 1)

        def by_row(values: FloatArray) -> FloatArray:
            out: FloatArray = values[rows].reshape(shape)
            return out

        points = sums_.points / by_row(self.series)
        scale = 1.0 / ar1_inflation(points, by_row(self.phi))
        center = sums_.center * scale
        net = sums_.info * scale - by_row(self.center) * center**2
        own = None
        if self.own.any():
            own = sums_.own * scale
            shared = own - by_row(self.center * self.cross) * center
            net = net - by_row(self.own) * shared**2
        net = np.maximum(net, 0.01 * sums_.info * scale)
        return Terms(
            scale, center, own, 0.5 / (net + 1.0 / prior), 0.5 * np.log1p(net * prior), net
        )


@dataclass(frozen=True)
class Windows:
    """All windows of one kind. `kind` step, ramp, window or lot; `terms` per (pair, window);
    `prior` log prior per (level, window), -inf where not allowed; `width` in bins; `first` is the
    bin of the first window (those before it are not allowed for any level)."""

    kind: str
    terms: Terms
    prior: FloatArray
    width: int = 0
    first: int = 0


def new_cells(evidence: Evidence, options: AttributionOptions) -> BoolArray:
    """Return which cells were measured after the last look, shape (n,)."""
    if options.since is None:
        return np.ones(len(evidence.series), dtype=bool)
    return evidence.t_measure > options.since


def graded_bins(
    level: IntArray, time: FloatArray, n_levels: int, n_bins: int
) -> tuple[IntArray, FloatArray]:
    """Put each level's cells into at most `n_bins` time bins, the latest half of them fine.

    The latest n_bins/2 distinct times of a level have a bin each, the earlier ones share the rest
    evenly. Bins are right-aligned. Returns the bin of each cell and the first time of each bin
    (levels, bins), +inf for an empty bin.
    """
    order = np.lexsort((time, level))
    lv, tm = level[order], time[order]
    fresh = np.r_[True, (lv[1:] != lv[:-1]) | (tm[1:] != tm[:-1])]
    event = np.cumsum(fresh) - 1
    last = np.zeros(n_levels, dtype=np.int64)
    np.maximum.at(last, lv, event)
    back = last[lv] - event
    count = np.bincount(lv[fresh], minlength=n_levels)
    half = n_bins // 2
    older = np.maximum(count - half, 1)
    rest = n_bins - half
    coarse = half + np.where(
        older[lv] <= rest, back - half, (back - half) * rest // np.maximum(older[lv], 1)
    )
    from_end = np.where(back < half, back, coarse)
    out = np.empty(len(level), dtype=np.int64)
    out[order] = n_bins - 1 - from_end
    edges = np.full(n_levels * n_bins, np.inf)
    np.minimum.at(edges, level * n_bins + out, time)
    return out, edges.reshape(n_levels, n_bins)


def offset_model(
    evidence: Evidence, noise: Noise, cells: IntArray, pair: IntArray, info: FloatArray,
    share: FloatArray, unknown: FloatArray,
) -> OffsetModel:  # fmt: skip
    """Return the offset model of the (level, family) pairs of some cells (see `OffsetModel`).

    `unknown` (P,) variance of the unknown usual offset. The centres' errors of the series of a
    pair share the lots' common part.
    """
    n_pairs = int(pair.max(initial=-1)) + 1
    m = len(evidence.family)
    key, code = np.unique(pair * m + evidence.series[cells], return_inverse=True)
    owner, series = key // m, key % m
    a = sums(code, info)
    n_series = np.bincount(owner, minlength=n_pairs)
    a_pair = np.maximum(sums(owner, a, n_pairs), _TINY)
    phi = sums(owner, a * noise.phi[series], n_pairs) / a_pair
    center = noise.center[series]
    own = sums(owner, a**2 * center, n_pairs) / a_pair**2
    mean = sums(owner, a * center, n_pairs) / a_pair
    kappa = sums(owner, a * noise.kappa[evidence.family[series]], n_pairs) / a_pair
    variance = kappa * mean + (1.0 - kappa) * own
    scale = 1.0 / ar1_inflation(sums(pair, share, n_pairs) / n_series, phi)
    points = sums(owner, noise.series_points[series], n_pairs)
    series_scale = 1.0 / ar1_inflation(points / n_series, phi)
    tells = noise.center_information(cells, pair, owner, series)
    told = sums(pair, tells, n_pairs)
    # All cells of the series tell as much as the level's, in proportion to their precision.
    whole = told * sums(owner, noise.series_q[series], n_pairs)
    whole *= series_scale / np.maximum(sums(pair, noise.q[cells], n_pairs), _TINY)
    cross = told * scale
    f = variance / (1.0 + variance * whole)
    left = np.maximum(a_pair * scale - f * cross**2, 0.0)
    return OffsetModel(
        center=f, own=unknown / (1.0 + unknown * left), cross=cross, tells=tells, phi=phi,
        series=n_series.astype(np.float64), scale=scale, series_scale=series_scale, owner=owner,
        member=series,
    )  # fmt: skip


def suffix_sums(table: FloatArray) -> FloatArray:
    """Return sums from each column to the end."""
    return table[:, ::-1].cumsum(1)[:, ::-1]


@dataclass(frozen=True)
class WindowBuilder:
    """Builds the window sets of a plan (fields as in `Plan`, `info` and `share` per cell)."""

    evidence: Evidence
    noise: Noise
    options: AttributionOptions
    column: Column
    cells: IntArray
    pair: IntArray
    level: IntArray
    bins: IntArray
    edges: FloatArray
    time: FloatArray
    info: FloatArray
    share: FloatArray
    new: BoolArray
    start: IntArray
    family: IntArray
    model: OffsetModel
    log_prior: float

    def build(self) -> tuple[tuple[Windows, ...], tuple[IntArray, ...]]:
        n_bins = self.edges.shape[1]
        tau2 = (self.options.prior_sigmas * self.noise.sigma[self.family]) ** 2
        whole = self.model.tells
        weights = (self.info, self.info * self.time, self.info * self.time**2, whole)
        i0, i1, i2, e0 = (suffix_sums(self._table(w)) for w in weights)
        e1, points = (suffix_sums(self._table(w)) for w in (whole * self.time, self.share))
        sizes = np.diff(np.append(self.start, len(self.family)))
        t0 = np.repeat(np.where(np.isfinite(self.edges), self.edges, 0.0), sizes, axis=0)
        ramp_prior = tau2[:, None] / np.repeat(self._reach(), sizes, axis=0) ** 2
        step = self.model.terms(Cross(i0, i0, e0, points), tau2[:, None])
        square = np.maximum(i2 - 2.0 * t0 * i1 + t0**2 * i0, 0.0)
        ramp = self.model.terms(Cross(square, i1 - t0 * i0, e1 - t0 * e0, points), ramp_prior)
        onset = self._onset_prior()
        out = [
            Windows("step", step, self._add(onset[0], "step")),
            Windows("ramp", ramp, self._add(onset[1], "ramp")),
        ]
        priors = [self._window_allowed(w) for w in _WIDTHS if w < n_bins]
        count = np.maximum(sum(p.sum(1) for p in priors), 1)
        for width, allowed in zip(_WIDTHS, priors, strict=False):
            some = np.flatnonzero(allowed.any(0))
            if not len(some):
                continue
            begin, stop = int(some[0]), int(some[-1]) + 1
            i, e, p = (
                t[:, begin:stop] - t[:, begin + width : stop + width] for t in (i0, e0, points)
            )
            prior = np.where(allowed[:, begin:stop], -np.log(count)[:, None], -np.inf)
            terms = self.model.terms(Cross(i, i, e, p), tau2[:, None])
            out.append(Windows("window", terms, self._add(prior, "window"), width, begin))
        lots = self._lots()
        some, entry, pair_of_lot, lot_level = lots[0], lots[1], lots[2], lots[5]
        info = sums(entry, self.info[some], len(pair_of_lot))
        number = sums(entry, self.share[some], len(pair_of_lot))
        e = sums(entry, whole[some], len(pair_of_lot))
        cross = Cross(info, info, e, number)
        terms = self.model.terms(cross, 4.0 * tau2[pair_of_lot], pair_of_lot)
        prior = -np.log(np.maximum(np.bincount(lot_level), 1))[lot_level]
        out.append(Windows("lot", terms, self._add(prior, "lot")))
        return tuple(out), lots

    def _table(self, weight: FloatArray) -> FloatArray:
        n_pairs, n_bins = len(self.family), self.edges.shape[1]
        key = self.pair * n_bins + self.bins
        return sums(key, weight, n_pairs * n_bins).reshape(n_pairs, n_bins)

    def _add(self, prior: FloatArray, kind: str) -> FloatArray:
        return prior + self.log_prior + np.log(self.options.shape_prior[kind])

    def _level_table(self, weight: FloatArray) -> FloatArray:
        n_levels, n_bins = self.edges.shape
        key = self.level * n_bins + self.bins
        return sums(key, weight, n_levels * n_bins).reshape(n_levels, n_bins)

    def _reach(self) -> FloatArray:
        """Days from each onset to the level's last cell, at least an hour, (L, K)."""
        last = np.full(len(self.edges), -np.inf)
        np.maximum.at(last, self.level, self.time)
        reach = last[:, None] - np.where(np.isfinite(self.edges), self.edges, 0.0)
        return np.maximum(reach, 1.0 / 24.0)

    def _onset_prior(self) -> tuple[FloatArray, FloatArray]:
        """Log priors of the onset of steps and of ramps, (L, K): recent onsets are likelier
        (earlier ones were looked for before), and a level that was not there in the baseline has
        most of its weight on its own beginning."""
        occupied = np.isfinite(self.edges)
        allowed = occupied & (suffix_sums(self._level_table(self.new.astype(float))) > 0)
        rank = suffix_sums(occupied.astype(float))
        weight = np.where(allowed, 1.0 / (rank + 0.5), 0.0)
        weight /= np.maximum(weight.sum(1, keepdims=True), _TINY)
        base = ~self.evidence.monitoring & (self.column.codes >= 0)
        born = np.ones(len(self.column.names), dtype=bool)
        born[self.column.codes[base]] = False
        active = np.unique(self.column.codes[self.cells])
        first = np.zeros_like(weight)
        first[np.arange(len(weight)), occupied.argmax(1)] = 1.0
        half = BORN * born[active][:, None]
        step = np.where(allowed, weight * (1.0 - half) + first * half, 0.0)
        with np.errstate(divide="ignore"):
            return np.log(step), np.log(weight)

    def _window_allowed(self, width: int) -> BoolArray:
        """Windows of `width` bins that begin in an occupied bin, hold something new and end
        before the level's last bin, (L, K - width)."""
        n_bins = self.edges.shape[1]
        occupied = np.isfinite(self.edges)[:, : n_bins - width]
        fresh = suffix_sums(self._level_table(self.new.astype(float)))
        return occupied & (fresh[:, : n_bins - width] - fresh[:, width:] > 0)

    def _lots(self) -> tuple[IntArray, ...]:
        """Index the (level, lot, family) entries of lots with something new: the cells concerned
        (position in `cells`), the entry of each, the pair of each entry, the first entry of each
        (level, lot), its lot and its level."""
        lot = self.evidence.lot[self.cells]
        n_lots, n_pairs = int(lot.max()) + 1, len(self.family)
        level_lot = self.level * n_lots + lot
        some = np.flatnonzero(np.isin(level_lot, level_lot[self.new]))
        key = level_lot[some] * n_pairs + self.pair[some]
        keys, entry = np.unique(key, return_inverse=True)
        found, first = np.unique(keys // n_pairs, return_index=True)
        return some, entry, keys % n_pairs, first, found % n_lots, found // n_lots

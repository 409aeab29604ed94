"""The coarse scan: every level x onset x form at once, by cumulative sums.

For a level, a window and a shape x (step, ramp, one lot) the score of a family f is S = x'V^-1 r
and its information I = x'V^-1 x; both are sums over cells, so a table (level, family) x (time bin)
of sums and its cumulative sums give every onset. With a normal prior N(0, tau^2) of the amplitude,

    log BF_f = S^2 / (2 (I + 1/tau^2)) - log(1 + I tau^2) / 2,

which families take part is unknown (`attribution_inclusion`), and a candidate's score is

    log sum over what took part + log prior(column, level, onset, shape).

All priors add up to one, so exp(score) has expectation at most 1 when nothing happened, and
P(best score >= u) <= exp(-u) (Markov). Amplitudes are shared by all series of a level in a family:
the level whose members all moved and whose others did not wins by itself.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from spc.stats.attribution_candidates import Column
from spc.stats.attribution_evidence import (
    DAY,
    AttributionOptions,
    Evidence,
    FloatArray,
    IntArray,
    sums,
)
from spc.stats.attribution_inclusion import Inclusion
from spc.stats.attribution_noise import Noise
from spc.stats.attribution_windows import (
    Normal,
    OffsetModel,
    WindowBuilder,
    Windows,
    graded_bins,
    new_cells,
    offset_model,
    suffix_sums,
)


@dataclass(frozen=True)
class Plan:
    """The scan of one column on one design: everything that does not depend on the residuals.

    `cells` (k,) are the monitored cells with a level, sorted by (level, family); `pair` (k,) their
    (level, family) index, `bin` (k,) time bin, `time` (k,) days before the origin (negative).
    `active` (L,) level codes, `start` (L,) first pair of each, `family` (P,) of each pair.
    `edges` (L, K) first time in each bin.
    """

    column: Column
    cells: IntArray
    pair: IntArray
    bin: IntArray
    time: FloatArray
    active: IntArray
    start: IntArray
    family: IntArray
    edges: FloatArray
    prior: Inclusion
    lot_prior: Inclusion
    model: OffsetModel
    windows: tuple[Windows, ...]
    lot_cells: IntArray
    lot_pair: IntArray
    lot_owner: IntArray
    lot_start: IntArray
    lot_code: IntArray
    lot_level: IntArray


@dataclass(frozen=True)
class Best:
    """Best candidate of each active level of a column, arrays (L,): `score` (log), `kind` index
    into the plan's windows, `where` window start (bin, or lot entry)."""

    score: FloatArray
    kind: IntArray
    where: IntArray


def scan(plan: Plan, y: FloatArray, series_score: FloatArray) -> Best:
    """Score every window of every level of a column.

    `y` (n,) whitened residuals, `series_score` (m,) their sums over the monitored cells of each
    series (see `series_scores`).
    """
    n_pairs, n_bins = len(plan.family), plan.edges.shape[1]
    own = y[plan.cells]
    key = plan.pair * n_bins + plan.bin
    c0 = suffix_sums(sums(key, own, n_pairs * n_bins).reshape(n_pairs, n_bins))
    c1 = suffix_sums(sums(key, own * plan.time, n_pairs * n_bins).reshape(n_pairs, n_bins))
    total = plan.model.total(c0[:, 0], series_score)
    n_levels = len(plan.active)
    score = np.full(n_levels, -np.inf)
    kind = np.zeros(n_levels, dtype=np.int64)
    where = np.zeros(n_levels, dtype=np.int64)
    edges = np.where(np.isfinite(plan.edges), plan.edges, 0.0)
    edge_of_pair = np.repeat(edges, np.diff(np.append(plan.start, n_pairs)), axis=0)
    for i, windows in enumerate(plan.windows):
        if windows.kind == "lot":
            best, at = _scan_lots(plan, windows, own, total)
        else:
            if windows.kind == "step":
                s = c0[:, :n_bins]
            elif windows.kind == "ramp":
                s = c1[:, :n_bins] - edge_of_pair * c0[:, :n_bins]
            else:
                begin, stop = windows.first, windows.first + windows.prior.shape[1]
                s = c0[:, begin:stop] - c0[:, begin + windows.width : stop + windows.width]
            b = windows.terms.log_bayes(s, total)
            table = plan.prior.score(b) + windows.prior
            at = table.argmax(1)
            best = table[np.arange(n_levels), at]
            at = at + windows.first
        better = best > score
        score = np.where(better, best, score)
        kind = np.where(better, i, kind)
        where = np.where(better, at, where)
    return Best(score, kind, where)


def _scan_lots(
    plan: Plan, windows: Windows, own: FloatArray, total: Normal
) -> tuple[FloatArray, IntArray]:
    """Score each (level, lot) alone; returns the best per level and its entry."""
    n_levels = len(plan.active)
    best = np.full(n_levels, -np.inf)
    at = np.zeros(n_levels, dtype=np.int64)
    if not len(plan.lot_start):
        return best, at
    s = sums(plan.lot_pair, own[plan.lot_cells], len(plan.lot_owner))
    b = windows.terms.log_bayes(s, total.rows(plan.lot_owner))
    value = plan.lot_prior.score(b) + windows.prior
    order = np.lexsort((-value, plan.lot_level))
    levels, first = np.unique(plan.lot_level[order], return_index=True)
    at[levels] = order[first]
    best[levels] = value[order[first]]
    return best, at


def series_scores(evidence: Evidence, y: FloatArray) -> FloatArray:
    """Return the sums of the whitened residuals over each series' monitored cells, shape (m,)."""
    return sums(evidence.series, np.where(evidence.monitoring, y, 0.0), len(evidence.family))


def make_plan(
    evidence: Evidence,
    noise: Noise,
    column: Column,
    offset_variance: FloatArray,
    options: AttributionOptions,
    log_prior: float,
) -> Plan | None:
    """Prepare the scan of a column; None if no level of it has anything new to look at.

    `offset_variance` (levels, families): see `usual_offsets`. `log_prior` of the whole column.
    """
    n_families = evidence.n_families
    new = new_cells(evidence, options)
    fresh = np.zeros(len(column.names), dtype=bool)
    fresh[column.codes[new & evidence.monitoring & (column.codes >= 0)]] = True
    use = evidence.monitoring & (column.codes >= 0)
    use &= fresh[np.maximum(column.codes, 0)]
    if not use.any():
        return None
    info, share = noise.information(np.where(use, column.codes, -1))
    cells = np.flatnonzero(use)
    key = column.codes[cells] * n_families + evidence.cell_family[cells]
    cells = cells[np.argsort(key, kind="stable")]
    keys, pair = np.unique(
        column.codes[cells] * n_families + evidence.cell_family[cells], return_inverse=True
    )
    active, start = np.unique(keys // n_families, return_index=True)
    level = np.searchsorted(active, column.codes[cells])
    time = (column.time[cells] - column.time[cells].max()) / DAY
    bins, edges = graded_bins(level, time, len(active), options.bins)
    model = offset_model(
        evidence, noise, cells, pair, info[cells], share[cells],
        offset_variance[keys // n_families, keys % n_families],
    )  # fmt: skip
    prior = Inclusion.of(evidence, keys % n_families, start)
    builder = WindowBuilder(
        evidence=evidence, noise=noise, options=options, column=column, cells=cells, pair=pair,
        level=level, bins=bins, edges=edges, time=time, info=info[cells], share=share[cells],
        new=new[cells], start=start, family=keys % n_families, model=model,
        log_prior=log_prior - np.log(len(active)),
    )  # fmt: skip
    windows, lots = builder.build()
    return Plan(
        column=column, cells=cells, pair=pair, bin=bins, time=time, active=active, start=start,
        family=keys % n_families, edges=edges, prior=prior,
        lot_prior=prior.entries(lots[2], lots[3]), model=model,
        windows=windows, lot_cells=lots[0], lot_pair=lots[1], lot_owner=lots[2],
        lot_start=lots[3], lot_code=lots[4], lot_level=lots[5],
    )  # fmt: skip

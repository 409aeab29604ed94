"""Sizes of one effect, and what it explains.

The amplitude of each family is the generalised least squares estimate over the affected cells,
wild residuals brought in to the cap around the fit (iterated). What the effect explains is its
posterior mean: the amplitude times the probability that the family moved, and, in families that
moved, each series' own amplitude shrunk towards the family's.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from spc.stats.attribution_candidates import Candidate, Column
from spc.stats.attribution_evidence import (
    DAY,
    AttributionOptions,
    Evidence,
    FloatArray,
    IntArray,
    sums,
)
from spc.stats.attribution_inclusion import Inclusion
from spc.stats.attribution_noise import Noise, ar1_inflation
from spc.stats.attribution_profile import Shape
from spc.stats.attribution_search import series_scores
from spc.stats.attribution_windows import (
    Cross,
    Normal,
    OffsetModel,
    Terms,
    offset_model,
)

_PASSES = 5
_SETTLED = 0.02


@dataclass(frozen=True)
class Fit:
    """Estimates of one effect. `cells` (k,) affected cells and `pattern` (k,) its form there (a
    step is 1; a ramp is 0 at its onset and 1 at the last affected cell, so that an amplitude is
    the change reached). `families` (F,) codes with `amplitude`, `se`, `gain` (log Bayes factor),
    `probability` (that it moved). `series` (m,) codes with `series_value`, `series_se`,
    `series_points`. `explained` (k,) is what the effect explains of the residual, unit."""

    cells: IntArray
    pattern: FloatArray
    families: IntArray
    amplitude: FloatArray
    se: FloatArray
    gain: FloatArray
    probability: FloatArray
    series: IntArray
    series_value: FloatArray
    series_se: FloatArray
    series_points: FloatArray
    explained: FloatArray

    def main(self) -> int:
        """Return the position of the family with the largest gain."""
        return int(self.gain.argmax())

    def telling(self) -> IntArray:
        """Return the families that tell of the effect: a tenth of the largest gain, or more."""
        return self.families[self.gain >= max(0.1 * float(self.gain.max()), 0.0)]


@dataclass(frozen=True)
class Residuals:
    """What other effects left: `value` (n,) in unit, and `whitened` (n,), wild values held."""

    value: FloatArray
    whitened: FloatArray


def pattern_of(column: Column, level: int, shape: Shape, evidence: Evidence) -> FloatArray:
    """Return the form of an effect on all cells, shape (n,), 0 where it does not act."""
    time = column.time
    on = evidence.monitoring & column.cells(level) & (time >= shape.start) & (time < shape.end)
    if shape.lot >= 0:
        on &= evidence.lot == shape.lot
    if shape.kind != "ramp" or not on.any():
        return on.astype(float)
    last = float(time[on].max())
    reach = max(last - shape.start, DAY / 24.0)
    return np.where(on, (time - shape.start) / reach, 0.0)


def fit_effect(
    evidence: Evidence,
    noise: Noise,
    candidate: Candidate,
    shape: Shape,
    residuals: Residuals,
    options: AttributionOptions,
) -> Fit | None:
    """Estimate an effect's sizes from the residuals that other effects left.

    Returns None if no monitored cell is affected.
    """
    column, level, unknown = candidate.column, candidate.level, candidate.unknown
    pattern = pattern_of(column, level, shape, evidence)
    level_cells = np.flatnonzero(evidence.monitoring & column.cells(level))
    on = np.flatnonzero(pattern[level_cells] != 0.0)
    if not len(on):
        return None
    info, share = noise.information(np.where(column.cells(level), 0, -1))
    family_all = evidence.cell_family[level_cells]
    families, family = np.unique(family_all, return_inverse=True)
    n_families = len(families)
    model = offset_model(
        evidence, noise, level_cells, family, info[level_cells], share[level_cells],
        unknown[families],
    )  # fmt: skip
    x = pattern[level_cells]
    i_raw = sums(family, info[level_cells] * x**2, n_families)
    cross = sums(family, info[level_cells] * x, n_families)
    points = sums(family[on], share[level_cells][on], n_families)
    wide = 2.0 if shape.lot >= 0 else 1.0
    tau2 = (wide * options.prior_sigmas * noise.sigma[families]) ** 2
    center = sums(family, model.tells * x, n_families)
    terms = model.terms(Cross(i_raw, cross, center, points), tau2)
    net = np.maximum(terms.info, 1e-300)
    amplitude, y, value, total = _amplitudes(
        evidence, noise, level_cells, family, x, terms, model, residuals
    )  # fmt: skip
    gain = terms.log_bayes(sums(family, y * x, n_families), total)
    probability = Inclusion.of(evidence, families, np.array([0])).probability(gain)
    shrink = net / (net + 1.0 / tau2)
    cells = level_cells[on]
    series = _series_sizes(evidence, noise, cells, x[on], value[on])
    explained = _explained(
        evidence, noise, series, cells, x[on], families, amplitude, probability * shrink
    )
    return Fit(
        cells=cells, pattern=x[on], families=families, amplitude=amplitude,
        se=1.0 / np.sqrt(net), gain=gain, probability=probability, series=series[0],
        series_value=series[1], series_se=series[2], series_points=series[3],
        explained=explained,
    )  # fmt: skip


def _amplitudes(
    evidence: Evidence, noise: Noise, cells: IntArray, family: IntArray, x: FloatArray,
    terms: Terms, model: OffsetModel, residuals: Residuals,
) -> tuple[FloatArray, FloatArray, FloatArray, Normal]:  # fmt: skip
    """Return the amplitudes (F,), the residuals of the cells, whitened and plain, and what their
    normal level is off by. Wild values are brought in around the fit, until the amplitudes
    settle."""
    groups = np.zeros(len(noise.group_factor), dtype=bool)
    groups[noise.group[cells]] = True
    near = np.flatnonzero(groups[noise.group])
    part, rest = noise.part(near), residuals.value[near]
    inner = np.searchsorted(near, cells)
    # The scores of the series change only where the level's cells are.
    base = series_scores(evidence, residuals.whitened)
    monitored = np.where(evidence.monitoring[near], 1.0, 0.0)
    before = residuals.whitened[near] * monitored
    n_families = len(model.phi)
    amplitude, held = np.zeros(n_families), np.zeros(len(near))
    for _ in range(_PASSES):
        value = held + part.clip(rest - held)
        whole = part.whiten(value)
        change = sums(evidence.series[near], whole * monitored - before, len(base))
        y = whole[inner]
        total = model.total(sums(family, y, n_families), base + change)
        score = terms.net_score(sums(family, y * x, n_families), total)
        last, amplitude = amplitude, score / np.maximum(terms.info, 1e-300)
        held[inner] = amplitude[family] * x
        if np.all(np.abs(amplitude - last) ** 2 * terms.info < _SETTLED**2):
            break
    return amplitude, y, value[inner], total


def _series_sizes(
    evidence: Evidence, noise: Noise, cells: IntArray, x: FloatArray, value: FloatArray
) -> tuple[IntArray, FloatArray, FloatArray, FloatArray, IntArray]:
    """Return series codes, own amplitude, its standard error, points, and each cell's position.

    Each series by itself, its points weighted by their whole variance: against the other streams
    of its lots it would be told from the noise that they do not share, which is nearly none.
    """
    series, at = np.unique(evidence.series[cells], return_inverse=True)
    _, first, point = np.unique(noise.point[cells], return_index=True, return_inverse=True)
    weight = noise.weight[cells]
    whole = sums(point, weight)
    mean, form = sums(point, weight * value) / whole, sums(point, weight * x) / whole
    precision = 1.0 / (noise.lot[cells][first] + 1.0 / whole)
    owner = at[first]
    i = np.maximum(sums(owner, precision * form**2), 1e-300)
    points = sums(owner, np.ones(len(first)))
    inflation = ar1_inflation(points, noise.phi[series])
    mean_x = sums(owner, precision * form) / i
    se = np.sqrt(inflation / i + noise.center[series] * mean_x**2)
    return series, sums(owner, precision * form * mean) / i, se, points, at


def _explained(
    evidence: Evidence, noise: Noise,
    series: tuple[IntArray, FloatArray, FloatArray, FloatArray, IntArray], cells: IntArray,
    x: FloatArray, families: IntArray, amplitude: FloatArray, shrink: FloatArray,
) -> FloatArray:  # fmt: skip
    """Posterior mean of the effect on its cells, each series with its own amplitude.

    The spread of amplitudes between series is a robust moment estimate (median), at most 40 % of
    the amplitude; a series is followed at most two such spreads away. So one odd series, which has
    a cause of its own, is not explained away with the rest.
    """
    code, value, se, _, at = series
    position = np.searchsorted(families, evidence.family[code])
    mean = amplitude[position]
    away2 = (value - mean) ** 2
    spread2 = np.zeros(len(families))
    for f in np.unique(position):
        mine = position == f
        if mine.sum() >= 3:
            excess = np.median(away2[mine]) / 0.4549 - np.median(se[mine] ** 2)
            spread2[f] = np.clip(excess, 0.0, (0.4 * amplitude[f]) ** 2)
    own = spread2[position] / (spread2[position] + se**2)
    room = 2.0 * np.sqrt(spread2[position])
    size = shrink[position] * (mean + own * np.clip(value - mean, -room, room))
    out: FloatArray = size[at] * x
    return out


def drift_line(
    evidence: Evidence, noise: Noise, fit: Fit, column: Column, residual: FloatArray, family: int
) -> tuple[float, float, float, FloatArray]:
    """Fit a free line to the affected cells of one family.

    Returns (reference time in seconds, change there, change per second, 2 x 2 covariance of the
    two); the reference is the last affected cell. For forecasting a drift.
    """
    mine = evidence.cell_family[fit.cells] == family
    cells = fit.cells[mine]
    time = column.time[cells]
    reference = float(time.max())
    days = (time - reference) / DAY
    on = np.full(len(residual), -1, dtype=np.int64)
    on[cells] = 0
    info, share = noise.information(on)
    y = noise.whiten(np.where(on >= 0, residual, 0.0))[cells]
    w = info[cells]
    a = np.array([[w.sum(), (w * days).sum()], [(w * days).sum(), (w * days**2).sum()]])
    b = np.array([y.sum(), (y * days).sum()])
    series = evidence.series[cells]
    points = sums(series, share[cells])
    used = np.flatnonzero(points)
    inflation = float(np.mean(ar1_inflation(points[used], noise.phi[used])))
    ridge = np.diag([1e-12 * a[0, 0], 1e-12 * max(a[1, 1], a[0, 0])])
    covariance = np.linalg.inv(a + ridge) * inflation
    line = np.linalg.solve(a + ridge, b)
    scale = np.array([1.0, 1.0 / DAY])
    return reference, float(line[0]), float(line[1] / DAY), covariance * np.outer(scale, scale)

"""How often chance scores as high: the null of this very design, drawn and scanned.

Residuals are drawn from the noise model (lot parts, shared by streams and correlated between
families as found, autocorrelation, errors of the baseline centres, usual offsets of levels) and
scanned by the same plans. The expected number of levels that score above u is read from the pooled
scores; beyond the last twenty it is carried on as exp(-u), which bounds the tail (see
`attribution_search`). It bounds the chance of a single false effect in the look.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from spc.stats.attribution_candidates import Column, Offsets
from spc.stats.attribution_evidence import AttributionOptions, Evidence, FloatArray
from spc.stats.attribution_noise import Noise
from spc.stats.attribution_search import Plan, scan, series_scores

_ANCHOR = 20
_LAGS = 12


@dataclass(frozen=True)
class Calibration:
    """Null scores: `scores` pooled level scores of all draws, descending; `draws` their number."""

    scores: FloatArray
    draws: int

    def expected(self, score: float) -> float:
        """Return the expected number of levels that score at least this by chance in a look."""
        above = int(np.searchsorted(-self.scores, -score, side="right"))
        anchor = min(_ANCHOR, len(self.scores))
        if above >= anchor or anchor == 0:
            return above / self.draws if self.draws else float(np.exp(-score))
        tail = anchor / self.draws * np.exp(min(self.scores[anchor - 1] - score, 0.0))
        return float(tail)

    def p_value(self, score: float, close: float = -np.inf) -> float:
        """Return the multiplicity-adjusted p-value of a coarse score; the score of the close look
        bounds it as well (Markov)."""
        return float(min(1.0, self.expected(score), np.exp(-min(max(score, close), 700.0))))


def calibrate(
    evidence: Evidence,
    noise: Noise,
    columns: tuple[Column, ...],
    offsets: Offsets,
    plans: tuple[Plan, ...],
    options: AttributionOptions,
) -> Calibration:
    """Draw and scan the null; the number of draws follows from `options.null_cells`."""
    n = len(evidence.series)
    draws = int(np.clip(options.null_cells // max(n, 1), 4, 60))
    rng = np.random.default_rng(options.seed)
    root: FloatArray = np.asarray(np.linalg.cholesky(noise.correlation), dtype=np.float64)
    sampler = _Sampler.of(evidence, noise, columns, offsets)
    pooled = []
    for _ in range(draws):
        y = noise.whiten(noise.clip(sampler.draw(rng, root)))
        whole = series_scores(evidence, y)
        pooled += [scan(plan, y, whole).score for plan in plans]
    scores = np.sort(np.concatenate(pooled))[::-1] if pooled else np.empty(0)
    return Calibration(scores[np.isfinite(scores)], draws)


@dataclass(frozen=True)
class _Sampler:
    evidence: Evidence
    noise: Noise
    columns: tuple[Column, ...]
    offsets: Offsets
    lot: np.ndarray
    first: np.ndarray
    single: np.ndarray
    crowd: np.ndarray
    order: np.ndarray
    rank: np.ndarray

    @classmethod
    def of(
        cls, evidence: Evidence, noise: Noise, columns: tuple[Column, ...], offsets: Offsets
    ) -> _Sampler:
        _, first = np.unique(noise.point, return_index=True)
        _, lot = np.unique(evidence.lot, return_inverse=True)
        single = np.bincount(noise.point)[noise.point] == 1
        # The number of points that share a lot's common part in a family.
        crowd = np.bincount(noise.group[first], minlength=len(noise.group_factor))
        series = evidence.series[first]
        order = np.lexsort((evidence.t_process[first], series))
        begins = np.r_[True, series[order][1:] != series[order][:-1]]
        start = np.maximum.accumulate(np.where(begins, np.arange(len(order)), 0))
        return cls(
            evidence, noise, columns, offsets, lot, first, single,
            crowd[noise.group[first]], order, np.arange(len(order)) - start,
        )  # fmt: skip

    def draw(self, rng: np.random.Generator, root: FloatArray) -> FloatArray:
        """Return one draw of residuals when nothing happened, shape (n,)."""
        e, noise = self.evidence, self.noise
        series = e.series[self.first]
        family = e.family[series]
        common = (rng.standard_normal((int(self.lot.max()) + 1, e.n_families)) @ root.T)[
            self.lot[self.first], family
        ]
        kappa = np.where(self.crowd > 1, noise.kappa[family], 1.0)
        z = np.sqrt(kappa) * common + np.sqrt(1.0 - kappa) * rng.standard_normal(len(series))
        z = self._correlate(z, noise.phi[series])[noise.point]
        lot = noise.lot
        own = rng.standard_normal(len(e.series)) * np.sqrt(noise.own)
        out = np.where(self.single, np.sqrt(lot + noise.own) * z, np.sqrt(lot) * z + own)
        k = noise.kappa[e.family]
        center = np.sqrt(k) * rng.standard_normal(e.n_families)[e.family]
        center += np.sqrt(1.0 - k) * rng.standard_normal(len(e.family))
        out += (center * np.sqrt(noise.center))[e.series]
        for column, variance in zip(self.columns, self.offsets.variance, strict=True):
            if variance.any():
                shift = rng.standard_normal(variance.shape) * np.sqrt(variance)
                known = column.codes >= 0
                out[known] += shift[column.codes[known], e.cell_family[known]]
        return out

    def _correlate(self, z: FloatArray, phi: FloatArray) -> FloatArray:
        """Give each series its lag-1 autocorrelation (moving average form, cut at 12 lags)."""
        if not phi.any():
            return z
        e, p = z[self.order], phi[self.order]
        out, power, norm = e.copy(), np.ones_like(e), np.ones_like(e)
        for lag in range(1, _LAGS + 1):
            power = power * p
            shifted = np.r_[np.zeros(lag), e[:-lag]] if lag < len(e) else np.zeros_like(e)
            use = self.rank >= lag
            out += np.where(use, power * shifted, 0.0)
            norm += np.where(use, power**2, 0.0)
        result = np.empty_like(z)
        result[self.order] = out / np.sqrt(norm)
        return result

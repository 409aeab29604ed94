"""The noise of a bay estimated from its cells: what the caller claims, checked and shrunk.

Variances and autocorrelations that come from a few dozen baseline points are shrunk towards their
family (empirical Bayes); the part of the lot variance that streams share, the rate of wild values
and the correlation between families are read from the baseline cells.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from spc.stats.attribution_evidence import Evidence, FloatArray, IntArray, statistic_class, sums
from spc.stats.attribution_noise import Noise, noise_layout

_CLIP = 3.0
# E[min(z^2, c^2)] of a standard normal z: 1 - 2 c phi(c) - 2 (1 - c^2) (1 - Phi(c)), c = 3.
_CLIPPED_SQUARE = 0.995007


def estimate_noise(evidence: Evidence, residual: FloatArray) -> Noise:
    """Build the noise model of a bay from its cells.

    `residual` (n,) in unit: the residuals, usual offsets of levels already taken out. The scale of
    each series is re-estimated from successive differences (immune to steps) and shrunk.
    """
    points = _Points.of(evidence, residual)
    phi = _shrunk_phi(evidence, points)
    scale = _series_scale(evidence, points, phi)
    square = scale[evidence.series]
    own, lot = evidence.var_own * square, evidence.var_lot * square
    family = evidence.cell_family
    n_families = evidence.n_families
    kappa = _shared_lot_part(evidence, points, scale)
    lot_shared, lot_own = lot * kappa[family], lot * (1.0 - kappa[family])
    weight = 1.0 / own
    w_point = sums(points.code, weight)
    v_point = sums(points.code, lot_own) / np.bincount(points.code)
    point_factor = v_point / (1.0 + v_point * w_point)
    q = weight / (1.0 + (v_point * w_point)[points.code])
    _, group = np.unique(evidence.lot * n_families + family, return_inverse=True)
    a_group = sums(group, q)
    u_group = sums(group, lot_shared) / np.bincount(group)
    sigma = _typical_sigma(points, np.sqrt(points.variance * scale[points.series]), n_families)
    z = residual / np.sqrt(own + lot)
    return Noise(
        weight=weight,
        own=own,
        lot_own=lot_own,
        lot_shared=lot_shared,
        cap=_caps(evidence, z)[family] * np.sqrt(own + lot),
        point_factor=point_factor,
        group_factor=u_group / (1.0 + u_group * a_group),
        q=q,
        sigma=sigma,
        kappa=kappa,
        correlation=_family_correlation(evidence, z),
        phi=phi,
        center=evidence.var_center * scale,
        **_series_tables(evidence, points.code, group, q),
        **noise_layout(points.code, group.astype(np.int64)),
    )


def _series_tables(
    evidence: Evidence, point: IntArray, group: IntArray, q: FloatArray
) -> dict[str, Any]:
    """Return what the noise keeps of series: totals of the monitored cells, and which series
    share a lot (the entries of each group)."""
    m = len(evidence.family)
    on = evidence.monitoring.astype(float)
    share = on / np.bincount(point)[point]
    keys, entry = np.unique(group * m + evidence.series, return_inverse=True)
    return {
        "series_q": sums(evidence.series, q * on, m),
        "series_points": sums(evidence.series, share, m),
        "shared_start": np.searchsorted(keys // m, np.arange(int(group.max(initial=-1)) + 2)),
        "shared_series": keys % m,
        "shared_q": sums(entry, q),
    }


@dataclass(frozen=True)
class _Points:
    """Plotted points from cells: dense code of each cell, and per point its attributes."""

    code: IntArray
    series: IntArray
    family: IntArray
    lot: IntArray
    value: FloatArray
    variance: FloatArray
    lot_variance: FloatArray
    baseline: FloatArray
    order: IntArray

    @classmethod
    def of(cls, evidence: Evidence, residual: FloatArray) -> _Points:
        _, first, code = np.unique(evidence.point, return_index=True, return_inverse=True)
        weight = 1.0 / evidence.var_own
        total = sums(code, weight)
        lot = sums(code, evidence.var_lot) / np.bincount(code)
        series = evidence.series[first]
        return cls(
            code=code.astype(np.int64),
            series=series,
            family=evidence.family[series],
            lot=evidence.lot[first],
            value=sums(code, weight * residual) / total,
            variance=lot + 1.0 / total,
            lot_variance=lot,
            baseline=(~evidence.monitoring[first]).astype(float),
            order=np.lexsort((evidence.t_process[first], series)),
        )


def _shrunk_phi(evidence: Evidence, points: _Points) -> FloatArray:
    """Shrink each series' lag-1 autocorrelation to its family (variance of r1 is about 1/n)."""
    m = len(evidence.family)
    count = sums(points.series, points.baseline, m)
    count = np.where(count > 3, count, np.maximum(np.bincount(points.series, minlength=m) / 2, 3.0))
    total = sums(evidence.family, count)
    mean = sums(evidence.family, count * evidence.phi) / np.maximum(total, 1.0)
    away = (evidence.phi - mean[evidence.family]) ** 2 - 1.0 / count
    members = np.bincount(evidence.family)
    between = np.maximum(sums(evidence.family, away) / np.maximum(members, 1), 0.0)
    trust = between[evidence.family] / (between[evidence.family] + 1.0 / count)
    # A family of few series is shrunk to 0 as far as its own mean is uncertain.
    mean = mean * np.maximum(total - 30.0, 0.0) / np.maximum(total, 1.0)
    phi = mean[evidence.family] + trust * (evidence.phi - mean[evidence.family])
    return np.clip(phi, 0.0, 0.85)


def _series_scale(evidence: Evidence, points: _Points, phi: FloatArray) -> FloatArray:
    """Return the variance ratio (found over claimed) of each series, shrunk, shape (m,).

    Twice shrunk: the family's ratio towards 1 (20 degrees of freedom), the series' ratio towards
    its family's (40). A difference of successive points carries 2/3 of a degree of freedom.
    """
    m, n_families = len(evidence.family), evidence.n_families
    order = points.order
    series = points.series[order]
    value, variance = points.value[order], points.variance[order]
    same = series[1:] == series[:-1]
    step = (value[1:] - value[:-1])[same]
    spread = ((variance[1:] + variance[:-1]) * (1.0 - phi[series[1:]]))[same]
    square = np.minimum(step**2 / spread, _CLIP**2) / _CLIPPED_SQUARE
    owner = series[1:][same]
    df = np.bincount(owner, minlength=m) * (2.0 / 3.0)
    total = sums(owner, square, m) * (2.0 / 3.0)
    df_family = sums(evidence.family, df, n_families)
    family = (sums(evidence.family, total, n_families) + 20.0) / (df_family + 20.0)
    ratio = (total + 40.0 * family[evidence.family]) / (df + 40.0)
    return np.clip(ratio, 0.7, 6.0)


def _shared_lot_part(evidence: Evidence, points: _Points, scale: FloatArray) -> FloatArray:
    """Return per family the part of the lot variance shared by the streams of one lot.

    Moment estimate from products of two points of one lot in one family, baseline points only,
    shrunk towards one half (weight of 20 pairs).
    """
    n_families = evidence.n_families
    use = points.baseline > 0
    if not use.any():
        return np.full(n_families, 0.5)
    key = (points.lot * n_families + points.family)[use]
    _, first, code = np.unique(key, return_index=True, return_inverse=True)
    z = points.value[use] / np.sqrt(points.variance[use] * scale[points.series[use]])
    z = np.clip(z, -_CLIP, _CLIP)
    share = points.lot_variance[use] / points.variance[use]
    size = np.bincount(code)
    product = (sums(code, z) ** 2 - sums(code, z**2)) / 2.0
    pairs = size * (size - 1) / 2.0
    family = points.family[use][first]
    mean_share = sums(code, share) / size
    top = sums(family, product, n_families)
    bottom = sums(family, pairs * mean_share, n_families)
    n_pairs = sums(family, pairs, n_families)
    kappa = np.clip(top / np.maximum(bottom, 1e-9), 0.0, 1.0)
    kappa = np.where(bottom > 1e-6, kappa, 0.0)
    return (n_pairs * kappa + 20.0 * 0.5) / (n_pairs + 20.0)


def _typical_sigma(points: _Points, sigma: FloatArray, n_families: int) -> FloatArray:
    total = sums(points.family, sigma, n_families)
    return np.maximum(
        total / np.maximum(np.bincount(points.family, minlength=n_families), 1), 1e-30
    )


def _caps(evidence: Evidence, z: FloatArray) -> FloatArray:
    """Return per family the largest standardised residual that counts, in sigmas.

    A single wild site moves spread and map statistics far; there the cap is the normal quantile of
    the rate of wild values (seen in the baseline, with half a value for those not yet seen), so
    that one wild value is no rarer than it is. A mean of many sites hardly moves: cap 6.
    """
    from scipy.stats import norm

    n_families = evidence.n_families
    family = evidence.cell_family
    base = ~evidence.monitoring
    n = np.bincount(family[base], minlength=n_families)
    wild = sums(family[base], np.abs(z[base]) > 4.0, n_families)
    rate = np.clip((wild + 0.5) / (n + 1.0), 1e-4, 0.05)
    cap = norm.isf(rate / 2.0)
    soft = np.array([statistic_class(name) != "mean" for name in evidence.family_statistic()])
    return np.where(soft, np.clip(cap, 2.0, 4.0), 6.0)


def _family_correlation(evidence: Evidence, z: FloatArray) -> FloatArray:
    """Return the correlation of a lot's clipped mean residual between families, shape (F, F).

    Correlations under three standard errors count as none; the matrix is made positive definite.
    """
    n_families = evidence.n_families
    family = evidence.cell_family
    base = ~evidence.monitoring
    use = base if base.sum() >= 30 * n_families else np.ones(len(z), dtype=bool)
    _, lot = np.unique(evidence.lot[use], return_inverse=True)
    n_lots = int(lot.max(initial=-1)) + 1
    key = lot * n_families + family[use]
    size = n_lots * n_families
    count = np.bincount(key, minlength=size).reshape(n_lots, n_families)
    total = sums(key, np.clip(z[use], -_CLIP, _CLIP), size).reshape(n_lots, n_families)
    seen = (count > 0).astype(float)
    mean = total / np.maximum(count, 1)
    mean = mean - mean.sum(0) / np.maximum(seen.sum(0), 1.0) * seen
    mean *= seen
    both = seen.T @ seen
    cross = mean.T @ mean
    power = (mean**2).T @ seen
    r = cross / np.sqrt(np.maximum(power * power.T, 1e-300))
    r = np.where((np.abs(r) * np.sqrt(both) > 3.0) & (both >= 20), np.clip(r, -0.95, 0.95), 0.0)
    np.fill_diagonal(r, 1.0)
    values, vectors = np.linalg.eigh(r)
    fixed = (vectors * np.maximum(values, 1e-3)) @ vectors.T
    root = np.sqrt(np.diag(fixed))
    return fixed / np.outer(root, root)

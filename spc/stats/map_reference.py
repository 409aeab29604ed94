"""The baseline that a wafer map is compared with: mean map, covariance of its terms, the rest.

Estimated from the maps of known-good wafers, one point a wafer or one point a lot; the distance of
later maps from it is in `spc.stats.map_distance`.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from spc.stats.map_terms import (
    DEFAULT_TERMS,
    Array,
    MapBasis,
    coordinate_free_basis,
    map_terms,
    separable_terms,
)

_LEAST_SPARE = 3  # degrees of freedom that T2 must be left with


@dataclass(frozen=True)
class MapReference:
    """Baseline of maps on one layout.

    mean_map : (n_sites,) mean baseline map, value unit; NaN at sites outside ``sites``.
    sites : (n_sites,) bool, sites that at least half of the baseline maps have.
    basis : terms fitted to deviations, on the kept sites.
    terms : names charted by T2 (no mean); empty when only site deviations are judged.
    covariance : (p, p) of the terms of one baseline point; within : (p, p) of one wafer in a lot.
    off_variance, off_within : expected sum of squares off the terms, likewise (squared unit).
    off_df : effective degrees of freedom of that sum (Box).
    mean_inverse_n : mean of 1/(wafers a point) over the baseline.
    n_points : baseline points. notes : what was given up and why.
    """

    mean_map: Array
    sites: np.ndarray
    basis: MapBasis
    terms: tuple[str, ...]
    covariance: Array
    within: Array
    off_variance: float
    off_within: float
    off_df: float
    mean_inverse_n: float
    n_points: int
    notes: tuple[str, ...]

    @property
    def residual_sigma(self) -> float:
        """Sigma of a site about its map in one baseline point, value unit."""
        spare = self.basis.n_sites - len(self.basis.names)
        return float(np.sqrt(self.off_variance / spare)) if spare else float("nan")

    @property
    def expected_mean_square(self) -> float:
        """Expected mean square over sites of a point's deviation, level out (squared unit)."""
        off = self.off_variance
        if self.terms:
            shape = _level_free(self.basis)
            off += float(np.trace(shape @ self.covariance @ shape.T))
        return off / self.basis.n_sites


def map_reference(
    maps: ArrayLike,
    x_mm: ArrayLike,
    y_mm: ArrayLike,
    radius_mm: float,
    terms: tuple[str, ...] | list[str] | int = DEFAULT_TERMS,
    *,
    groups: ArrayLike | None = None,
) -> MapReference:
    """Baseline from the maps of known-good wafers.

    Parameters
    ----------
    maps : (n_wafers, n_sites) values, NaN where missing. Leave wild wafers out.
    x_mm, y_mm, radius_mm, terms : as for `wafer_map.fit_maps`.
    groups : (n_wafers,) integer codes 0, 1, ... of the lot when a plotted point is a lot; None
        when it is a wafer.

    Raises
    ------
    ValueError: fewer than three points, no variation between them, or no site kept.
    """
    return _reference(maps, map_terms(x_mm, y_mm, radius_mm, terms), groups)


def site_reference(maps: ArrayLike, *, groups: ArrayLike | None = None) -> MapReference:
    """As `map_reference` for sites without coordinates: columns are sites by name."""
    data = np.atleast_2d(np.asarray(maps, float))
    return _reference(data, coordinate_free_basis(data.shape[1]), groups)


def map_rows(maps: ArrayLike, n_sites: int) -> Array:
    data = np.atleast_2d(np.asarray(maps, float))
    if data.ndim != 2 or data.shape[1] != n_sites:
        raise ValueError(f"maps {data.shape} do not match a layout of {n_sites} sites")
    return np.where(np.isfinite(data), data, np.nan)


def point_codes(groups: ArrayLike | None, n_rows: int) -> np.ndarray:
    if groups is None:
        return np.arange(n_rows)
    codes = np.asarray(groups)
    if codes.shape != (n_rows,) or codes.dtype.kind not in "iu" or (n_rows and codes.min() < 0):
        raise ValueError(f"groups must be {n_rows} integer codes from 0, one a wafer")
    return codes


def fit_present(deviation: Array, design: Array) -> tuple[Array, Array, np.ndarray]:
    """Fits with missing sites: coefficients, inverse normal matrices, estimable."""
    present = np.isfinite(deviation)
    weights = present.astype(float)
    p = design.shape[1]
    q, r = np.linalg.qr(design)
    products = (q[:, :, None] * q[:, None, :]).reshape(-1, p * p)
    normal = (weights @ products).reshape(-1, p, p)
    estimable = np.linalg.eigvalsh(normal)[:, 0] > 1e-9
    inverse = np.linalg.inv(np.where(estimable[:, None, None], normal, np.eye(p)))
    back = np.linalg.inv(r)
    inverse = np.einsum("ik,wkl,jl->wij", back, inverse, back)
    coefficients = np.einsum("wkl,wl->wk", inverse, np.where(present, deviation, 0.0) @ design)
    coefficients[~estimable] = np.nan
    return coefficients, inverse, estimable


def _filled(data: Array, basis: MapBasis) -> tuple[Array, Array]:
    """Mean map (n_sites,) and the maps with missing sites filled from their own fit."""
    missing = np.isnan(data)
    level = np.nanmean(data, axis=1, keepdims=True)
    mean_map = np.nanmean(data - level, axis=0) + level.mean()
    full = data
    for _ in range(25 if missing.any() else 1):
        coefficients, _, _ = fit_present(data - mean_map, basis.design)
        full = np.where(missing, mean_map + coefficients @ basis.design.T, data)
        mean_map = full.mean(axis=0)
    return mean_map, full


def _reference(maps: ArrayLike, basis: MapBasis, groups: ArrayLike | None) -> MapReference:
    data = map_rows(maps, basis.n_sites)
    codes = point_codes(groups, len(data))
    notes = [d.reason for d in basis.dropped]
    sites = np.isfinite(data).mean(axis=0) >= 0.5 if len(data) else np.zeros(basis.n_sites, bool)
    if not sites.any():
        raise ValueError("no site is present in half of the baseline maps")
    if not sites.all():
        notes.append(f"{(~sites).sum()} sites are missing in most baseline maps and are left out")
        basis = separable_terms(basis.names, basis.design[sites], 1e-3)
    _, _, estimable = fit_present(data[:, sites], basis.design)
    kept, codes = data[estimable][:, sites], codes[estimable]
    codes = np.unique(codes, return_inverse=True)[1]
    n_points = int(codes.max()) + 1 if codes.size else 0
    if n_points < 3:
        raise ValueError(f"{n_points} baseline points with enough sites: a map needs at least 3")
    wafer_mean, full = _filled(kept, basis)
    # Each point counts once in the mean map, however many wafers it has.
    counts = np.bincount(codes).astype(float)
    sums = np.zeros((n_points, full.shape[1]))
    np.add.at(sums, codes, full - wafer_mean)
    mean_map = wafer_mean + (sums / counts[:, None]).mean(axis=0)
    found = (mean_map, sites, notes, float(np.isfinite(kept).sum(axis=1).mean()))
    return _estimate(full - mean_map, codes, counts, basis, found)


def _estimate(
    deviation: Array,
    codes: np.ndarray,
    counts: Array,
    basis: MapBasis,
    found: tuple[Array, np.ndarray, list[str], float],
) -> MapReference:
    mean_map, sites, notes, n_present = found
    n_points = counts.size
    nu = n_points - 1
    coefficients, _, _ = fit_present(deviation, basis.design)
    index = [j for j, name in enumerate(basis.names) if name != "mean"]
    point_terms = _group_means(coefficients[:, index], codes, counts)
    covariance = point_terms.T @ point_terms / nu
    if index and (nu - len(index) + 1 < _LEAST_SPARE or not _regular(covariance)):
        notes.append(
            f"{n_points} baseline points are too few (or too alike) for the covariance of "
            f"{len(index)} map terms: site deviations are judged without terms"
        )
        basis = MapBasis(("mean",), np.ones((basis.n_sites, 1)), basis.dropped, np.ones(1))
        index = []
        coefficients, _, _ = fit_present(deviation, basis.design)
        covariance = np.zeros((0, 0))
    rest = deviation - coefficients @ basis.design.T
    # Filled sites have no residual of their own: give back the share that they take away.
    spare_sites = basis.n_sites - len(basis.names)
    rest = rest * np.sqrt(spare_sites / max(n_present - len(basis.names), 0.5))
    point_rest = _group_means(rest, codes, counts)
    off_variance, off_df = _off_terms(point_rest, nu, basis)
    if not index and off_variance == 0.0:
        raise ValueError("the baseline maps do not differ: there is no variation to measure with")
    spare = codes.size - n_points
    scatter = coefficients[:, index] - _group_means(coefficients[:, index], codes, counts)[codes]
    loose = rest - point_rest[codes]
    inverse_n = float(np.mean(1.0 / counts))
    within = scatter.T @ scatter / spare if spare else np.zeros_like(covariance)
    off_within = float((loose**2).sum() / spare) if spare else 0.0
    full_map = np.full(sites.size, np.nan)
    full_map[sites] = mean_map
    return MapReference(
        full_map,
        sites,
        basis,
        tuple(basis.names[j] for j in index),
        covariance,
        _limited(within, covariance, inverse_n),
        off_variance,
        min(off_within, 0.95 * off_variance / inverse_n),
        off_df,
        inverse_n,
        n_points,
        tuple(notes),
    )


def _group_means(values: Array, codes: np.ndarray, counts: Array) -> Array:
    total = np.zeros((counts.size, values.shape[1]))
    np.add.at(total, codes, values)
    return np.asarray(total / counts[:, None])


def _regular(covariance: Array) -> bool:
    sd = np.sqrt(np.diag(covariance))
    if not (sd > 0).all():
        return False
    return bool(np.linalg.eigvalsh(covariance / np.outer(sd, sd))[0] > 1e-9)


def _limited(within: Array, covariance: Array, inverse_n: float) -> Array:
    """The within-lot covariance, cut so that lots of any size keep a positive covariance."""
    if not covariance.size or not within.any():
        return within
    root = np.linalg.cholesky(covariance)
    flat = np.linalg.solve(root, np.linalg.solve(root, within).T).T
    size, axes = np.linalg.eigh(0.5 * (flat + flat.T))
    axes = root @ axes
    return np.asarray((axes * np.clip(size, 0.0, 0.95 / inverse_n)) @ axes.T)


def _off_terms(rest: Array, nu: int, basis: MapBasis) -> tuple[float, float]:
    """Expected sum of squares off the terms, and its effective degrees of freedom (Box)."""
    spare = basis.n_sites - len(basis.names)
    total = float((rest**2).sum() / nu)
    if spare == 0 or total <= 0.0:
        return 0.0, 0.0
    gram = rest @ rest.T
    squared = float((gram**2).sum() / nu**2)
    if nu < 2:
        return total, float(spare)
    unbiased = nu**2 / ((nu - 1) * (nu + 2)) * (squared - total**2 / nu)
    effective = total**2 / unbiased if unbiased > 0 else float(spare)
    return total, float(np.clip(effective, 1.0, spare))


def _level_free(basis: MapBasis) -> Array:
    index = [j for j, name in enumerate(basis.names) if name != "mean"]
    shape = basis.design[:, index]
    return np.asarray(shape - shape.mean(axis=0))

"""Wafer maps: least-squares and robust fits of map terms, many wafers on one layout at once.

The terms and their units are in `spc.stats.map_terms`, the distance of a map from its baseline in
`spc.stats.map_distance`; both
are offered from here.

Robust fits are M-estimates by iteratively reweighted least squares (Huber 1981, Robust Statistics;
Beaton & Tukey 1974, Technometrics 16:147-185), started from a least-absolute fit, then a plain
least-squares fit without the sites found to be flyers (reweighted least squares, Rousseeuw & Leroy
1987, Robust Regression and Outlier Detection). A wafer without flyers keeps its least-squares fit.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike
from scipy import stats

from spc.stats.map_distance import MapDistance, map_distance, site_distance
from spc.stats.map_reference import MapReference, map_reference, site_reference
from spc.stats.map_terms import (
    DEFAULT_TERMS,
    Array,
    DroppedTerm,
    MapBasis,
    coordinate_free_basis,
    map_terms,
    terms_of_degree,
    wafer_radius,
)

__all__ = [
    "DEFAULT_TERMS",
    "DroppedTerm",
    "MapBasis",
    "MapDistance",
    "MapFit",
    "MapReference",
    "RobustFit",
    "coordinate_free_basis",
    "fit_basis",
    "fit_maps",
    "map_distance",
    "map_reference",
    "map_terms",
    "site_distance",
    "site_reference",
    "terms_of_degree",
    "wafer_radius",
]

_MAD_OF_NORMAL = 0.6744897501960817  # median of |z|, z standard normal
_SINGULAR = 1e-9


@dataclass(frozen=True)
class RobustFit:
    """How flyer sites are held off.

    loss : ``tukey`` (bisquare) or ``huber``.
    tuning : turning point in sigmas; None takes the usual 4.685 (Tukey), 1.345 (Huber), each 95 %
        efficient on normal data.
    flyer_sigmas : a site whose residual is beyond this many scales may be a flyer.
    flyer_p : it is one if, left out, it is also beyond the t quantile of this tail probability of
        the fit to the other sites. Guards layouts of few sites, whose own scale is very unsure;
        not used when the scale is given.
    scale : residual sigma in the value's unit, scalar or (n_wafers,), when it is known from a
        baseline; None takes the median absolute residual of each wafer. With few sites a known
        scale finds flyers far better.
    refit : True (default) ends with least squares without the flyers, False with the M-estimate.
    """

    loss: str = "tukey"
    tuning: float | None = None
    flyer_sigmas: float = 5.0
    flyer_p: float = 1e-4
    scale: float | Array | None = None
    refit: bool = True
    max_iterations: int = 100

    def __post_init__(self) -> None:
        if self.loss not in ("tukey", "huber"):
            raise ValueError(f"loss {self.loss!r}: choose 'tukey' or 'huber'")
        if self.flyer_sigmas <= 0 or (self.tuning is not None and self.tuning <= 0):
            raise ValueError("tuning and flyer_sigmas must be positive")

    @property
    def turning_point(self) -> float:
        return self.tuning or (4.685 if self.loss == "tukey" else 1.345)


@dataclass(frozen=True)
class MapFit:
    """Map terms of many wafers.

    names : the fitted terms; the columns of ``coefficients`` and ``standard_errors``, both
        (n_wafers, n_terms), in the value's unit.
    residuals : (n_wafers, n_sites), value minus fitted map; NaN where the site is missing.
    residual_ss, df, n_sites : (n_wafers,) residual sum of squares (squared unit), its degrees of
        freedom, and the sites used. Without flyers.
    flyers : (n_wafers, n_sites) bool.
    dropped : terms that the layout cannot tell apart, with the reason.
    Wafers with too few sites for the terms have NaN coefficients; ``estimable`` (n_wafers,) is
    False there.
    """

    names: tuple[str, ...]
    coefficients: Array
    standard_errors: Array
    residuals: Array
    residual_ss: Array
    df: Array
    n_sites: Array
    flyers: np.ndarray
    dropped: tuple[DroppedTerm, ...]
    estimable: np.ndarray

    @property
    def residual_sigma(self) -> Array:
        """(n_wafers,) residual standard deviation; NaN without degrees of freedom."""
        df = np.where(self.df > 0, self.df, np.nan)
        return np.asarray(np.sqrt(self.residual_ss / df))

    def term(self, name: str) -> Array:
        """(n_wafers,) coefficients of one term; KeyError with the reason when it was dropped."""
        if name in self.names:
            return self.coefficients[:, self.names.index(name)]
        reasons = [d.reason for d in self.dropped if d.name == name]
        raise KeyError(reasons[0] if reasons else f"map term {name!r} was not fitted")


def fit_maps(
    values: ArrayLike,
    x_mm: ArrayLike,
    y_mm: ArrayLike,
    radius_mm: float,
    terms: tuple[str, ...] | list[str] | int = DEFAULT_TERMS,
    *,
    robust: RobustFit | None = None,
) -> MapFit:
    """Fit map terms to wafers measured on one site layout.

    Parameters
    ----------
    values : (n_wafers, n_sites) or (n_sites,), any unit; NaN is a missing site.
    x_mm, y_mm : (n_sites,) site places from the wafer centre, mm.
    radius_mm : wafer radius, mm.
    terms : names or a radial degree, see `map_terms`.
    robust : None for least squares.

    Returns
    -------
    MapFit. The ``mean`` term is the mean over the whole disc of the fitted map, not the mean of
    the sites.

    Raises
    ------
    ValueError: shapes do not match, coordinates are missing or off the wafer.
    """
    return fit_basis(values, map_terms(x_mm, y_mm, radius_mm, terms), robust=robust)


def fit_basis(values: ArrayLike, basis: MapBasis, *, robust: RobustFit | None = None) -> MapFit:
    """As `fit_maps`, on a basis made before (one layout, many calls)."""
    data = np.atleast_2d(np.asarray(values, float))
    if data.ndim != 2 or data.shape[1] != basis.n_sites:
        raise ValueError(
            f"values {data.shape} do not match a layout of {basis.n_sites} sites: "
            "give one row a wafer, one column a site"
        )
    present = np.isfinite(data)
    filled = np.where(present, data, 0.0)
    # Orthonormal columns keep the normal equations as well conditioned as the layout allows.
    q, r = np.linalg.qr(basis.design)
    weights = present.astype(float)
    flyers = np.zeros_like(present)
    if robust is not None:
        weights, flyers = _robust_weights(filled, present, q, robust)
    return _finish(basis, filled, present, weights, (q, r), flyers)


def _solve(y: Array, weights: Array, q: Array) -> tuple[Array, Array, np.ndarray]:
    """Weighted fits in orthonormal columns: coefficients, inverse normal matrices, estimable."""
    n_wafers, p = y.shape[0], q.shape[1]
    products = (q[:, :, None] * q[:, None, :]).reshape(q.shape[0], p * p)
    normal = (weights @ products).reshape(n_wafers, p, p)
    size = np.maximum(weights.max(axis=1, initial=0.0), 1e-300)
    estimable = np.linalg.eigvalsh(normal / size[:, None, None])[:, 0] > _SINGULAR
    safe = np.where(estimable[:, None, None], normal, np.eye(p))
    inverse = np.linalg.inv(safe)
    coefficients = np.einsum("wkl,wl->wk", inverse, (weights * y) @ q)
    return coefficients, inverse, estimable


def _leverage(weights: Array, q: Array, inverse: Array) -> Array:
    return weights * np.einsum("sk,wkl,sl->ws", q, inverse, q)


def _row_median(values: Array, keep: np.ndarray) -> Array:
    """Median over kept entries of each row; 0 for an empty row."""
    ordered = np.sort(np.where(keep, values, np.inf), axis=1)
    count = keep.sum(axis=1)
    rows = np.arange(len(values))
    low, high = np.maximum((count - 1) // 2, 0), np.minimum(count // 2, values.shape[1] - 1)
    middle = np.where(count > 0, 0.5 * (ordered[rows, low] + ordered[rows, high]), 0.0)
    return np.asarray(middle)


def _robust_weights(
    y: Array, present: np.ndarray, q: Array, options: RobustFit
) -> tuple[Array, np.ndarray]:
    """IRLS weights (n_wafers, n_sites) and flyers; 1 and none where sites are too few."""
    base = present.astype(float)
    spare = present.sum(axis=1) - q.shape[1]
    # With fewer than three spare sites all residuals of a wafer are tied together.
    usable = spare >= (1 if options.scale is not None else 3)
    _, inverse, estimable = _solve(y, base, q)
    usable &= estimable
    shrink = np.sqrt(np.maximum(1.0 - _leverage(base, q, inverse), 1e-6))
    # A site that the terms fit exactly (leverage 1) can be neither judged nor used for the scale.
    judged = present & (shrink > 1e-2)
    size = np.maximum(np.abs(y).max(axis=1), 1e-300)
    weights = base
    for _ in range(20):  # least absolute values, the robust start
        coefficients, _, _ = _solve(y, weights, q)
        residual = np.abs(y - coefficients @ q.T)
        floor = np.maximum(1e-3 * _row_median(residual, judged), 1e-12 * size)
        weights = base / np.maximum(residual, floor[:, None])
    weights = _reweigh(y, base, q, (weights, judged, shrink, size), options)
    coefficients, _, _ = _solve(y, weights, q)
    loose = np.abs(y - coefficients @ q.T)
    scale = _scale(loose, judged, shrink, size, options)
    flyers = judged & usable[:, None] & (loose > options.flyer_sigmas * scale[:, None])
    # Never throw out so many that the terms cannot be fitted with one site to spare.
    too_many = flyers.sum(axis=1) > np.maximum(spare // 2, 1)
    flyers &= ~too_many[:, None]
    if options.scale is None and flyers.any():
        flyers &= _confirmed(y, base, q, flyers, options.flyer_p)
    if options.refit:
        return base * ~flyers, flyers
    return np.where(usable[:, None], weights, base), flyers


def _confirmed(y: Array, base: Array, q: Array, flyers: np.ndarray, tail: float) -> np.ndarray:
    """Sites beyond the t quantile of the fit without the suspected flyers."""
    rest = base * ~flyers
    coefficients, inverse, _ = _solve(y, rest, q)
    residual = y - coefficients @ q.T
    df = np.maximum(rest.sum(axis=1) - q.shape[1], 1.0)
    sigma = np.sqrt((rest * residual**2).sum(axis=1) / df)
    spread = np.sqrt(1.0 + np.einsum("sk,wkl,sl->ws", q, inverse, q))
    bound = stats.t.isf(tail, df) * sigma
    return np.abs(residual) > spread * bound[:, None]


def _scale(
    residual: Array, judged: np.ndarray, shrink: Array, size: Array, options: RobustFit
) -> Array:
    if options.scale is not None:
        return np.broadcast_to(np.asarray(options.scale, float), size.shape)
    scaled = residual / shrink
    return np.maximum(_row_median(scaled, judged) / _MAD_OF_NORMAL, 1e-12 * size)


def _reweigh(
    y: Array,
    base: Array,
    q: Array,
    state: tuple[Array, np.ndarray, Array, Array],
    options: RobustFit,
) -> Array:
    weights, judged, shrink, size = state
    turn = options.turning_point
    previous = np.zeros((y.shape[0], q.shape[1]))
    for _ in range(options.max_iterations):
        coefficients, _, _ = _solve(y, weights, q)
        residual = np.abs(y - coefficients @ q.T)
        scale = _scale(residual, judged, shrink, size, options)
        u = residual / np.maximum(turn * scale, 1e-300)[:, None]
        if options.loss == "tukey":
            weights = base * np.maximum(1.0 - u**2, 0.0) ** 2
        else:
            weights = base / np.maximum(u, 1.0)
        # A wafer whose weights all vanish keeps the plain fit.
        weights = np.where((weights > 1e-6).sum(axis=1)[:, None] > q.shape[1], weights, base)
        if np.all(np.abs(coefficients - previous) <= 1e-10 * size[:, None]):
            break
        previous = coefficients
    return weights


def _finish(
    basis: MapBasis,
    y: Array,
    present: np.ndarray,
    weights: Array,
    qr: tuple[Array, Array],
    flyers: np.ndarray,
) -> MapFit:
    q, r = qr
    coefficients, inverse, estimable = _solve(y, weights, q)
    residuals = np.where(present, y - coefficients @ q.T, np.nan)
    residual_ss = (weights * np.where(present, residuals, 0.0) ** 2).sum(axis=1)
    used = (present & ~flyers).sum(axis=1)
    df = used - q.shape[1]
    back = np.linalg.inv(r)
    sigma2 = np.where(df > 0, residual_ss / np.maximum(df, 1), np.nan)
    spread = np.einsum("ik,wkl,il->wi", back, inverse, back)
    unknown = ~estimable
    coefficients = coefficients @ back.T
    coefficients[unknown] = np.nan
    residuals[unknown] = np.nan
    errors = np.sqrt(spread * sigma2[:, None])
    errors[unknown] = np.nan
    return MapFit(
        basis.names,
        coefficients,
        errors,
        residuals,
        np.where(unknown, np.nan, residual_ss),
        np.where(unknown, 0, np.maximum(df, 0)).astype(float),
        used.astype(float),
        flyers,
        basis.dropped,
        estimable,
    )

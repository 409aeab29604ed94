"""Linear overlay model: wafer terms, field terms, residual.

    dx = Tx + Sx X - Rx Y + mx u - rx v
    dy = Ty + Sy Y + Ry X + my v + ry u

dx, dy: overlay error in nm. X, Y: centre of the field on the wafer; u, v: place in the field; mm.
Scales (S, m) are in ppm = nm/mm, rotations (R, r) in microradian = nm/mm; rotation is
counter-clockwise when both axes agree. The model is linear least squares in each axis (Perloff
1978, IEEE J. Solid-State Circuits SC-13:436-444; Armitage & Kirk 1988, Proc. SPIE 921:207-222; both
from memory).

Terms that a layout cannot estimate are never given as zero: they are NaN, with the reason. A layout
that mixes wafer and field terms is refused; one that lacks field terms alone (one mark a field)
is fitted in the wafer terms, and says so.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

Array = NDArray[np.float64]

# Column order of the two axes: constant, own-axis wafer scale, wafer rotation, field scale,
# field rotation.
X_TERMS = ("translation-x", "scale-x", "rotation-x", "field-scale-x", "field-rotation-x")
Y_TERMS = ("translation-y", "scale-y", "rotation-y", "field-scale-y", "field-rotation-y")
WAFER_TERMS = (*X_TERMS[:3], *Y_TERMS[:3])
FIELD_TERMS = (*X_TERMS[3:], *Y_TERMS[3:])
OVERLAY_TERMS = (
    "translation-x",
    "translation-y",
    "scale-x",
    "scale-y",
    "rotation-x",
    "rotation-y",
    "field-scale-x",
    "field-scale-y",
    "field-rotation-x",
    "field-rotation-y",
)
TERM_UNITS = {
    name: "nm" if "translation" in name else "urad" if "rotation" in name else "ppm"
    for name in OVERLAY_TERMS
}

# A column explained by the others to better than this share of its length is tied to them: stage
# rounding of a micrometre over a field of some millimetres is below it.
_TIED = 1e-3


@dataclass(frozen=True)
class OverlayLayout:
    """What a layout of marks can estimate.

    designs : (n_marks, k) for x and for y, over the estimable terms of each axis.
    terms : names of those terms, x and y.
    dropped : term -> why it cannot be estimated here.
    """

    designs: tuple[Array, Array]
    terms: tuple[tuple[str, ...], tuple[str, ...]]
    dropped: dict[str, str]

    @property
    def n_marks(self) -> int:
        return int(self.designs[0].shape[0])


@dataclass(frozen=True)
class OverlayFit:
    """Overlay terms of many wafers; every array leads with n_wafers.

    terms, standard_errors : (n_wafers, 10) in the order of OVERLAY_TERMS, units TERM_UNITS; NaN
        where a term cannot be estimated (`dropped` says why) or the wafer has too few marks.
    residual_x, residual_y : (n_wafers, n_marks) nm.
    residual_sigma_x, residual_sigma_y : (n_wafers,) nm, residual sd with n - (terms of the axis)
        degrees of freedom; residual_sigma: both axes pooled. NaN without degrees of freedom.
    df : (n_wafers, 2) residual degrees of freedom by axis.
    raw_m3s, corrected_m3s : (n_wafers, 2) |mean| + 3 sd of the readings and of the residuals by
        axis, nm (n - 1 divisor).
    n_marks : (n_wafers, 2) marks read by axis.
    dropped : term -> reason.
    estimable : (n_wafers,) bool.
    """

    terms: Array
    standard_errors: Array
    residual_x: Array
    residual_y: Array
    residual_sigma_x: Array
    residual_sigma_y: Array
    residual_sigma: Array
    df: Array
    raw_m3s: Array
    corrected_m3s: Array
    n_marks: Array
    dropped: dict[str, str]
    estimable: np.ndarray

    def term(self, name: str) -> Array:
        """(n_wafers,) one term; KeyError for an unknown name."""
        if name not in OVERLAY_TERMS:
            raise KeyError(f"overlay term {name!r} is not known; known are {OVERLAY_TERMS}")
        return self.terms[:, OVERLAY_TERMS.index(name)]

    @property
    def residual_3sigma(self) -> Array:
        """(n_wafers, 2) three residual sds by axis, nm."""
        return 3.0 * np.stack([self.residual_sigma_x, self.residual_sigma_y], axis=1)


def field_centres(
    x_mm: ArrayLike, y_mm: ArrayLike, field_x_mm: ArrayLike, field_y_mm: ArrayLike
) -> tuple[Array, Array]:
    """Field centres (X, Y) in mm from the place of each mark on the wafer and in its field."""
    x, y, u, v = (np.asarray(a, float) for a in (x_mm, y_mm, field_x_mm, field_y_mm))
    return x - u, y - v


def overlay_layout(x: ArrayLike, y: ArrayLike, u: ArrayLike, v: ArrayLike) -> OverlayLayout:
    """What the marks at field centres (x, y) and places in the field (u, v) can estimate.

    Parameters
    ----------
    x, y : (n_marks,) field centres from the wafer centre, mm.
    u, v : (n_marks,) places in the field from its centre, mm.

    Raises
    ------
    ValueError: shapes differ, a place is missing, or wafer terms cannot be separated (from each
    other or from the field terms); the message names the terms.
    """
    places = [np.atleast_1d(np.asarray(a, float)) for a in (x, y, u, v)]
    if len({a.shape for a in places}) != 1 or places[0].ndim != 1 or places[0].size == 0:
        raise ValueError(f"x, y, u, v must be one length; got {[a.shape for a in places]}")
    missing = ~np.isfinite(np.column_stack(places)).all(axis=1)
    if missing.any():
        raise ValueError(
            f"mark {int(np.flatnonzero(missing)[0])} has no place: overlay needs x_mm, y_mm, "
            "field_x_mm and field_y_mm of every mark"
        )
    big_x, big_y, u, v = places
    one = np.ones_like(big_x)
    designs, names, dropped = [], [], {}
    for all_names, columns in (
        (X_TERMS, (one, big_x, -big_y, u, -v)),
        (Y_TERMS, (one, big_y, big_x, v, u)),
    ):
        design = np.column_stack(columns)
        keep, why = _separable(design, all_names)
        designs.append(np.ascontiguousarray(design[:, keep]))
        names.append(tuple(all_names[k] for k in keep))
        dropped.update(why)
    return OverlayLayout((designs[0], designs[1]), (names[0], names[1]), dropped)


def _separable(design: Array, names: tuple[str, ...]) -> tuple[list[int], dict[str, str]]:
    """Columns that can be told apart; loops over the five terms of one axis."""
    where = f"on this layout of {design.shape[0]} marks"
    keep = [0]
    for k in (1, 2):
        tie = _tie(design[:, keep], design[:, k])
        if tie is not None:
            with_whom = " and ".join(names[keep[j]] for j in tie)
            raise ValueError(f"{names[k]} cannot be told from {with_whom} {where}")
        keep.append(k)
    dropped = {}
    for k in (3, 4):
        tie = _tie(design[:, keep], design[:, k])
        if tie is None:
            keep.append(k)
            continue
        tied = [keep[j] for j in tie]
        with_whom = " and ".join(names[j] for j in tied)
        # A column that is constant over the marks (all at one place of their fields) only moves
        # the translation: the field term is then unknown, the wafer terms still mean something.
        if any(j in (1, 2) for j in tied):
            raise ValueError(
                f"{names[k]} cannot be told from {with_whom} {where}: the place in the field "
                "moves with the place of the field"
            )
        if tied and tied != [0]:
            dropped[names[k]] = f"{names[k]} cannot be told from {with_whom} {where}"
        else:
            dropped[names[k]] = (
                f"{names[k]} cannot be estimated {where}: all marks lie at one place of their "
                "fields along that axis"
            )
    return keep, dropped


def _tie(base: Array, column: Array) -> list[int] | None:
    """Indices of the base columns that make up ``column``; None when it stands on its own."""
    spread = column - column.mean()
    length = float(np.sqrt(np.mean(column**2)))
    if length == 0.0 or float(np.sqrt(np.mean(spread**2))) < _TIED * length:
        return [0]
    share, *_ = np.linalg.lstsq(base, column, rcond=None)
    left = float(np.sqrt(np.mean((column - base @ share) ** 2)))
    if left > _TIED * float(np.sqrt(np.mean(spread**2))):
        return None
    size = np.abs(share) * np.sqrt(np.mean(base**2, axis=0))
    part = [int(j) for j in np.flatnonzero(size > 10 * _TIED * length)]
    return [j for j in part if j != 0] or part


def fit_overlay(
    x: ArrayLike, y: ArrayLike, u: ArrayLike, v: ArrayLike, dx: ArrayLike, dy: ArrayLike
) -> OverlayFit:
    """Overlay terms and residuals of wafers measured on one layout of marks.

    Parameters
    ----------
    x, y : (n_marks,) field centres from the wafer centre, mm (`field_centres`).
    u, v : (n_marks,) places in the field from its centre, mm.
    dx, dy : (n_wafers, n_marks) or (n_marks,) overlay errors, nm; NaN is a missing mark, and each
        axis may miss its own.

    Returns
    -------
    OverlayFit.

    Raises
    ------
    ValueError: as `overlay_layout`; or dx, dy do not match the layout.
    """
    return fit_layout(overlay_layout(x, y, u, v), dx, dy)


def fit_layout(layout: OverlayLayout, dx: ArrayLike, dy: ArrayLike) -> OverlayFit:
    """As `fit_overlay`, on a layout examined before (one layout, many calls)."""
    data = [np.atleast_2d(np.asarray(a, float)) for a in (dx, dy)]
    if data[0].shape != data[1].shape or data[0].shape[1] != layout.n_marks:
        raise ValueError(
            f"dx {data[0].shape} and dy {data[1].shape} must both be (n_wafers, {layout.n_marks})"
        )
    n_wafers = len(data[0])
    terms = np.full((n_wafers, len(OVERLAY_TERMS)), np.nan)
    errors = terms.copy()
    axes = []
    for values, design, names in zip(data, layout.designs, layout.terms, strict=True):
        axis = _fit_axis(values, design)
        columns = [OVERLAY_TERMS.index(name) for name in names]
        terms[:, columns], errors[:, columns] = axis.coefficients, axis.errors
        axes.append(axis)
    a, b = axes
    df = np.stack([a.df, b.df], axis=1)
    pooled = np.where(df.sum(axis=1) > 0, df.sum(axis=1), np.nan)
    return OverlayFit(
        terms=terms,
        standard_errors=errors,
        residual_x=a.residual,
        residual_y=b.residual,
        residual_sigma_x=a.sigma,
        residual_sigma_y=b.sigma,
        residual_sigma=np.sqrt((a.rss + b.rss) / pooled),
        df=df,
        raw_m3s=np.stack([mean_plus_3sigma(d) for d in data], axis=1),
        corrected_m3s=np.stack([mean_plus_3sigma(c.residual) for c in axes], axis=1),
        n_marks=np.stack([np.isfinite(d).sum(axis=1) for d in data], axis=1).astype(float),
        dropped=dict(layout.dropped),
        estimable=a.estimable & b.estimable,
    )


@dataclass(frozen=True)
class _Axis:
    coefficients: Array
    errors: Array
    residual: Array
    rss: Array
    sigma: Array
    df: Array
    estimable: np.ndarray


def _fit_axis(values: Array, design: Array) -> _Axis:
    """Least squares of one axis, vectorised over wafers with their own missing marks."""
    present = np.isfinite(values)
    weights = present.astype(float)
    k = design.shape[1]
    q, r = np.linalg.qr(design)
    products = (q[:, :, None] * q[:, None, :]).reshape(-1, k * k)
    normal = (weights @ products).reshape(-1, k, k)
    estimable = np.linalg.eigvalsh(normal)[:, 0] > 1e-9
    inverse = np.linalg.inv(np.where(estimable[:, None, None], normal, np.eye(k)))
    in_q = np.einsum("wkl,wl->wk", inverse, np.where(present, values, 0.0) @ q)
    residual = np.where(present & estimable[:, None], values - in_q @ q.T, np.nan)
    rss = np.where(estimable, np.nansum(residual**2, axis=1), np.nan)
    df = np.where(estimable, present.sum(axis=1) - k, 0).astype(float)
    sigma = np.sqrt(np.where(df > 0, rss, np.nan) / np.maximum(df, 1.0))
    back = np.linalg.inv(r)
    spread = np.sqrt(np.einsum("ik,wkl,il->wi", back, inverse, back))
    coefficients = in_q @ back.T
    coefficients[~estimable] = np.nan
    return _Axis(coefficients, spread * sigma[:, None], residual, rss, sigma, df, estimable)


def mean_plus_3sigma(values: ArrayLike) -> Array:
    """|mean| + 3 sd along the last axis (n - 1 divisor), missing values left out; nm in, nm out.

    NaN with fewer than two values. Common practice of the trade, no source.
    """
    data = np.asarray(values, float)
    present = np.isfinite(data)
    n = present.sum(axis=-1)
    filled = np.where(present, data, 0.0)
    mean = filled.sum(axis=-1) / np.maximum(n, 1)
    ss = (np.where(present, data - mean[..., None], 0.0) ** 2).sum(axis=-1)
    out = np.abs(mean) + 3.0 * np.sqrt(ss / np.maximum(n - 1, 1))
    return np.asarray(np.where(n > 1, out, np.nan))


@dataclass(frozen=True)
class SymmetricTerms:
    """Half-sums and half-differences of the two axes; every field is (n_wafers,).

    wafer_scale, wafer_rotation, field_magnification, field_rotation are the means of x and y (ppm,
    urad). asymmetric_scale = (Sx - Sy)/2, asymmetric_magnification = (mx - my)/2,
    asymmetric_rotation = (ry - rx)/2, all of the field but the first. non_orthogonality is the
    whole difference, Ry - Rx (urad).
    """

    wafer_scale: Array
    asymmetric_scale: Array
    wafer_rotation: Array
    non_orthogonality: Array
    field_magnification: Array
    asymmetric_magnification: Array
    field_rotation: Array
    asymmetric_rotation: Array


def symmetric_terms(fit: OverlayFit) -> SymmetricTerms:
    """Symmetric and antisymmetric forms of the fitted terms (NaN where a part is)."""
    sx, sy = fit.term("scale-x"), fit.term("scale-y")
    rx, ry = fit.term("rotation-x"), fit.term("rotation-y")
    mx, my = fit.term("field-scale-x"), fit.term("field-scale-y")
    fx, fy = fit.term("field-rotation-x"), fit.term("field-rotation-y")
    return SymmetricTerms(
        wafer_scale=(sx + sy) / 2,
        asymmetric_scale=(sx - sy) / 2,
        wafer_rotation=(rx + ry) / 2,
        non_orthogonality=ry - rx,
        field_magnification=(mx + my) / 2,
        asymmetric_magnification=(mx - my) / 2,
        field_rotation=(fx + fy) / 2,
        asymmetric_rotation=(fy - fx) / 2,
    )


def axis_terms(symmetric: SymmetricTerms) -> Array:
    """(n_wafers, 8) scale, rotation and field terms of the axes back from the symmetric forms.

    Order: the last eight of OVERLAY_TERMS.
    """
    s = symmetric
    return np.stack(
        [
            s.wafer_scale + s.asymmetric_scale,
            s.wafer_scale - s.asymmetric_scale,
            s.wafer_rotation - s.non_orthogonality / 2,
            s.wafer_rotation + s.non_orthogonality / 2,
            s.field_magnification + s.asymmetric_magnification,
            s.field_magnification - s.asymmetric_magnification,
            s.field_rotation - s.asymmetric_rotation,
            s.field_rotation + s.asymmetric_rotation,
        ],
        axis=1,
    )


def model_overlay(
    terms: ArrayLike, x: ArrayLike, y: ArrayLike, u: ArrayLike, v: ArrayLike
) -> Array:
    """(2, n_wafers, n_marks) modelled dx, dy in nm of terms (n_wafers, 10) at the marks, mm."""
    t = np.atleast_2d(np.asarray(terms, float))
    x, y, u, v = (np.asarray(a, float) for a in (x, y, u, v))
    one = np.ones_like(x)
    named = {name: t[:, [j]] for j, name in enumerate(OVERLAY_TERMS)}
    dx = sum(named[n] * c for n, c in zip(X_TERMS, (one, x, -y, u, -v), strict=True))
    dy = sum(named[n] * c for n, c in zip(Y_TERMS, (one, y, x, v, u), strict=True))
    return np.stack([dx, dy])

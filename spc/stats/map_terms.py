"""Zernike terms of a wafer map on any site layout.

A map term is a Zernike polynomial in (rho, theta), with rho = distance from the wafer centre over
the wafer radius (Noll 1976, J. Opt. Soc. Am. 66:207-211). The terms are orthogonal over the full
disc. Two scales are offered:

``edge`` (default)
    The unit of a coefficient is the unit of the value, read off the wafer: ``tilt-x`` is the
    change of the value from the centre to the edge along +x, ``bowl`` is the edge minus the
    centre (term rho^2 - 1/2, zero mean over the disc), every other term is 1 where it is
    largest on the edge.
``rms``
    Orthonormal over the disc (Noll's scale): the coefficient is the root mean square that the
    term adds to the map of a full disc.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import factorial, sqrt

import numpy as np
from numpy.typing import ArrayLike, NDArray

Array = NDArray[np.float64]

# name -> (n, m); m > 0 is the cosine, m < 0 the sine.
TERM_INDEX: dict[str, tuple[int, int]] = {
    "mean": (0, 0),
    "tilt-x": (1, 1),
    "tilt-y": (1, -1),
    "bowl": (2, 0),
    "astigmatism-0": (2, 2),
    "astigmatism-45": (2, -2),
    "coma-x": (3, 1),
    "coma-y": (3, -1),
    "trefoil-x": (3, 3),
    "trefoil-y": (3, -3),
    "spherical": (4, 0),
    "secondary-astigmatism-0": (4, 2),
    "secondary-astigmatism-45": (4, -2),
    "tetrafoil-0": (4, 4),
    "tetrafoil-22": (4, -4),
}
DEFAULT_TERMS: tuple[str, ...] = ("mean", "tilt-x", "tilt-y", "bowl")

# Wafer radii in mm of the standard diameters 100, 125, 150, 200, 300 mm (SEMI M1, from memory)
# and of the two small ones still run, 51 and 76 mm.
STANDARD_RADII_MM: tuple[float, ...] = (25.4, 38.1, 50.0, 62.5, 75.0, 100.0, 150.0)


@dataclass(frozen=True)
class DroppedTerm:
    """A term left out because the layout cannot tell it from ``same_as``."""

    name: str
    same_as: tuple[str, ...]
    reason: str

    @property
    def confounded(self) -> tuple[str, ...]:
        """The whole set that cannot be told apart, the dropped term last."""
        return (*self.same_as, self.name)


@dataclass(frozen=True)
class MapBasis:
    """The terms that a site layout can estimate.

    ``design`` is (n_sites, n_terms), columns in the order of ``names``; ``dropped`` are the
    asked-for terms that the layout cannot separate. ``variance_inflation`` (n_terms,) is how many
    times the variance of a coefficient exceeds the one it would have were the terms orthogonal on
    the sites.
    """

    names: tuple[str, ...]
    design: Array
    dropped: tuple[DroppedTerm, ...]
    variance_inflation: Array

    @property
    def n_sites(self) -> int:
        return int(self.design.shape[0])


def terms_of_degree(degree: int) -> tuple[str, ...]:
    """Names of all terms up to a radial degree (0 to 4), lowest degree first."""
    if not 0 <= degree <= 4:
        raise ValueError(f"degree {degree}: map terms are defined for degrees 0 to 4")
    return tuple(name for name, (n, _) in TERM_INDEX.items() if n <= degree)


def wafer_radius(x_mm: ArrayLike, y_mm: ArrayLike) -> float:
    """Smallest standard wafer radius (mm) that holds every site; the largest site radius beyond.

    A guess for layouts whose wafer size is not stated. Raises ValueError when no site has
    coordinates.
    """
    reach = np.hypot(np.asarray(x_mm, float), np.asarray(y_mm, float))
    if not np.isfinite(reach).any():
        raise ValueError("no site has coordinates: the wafer radius cannot be told")
    largest = float(np.nanmax(reach))
    return next((r for r in STANDARD_RADII_MM if r >= largest - 1e-9), largest)


def zernike(name: str, rho: Array, theta: Array, scale: str = "edge") -> Array:
    """One term at polar places: rho (radius over wafer radius), theta (radian from +x).

    Same shape as ``rho``. ``scale`` is ``edge`` or ``rms`` (see the module). Raises ValueError
    for an unknown name or scale.
    """
    if name not in TERM_INDEX:
        raise ValueError(f"map term {name!r} is not known; known are {', '.join(TERM_INDEX)}")
    if scale not in ("edge", "rms"):
        raise ValueError(f"scale {scale!r}: choose 'edge' or 'rms'")
    n, m = TERM_INDEX[name]
    order = abs(m)
    radial = np.zeros_like(rho)
    for k in range((n - order) // 2 + 1):
        weight = (-1) ** k * factorial(n - k)
        weight /= factorial(k) * factorial((n + order) // 2 - k) * factorial((n - order) // 2 - k)
        radial = radial + weight * rho ** (n - 2 * k)
    angular = np.cos(order * theta) if m >= 0 else np.sin(order * theta)
    if scale == "rms":
        return sqrt((n + 1) * (1 if m == 0 else 2)) * radial * angular
    # Edge minus centre is 1 for the bowl: half of the usual 2 rho^2 - 1.
    return radial * angular * (0.5 if name == "bowl" else 1.0)


def _names(terms: tuple[str, ...] | list[str] | int) -> tuple[str, ...]:
    names = terms_of_degree(terms) if isinstance(terms, int) else tuple(terms)
    if not names:
        raise ValueError("no map term asked for")
    repeated = sorted({name for name in names if names.count(name) > 1})
    if repeated:
        raise ValueError(f"map term asked for twice: {', '.join(repeated)}")
    # The mean is always fitted: without it a tilt on an off-centre layout would carry the level.
    return names if "mean" in names else ("mean", *names)


def map_terms(
    x_mm: ArrayLike,
    y_mm: ArrayLike,
    radius_mm: float,
    terms: tuple[str, ...] | list[str] | int = DEFAULT_TERMS,
    *,
    scale: str = "edge",
    tolerance: float = 1e-3,
) -> MapBasis:
    """Design matrix of the map terms on a site layout.

    Parameters
    ----------
    x_mm, y_mm : (n_sites,) places of the sites from the wafer centre, mm.
    radius_mm : wafer radius, mm.
    terms : names (see ``TERM_INDEX``) or a radial degree 0 to 4; ``mean`` is added if absent.
    scale : ``edge`` or ``rms`` (see the module).
    tolerance : a term whose part not explained by the terms before it is below this share of its
        own length cannot be told from them. 1e-3 lets stage rounding not hide a tie.

    Returns
    -------
    MapBasis; terms later in the list give way to earlier ones.

    Raises
    ------
    ValueError: coordinates missing, of unequal length, or off the wafer; unknown term.
    """
    x = np.atleast_1d(np.asarray(x_mm, float))
    y = np.atleast_1d(np.asarray(y_mm, float))
    if x.ndim != 1 or x.shape != y.shape or x.size == 0:
        raise ValueError(
            f"x_mm {x.shape} and y_mm {y.shape} must be one-dimensional and of one length"
        )
    if not (np.isfinite(x) & np.isfinite(y)).all():
        where = int(np.flatnonzero(~(np.isfinite(x) & np.isfinite(y)))[0])
        raise ValueError(f"site {where} has no coordinates: use the site distance instead of a map")
    if not radius_mm > 0:
        raise ValueError(f"wafer radius {radius_mm} mm must be positive")
    rho = np.hypot(x, y) / radius_mm
    if rho.max() > 1.001:
        where = int(rho.argmax())
        raise ValueError(
            f"site {where} at ({x[where]:g}, {y[where]:g}) mm is off a wafer of radius "
            f"{radius_mm:g} mm"
        )
    theta = np.arctan2(y, x)
    names = _names(terms)
    return separable_terms(
        names, np.column_stack([zernike(name, rho, theta, scale) for name in names]), tolerance
    )


def separable_terms(names: tuple[str, ...], design: Array, tolerance: float) -> MapBasis:
    """Keep the columns of ``design`` (n_rows, n_terms) that add to those before them.

    The reason of each dropped one names the set it cannot be told from. Loops over terms only.
    """
    kept: list[int] = []
    dropped: list[DroppedTerm] = []
    where = f"on this layout of {design.shape[0]} sites"
    for j, name in enumerate(names):
        column = design[:, j]
        length = float(np.sqrt(np.mean(column**2)))
        if length < tolerance:
            reason = f"{name} is zero at every site {where}"
            dropped.append(DroppedTerm(name, (), reason))
            continue
        if kept:
            base = design[:, kept]
            share, *_ = np.linalg.lstsq(base, column, rcond=None)
            left = float(np.sqrt(np.mean((column - base @ share) ** 2)))
            if left < tolerance * length:
                part = np.abs(share) * np.sqrt(np.mean(base**2, axis=0))
                same = tuple(
                    names[k] for k, p in zip(kept, part, strict=True) if p > 10 * tolerance * length
                )
                reason = f"{name} cannot be told from {' and '.join(same)} {where}"
                dropped.append(DroppedTerm(name, same, reason))
                continue
        kept.append(j)
    kept_design = np.ascontiguousarray(design[:, kept])
    inverse = np.linalg.inv(kept_design.T @ kept_design) if kept else np.zeros((0, 0))
    inflation = np.diag(inverse) * (kept_design**2).sum(axis=0)
    return MapBasis(tuple(names[j] for j in kept), kept_design, tuple(dropped), inflation)


def coordinate_free_basis(n_sites: int) -> MapBasis:
    """The basis for sites without coordinates: the wafer mean alone."""
    if n_sites < 1:
        raise ValueError("a map needs at least one site")
    return MapBasis(("mean",), np.ones((n_sites, 1)), (), np.ones(1))

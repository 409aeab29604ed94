"""The constants c4, d2 and d3 of ranges and standard deviations, to full precision.

Printed tables round them to three or four places; limits here use the exact values.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike
from scipy import special

from spc.stats.grouping import FloatArray


def c4(n: ArrayLike) -> FloatArray:
    """Expected standard deviation of `n` normal values over sigma (n >= 2, need not be whole).

    c4 = sqrt(2 / (n-1)) Gamma(n/2) / Gamma((n-1)/2), the mean of a chi variable with n - 1
    degrees of freedom over sqrt(n - 1). Pass df + 1 for a pooled sd with `df` degrees of freedom.

    Raises
    ------
    ValueError
        If `n` is not above 1.
    """
    size = np.asarray(n, dtype=np.float64)
    if not (size > 1).all():
        raise ValueError("c4 needs n above 1")
    half = 0.5 * (size - 1.0)
    return np.asarray(special.poch(half, 0.5) / np.sqrt(half))


def d2(n: ArrayLike) -> FloatArray:
    """Expected range of `n` standard normal values (Tippett 1925, Biometrika 17); n >= 2, whole."""
    return _each(n, 0)


def d3(n: ArrayLike) -> FloatArray:
    """Standard deviation of the range of `n` standard normal values; n >= 2, whole."""
    return _each(n, 1)


def _each(n: ArrayLike, which: int) -> FloatArray:
    size = np.asarray(n)
    if not (np.equal(np.mod(size, 1), 0).all() and (size >= 2).all()):
        raise ValueError("the range constants need whole n of at least 2")
    distinct, where = np.unique(size, return_inverse=True)
    values = np.array([_range_moments(int(k))[which] for k in distinct])
    return values[where].reshape(size.shape)


@lru_cache(maxsize=256)
def _range_moments(n: int) -> tuple[float, float]:
    """Mean and sd of the range of n standard normals, by Gauss-Legendre quadrature.

    P(R <= r) = n integral of phi(x) [Phi(x + r) - Phi(x)]^(n-1) dx; then E R = integral of P(R > r)
    and E R^2 = 2 integral of r P(R > r). 200 nodes a side give 11 digits.
    """
    node, weight = special.roots_legendre(200)
    top = 14.0
    r, r_weight = 0.5 * top * (node + 1.0), 0.5 * top * weight
    x, x_weight = 9.0 * node, 9.0 * weight
    density = np.exp(-0.5 * x**2) / np.sqrt(2.0 * np.pi)
    between = special.ndtr(x + r[:, None]) - special.ndtr(x)
    below = n * (between ** (n - 1) * density) @ x_weight
    mean = float((1.0 - below) @ r_weight)
    square = float(2.0 * ((1.0 - below) * r) @ r_weight)
    return mean, float(np.sqrt(square - mean**2))

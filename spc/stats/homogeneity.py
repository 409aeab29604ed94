"""Whether several standard deviations vary no more than chance makes them."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike
from scipy import special

from spc.stats.grouping import FloatArray, sum_by


def bartlett_p(sd: ArrayLike, df: ArrayLike, stream: ArrayLike | None = None) -> FloatArray:
    """P-value of equal variances behind some standard deviations, for many streams at once.

    Parameters
    ----------
    sd, df : (n,) array_like of float
        Standard deviations (any unit) and their degrees of freedom, both positive.
    stream : (n,) array_like of int, optional
        Stream of each; default one stream.

    Returns
    -------
    (n_streams,) array
        NaN for streams with fewer than two.

    Raises
    ------
    ValueError
        If a standard deviation or its df is not positive.

    Notes
    -----
    Bartlett (1937), Proceedings of the Royal Society A 160:268-282, with his correction.
    """
    s, nu = np.broadcast_arrays(np.asarray(sd, np.float64), np.asarray(df, np.float64))
    if not ((s > 0).all() and (nu > 0).all()):
        raise ValueError("standard deviations and their degrees of freedom must be positive")
    place = np.zeros(s.size, np.int64) if stream is None else np.asarray(stream)
    size = int(place.max(initial=-1)) + 1
    count = sum_by(place, np.ones(s.size), size)
    total = np.maximum(sum_by(place, nu, size), 1e-300)
    pooled = sum_by(place, nu * s**2, size) / total
    log_pooled = np.log(np.where(pooled > 0, pooled, 1.0))
    spread = total * log_pooled - sum_by(place, nu * 2.0 * np.log(s), size)
    k = np.maximum(count - 1.0, 1.0)
    correction = 1.0 + (sum_by(place, 1.0 / nu, size) - 1.0 / total) / (3.0 * k)
    p = special.chdtrc(k, np.maximum(spread / correction, 0.0))
    return np.where(count >= 2, p, np.nan)

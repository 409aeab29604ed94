"""Is a larger spread within the wafer a new shape of the map, or is it scatter?

Both raise the sd of the sites about their usual map. A new shape is the same on every wafer: it is
seen in the mean of the maps. Scatter is another one on each: the mean of the maps stays. The mean
square of the change of the mean map, less what chance alone makes of it (the variances of the two
means), is the part of the shape in the growth of the mean square; an analysis of variance by site.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]


def systematic_share(before: FloatArray, after: FloatArray) -> float:
    """Return the share of the growth of the within-wafer mean square that is a new mean map.

    `before` (n, s) and `after` (m, s): deviations of the sites from their wafer's mean and from
    the usual map of their stream, NaN for a missing site; one unit. The share lies in [0, 1]; NaN
    where a side has fewer than two wafers, the maps share no site, or nothing has grown.
    """
    if len(before) < 2 or len(after) < 2:
        return float("nan")
    use = (np.isfinite(before).sum(0) >= 2) & (np.isfinite(after).sum(0) >= 2)
    if not use.any():
        return float("nan")
    old, new = before[:, use], after[:, use]
    change = np.nanmean(new, axis=0) - np.nanmean(old, axis=0)
    chance = _variance_of_mean(new) + _variance_of_mean(old)
    shape = float(np.mean(change**2 - chance))
    usual = np.nanmean(old, axis=0)
    spread = np.nanvar(old, axis=0, ddof=1)
    growth = np.nanmean((new - usual) ** 2, axis=0) - spread - _variance_of_mean(old)
    total = float(np.mean(growth))
    if total <= 0.0:
        return float("nan")
    return float(np.clip(shape / total, 0.0, 1.0))


def _variance_of_mean(values: FloatArray) -> FloatArray:
    count = np.isfinite(values).sum(0)
    out: FloatArray = np.nanvar(values, axis=0, ddof=1) / count
    return out

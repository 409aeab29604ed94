"""How much a nested sample is worth: effective degrees of freedom and effective number.

Sites on a wafer and wafers of a lot are not independent. With components of variance lot, wafer,
site (balanced, or unbalanced by mean numbers) the total is a positive combination of the mean
squares of the analysis of variance, so its degrees of freedom follow from Satterthwaite (1946,
Biometrics Bulletin 2:110-114).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike
from scipy import stats

from spc.stats.capability_indices import Array, Sigma
from spc.stats.constants import c4, d2


@dataclass(frozen=True)
class NestedSample:
    """Readings of sites in wafers in lots, with their components of variance.

    lot, wafer, site : variances, squared value unit; a component that was pooled is 0.
    n_lots, n_wafers, n_readings : totals. signature : variance over a wafer of the fixed site
    pattern (it is not noise: infinite degrees of freedom); signature_df : parameters it took.
    Scalars or arrays of one shape (streams).
    """

    lot: ArrayLike
    wafer: ArrayLike
    site: ArrayLike
    n_lots: ArrayLike
    n_wafers: ArrayLike
    n_readings: ArrayLike
    signature: ArrayLike = 0.0
    signature_df: ArrayLike = 0.0

    def _parts(self) -> tuple[Array, ...]:
        arrays = np.broadcast_arrays(
            *(
                np.asarray(a, float)
                for a in (
                    self.lot,
                    self.wafer,
                    self.site,
                    self.n_lots,
                    self.n_wafers,
                    self.n_readings,
                    self.signature,
                    self.signature_df,
                )
            )
        )
        lots, wafers, readings = arrays[3:6]
        if ((lots < 1) | (wafers < lots) | (readings < wafers)).any():
            raise ValueError("counts must be lots <= wafers <= readings, at least one lot")
        if any((a < 0).any() for a in arrays[:3]) or (arrays[6] < 0).any():
            raise ValueError("components of variance cannot be negative")
        return arrays

    def mean_squares(self) -> tuple[Array, Array, Array]:
        """Expected mean squares between lots, between wafers of a lot, between sites."""
        lot, wafer, site, lots, wafers, readings, *_ = self._parts()
        per_lot, per_wafer = wafers / lots, readings / wafers
        between_wafers = per_wafer * wafer + site
        return per_lot * per_wafer * lot + between_wafers, between_wafers, np.array(site)

    def mean_variance(self) -> Array:
        """Variance of the grand mean."""
        return np.asarray(self.mean_squares()[0] / self._parts()[5])

    def _sigma(self, weights: tuple[Array, Array, Array]) -> Sigma:
        _, _, _, lots, wafers, readings, signature, lost = self._parts()
        df = (lots - 1, wafers - lots, np.maximum(readings - wafers - lost, 0))
        parts = [w * ms for w, ms in zip(weights, self.mean_squares(), strict=True)]
        random = parts[0] + parts[1] + parts[2]
        # A level with no degrees of freedom has no mean square: what is charged to it is unknown.
        square = np.zeros_like(random)
        for part, d in zip(parts, df, strict=True):
            square = square + np.where(part > 0, part**2 / np.where(d > 0, d, np.nan), 0.0)
        total = random + signature
        good = (square > 0) & np.isfinite(square)
        effective = np.where(good, total**2 / np.where(good, square, 1.0), np.nan)
        variance = self.mean_variance()
        n = np.where(variance > 0, total / np.where(variance > 0, variance, 1.0), np.nan)
        return Sigma(np.sqrt(total), effective, n)

    def overall(self) -> Sigma:
        """sqrt(lot + wafer + site + signature): the sigma of a reading of the whole process."""
        _, _, _, lots, wafers, readings, *_ = self._parts()
        per_lot, per_wafer = wafers / lots, readings / wafers
        return self._sigma(
            (
                1 / (per_lot * per_wafer),
                (1 - 1 / per_lot) / per_wafer,
                1 - 1 / per_wafer,
            )
        )

    def within_lot(self) -> Sigma:
        """sqrt(wafer + site + signature): the sigma of a reading about its lot."""
        _, _, _, _, wafers, readings, *_ = self._parts()
        per_wafer = readings / wafers
        return self._sigma((np.zeros_like(per_wafer), 1 / per_wafer, 1 - 1 / per_wafer))

    def mean_interval(self, mean: ArrayLike, confidence: float = 0.95) -> tuple[Array, Array]:
        """t interval of the grand mean, with lots - 1 degrees of freedom."""
        lots = self._parts()[3]
        t = stats.t.ppf((1 + confidence) / 2, np.where(lots > 1, lots - 1, np.nan))
        half = t * np.sqrt(self.mean_variance())
        centre = np.asarray(mean, float)
        return np.asarray(centre - half), np.asarray(centre + half)


def satterthwaite(variances: ArrayLike, df: ArrayLike) -> Array:
    """Degrees of freedom of a sum of independent variance estimates, summed along the last axis.

    variances : (..., k), already multiplied by their coefficients. df : (..., k).
    """
    v, d = np.broadcast_arrays(np.asarray(variances, float), np.asarray(df, float))
    with np.errstate(divide="ignore", invalid="ignore"):
        part = np.where(v == 0, 0.0, v**2 / d)
        return np.asarray(v.sum(axis=-1) ** 2 / part.sum(axis=-1))


def df_of_standard_error(variance: ArrayLike, standard_error: ArrayLike) -> Array:
    """Degrees of freedom of a variance estimate from its standard error: 2 (v / se)^2."""
    v, se = np.asarray(variance, float), np.asarray(standard_error, float)
    return np.asarray(2.0 * (v / np.where(se > 0, se, np.nan)) ** 2)


def without_gauge(sigma: Sigma, gauge: Sigma) -> Sigma:
    """Sigma of the process alone: sd^2 less the gauge's variance.

    NaN where the gauge is as large as the whole: then the readings show the gauge only.
    """
    whole, part = sigma.sd**2, gauge.sd**2
    left = np.where(whole > part, whole - part, np.nan)
    df = left**2 / (whole**2 / sigma.df + part**2 / gauge.df)
    # The variance of the mean does not change: only the unit in which it is counted does.
    return Sigma(np.sqrt(left), df, sigma.n_effective * left / whole)


def sd_interval(sigma: Sigma, confidence: float = 0.95) -> tuple[Array, Array]:
    """Chi-square interval of a standard deviation."""
    low, high = (1 - confidence) / 2, (1 + confidence) / 2
    return (
        np.asarray(sigma.sd * np.sqrt(sigma.df / stats.chi2.ppf(high, sigma.df))),
        np.asarray(sigma.sd * np.sqrt(sigma.df / stats.chi2.ppf(low, sigma.df))),
    )


def within_sigma(subgroups: ArrayLike, method: str = "pooled") -> Sigma:
    """Within-subgroup sigma of equal subgroups of independent readings, (n_groups, size).

    method : ``pooled`` (root of the mean variance, df = n_groups (size - 1)), ``range`` (mean range
        over d2) or ``sd`` (mean sd over c4), e-Handbook 6.3.2; the last two are given the df of
        the pooled one. Raises ValueError for another method or subgroups of one.
    """
    data = np.asarray(subgroups, float)
    if data.ndim != 2 or data.shape[1] < 2 or not np.isfinite(data).all():
        raise ValueError("subgroups must be (n_groups, size >= 2) without missing values")
    groups, size = data.shape
    if method == "pooled":
        sd = float(np.sqrt(data.var(axis=1, ddof=1).mean()))
    elif method == "range":
        sd = float(np.ptp(data, axis=1).mean() / d2(size))
    elif method == "sd":
        sd = float(data.std(axis=1, ddof=1).mean() / c4(size))
    else:
        raise ValueError(f"method {method!r}: choose pooled, range or sd")
    return Sigma.of(sd, groups * (size - 1), sd**2 * groups / data.mean(axis=1).var(ddof=1))

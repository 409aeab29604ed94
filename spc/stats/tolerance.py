"""Normal tolerance factors: mean -+ k s holds a share of the process with a given confidence.

One-sided: noncentral t (exact). Two-sided: the exact integral (Odeh & Owen 1980; ISO 16269-6), and
Howe's approximation (Howe 1969, J. Amer. Statist. Assoc. 64:610-620). See also NIST/SEMATECH
e-Handbook 7.2.6.3.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from scipy import optimize, stats


def _check(n: float, content: float, confidence: float) -> None:
    if n < 2:
        raise ValueError(f"{n} readings: a tolerance factor needs at least 2")
    if not (0 < content < 1 and 0 < confidence < 1):
        raise ValueError("content and confidence must be between 0 and 1")


def one_sided_factor(n: float, content: float, confidence: float) -> float:
    """k for one limit; n independent readings, content and confidence as shares."""
    _check(n, content, confidence)
    root = np.sqrt(n)
    return float(stats.nct.ppf(confidence, n - 1, stats.norm.ppf(content) * root) / root)


def howe_factor(n: float, content: float, confidence: float) -> float:
    """Howe's approximation to the two-sided k."""
    _check(n, content, confidence)
    z = stats.norm.ppf((1 + content) / 2)
    return float(z * np.sqrt((n - 1) * (1 + 1 / n) / stats.chi2.ppf(1 - confidence, n - 1)))


@lru_cache(maxsize=256)
def two_sided_factor(n: float, content: float, confidence: float) -> float:
    """Exact k for two limits, by quadrature over the mean and root finding (about 1e-10)."""
    _check(n, content, confidence)
    node, weight = np.polynomial.hermite_e.hermegauss(100)
    weight = weight / weight.sum()
    # For a mean off by c sds the interval must have half width r(c) to hold the content; r squared
    # is the quantile of a chi-square with one degree of freedom and noncentrality c squared.
    squared = stats.ncx2.ppf(content, 1, np.maximum(node**2 / n, 1e-300))
    df = n - 1

    def miss(k: float) -> float:
        return float(weight @ stats.chi2.sf(df * squared / k**2, df)) - confidence

    start = howe_factor(n, content, confidence)
    return float(optimize.brentq(miss, 0.5 * start, 2.0 * start, xtol=1e-12))

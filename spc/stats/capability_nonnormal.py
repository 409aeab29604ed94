"""Capability when the law is not normal: a fitted law, its fit tested, the percentile method.

ISO 22514-2 (before it ISO 21747): with X0.135, X50 and X99.865 the percentiles that a normal law
has at mean -+ 3 sd,

    Pp = (USL - LSL)/(X99.865 - X0.135)
    Ppk = min((USL - X50)/(X99.865 - X50), (X50 - LSL)/(X50 - X0.135)).

The law is chosen by Akaike's criterion among a few families and tested by the Anderson-Darling test
of Chen & Balakrishnan (1995, J. Quality Technology 27:154-161): normal scores of the fitted
probabilities are tested for normality with Stephens' p-values (D'Agostino & Stephens 1986,
Goodness-of-Fit Techniques, table 4.9). The p-value is approximate for families other than the
normal. Readings that come in clusters are counted as the independent ones that they are worth.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import ArrayLike
from scipy import special, stats

from spc.stats.capability import Capability, StudyOptions, verdicts
from spc.stats.capability_indices import Array, SpecLimits
from spc.stats.distributions import FAMILIES, Family, Law, covariance, maximum_likelihood

DEFAULT_FAMILIES: tuple[str, ...] = tuple(FAMILIES)
_TAIL = float(special.ndtr(-3.0))  # 0.00134990: the exact 3-sigma tail, not the rounded 0.00135


@dataclass(frozen=True)
class DistributionFit:
    """A fitted law.

    name : family. theta : its parameters (see `spc.stats.distributions`). law : its ppf, cdf, sf.
    log_likelihood, aic : of the sample as independent readings, and counted as effective ones.
    anderson_darling, p_value : of the test of fit; ``fits`` is p_value >= the level asked for.
    tried : family -> aic of all that were tried (NaN where it failed or cannot apply).
    n, n_effective : readings, and the independent ones they are worth.
    """

    name: str
    theta: Array
    law: Law
    log_likelihood: float
    aic: float
    anderson_darling: float
    p_value: float
    fits: bool
    tried: dict[str, float]
    n: int
    n_effective: float


@dataclass(frozen=True)
class PercentileIndices:
    """Percentiles (value unit), indices and ppm of one law; NaN where a limit is absent."""

    x_low: float
    x_mid: float
    x_high: float
    pp: float
    ppk: float
    ppk_lower: float
    ppk_upper: float
    ppm_below: float
    ppm_above: float

    @property
    def ppm_expected(self) -> float:
        return self.ppm_below + self.ppm_above


@dataclass(frozen=True)
class PercentileIntervals:
    """Two-sided intervals of the indices of a fitted law; NaN where the fit gives none."""

    pp: tuple[float, float]
    ppk: tuple[float, float]
    ppm: tuple[float, float]


def fit_distribution(
    values: ArrayLike,
    families: tuple[str, ...] = DEFAULT_FAMILIES,
    *,
    n_effective: float | None = None,
    margin: float = 2.0,
    level: float = 0.05,
) -> DistributionFit:
    """Choose and test a law for readings.

    Parameters
    ----------
    values : (n,) readings, value unit; missing ones are left out.
    families : names among ``FAMILIES``. Those for positive values are skipped when some are not.
    n_effective : independent readings that the sample is worth (`capability_sampling`); None: n.
    margin : the normal law stays unless another's criterion is lower by more than this.
    level : of the test of fit.

    Raises
    ------
    ValueError: fewer than 8 readings, no variation, an unknown family.
    """
    x = np.asarray(values, float).ravel()
    x = x[np.isfinite(x)]
    if x.size < 8:
        raise ValueError(f"{x.size} readings: a law needs at least 8")
    if np.ptp(x) == 0.0:
        raise ValueError(f"all readings are {x[0]:g}: no law can be fitted")
    unknown = [name for name in families if name not in FAMILIES]
    if unknown or not families:
        raise ValueError(f"unknown families {unknown}; known are {', '.join(FAMILIES)}")
    worth = float(x.size if n_effective is None else min(n_effective, x.size))
    found: dict[str, tuple[Array, float]] = {}
    tried: dict[str, float] = {}
    for name in families:
        family = FAMILIES[name]
        if family.positive and x.min() <= 0.0:
            tried[name] = float("nan")
            continue
        theta, likelihood = maximum_likelihood(family, x)
        found[name] = (theta, likelihood)
        tried[name] = 2.0 * family.n_parameters - 2.0 * likelihood * worth / x.size
    usable = {name: aic for name, aic in tried.items() if np.isfinite(aic)}
    if not usable:
        raise ValueError("none of the families can describe these readings")
    best = min(usable, key=lambda name: usable[name])
    if "normal" in usable and usable["normal"] <= usable[best] + margin:
        best = "normal"
    theta, likelihood = found[best]
    law = FAMILIES[best].law(theta)
    statistic, p_value = goodness_of_fit(x, law.cdf, n_effective=worth)
    return DistributionFit(
        name=best,
        theta=theta,
        law=law,
        log_likelihood=likelihood,
        aic=usable[best],
        anderson_darling=statistic,
        p_value=p_value,
        fits=p_value >= level,
        tried=tried,
        n=int(x.size),
        n_effective=worth,
    )


def goodness_of_fit(
    values: ArrayLike, cdf: Callable[[Array], Array], *, n_effective: float | None = None
) -> tuple[float, float]:
    """Anderson-Darling statistic and p-value of readings (n,) against a fitted cdf.

    Clustered readings: the statistic is taken down by n_effective/n, the share by which clustering
    inflates it, before the p-value is read.
    """
    x = np.sort(np.asarray(values, float))
    n = x.size
    worth = n if n_effective is None else min(n_effective, n)
    # Stay off 0 and 1, where a normal score is infinite.
    score = special.ndtri(np.clip(cdf(x), 1e-15, 1 - 1e-15))
    z = np.sort((score - score.mean()) / max(score.std(ddof=1), 1e-300))
    k = np.arange(1, n + 1)
    logs = special.log_ndtr(z) + special.log_ndtr(-z[::-1])
    statistic = float(-n - np.mean((2 * k - 1) * logs))
    shrunk = statistic * worth / n
    return statistic, stephens_p_value(shrunk * (1 + 0.75 / worth + 2.25 / worth**2))


def stephens_p_value(modified: float) -> float:
    """p-value of the modified A^2 for a normal law with both parameters estimated."""
    a = max(modified, 0.0)
    if a < 0.2:
        return float(1 - np.exp(-13.436 + 101.14 * a - 223.73 * a**2))
    if a < 0.34:
        return float(1 - np.exp(-8.318 + 42.796 * a - 59.938 * a**2))
    if a < 0.6:
        return float(np.exp(0.9177 - 4.279 * a - 1.38 * a**2))
    # The last branch turns up again beyond a = 153; it is nothing long before.
    return float(np.exp(1.2937 - 5.709 * a + 0.0186 * a**2)) if a < 13 else 0.0


def percentile_indices(law: Any, spec: SpecLimits, *, tail: float = _TAIL) -> PercentileIndices:
    """Indices of a law (anything with ppf, cdf and sf) by the percentile method.

    tail : probability below X0.135; the default is the exact normal tail at 3 sd, so that a normal
        law gives exactly the usual indices; 0.00135 is the literal one.
    """
    low, mid, high = (float(v) for v in (law.ppf(tail), law.ppf(0.5), law.isf(tail)))
    nan = float("nan")
    lower = nan if spec.lower is None else (mid - spec.lower) / (mid - low)
    upper = nan if spec.upper is None else (spec.upper - mid) / (high - mid)
    pp = nan
    if spec.lower is not None and spec.upper is not None:
        pp = (spec.upper - spec.lower) / (high - low)
    return PercentileIndices(
        x_low=low,
        x_mid=mid,
        x_high=high,
        pp=pp,
        ppk=float(np.fmin(lower, upper)),
        ppk_lower=lower,
        ppk_upper=upper,
        ppm_below=0.0 if spec.lower is None else 1e6 * float(law.cdf(spec.lower)),
        ppm_above=0.0 if spec.upper is None else 1e6 * float(law.sf(spec.upper)),
    )


def percentile_intervals(
    fit: DistributionFit, values: ArrayLike, spec: SpecLimits, *, confidence: float = 0.95
) -> PercentileIntervals:
    """Delta-method intervals from the observed information of the fit.

    Pp and Ppk on the log scale where positive, ppm on the normal-score scale; the variance is
    multiplied by n/n_effective. The uncertainty of the choice of family is not in them.
    """
    x = np.asarray(values, float).ravel()
    x = x[np.isfinite(x)]
    family = FAMILIES[fit.name]
    spread = covariance(family, x, fit.theta) * fit.n / fit.n_effective
    z = float(stats.norm.ppf((1 + confidence) / 2))
    here = percentile_indices(fit.law, spec)
    gradient = _gradient(family, fit.theta, spec, np.sqrt(np.diag(spread)))
    error = np.sqrt(np.einsum("ki,ij,kj->k", gradient, spread, gradient))

    def ratio(value: float, half: float) -> tuple[float, float]:
        if not np.isfinite(half) or not value > 0:
            return value - z * half, value + z * half
        return value * np.exp(-z * half / value), value * np.exp(z * half / value)

    score = _score(here)
    ppm = (
        1e6 * float(special.ndtr(-(score + z * error[2]))),
        1e6 * float(special.ndtr(-(score - z * error[2]))),
    )
    return PercentileIntervals(ratio(here.pp, error[0]), ratio(here.ppk, error[1]), ppm)


def _score(indices: PercentileIndices) -> float:
    out = np.clip(indices.ppm_expected / 1e6, 1e-300, 1 - 1e-16)
    return float(-special.ndtri(out))


def _gradient(family: Family, theta: Array, spec: SpecLimits, scale: Array) -> Array:
    """(3, k) derivatives of Pp, Ppk and the normal score of the ppm, central differences."""
    k = theta.size
    gradient = np.full((3, k), np.nan)
    if not np.isfinite(scale).all():
        return gradient
    for i in range(k):
        step = np.zeros(k)
        step[i] = 1e-2 * scale[i]
        plus, minus = (percentile_indices(family.law(theta + s), spec) for s in (step, -step))
        for row, (a, b) in enumerate(
            ((plus.pp, minus.pp), (plus.ppk, minus.ppk), (_score(plus), _score(minus)))
        ):
            gradient[row, i] = (a - b) / (2 * step[i])
    return gradient


def study_with_law(
    study: Capability,
    fit: DistributionFit,
    values: ArrayLike,
    spec: SpecLimits,
    *,
    stable: bool | None = None,
    options: StudyOptions = StudyOptions(),
) -> Capability:
    """The study of one stream with Pp, Ppk and the expected ppm from a fitted law.

    A normal law changes nothing but the name and the p-value: its exact intervals are better than
    those of the delta method. Cp and Cpk stay as they are: they speak of the spread within lots.
    Raises ValueError where the gauge was taken out: the law of the readings holds the gauge.
    """
    if study.gauge_removed and fit.name != "normal":
        raise ValueError("a fitted law describes readings with their gauge: study it without")
    if fit.name == "normal":
        return replace(study, distribution="normal", fit_p_value=fit.p_value)
    here = percentile_indices(fit.law, spec)
    bounds = percentile_intervals(fit, values, spec, confidence=options.confidence)
    ppk = np.asarray(bounds.ppk)
    return replace(
        study,
        pp=np.asarray(here.pp),
        pp_low=np.asarray(bounds.pp[0]),
        pp_high=np.asarray(bounds.pp[1]),
        ppk=np.asarray(here.ppk),
        ppk_low=ppk[0],
        ppk_high=ppk[1],
        ppm_below=np.asarray(here.ppm_below),
        ppm_above=np.asarray(here.ppm_above),
        ppm_expected=np.asarray(here.ppm_expected),
        ppm_low=np.asarray(bounds.ppm[0]),
        ppm_high=np.asarray(bounds.ppm[1]),
        verdict=verdicts(ppk[0], ppk[1], options.required, stable),
        distribution=fit.name,
        fit_p_value=fit.p_value,
    )


def empirical_indices(values: ArrayLike, spec: SpecLimits, *, tail: float = 0.005) -> float:
    """Ppk from the sample's own percentiles, without any law (e-Handbook 3.5.1.2, Cnpk).

    min((USL - median)/(p(1 - tail) - median), (median - LSL)/(median - p(tail))), percentiles at
    (n + 1) p. With the handbook's tail of 0.005 it covers 99 % of the readings, not 99.73 %: it is
    a fall-back for when no law fits, and reads higher than Ppk.
    """
    x = np.asarray(values, float).ravel()
    x = x[np.isfinite(x)]
    if x.size < 2:
        raise ValueError("percentiles of a sample need at least 2 readings")
    low, mid, high = np.quantile(x, [tail, 0.5, 1 - tail], method="weibull")
    lower = np.nan if spec.lower is None else (mid - spec.lower) / (mid - low)
    upper = np.nan if spec.upper is None else (spec.upper - mid) / (high - mid)
    return float(np.fmin(lower, upper))

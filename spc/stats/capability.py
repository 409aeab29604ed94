"""A process against its specification: indices, intervals, ppm, and whether to believe them.

One call makes the whole study of one or many streams that a normal law describes; what it is made
of is offered from here too. Where the law is not normal, see `spc.stats.capability_nonnormal`.

The study states two sigmas. Cp and Cpk use the within-lot sigma: what the process could do with its
lots on one level. Pp, Ppk, Cpm and the ppm use the overall sigma: what was delivered. An index of a
process that was not in control describes the past and promises nothing: the verdict says so first.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

import numpy as np
from numpy.typing import ArrayLike

from spc.stats.capability_indices import (
    Array,
    Sigma,
    SpecLimits,
    bissell_interval,
    cp,
    cp_interval,
    cpk,
    cpm,
    cpm_df,
    cpm_interval,
    noncentral_t_interval,
    off_centre,
    one_sided,
)
from spc.stats.capability_ppm import ppm_expected, ppm_interval, ppm_observed
from spc.stats.capability_sampling import (
    NestedSample,
    df_of_standard_error,
    satterthwaite,
    sd_interval,
    within_sigma,
    without_gauge,
)

__all__ = [
    "Capability",
    "NestedSample",
    "Sigma",
    "SpecLimits",
    "StudyOptions",
    "Verdict",
    "bissell_interval",
    "capability_study",
    "cp",
    "cp_interval",
    "cpk",
    "cpm",
    "cpm_df",
    "cpm_interval",
    "df_of_standard_error",
    "noncentral_t_interval",
    "off_centre",
    "one_sided",
    "ppm_expected",
    "ppm_interval",
    "ppm_observed",
    "satterthwaite",
    "sd_interval",
    "verdicts",
    "within_sigma",
    "without_gauge",
]


class Verdict(StrEnum):
    """What a study says, the weightiest first."""

    NOT_STABLE = "not stable"  # the index describes the past only
    NOT_CAPABLE = "not capable"  # the whole interval is below what is required
    UNDECIDED = "undecided"  # the interval holds the required value
    CAPABLE = "capable"  # the whole interval is at or above it
    STABILITY_UNKNOWN = "stability unknown"  # would be capable, if it is stable
    NO_ESTIMATE = "no estimate"  # too few lots, or no variation


@dataclass(frozen=True)
class StudyOptions:
    """confidence : of every interval, two-sided.

    interval : ``noncentral-t`` (exact for one side) or ``bissell``, for Cpk and Ppk.
    required : Ppk that counts as capable (1.33: common practice, no source).
    gauge : sigma of the gauge to take out of both sigmas, or None.
    """

    confidence: float = 0.95
    interval: str = "noncentral-t"
    required: float = 1.33
    gauge: Sigma | None = None

    def __post_init__(self) -> None:
        if self.interval not in ("noncentral-t", "bissell"):
            raise ValueError(f"interval {self.interval!r}: choose 'noncentral-t' or 'bissell'")


@dataclass(frozen=True)
class Capability:
    """A study; every field but the last two and ``gauge_removed`` has the shape of the streams.

    Indices have no unit; NaN where a limit, the target or the sigma is lacking. mean, sd_overall,
    sd_within: value unit, the gauge taken out where asked. ppm: parts per million.
    distribution: the law that Pp, Ppk and the expected ppm come from, fit_p_value: of the test that
    the readings follow it (NaN: not tested).
    """

    mean: Array
    sd_overall: Array
    sd_within: Array
    cp: Array
    cp_low: Array
    cp_high: Array
    cpk: Array
    cpk_low: Array
    cpk_high: Array
    pp: Array
    pp_low: Array
    pp_high: Array
    ppk: Array
    ppk_low: Array
    ppk_high: Array
    cpm: Array
    cpm_low: Array
    cpm_high: Array
    ppm_below: Array
    ppm_above: Array
    ppm_expected: Array
    ppm_low: Array
    ppm_high: Array
    ppm_observed: Array
    ppm_observed_low: Array
    ppm_observed_high: Array
    df_overall: Array
    df_within: Array
    gauge_removed: bool
    verdict: np.ndarray
    distribution: str = "normal"
    fit_p_value: float = float("nan")


def capability_study(
    mean: ArrayLike,
    overall: Sigma,
    spec: SpecLimits,
    *,
    within: Sigma | None = None,
    observed: tuple[ArrayLike, ArrayLike] | None = None,
    stable: ArrayLike | None = None,
    options: StudyOptions = StudyOptions(),
) -> Capability:
    """Capability of streams that a normal law describes.

    Parameters
    ----------
    mean : () or (n_streams,), value unit.
    overall, within : sigmas with their degrees of freedom (`NestedSample` gives both); without
        ``within`` Cp and Cpk are NaN.
    observed : (readings out of specification, readings).
    stable : bool a stream, None when unknown; passed into the verdict.

    Returns
    -------
    Capability, see there. ppm_observed is NaN without ``observed``; its interval takes the sample
    for the independent readings that it is worth.
    """
    mean = np.asarray(mean, float)
    blank = np.full(np.broadcast_shapes(mean.shape, overall.sd.shape), np.nan)
    worth = overall.n_effective
    if within is None:
        within = Sigma(blank, blank, blank)
    if options.gauge is not None:
        overall, within = (without_gauge(s, options.gauge) for s in (overall, within))

    def spread(sigma: Sigma) -> tuple[Array, Array, Array]:
        index = cp(sigma.sd, spec)
        return (index, *cp_interval(index, sigma.df, options.confidence))

    def nearest(sigma: Sigma) -> tuple[Array, Array, Array]:
        index = cpk(mean, sigma.sd, spec)
        route = noncentral_t_interval if options.interval == "noncentral-t" else bissell_interval
        return (index, *route(index, sigma, options.confidence))

    cp_three, pp_three = spread(within), spread(overall)
    cpk_three, ppk_three = nearest(within), nearest(overall)
    cpm_two = cpm_interval(mean, overall, spec, options.confidence)
    below, above, total = ppm_expected(mean, overall.sd, spec)
    seen = (blank, blank, blank)
    if observed is not None:
        seen = ppm_observed(*observed, confidence=options.confidence, n_effective=worth)
    return Capability(
        mean + 0 * blank if mean.shape != blank.shape else mean,
        overall.sd,
        within.sd,
        *cp_three,
        *cpk_three,
        *pp_three,
        *ppk_three,
        cpm(mean, overall.sd, spec),
        *cpm_two,
        below,
        above,
        total,
        *ppm_interval(mean, overall, spec, options.confidence),
        *seen,
        overall.df,
        within.df,
        options.gauge is not None,
        verdicts(ppk_three[1], ppk_three[2], options.required, stable),
    )


def verdicts(
    low: ArrayLike, high: ArrayLike, required: float, stable: ArrayLike | None = None
) -> np.ndarray:
    """Verdict of each stream from the interval of its index; same shape, dtype object."""
    low, high = np.broadcast_arrays(np.asarray(low, float), np.asarray(high, float))
    answer = np.full(low.shape, Verdict.UNDECIDED, dtype=object)
    answer[high < required] = Verdict.NOT_CAPABLE
    good = low >= required
    answer[good] = Verdict.STABILITY_UNKNOWN if stable is None else Verdict.CAPABLE
    answer[~(np.isfinite(low) & np.isfinite(high))] = Verdict.NO_ESTIMATE
    if stable is not None:
        steady = np.broadcast_to(np.asarray(stable, bool), low.shape)
        answer[~steady] = Verdict.NOT_STABLE
    return answer

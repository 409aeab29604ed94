"""Capability of units: from their statistics to the numbers of a row.

Cp and Cpk come from the sd within lots, Pp, Ppk and Cpm from the overall sd. The normal law is
tested on the readings, counted as the independent ones they are worth; where it is rejected (5 %)
Pp, Ppk and the expected ppm are those of the chosen law by the percentile method (ISO 22514-2), and
`distribution` names it.

An overlay characteristic has two axes; each is studied by itself, marks against the specification,
and the row is that of the worse one: the smaller Ppk, without a specification the larger
|mean - target| + 3 sd. `axis` names it and `axes` has both. Its `n_readings` counts both axes.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, fields, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from config.control_plan import Characteristic
from spc.monitoring.review_sites import Readings
from spc.monitoring.review_units import Units, UnitStatistics, unit_statistics
from spc.stats.capability import (
    Capability,
    Sigma,
    SpecLimits,
    StudyOptions,
    capability_study,
    verdicts,
)
from spc.stats.capability_nonnormal import (
    DistributionFit,
    fit_distribution,
    goodness_of_fit,
    study_with_law,
)
from spc.stats.components import Components

FloatArray = NDArray[np.float64]

LEVEL = 0.05  # of the test of the normal law
FEWEST_READINGS_OF_A_LAW = 8
MOST_READINGS_OF_A_LAW = 2000  # more are thinned to so many evenly spaced order statistics
AXES = ("x", "y")
INDICES = ("cp", "cpk", "pp", "ppk", "cpm")


@dataclass(frozen=True)
class UnitStudy:
    """Capability of one unit.

    row : the contract's numbers and the extras (without characteristic, context, month,
        stability and excursions); absent ones are None.
    values : the readings of the row (one axis); law : what fits them, None where not normal was
        not tried or not needed. fits : whether the named law passes its test (None: no test).
    ppk_verdict : verdict before stability is known.
    """

    row: dict[str, Any]
    values: FloatArray
    law: DistributionFit | None
    fits: bool | None
    ppk_verdict: str

    @property
    def mean(self) -> float | None:
        """Mean of the readings."""
        value: float | None = self.row["mean"]
        return value


@dataclass(frozen=True)
class Ask:
    """What a study needs of the plan: specification, target, gauge."""

    spec: SpecLimits | None
    target: float | None
    gauge_sd: float | None
    options: StudyOptions
    overlay: bool = False

    @classmethod
    def of(cls, one: Characteristic, gauge_out: bool) -> Ask:
        """From the control plan; the gauge is taken out where asked and known."""
        gauge = None
        if gauge_out and one.gauge_sd:
            gauge = Sigma.of(one.gauge_sd, np.inf, np.inf)
        spec = None
        if one.lower_spec is not None or one.upper_spec is not None:
            spec = SpecLimits(one.lower_spec, one.upper_spec, one.target)
        return cls(spec, one.target, one.gauge_sd, StudyOptions(gauge=gauge), one.is_overlay)


def study_units(
    readings: Readings, units: Units, ask: Ask, progress: Callable[[], None] = lambda: None
) -> list[UnitStudy]:
    """Studies of all units; one for each, in their order."""
    axes = range(readings.value.shape[1])
    by_axis = [_axis_studies(readings, units, ask, axis, progress) for axis in axes]
    if not ask.overlay:
        return by_axis[0]
    return [_worse(pair, ask.target) for pair in zip(*by_axis, strict=True)]


def empty_row() -> dict[str, Any]:
    """Numbers of a unit without data."""
    row: dict[str, Any] = {"n_lots": 0, "n_wafers": 0, "n_readings": 0}
    row |= dict.fromkeys(("mean", "mean_low", "mean_high", "sd_overall", "sd_within", "sd_total"))
    row["components"] = {"lot": None, "wafer": None, "site": None}
    row |= dict.fromkeys(("components_signature_out", "site_signature_out", "pooled"))
    for name in INDICES:
        row |= dict.fromkeys((name, f"{name}_low", f"{name}_high"))
    for name in ("ppm_expected", "ppm_observed"):
        row |= dict.fromkeys((name, f"{name}_low", f"{name}_high"))
    row |= dict.fromkeys(("distribution", "fit_p_value", "df_overall", "df_within", "n_effective"))
    row |= {"gauge_share": None, "gauge_removed": False}
    return row


def with_stability(verdict: str, stable: bool | None) -> str:
    """The verdict in words once stability is known."""
    if stable is False:
        return "not stable"
    if stable and verdict == "stability unknown":
        return "capable"
    return verdict


# ---- one axis ----------------------------------------------------------------------------------


def _axis_studies(
    readings: Readings, units: Units, ask: Ask, axis: int, progress: Callable[[], None]
) -> list[UnitStudy]:
    found = unit_statistics(readings, units, axis)
    study = None if ask.spec is None else _study(found, units, ask, ask.spec)
    out = []
    for unit in range(units.n):
        one = None if study is None else _one_of(study, unit)
        out.append(_unit_study(found, unit, one, ask))
        progress()
    return out


def _study(found: UnitStatistics, units: Units, ask: Ask, spec: SpecLimits) -> Capability:
    low = -np.inf if spec.lower is None else spec.lower
    high = np.inf if spec.upper is None else spec.upper
    outside = (found.values < low) | (found.values > high)
    n = np.bincount(found.of_reading, minlength=units.n)
    n_out = np.bincount(found.of_reading, weights=outside, minlength=units.n)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        return capability_study(
            found.mean,
            found.overall,
            spec,
            within=found.within,
            observed=(n_out, n),
            options=ask.options,
        )


def _one_of(study: Capability, unit: int) -> Capability:
    """The study of one unit alone."""
    changes = {
        field.name: value[unit]
        for field in fields(study)
        if isinstance(value := getattr(study, field.name), np.ndarray) and value.ndim
    }
    return replace(study, **changes)


def _unit_study(found: UnitStatistics, unit: int, study: Capability | None, ask: Ask) -> UnitStudy:
    row = empty_row()
    values = found.readings_of(unit)
    if not found.n_readings[unit]:
        return UnitStudy(row, values, None, None, "no estimate")
    worth = float(found.overall.n_effective[unit])
    name, p_value, law = _law(values, worth, bool(found.complete[unit]))
    fits = None if p_value is None else p_value >= LEVEL
    if study is not None and law is not None and not study.gauge_removed and ask.spec is not None:
        study = study_with_law(study, law, _thinned(values), ask.spec, options=ask.options)
    row |= _numbers(found, unit)
    row |= {"distribution": name, "fit_p_value": p_value}
    verdict = "no estimate"
    if study is not None:
        row |= _indices(study)
        verdict = str(verdicts(study.ppk_low, study.ppk_high, ask.options.required).item())
    sd = float(found.overall.sd[unit])
    if ask.gauge_sd is not None and sd > 0:
        row["gauge_share"] = min((ask.gauge_sd / sd) ** 2, 1.0)
    return UnitStudy(row, values, law, fits, verdict)


def _law(
    values: FloatArray, worth: float, complete: bool
) -> tuple[str | None, float | None, DistributionFit | None]:
    """Name of the law, p-value of its test, and its fit where it is not the normal.

    Without a known worth (one lot) or with wafers kept as sums alone there is no test, and the
    normal law is taken.
    """
    if values.size < FEWEST_READINGS_OF_A_LAW or np.ptp(values) == 0.0:
        return None, None, None
    if not np.isfinite(worth) or not complete:
        return "normal", None, None
    sd, mean = float(values.std(ddof=1)), float(values.mean())
    scores = (values - mean) / sd
    p_value = goodness_of_fit(scores, _normal_cdf, n_effective=worth)[1]
    if p_value >= LEVEL:
        return "normal", p_value, None
    fit = fit_distribution(_thinned(values), n_effective=worth, level=LEVEL)
    return fit.name, fit.p_value, None if fit.name == "normal" else fit


def _normal_cdf(z: FloatArray) -> FloatArray:
    from scipy.special import ndtr

    return np.asarray(ndtr(z), np.float64)


def _thinned(values: FloatArray) -> FloatArray:
    if values.size <= MOST_READINGS_OF_A_LAW:
        return values
    rank = (np.arange(MOST_READINGS_OF_A_LAW) + 0.5) / MOST_READINGS_OF_A_LAW * values.size
    return np.asarray(np.sort(values)[rank.astype(np.int64)])


# ---- numbers of a row ----------------------------------------------------------------------------


def finite(value: Any) -> float | None:
    """A plain number, None for NaN and infinity."""
    number = float(value)
    return number if np.isfinite(number) else None


def _parts(components: Components, unit: int) -> dict[str, float | None]:
    return {name: finite(getattr(components, name)[unit]) for name in ("lot", "wafer", "site")}


def _numbers(found: UnitStatistics, unit: int) -> dict[str, Any]:
    components = found.components
    parts = _parts(found.plain, unit)
    known = [part for part in parts.values() if part is not None]
    return {
        "n_lots": int(found.n_lots[unit]),
        "n_wafers": int(found.n_wafers[unit]),
        "n_readings": int(found.n_readings[unit]),
        "mean": finite(found.mean[unit]),
        "mean_low": finite(found.mean_low[unit]),
        "mean_high": finite(found.mean_high[unit]),
        "sd_overall": finite(found.overall.sd[unit]),
        "sd_within": finite(found.within.sd[unit]),
        "sd_total": finite(np.sqrt(sum(known))) if len(known) == 3 else None,
        "components": parts,
        "components_signature_out": _parts(components, unit),
        "site_signature_out": finite(components.site[unit]),
        "pooled": components.pooled[unit] or None,
        "df_overall": finite(found.overall.df[unit]),
        "df_within": finite(found.within.df[unit]),
        "n_effective": finite(found.overall.n_effective[unit]),
    }


def _indices(study: Capability) -> dict[str, Any]:
    row: dict[str, Any] = {}
    for name in INDICES:
        for key in (name, f"{name}_low", f"{name}_high"):
            row[key] = finite(getattr(study, key))
    row |= {
        "ppm_expected": finite(study.ppm_expected),
        "ppm_expected_low": finite(study.ppm_low),
        "ppm_expected_high": finite(study.ppm_high),
        "ppm_observed": finite(study.ppm_observed),
        "ppm_observed_low": finite(study.ppm_observed_low),
        "ppm_observed_high": finite(study.ppm_observed_high),
    }
    if study.gauge_removed:
        row |= {
            "sd_overall": finite(study.sd_overall),
            "sd_within": finite(study.sd_within),
            "gauge_removed": True,
        }
    return row


# ---- two axes ------------------------------------------------------------------------------------

_OF_AN_AXIS = ("n_readings", "mean", "sd_overall", "sd_within", "cpk", "ppk", "ppm_expected")


def _worse(pair: tuple[UnitStudy, ...], target: float | None) -> UnitStudy:
    rows = [one.row for one in pair]
    reach = [_reach(row, target) for row in rows]
    ppk = [row["ppk"] for row in rows]
    if all(value is not None for value in ppk):
        worse = int(np.argmin(ppk))
    else:
        worse = int(np.argmax([-1.0 if value is None else value for value in reach]))
    axes = {
        name: {key: row[key] for key in _OF_AN_AXIS} | {"mean_plus_3sigma": far}
        for name, row, far in zip(AXES, rows, reach, strict=True)
    }
    row = rows[worse] | {
        "n_lots": max(row["n_lots"] for row in rows),
        "n_wafers": max(row["n_wafers"] for row in rows),
        "n_readings": sum(row["n_readings"] for row in rows),
        "axis": AXES[worse],
        "axes": axes,
    }
    return replace(pair[worse], row=row)


def _reach(row: dict[str, Any], target: float | None) -> float | None:
    """|mean - target| + 3 sd of one axis (common practice of the trade, no source)."""
    if row["mean"] is None or row["sd_overall"] is None:
        return None
    return float(abs(row["mean"] - (target or 0.0)) + 3.0 * row["sd_overall"])

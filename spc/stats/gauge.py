"""Gauge study: how much of what is seen is the gauge. Offsets between gauges: `gauge_offset`.

Crossed study: every part (wafer) measured on every gauge, several times. Components from the
two-factor random-effects analysis of variance (Montgomery & Runger 1993, Quality Engineering
6:115-135 and 289-305; Burdick, Borror & Montgomery 2005, Design and Analysis of Gauge R&R Studies).
Intervals are generalised confidence intervals (Weerahandi 1993, J. Amer. Statist. Assoc.
88:899-905; for gauge studies Hamada & Weerahandi 2000, J. Quality Technology 32:241-253; both from
memory): each mean square is divided by a chi-square variate over its degrees of freedom, here on a
fixed low-discrepancy grid, so that the same data give the same interval.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import stats

from spc.stats.gauge_offset import GaugeOffset, gauge_offset

__all__ = [
    "AnovaRow",
    "GaugeComponents",
    "GaugeOffset",
    "GaugeOptions",
    "GaugeStudy",
    "gauge_offset",
    "gauge_study",
]

Array = NDArray[np.float64]
Interval = tuple[float, float]

_GRID_POWER = 14  # 16 384 points: interval ends move by less than 1 % of their width


@dataclass(frozen=True)
class AnovaRow:
    """One line of the analysis: degrees of freedom, sum and mean of squares, F and its p (NaN)."""

    source: str
    df: int
    ss: float
    ms: float
    f: float
    p: float


@dataclass(frozen=True)
class GaugeComponents:
    """Variances (squared unit): as estimated, negatives included in ``raw``, set to 0 elsewhere."""

    raw: dict[str, float]
    negative: tuple[str, ...]
    repeatability: float
    gauge: float
    interaction: float
    part: float

    @property
    def reproducibility(self) -> float:
        """Between gauges: gauge + part-by-gauge interaction."""
        return self.gauge + self.interaction

    @property
    def measurement(self) -> float:
        """The whole gauge: repeatability + reproducibility."""
        return self.repeatability + self.reproducibility

    @property
    def total(self) -> float:
        return self.measurement + self.part


@dataclass(frozen=True)
class GaugeStudy:
    """Result of a crossed study; sd and offsets in the value unit, shares without one.

    anova : rows part, gauge, part x gauge (absent when pooled), repeatability, total.
    interaction_kept : False when it was pooled into repeatability.
    sd_* : standard deviations, with intervals in ``intervals`` under the same names, as for
        ``percent_of_study_sd`` (100 sd_measurement / sd_total), ``percent_contribution`` (100 times
        the ratio of variances), ``precision_to_tolerance`` (6 sd_measurement over the width of the
        specification; NaN without both limits) and ``signal_to_noise``
        (sqrt(2) sd_part / sd_measurement).
    distinct_categories : signal_to_noise cut to whole, at least 1.
    gauge_offsets : (n_gauges,) mean of each gauge less the mean of all.
    """

    anova: tuple[AnovaRow, ...]
    components: GaugeComponents
    interaction_kept: bool
    sd_repeatability: float
    sd_reproducibility: float
    sd_measurement: float
    sd_part: float
    sd_total: float
    percent_of_study_sd: float
    percent_contribution: float
    precision_to_tolerance: float
    signal_to_noise: float
    distinct_categories: int
    gauge_offsets: Array
    intervals: dict[str, Interval]


@dataclass(frozen=True)
class GaugeOptions:
    """interaction : ``test`` keeps it unless its p is above ``pool_above``, ``keep``, ``pool``.

    pool_above : 0.25, common practice, no source. confidence : of the intervals.
    """

    interaction: str = "test"
    pool_above: float = 0.25
    confidence: float = 0.95

    def __post_init__(self) -> None:
        if self.interaction not in ("test", "keep", "pool"):
            raise ValueError(f"interaction {self.interaction!r}: choose 'test', 'keep' or 'pool'")


def gauge_study(
    readings: ArrayLike,
    *,
    lower_spec: float | None = None,
    upper_spec: float | None = None,
    options: GaugeOptions = GaugeOptions(),
) -> GaugeStudy:
    """Crossed study of parts, gauges and repeats.

    Parameters
    ----------
    readings : (n_parts, n_gauges, n_repeats), value unit, complete. With one repeat the interaction
        cannot be told from repeatability and is pooled.
    lower_spec, upper_spec : for the precision-to-tolerance ratio.

    Raises
    ------
    ValueError: a reading is missing (named), fewer than two parts or gauges, no variation,
    limits out of order.
    """
    data = _checked(readings, lower_spec, upper_spec)
    rows, kept = _anova(data, options)
    shape = data.shape
    squares = {row.source: row.ms for row in rows}
    # An exact zero that rounding turns into a tiny negative is a zero.
    small = 1e-12 * max(squares.values())
    raw = {
        name: np.where(np.abs(value) < small, 0.0, value)
        for name, value in _components(squares, shape, kept).items()
    }
    found = GaugeComponents(
        raw={name: float(value) for name, value in raw.items()},
        negative=tuple(name for name, value in raw.items() if value < 0),
        **{name: max(float(value), 0.0) for name, value in raw.items()},
    )
    width = np.nan
    if lower_spec is not None and upper_spec is not None:
        width = upper_spec - lower_spec
    figures = {name: float(v) for name, v in _figures(raw, width).items()}
    intervals = _intervals(rows, shape, kept, width, options.confidence)
    return GaugeStudy(
        anova=rows,
        components=found,
        interaction_kept=kept,
        distinct_categories=_categories(figures["signal_to_noise"]),
        gauge_offsets=data.mean(axis=(0, 2)) - data.mean(),
        intervals=intervals,
        **figures,
    )


def _categories(ratio: float) -> int:
    """Whole categories, at least one; a gauge without any error is given a thousand."""
    return int(np.clip(np.floor(ratio), 1, 1000)) if not np.isnan(ratio) else 1


def _checked(readings: ArrayLike, lower: float | None, upper: float | None) -> Array:
    data = np.asarray(readings, float)
    if data.ndim != 3 or data.shape[0] < 2 or data.shape[1] < 2 or data.shape[2] < 1:
        raise ValueError(
            f"readings {data.shape} must be (parts, gauges, repeats) with two parts and gauges"
        )
    if not np.isfinite(data).all():
        part, gauge, repeat = (int(k[0]) for k in np.nonzero(~np.isfinite(data)))
        raise ValueError(
            f"reading of part {part}, gauge {gauge}, repeat {repeat} is missing: "
            "a crossed study must be complete"
        )
    if np.ptp(data) == 0:
        raise ValueError("all readings are equal: there is nothing to split")
    if lower is not None and upper is not None and not lower < upper:
        raise ValueError(f"lower limit {lower:g} must be below the upper limit {upper:g}")
    return data


def _anova(data: Array, options: GaugeOptions) -> tuple[tuple[AnovaRow, ...], bool]:
    parts, gauges, repeats = data.shape
    mean = data.mean()
    part = data.mean(axis=(1, 2), keepdims=True) - mean
    gauge = data.mean(axis=(0, 2), keepdims=True) - mean
    cell = data.mean(axis=2, keepdims=True) - mean - part - gauge
    rest = data - mean - part - gauge - cell
    ss = {
        "part": gauges * repeats * float((part**2).sum()),
        "gauge": parts * repeats * float((gauge**2).sum()),
        "part x gauge": repeats * float((cell**2).sum()),
        "repeatability": float((rest**2).sum()),
    }
    df = {
        "part": parts - 1,
        "gauge": gauges - 1,
        "part x gauge": (parts - 1) * (gauges - 1),
        "repeatability": parts * gauges * (repeats - 1),
    }
    kept = options.interaction == "keep" and repeats > 1
    if options.interaction == "test" and repeats > 1:
        _, p = _f_test(ss, df, "part x gauge", "repeatability")
        # Repeats without any scatter: whatever the interaction is, it is more than that.
        kept = bool(np.isnan(p) or p <= options.pool_above)
    if not kept:
        ss["repeatability"] += ss.pop("part x gauge")
        df["repeatability"] += df.pop("part x gauge")
    below = "part x gauge" if kept else "repeatability"
    tests = {"part": below, "gauge": below, "part x gauge": "repeatability"}
    rows = []
    for source in ss:
        f, p = _f_test(ss, df, source, tests[source]) if source in tests else (np.nan, np.nan)
        rows.append(AnovaRow(source, df[source], ss[source], ss[source] / df[source], f, p))
    whole = float(((data - mean) ** 2).sum())
    rows.append(AnovaRow("total", data.size - 1, whole, whole / (data.size - 1), np.nan, np.nan))
    return tuple(rows), kept


def _f_test(
    ss: dict[str, float], df: dict[str, int], source: str, below: str
) -> tuple[float, float]:
    if ss[below] <= 0 or df[below] == 0:
        return float("nan"), float("nan")
    f = (ss[source] / df[source]) / (ss[below] / df[below])
    return f, float(stats.f.sf(f, df[source], df[below]))


def _components(
    ms: dict[str, float] | dict[str, Array], shape: tuple[int, ...], kept: bool
) -> dict[str, Array]:
    """Components as estimated from the mean squares (floats or arrays alike)."""
    parts, gauges, repeats = shape
    error = np.asarray(ms["repeatability"])
    below = np.asarray(ms["part x gauge"]) if kept else error
    return {
        "repeatability": error,
        "gauge": (np.asarray(ms["gauge"]) - below) / (parts * repeats),
        "interaction": (below - error) / repeats,
        "part": (np.asarray(ms["part"]) - below) / (gauges * repeats),
    }


def _figures(raw: dict[str, Array], width: float) -> dict[str, Array]:
    """All figures of the study from raw components; negatives count as 0."""
    v = {name: np.maximum(value, 0.0) for name, value in raw.items()}
    between = v["gauge"] + v["interaction"]
    measurement = v["repeatability"] + between
    total = measurement + v["part"]
    with np.errstate(divide="ignore", invalid="ignore"):
        return {
            "sd_repeatability": np.sqrt(v["repeatability"]),
            "sd_reproducibility": np.sqrt(between),
            "sd_measurement": np.sqrt(measurement),
            "sd_part": np.sqrt(v["part"]),
            "sd_total": np.sqrt(total),
            "percent_of_study_sd": 100 * np.sqrt(measurement / total),
            "percent_contribution": 100 * measurement / total,
            "precision_to_tolerance": 6 * np.sqrt(measurement) / width,
            "signal_to_noise": np.sqrt(2 * v["part"] / measurement),
        }


@lru_cache(maxsize=4)
def _grid(dimensions: int) -> Array:
    """(n, dimensions) Sobol points, the same every time; the corner at 0 is left out."""
    from scipy.stats import qmc

    points = qmc.Sobol(dimensions, scramble=False).random_base2(_GRID_POWER)[1:]
    return np.asarray(points)


@lru_cache(maxsize=256)
def _variates(dimensions: int, column: int, df: int) -> Array:
    """Chi-square variates with ``df`` degrees of freedom on one column of the grid."""
    return np.asarray(stats.chi2.ppf(_grid(dimensions)[:, column], df))


def _intervals(
    rows: tuple[AnovaRow, ...],
    shape: tuple[int, ...],
    kept: bool,
    width: float,
    confidence: float,
) -> dict[str, Interval]:
    used = [row for row in rows if row.source != "total"]
    drawn = {row.source: row.ss / _variates(len(used), k, row.df) for k, row in enumerate(used)}
    figures = _figures(_components(drawn, shape, kept), width)
    tail = (1 - confidence) / 2
    out: dict[str, Interval] = {}
    for name, value in figures.items():
        ordered = np.sort(value[~np.isnan(value)])
        if ordered.size == 0:
            out[name] = (float("nan"), float("nan"))
            continue
        # Order statistics, not interpolated ones: a ratio may be infinite.
        last = ordered.size - 1
        low, high = ordered[int(tail * last)], ordered[last - int(tail * last)]
        out[name] = (float(low), float(high))
    return out

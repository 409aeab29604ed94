"""What the attribution engine is given: the bay's residuals as plain arrays, and the options.

A *cell* is that part of one plotted lot (one stream, one statistic, one lot) whose wafers share
the same full context, the context of their other process steps included. A lot mean of three
wafers coated on three cups is one point of three cells. A statistic that has no value for a part
of the lot (wafer-to-wafer) is one cell; a factor on which its wafers differ is -1 there.

All times are seconds on one clock (any origin). All variances are squared units of the residual.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

DAY = 86400.0
SPREAD = frozenset({"within-wafer", "wafer-to-wafer"})
MAP = frozenset({"tilt-x", "tilt-y", "bowl", "map-distance"})
RESIDUAL = frozenset({"residual"})


def sums(index: IntArray, weights: NDArray[Any], length: int = 0) -> FloatArray:
    """Return the sums of `weights` by `index` (codes from 0), at least `length` of them."""
    return np.bincount(index, weights, length).astype(np.float64, copy=False)


def statistic_class(name: str) -> str:
    """Return what a statistic tells of: `mean`, `spread` or `map`.

    Every name that is not a spread or map statistic counts as a mean: `mean` itself and each
    overlay term (a term that steps is a shift of that term). The overlay `residual` is a spread.
    """
    if name in SPREAD or name in RESIDUAL:
        return "spread"
    return "map" if name in MAP else "mean"


@dataclass(frozen=True)
class Evidence:
    """Residuals of the bay, one entry a cell, with what is known of each series.

    Cell arrays, shape (n,): `series` (index of stream x statistic), `point` (plotted point; its
    cells share the lot component), `lot` (lot identity over all streams), `t_process` and
    `t_measure` (seconds), `residual` (value minus the baseline centre of its series, in unit),
    `var_own` (wafer and site part of its variance), `var_lot` (lot part), `monitoring` (False for
    baseline cells: they only show a level's normal behaviour and are never searched).
    `levels`, shape (n, n_factors): level codes, -1 where unknown; `factors` and `level_names` name
    them. Order the factors by preference: where the data cannot tell two levels apart, the level
    of the earlier factor is named first.
    Series arrays, shape (m,): `family` (characteristic x statistic), `characteristic`,
    `statistic` (names), `var_center` (variance of the error of the baseline centre), `phi` (lag-1
    autocorrelation of the plotted points).
    `measured_factors` act when the wafer is measured (their onsets run on `t_measure`).
    `t_level`, shape (n, n_factors), optional: when each factor acted on the cell's wafers, in
    seconds (the coat time behind a CD); not finite means unknown: the default time is taken.
    `kind`, shape (m,), optional: code of the statistic of a parameter that a series' family belongs
    to; the family codes of a kind follow each other. Without it every family is of its own kind.

    Raises ValueError naming the array where shapes, codes, variances or times do not fit.
    """

    series: IntArray
    point: IntArray
    lot: IntArray
    t_process: FloatArray
    t_measure: FloatArray
    residual: FloatArray
    var_own: FloatArray
    var_lot: FloatArray
    monitoring: BoolArray
    levels: IntArray
    factors: tuple[str, ...]
    level_names: tuple[tuple[str, ...], ...]
    family: IntArray
    characteristic: IntArray
    statistic: tuple[str, ...]
    var_center: FloatArray
    phi: FloatArray
    measured_factors: frozenset[str] = frozenset({"gauge"})
    t_level: FloatArray | None = None
    kind: IntArray | None = None

    def __post_init__(self) -> None:
        n, m = len(self.series), len(self.family)
        for name in ("series", "point", "lot"):
            _check_codes(name, getattr(self, name), n, m if name == "series" else None)
        for name in ("t_process", "t_measure", "residual", "var_own", "var_lot"):
            _check_numbers(name, getattr(self, name), n)
        for name in ("characteristic", "family"):
            _check_codes(name, getattr(self, name), m, None)
        for name in ("var_center", "phi"):
            _check_numbers(name, getattr(self, name), m)
        if len(self.statistic) != m:
            raise ValueError(f"statistic: {len(self.statistic)} names for {m} series")
        if np.shape(self.monitoring) != (n,):
            raise ValueError(f"monitoring: shape {np.shape(self.monitoring)}, expected ({n},)")
        if np.any(self.var_own <= 0.0):
            raise ValueError("var_own: every cell needs a variance above 0")
        if np.any(self.var_lot < 0.0) or np.any(self.var_center < 0.0):
            raise ValueError("var_lot, var_center: a variance is negative")
        if np.any(np.abs(self.phi) >= 1.0):
            raise ValueError("phi: an autocorrelation is outside (-1, 1)")
        if self.kind is not None:
            _check_codes("kind", self.kind, m, None)
            kinds = self.family_kind()
            if np.any(np.bincount(kinds[np.r_[True, kinds[1:] != kinds[:-1]]]) > 1):
                raise ValueError("kind: the family codes of a kind have to follow each other")
        self._check_levels(n)

    def _check_levels(self, n: int) -> None:
        k = len(self.factors)
        if np.shape(self.levels) != (n, k):
            raise ValueError(f"levels: shape {np.shape(self.levels)}, expected ({n}, {k})")
        if len(self.level_names) != k:
            raise ValueError(f"level_names: {len(self.level_names)} lists for {k} factors")
        if self.t_level is not None and np.shape(self.t_level) != (n, k):
            raise ValueError(f"t_level: shape {np.shape(self.t_level)}, expected ({n}, {k})")
        for j, factor in enumerate(self.factors):
            codes = self.levels[:, j]
            if n and (codes.min() < -1 or codes.max() >= len(self.level_names[j])):
                raise ValueError(f"levels: factor {factor!r} has a code without a level name")

    @property
    def n_families(self) -> int:
        """Number of family codes in use (largest code plus one)."""
        return int(self.family.max()) + 1 if len(self.family) else 0

    @property
    def cell_family(self) -> IntArray:
        """Family of each cell, shape (n,)."""
        return self.family[self.series]

    def family_statistic(self) -> tuple[str, ...]:
        """Return the statistic's name of each family."""
        names = [""] * self.n_families
        for code, name in zip(self.family.tolist(), self.statistic, strict=True):
            names[code] = name
        return tuple(names)

    def family_characteristic(self) -> IntArray:
        """Return the characteristic of each family, shape (n_families,)."""
        out = np.full(self.n_families, -1, dtype=np.int64)
        out[self.family] = self.characteristic
        return out

    def family_kind(self) -> IntArray:
        """Return the kind of each family, shape (n_families,)."""
        out = np.arange(self.n_families)
        if self.kind is not None:
            out[self.family] = self.kind
        return out

    def is_measured(self, factors: tuple[int, ...]) -> bool:
        """Say whether a factor (or conjunction) acts at the time of measurement."""
        return any(self.factors[j] in self.measured_factors for j in factors)

    def known_levels(self, factor: int) -> IntArray:
        """Return the level codes of a factor; -1 also where it acted after the measurement, since
        what came later explains nothing."""
        codes = self.levels[:, factor]
        if self.t_level is None:
            return codes
        return np.where(self.t_level[:, factor] > self.t_measure, -1, codes)

    def time_of(self, factors: tuple[int, ...]) -> FloatArray:
        """Return when a factor or conjunction acted on each cell, seconds, shape (n,)."""
        if self.is_measured(factors):
            return self.t_measure
        if self.t_level is None:
            return self.t_process
        own = self.t_level[:, factors[0]]
        return np.where(np.isfinite(own), own, self.t_process)


@dataclass(frozen=True)
class AttributionOptions:
    """How the search is held.

    `alpha`: an effect is reported when at most this many false effects are expected in one look
    at the whole bay. `since`: time of the last look in seconds; new effects must then rest on at
    least one cell measured after it (None: this is the first look). `conjunctions`: pairs of
    factor names searched as one factor from the start (None: `tool` with `module` of each step);
    other pairs are tried below the best single levels. `max_effects` bounds the effects of a
    look. `bins` is the number of onsets in the first, coarse scan. `null_cells` is the amount of
    null simulation (cells drawn in all) that calibrates the p-values; `seed` makes it repeat.
    `prior_sigmas` is the typical size of an effect in sigmas of a plotted point (of a single-lot
    spike: twice that); a new effect smaller than `min_sigmas` in every family is no excursion,
    however many streams bear it out. `confidence` is that of all intervals.
    """

    alpha: float = 0.1
    since: float | None = None
    conjunctions: tuple[tuple[str, str], ...] | None = None
    max_effects: int = 12
    bins: int = 64
    null_cells: int = 250_000
    seed: int = 20240611
    prior_sigmas: float = 2.5
    min_sigmas: float = 0.4
    confidence: float = 0.95
    shape_prior: dict[str, float] = field(
        default_factory=lambda: {"step": 0.45, "ramp": 0.22, "window": 0.11, "lot": 0.22}
    )

    def __post_init__(self) -> None:
        if not 0.0 < self.alpha <= 1.0:
            raise ValueError(f"alpha: {self.alpha} is outside (0, 1]")
        if not 0.5 <= self.confidence < 1.0:
            raise ValueError(f"confidence: {self.confidence} is outside [0.5, 1)")
        if self.bins < 8:
            raise ValueError(f"bins: {self.bins} is too coarse, at least 8")
        if set(self.shape_prior) != {"step", "ramp", "window", "lot"}:
            raise ValueError("shape_prior: needs step, ramp, window and lot")


def _check_codes(name: str, values: IntArray, n: int, limit: int | None) -> None:
    if np.shape(values) != (n,):
        raise ValueError(f"{name}: shape {np.shape(values)}, expected ({n},)")
    if n and values.min() < 0:
        raise ValueError(f"{name}: a negative code")
    if limit is not None and n and values.max() >= limit:
        raise ValueError(f"{name}: code {values.max()} but only {limit} series are described")


def _check_numbers(name: str, values: FloatArray, n: int) -> None:
    if np.shape(values) != (n,):
        raise ValueError(f"{name}: shape {np.shape(values)}, expected ({n},)")
    if not np.all(np.isfinite(values)):
        where = int(np.flatnonzero(~np.isfinite(values))[0])
        raise ValueError(f"{name}: entry {where} is not a finite number")

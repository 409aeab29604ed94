"""What could have moved: levels of factors and of conjunctions, and their usual offsets.

A column is one factor, or a conjunction of two, with the level of each cell. A level that always
read a little high (a cup's usual offset, batch to batch variation) is no excursion: its offset is
estimated from the baseline cells as a random effect, per column and family, and taken out; what
stays unknown of it widens the noise of that level. The variance of the effect is the moment
estimate of DerSimonian and Laird (Controlled Clinical Trials 7, 1986).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from spc.stats.attribution_evidence import (
    AttributionOptions,
    BoolArray,
    Evidence,
    FloatArray,
    IntArray,
    sums,
)
from spc.stats.attribution_noise import Noise, ar1_inflation

WHOLE = "characteristic"


@dataclass(frozen=True)
class Column:
    """One searched factor: `factors` (names), `codes` (n,) with -1 for none, `names` of levels.

    `time` (n,) is when it first acted on the cell's lot, `last` (n,) when it last did, seconds: all
    cells of a lot with the level in a family have one time, since the lot's common part is told
    apart from an effect only by whole lots. `measured` tells that this is the time of measurement.
    `twin_of` is the index of an earlier column that splits the monitored cells in the same way
    (it is not searched, only named as an alias), or -1.
    """

    factors: tuple[str, ...]
    codes: IntArray
    names: tuple[tuple[str, ...], ...]
    time: FloatArray
    last: FloatArray
    measured: bool
    twin_of: int = -1

    def cells(self, level: int) -> BoolArray:
        """Return which cells carry the level, shape (n,)."""
        return self.codes == level


@dataclass(frozen=True)
class Candidate:
    """A level to look at: its column, level code, log prior of the level, `unknown` (F,) offset
    variance and the score of the coarse scan."""

    column: Column
    level: int
    log_prior: float
    unknown: FloatArray
    score: float

    @property
    def key(self) -> tuple[tuple[str, ...], tuple[str, ...]]:
        """Factor names and level names."""
        return self.column.factors, self.column.names[self.level]


@dataclass(frozen=True)
class Offsets:
    """Usual offsets: `total` (n,) to take out of the residuals, and per column the variance that
    stays unknown, a (levels, families) array."""

    total: FloatArray
    variance: tuple[FloatArray, ...]


def default_conjunctions(factors: tuple[str, ...]) -> tuple[tuple[str, str], ...]:
    """Return `tool` with `module` for every step that has both, e.g. coat.tool with coat.module."""
    pairs = []
    for name in factors:
        stem, _, last = name.rpartition(".")
        other = f"{stem}.module" if stem else "module"
        if last == "tool" and other in factors:
            pairs.append((name, other))
    return tuple(pairs)


def is_machine(factors: tuple[str, ...]) -> bool:
    """Return whether factors name only tools and modules, of whatever step."""
    return all(name.rpartition(".")[2] in ("tool", "module") for name in factors)


def build_columns(evidence: Evidence, options: AttributionOptions) -> tuple[Column, ...]:
    """Return the columns to search: each factor, each conjunction after it, whole characteristics.

    Raises ValueError for a conjunction of an unknown factor.
    """
    pairs = options.conjunctions
    if pairs is None:
        pairs = default_conjunctions(evidence.factors)
    for pair in pairs:
        for name in pair:
            if name not in evidence.factors:
                raise ValueError(f"conjunctions: {name!r} is not a factor")
    wanted: list[tuple[int, ...]] = []
    for j, name in enumerate(evidence.factors):
        wanted.append((j,))
        wanted += [(j, evidence.factors.index(b)) for a, b in pairs if a == name]
    columns = [make_column(evidence, factors) for factors in wanted]
    columns.append(_whole_characteristic(evidence))
    return _mark_twins([c for c in columns if len(c.names)], evidence.monitoring)


def make_column(evidence: Evidence, factors: tuple[int, ...]) -> Column:
    """Return the column of one factor (by index) or of the conjunction of two."""
    first = factors[0]
    codes = evidence.known_levels(first)
    names: tuple[tuple[str, ...], ...] = tuple((n,) for n in evidence.level_names[first])
    if len(factors) == 2:
        second = factors[1]
        width = len(evidence.level_names[second])
        other = evidence.known_levels(second)
        both = np.where((codes >= 0) & (other >= 0), codes * width + other, -1)
        present, codes = np.unique(both, return_inverse=True)
        shift = int(present[0] == -1) if len(present) else 0
        codes = codes - shift
        names = tuple(
            (evidence.level_names[first][c // width], evidence.level_names[second][c % width])
            for c in present[shift:].tolist()
        )
    time, last = _lot_times(evidence, codes, evidence.time_of(factors))
    return Column(
        factors=tuple(evidence.factors[j] for j in factors),
        codes=codes.astype(np.int64),
        names=names,
        time=time,
        last=last,
        measured=evidence.is_measured(factors),
    )


def _lot_times(
    evidence: Evidence, codes: IntArray, time: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return the first and the last time of each cell's lot, level and family."""
    group = evidence.lot * evidence.n_families + evidence.cell_family
    _, at = np.unique(group * (int(codes.max(initial=-1)) + 2) + codes + 1, return_inverse=True)
    first = np.full(int(at.max(initial=-1)) + 1, np.inf)
    last = -first
    np.minimum.at(first, at, time)
    np.maximum.at(last, at, time)
    return first[at], last[at]


def conjunction_within(evidence: Evidence, parent: Column, level: int, other: Column) -> Column:
    """Return the conjunction of one level of `parent` with every level of the single `other`."""
    codes = np.where(parent.cells(level), other.codes, -1)
    time, last = _lot_times(evidence, codes, (other if other.measured else parent).time)
    return Column(
        factors=parent.factors + other.factors,
        codes=codes,
        names=tuple(parent.names[level] + name for name in other.names),
        time=time,
        last=last,
        measured=parent.measured or other.measured,
    )


def usual_offsets(evidence: Evidence, noise: Noise, columns: tuple[Column, ...]) -> Offsets:
    """Estimate from the baseline cells how far each level usually lies from its series' centre.

    Columns are taken in turn, each on what the earlier ones left. Returns zero offsets without
    baseline cells.
    """
    base = ~evidence.monitoring
    total = np.zeros(len(evidence.residual))
    variances: list[FloatArray] = []
    for column in columns:
        shape = (len(column.names), evidence.n_families)
        use = base & (column.codes >= 0)
        if column.twin_of >= 0 or not use.any() or column.factors == (WHOLE,):
            variances.append(np.zeros(shape))
            continue
        blup, variance = _random_effect(evidence, noise, column, use, evidence.residual - total)
        known = column.codes >= 0
        total[known] += blup[column.codes[known], evidence.cell_family[known]]
        variances.append(variance)
    # A whole characteristic has no offset of its own, but what varies by nature from one batch to
    # the next varies for all of it.
    natural = np.max([v.max(axis=0) for v in variances if v.size], axis=0)
    for i, column in enumerate(columns):
        if column.factors == (WHOLE,):
            variances[i] = np.tile(natural, (len(column.names), 1))
    return Offsets(total, tuple(variances))


def _random_effect(
    evidence: Evidence, noise: Noise, column: Column, use: BoolArray, residual: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return the shrunken offset and its remaining variance, each (levels, families)."""
    n_levels, n_families = len(column.names), evidence.n_families
    info, share = noise.information(np.where(use, column.codes, -1))
    y = noise.whiten(np.where(use, noise.clip(residual), 0.0))
    series, code = evidence.series[use], column.codes[use]
    key, pair = np.unique(series * n_levels + code, return_inverse=True)
    owner = key // n_levels
    points = sums(pair, share[use])
    inflation = ar1_inflation(points, noise.phi[owner])
    weight = np.maximum(sums(pair, info[use]), 1e-300) / inflation
    mean = sums(pair, y[use]) / np.maximum(sums(pair, info[use]), 1e-300)
    m = len(evidence.family)
    all_weight = sums(owner, weight, m)
    center = sums(owner, weight * mean, m) / np.maximum(all_weight, 1e-300)
    # What a level tells beyond its series' own centre: nothing if it is the series' only level.
    inner = weight * (1.0 - weight / all_weight[owner])
    cell = (key % n_levels) * n_families + evidence.family[owner]
    a = sums(cell, inner, n_levels * n_families).reshape(n_levels, n_families)
    top = sums(cell, inner * (mean - center[owner]), n_levels * n_families)
    mean_level = top.reshape(n_levels, n_families) / np.maximum(a, 1e-300)
    typical = 1e-3 / noise.sigma**2
    known = a > typical
    q = np.where(known, a * mean_level**2, 0.0).sum(0)
    degrees = np.maximum(known.sum(0) - 1, 0)
    # Two standard deviations of the chi-square are taken off: an offset has to be there, and a
    # handful of batches must not talk the variance up.
    excess = np.maximum(q - degrees - 2.0 * np.sqrt(2.0 * degrees), 0.0)
    tau2 = excess / np.maximum(np.where(known, a, 0.0).sum(0), 1e-300)
    tau2 = np.where(degrees > 0, tau2, 0.0)
    shrink = tau2 * a / (1.0 + tau2 * a)
    blup = np.where(known, mean_level * shrink, 0.0)
    return blup, tau2 / (1.0 + tau2 * a)


def _whole_characteristic(evidence: Evidence) -> Column:
    codes = evidence.characteristic[evidence.series]
    count = int(codes.max(initial=-1)) + 1
    time, last = _lot_times(evidence, codes, evidence.t_process)
    return Column(
        factors=(WHOLE,),
        codes=codes,
        names=tuple((str(c),) for c in range(count)),
        time=time,
        last=last,
        measured=False,
    )


def _mark_twins(columns: list[Column], monitoring: BoolArray) -> tuple[Column, ...]:
    """Mark columns whose levels split the monitored cells exactly as an earlier column's do."""
    seen: dict[bytes, int] = {}
    out: list[Column] = []
    for i, column in enumerate(columns):
        codes = column.codes[monitoring]
        _, first, inverse = np.unique(codes, return_index=True, return_inverse=True)
        rank = np.empty(len(first), dtype=np.int64)
        rank[np.argsort(first)] = np.arange(len(first))
        canonical = np.where(codes < 0, -1, rank[inverse])
        key = canonical.tobytes() + bytes([column.measured])
        twin = seen.setdefault(key, i)
        out.append(column if twin == i else replace(column, twin_of=twin))
    return tuple(out)

"""Statistics of units: a unit is a stream, a tool or a whole characteristic in one month.

What is estimated how, and from what source:

* mean and overall sd are those of all readings, the sd with the divisor n - 1 (NIST/SEMATECH
  e-Handbook 3.5.1.2; the long-term standard deviation of ISO 22514-2). With few lots it lies a
  little below the root of the summed components, which is given beside it (`sd_total`).
* lot, wafer and site are REML components of the nested model with the fixed pattern of the sites
  taken out first, so that the wafer component is not spoiled by it. The variance of the pattern
  over a wafer is then added to the site component again: product sees it.
* the sd within lots is the root of the wafer and site components, not of the pooled squares: the
  sites of a wafer move together, so that the pooled squares hold too little of the wafers.
* degrees of freedom and effective numbers come from the nested sampling (`NestedSample`).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spc.monitoring.review_sites import Readings
from spc.stats.capability import NestedSample, Sigma
from spc.stats.components import Components, WaferSummary, nested_components, site_signatures
from spc.stats.grouping import centred_sums

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

# A place seen on fewer wafers of a unit has no pattern of its own; its readings count as they are.
FEWEST_WAFERS_OF_A_SITE = 3


@dataclass(frozen=True)
class Units:
    """Which unit each wafer belongs to: (n_wafers,) codes from 0 to n - 1, every code in use."""

    of_wafer: IntArray
    n: int


def units_of(labels: IntArray) -> tuple[Units, IntArray]:
    """Units from any whole numbers, one a wafer; and the number behind each unit."""
    behind, codes = np.unique(labels, return_inverse=True)
    return Units(codes.astype(np.int64), behind.size), behind.astype(np.int64)


@dataclass(frozen=True)
class UnitStatistics:
    """Statistics of units; arrays (n_units,), in the characteristic's unit (squared: variances).

    components : as estimated, with the site pattern out. signature : variance of the pattern.
    plain : components of the readings as they stand, sites taken as drawn at random.
    overall, within : sigmas with their degrees of freedom; NaN where the data do not tell.
    of_reading : (n,) unit of each reading that was used; values : these readings.
    complete : whether every wafer still has its sites.
    """

    n_lots: IntArray
    n_wafers: IntArray
    n_readings: IntArray
    mean: FloatArray
    mean_low: FloatArray
    mean_high: FloatArray
    components: Components
    plain: Components
    signature: FloatArray
    overall: Sigma
    within: Sigma
    of_reading: IntArray
    values: FloatArray
    complete: BoolArray

    @property
    def site(self) -> FloatArray:
        """Site component with the pattern left in."""
        return np.asarray(self.components.site + self.signature)

    def readings_of(self, unit: int) -> FloatArray:
        """Readings of one unit; `of_reading` is sorted."""
        first, last = np.searchsorted(self.of_reading, [unit, unit + 1])
        return self.values[first:last]


def unit_statistics(readings: Readings, units: Units, axis: int = 0) -> UnitStatistics:
    """Statistics of every unit from one axis of the readings.

    Units whose wafers were all read on the other axis alone have counts 0 and NaN.
    """
    value = readings.value[:, axis]
    there = np.isfinite(value)
    wafer, site, value = readings.wafer[there], readings.site[there], value[there]
    size = len(readings.stream)
    count, mean, squares = centred_sums(wafer, value, size)
    bare = count == 0
    count = np.where(bare, readings.bare_n, count)
    mean = np.where(bare, readings.bare_mean, mean)
    squares = np.where(bare, readings.bare_squares, squares)
    used = count > 0
    unit = units.of_wafer
    total, grand, spread = _all_readings(unit[used], count[used], mean[used], squares[used], units)
    pattern = _pattern(unit[wafer], wafer, site, value, units.n)
    summary = _reduced(readings, units, pattern, (wafer, value), (count, mean, squares))
    components = nested_components(summary, site_df_lost=pattern.df[: summary.n_streams])
    components = _padded(components, units.n)
    n_lots = _distinct(unit[used], readings.lot[used], units.n)
    n_wafers = _distinct(unit[used], readings.lot_wafer[used], units.n)
    signature = np.where(
        pattern.n > 0,
        np.maximum(pattern.squares - np.nan_to_num(components.site) * pattern.df, 0.0)
        / np.maximum(pattern.n, 1),
        0.0,
    )
    sample_counts = (n_lots, np.bincount(unit[used], minlength=units.n), total)
    overall, within, low, high = _sigmas(
        components, signature, pattern.df, sample_counts, grand, spread
    )
    order = np.argsort(unit[wafer], kind="stable")
    return UnitStatistics(
        n_lots=n_lots,
        n_wafers=n_wafers,
        n_readings=total,
        mean=grand,
        mean_low=low,
        mean_high=high,
        components=components,
        plain=_plain(readings, units, (count, mean, squares)),
        signature=np.where(np.isfinite(components.site), signature, np.nan),
        overall=overall,
        within=within,
        of_reading=unit[wafer][order],
        values=value[order],
        complete=np.bincount(unit, weights=bare & used, minlength=units.n) == 0,
    )


def _all_readings(
    unit: IntArray, count: IntArray, mean: FloatArray, squares: FloatArray, units: Units
) -> tuple[IntArray, FloatArray, FloatArray]:
    """Readings, their mean and their sd (n - 1) of each unit from the sums of its wafers."""
    total = np.bincount(unit, weights=count, minlength=units.n)
    some = np.maximum(total, 1.0)
    grand = np.bincount(unit, weights=count * mean, minlength=units.n) / some
    slip = np.bincount(unit, weights=count * (mean - grand[unit]), minlength=units.n)
    grand = grand + slip / some
    about = squares + count * (mean - grand[unit]) ** 2
    spread = np.bincount(unit, weights=about, minlength=units.n)
    sd = np.sqrt(np.where(total > 1, spread / np.maximum(total - 1.0, 1.0), np.nan))
    return total.astype(np.int64), np.where(total > 0, grand, np.nan), sd


@dataclass(frozen=True)
class _Pattern:
    """Fixed pattern of the sites: effect at each reading (NaN: none); sums of each unit."""

    effect: FloatArray
    df: IntArray
    n: IntArray  # readings with an effect
    squares: FloatArray  # sum of their squared effects


def _pattern(
    unit: IntArray, wafer: IntArray, site: IntArray, value: FloatArray, n: int
) -> _Pattern:
    effect = np.full(value.size, np.nan)
    df = np.zeros(n, np.int64)
    width = int(site.max(initial=0)) + 1
    cell = np.unique(unit * width + site, return_inverse=True)[1]
    use = np.bincount(cell)[cell] >= FEWEST_WAFERS_OF_A_SITE if cell.size else np.zeros(0, bool)
    if use.any():
        fit = site_signatures(unit[use], wafer[use], site[use], value[use])
        effect[use] = fit.effect[fit.row]
        df[: fit.df.size] = fit.df
    known = np.isfinite(effect)
    return _Pattern(
        effect,
        df,
        np.bincount(unit[known], minlength=n).astype(np.int64),
        np.bincount(unit[known], effect[known] ** 2, n).astype(np.float64),
    )


def _reduced(
    readings: Readings,
    units: Units,
    pattern: _Pattern,
    sites: tuple[IntArray, FloatArray],
    sums: tuple[IntArray, FloatArray, FloatArray],
) -> WaferSummary:
    """One row a wafer with the pattern out, for the components.

    A wafer with two known places or more is reduced to those; any other is taken as it stands.
    """
    wafer, value = sites
    size = len(readings.stream)
    known = np.isfinite(pattern.effect)
    plain = np.bincount(wafer, weights=known, minlength=size) < 2
    use = known | plain[wafer]
    rest = value - np.where(plain[wafer], 0.0, np.nan_to_num(pattern.effect))
    count, mean, squares = centred_sums(wafer[use], rest[use], size)
    bare = count == 0
    count = np.where(bare, sums[0], count)
    mean = np.where(bare, sums[1], mean)
    squares = np.where(bare, sums[2], squares)
    used = count > 0
    lots = np.unique(
        np.column_stack([units.of_wafer, readings.lot])[used], axis=0, return_inverse=True
    )[1]
    return WaferSummary(units.of_wafer[used], lots.ravel(), count[used], mean[used], squares[used])


def _plain(
    readings: Readings, units: Units, sums: tuple[IntArray, FloatArray, FloatArray]
) -> Components:
    """Components of the usual nested model: the site pattern is part of the site variance."""
    used = sums[0] > 0
    pairs = np.column_stack([units.of_wafer, readings.lot])[used]
    lots = np.unique(pairs, axis=0, return_inverse=True)[1].ravel()
    count, mean, squares = sums
    summary = WaferSummary(units.of_wafer[used], lots, count[used], mean[used], squares[used])
    return _padded(nested_components(summary), units.n)


def _padded(components: Components, n: int) -> Components:
    """The same for n units; those at the end that have no wafers get NaN."""
    have = components.mean.size
    if have == n:
        return components
    fields = dict(components.__dict__)
    for name, array in fields.items():
        if isinstance(array, np.ndarray):
            whole = array.dtype.kind in "ib"
            more = np.zeros((n - have, *array.shape[1:]), array.dtype)
            fields[name] = np.concatenate([array, more if whole else more * np.nan])
    fields["pooled"] = (*components.pooled, *([""] * (n - have)))
    return Components(**fields)


def _distinct(unit: IntArray, code: IntArray, n: int) -> IntArray:
    """Distinct codes of each unit."""
    pairs = np.unique(np.column_stack([unit, code]), axis=0)
    return np.bincount(pairs[:, 0], minlength=n).astype(np.int64)


def _sigmas(
    components: Components,
    signature: FloatArray,
    lost: IntArray,
    counts: tuple[IntArray, IntArray, IntArray],
    mean: FloatArray,
    sd: FloatArray,
) -> tuple[Sigma, Sigma, FloatArray, FloatArray]:
    """Overall and within-lot sigma, and the 95 % interval of the mean."""
    lots, wafers, total = counts
    lot, wafer, site = (np.nan_to_num(getattr(components, k)) for k in ("lot", "wafer", "site"))
    at_least = [np.maximum(c, 1) for c in counts]
    with np.errstate(divide="ignore", invalid="ignore"):
        sample = NestedSample(
            lot, wafer, site, at_least[0], at_least[1], at_least[2], signature, lost
        )
        whole, inner = sample.overall(), sample.within_lot()
        low, high = sample.mean_interval(mean)
    several = (lots > 1) & np.isfinite(components.lot)
    blank = np.where(several, 0.0, np.nan)
    df = np.minimum(whole.df, np.maximum(total - 1.0, 1.0))
    overall = Sigma(sd, df + blank, whole.n_effective + blank)
    # One wafer a lot: wafers cannot be told from lots, and what is within a lot is its sites.
    one_each = wafers == lots
    free = total - wafers - lost
    random = np.where(site > 0, site, np.nan)
    site_df = np.where(free > 0, free * ((site + signature) / random) ** 2, np.nan)
    variance = np.where(one_each, site + signature, inner.sd**2)
    variance = np.where(total > lots, variance, np.nan)
    grand = sample.mean_variance() + blank
    within = Sigma(
        np.sqrt(variance),
        np.where(one_each, site_df, inner.df),
        variance / np.where(grand > 0, grand, np.nan),
    )
    return overall, within, low + blank, high + blank

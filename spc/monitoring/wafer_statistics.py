"""Statistics of single wafers: spread with the site signature out, map terms, overlay terms."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from spc.monitoring.wafers import Wafers
from spc.stats.overlay import OVERLAY_TERMS, fit_layout, overlay_layout
from spc.stats.signature import site_signatures
from spc.stats.wafer_map import fit_basis, map_terms

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

MAP_TERMS = ("tilt-x", "tilt-y", "bowl")

# One site of a wafer that is so far off the rest is a flyer of the gauge or a speck, not the shape
# of the map. At 5 sigma a clean site is taken for one in 1.7 million.
FLYER_SIGMAS = 5.0
FEWEST_SITES = 5


@dataclass(frozen=True)
class SignatureAt:
    """The signature that holds for each wafer.

    effect, count : (n_sets + 1, n_places) as of `spc.monitoring.limit_sets.signature_at`, and a
        last row of NaN.
    sigma : (n_sets + 1,) standard deviation of a site, NaN where not known.
    set_of : (n_wafers,) set of each wafer, -1 where its stream has none yet.
    member : (n_wafers,) whether the wafer itself helped to estimate it.
    """

    effect: FloatArray
    count: FloatArray
    sigma: FloatArray
    set_of: IntArray
    member: BoolArray


@dataclass
class WaferStatistics:
    """Values of single wafers; arrays (n_wafers,), NaN where a wafer has none.

    squares, df : sum of squares of the sites about the wafer mean with the signature out, scaled
        so that squares / df estimates the site variance, and its degrees of freedom.
    terms : map or overlay terms by name.
    flyer : (n_readings,) site readings far off the rest of their wafer; they count in the mean and
        the spread, and are left out of the shape of the map. sigmas : how far, in site sigmas.
    """

    squares: FloatArray
    df: FloatArray
    terms: dict[str, FloatArray] = field(default_factory=dict)
    notes: list[str] = field(default_factory=list)
    flyer: BoolArray | None = None
    sigmas: FloatArray | None = None

    @property
    def sd(self) -> FloatArray:
        """Spread of the sites of each wafer, NaN without degrees of freedom."""
        return np.sqrt(np.where(self.df > 0, self.squares, np.nan) / np.maximum(self.df, 1.0))


def site_spread(wafers: Wafers, at: SignatureAt) -> WaferStatistics:
    """Spread of the sites of each wafer with the signature of its limits taken out.

    A stream without limits yet has its signature estimated from the wafers at hand. The error of
    a signature of K wafers adds sigma^2 / K to each site of a later wafer and takes as much from
    the wafers it was fitted to, so the sum of squares over 1 +- 1/K is chi-square with sites - 1
    degrees of freedom (two-way layout without interaction, Searle 1971, chapter 7). Sites that
    the signature does not know are left out; a wafer with fewer than two known ones is taken as
    it stands.
    """
    size = len(wafers.table)
    wafer, value = wafers.wafer, wafers.value[:, 0]
    set_of = at.set_of[wafer]
    effect = np.where(set_of >= 0, at.effect[set_of, wafers.place], np.nan)
    count = np.where(set_of >= 0, at.count[set_of, wafers.place], np.nan)
    member = at.member.copy()
    fresh = set_of < 0
    if fresh.any():
        effect[fresh], count[fresh] = _provisional(wafers, fresh)
        member |= at.set_of < 0
    known = np.isfinite(effect) & ~(member[wafer] & (count < 2))
    n_known = np.bincount(wafer, weights=known, minlength=size)
    judged = n_known >= 2
    use = known | ~judged[wafer]
    rest = np.where(judged[wafer], value - np.nan_to_num(effect), value)
    n = np.bincount(wafer[use], minlength=size)
    mean = np.bincount(wafer[use], weights=rest[use], minlength=size) / np.maximum(n, 1)
    squares = np.bincount(wafer[use], weights=(rest - mean[wafer])[use] ** 2, minlength=size)
    share = np.bincount(
        wafer[use], weights=1.0 / np.nan_to_num(count[use], nan=np.inf), minlength=size
    )
    share = np.where(judged, share / np.maximum(n, 1), 0.0)
    factor = np.where(member, 1.0 - share, 1.0 + share)
    df = np.maximum(n - 1.0, 0.0)
    # Wafers kept as sums alone still have the signature in their spread: it is not charted.
    squares = np.where(n == 0, wafers.table["squares"], squares / factor)
    found = WaferStatistics(np.asarray(squares, np.float64), df)
    off = rest - _medians(np.where(use, rest, np.nan), wafer, size)[wafer]
    found.sigmas = off / at.sigma[set_of]
    far = known & (np.abs(np.nan_to_num(found.sigmas)) > FLYER_SIGMAS)
    n_far = np.bincount(wafer, weights=far, minlength=size)
    alone = (n_far == 1) & (n_known >= FEWEST_SITES)
    found.flyer = far & alone[wafer]
    return found


def _medians(values: FloatArray, wafer: IntArray, size: int) -> FloatArray:
    """Median of the finite values of each wafer; readings of a wafer are neighbours."""
    there = np.flatnonzero(np.isfinite(values))
    order = there[np.lexsort((values[there], wafer[there]))]
    count = np.bincount(wafer[there], minlength=size)
    start = np.cumsum(count) - count
    some = np.flatnonzero(count)
    middle = np.zeros(size)
    low, high = start + np.maximum(count - 1, 0) // 2, start + count // 2
    middle[some] = 0.5 * (values[order[low[some]]] + values[order[high[some]]])
    return middle


def without_flyers(wafers: Wafers, found: WaferStatistics) -> Wafers:
    """The same wafers with their flyer sites missing (NaN)."""
    if found.flyer is None or not found.flyer.any():
        return wafers
    return replace(wafers, value=np.where(found.flyer[:, None], np.nan, wafers.value))


def _provisional(wafers: Wafers, fresh: BoolArray) -> tuple[FloatArray, FloatArray]:
    """Effect and count at each reading of streams without limits, from these wafers alone."""
    stream = wafers.table["stream"][wafers.wafer[fresh]]
    found = site_signatures(
        stream, wafers.wafer[fresh], wafers.place[fresh], wafers.value[fresh, 0]
    )
    return found.effect[found.row], found.count[found.row].astype(np.float64)


@dataclass(frozen=True)
class LayoutBlock:
    """Wafers read at the same places: rows of the wafer table, places, and values by axis."""

    rows: IntArray
    places: IntArray
    values: FloatArray  # (n_rows, n_places, n_axes)


def layout_blocks(wafers: Wafers) -> Iterator[LayoutBlock]:
    """Wafers by layout; the places of a wafer are in the order of their names."""
    size = len(wafers.table)
    # A layout is recognised by the sum of random marks of its places.
    marks = np.random.default_rng(20_25).integers(1, 2**62, len(wafers.places.names) + 1)
    total = np.zeros(size, np.int64)
    with np.errstate(over="ignore"):
        np.add.at(total, wafers.wafer, marks[wafers.place])
    count = np.bincount(wafers.wafer, minlength=size)
    start = np.cumsum(count) - count
    _, layout = np.unique(total, return_inverse=True)
    order = np.argsort(layout, kind="stable")
    cuts = np.flatnonzero(np.diff(layout[order])) + 1
    for rows in np.split(order, cuts):
        if rows.size == 0 or count[rows[0]] == 0:
            continue
        index = start[rows][:, None] + np.arange(count[rows[0]])
        yield LayoutBlock(rows, wafers.place[index[0]], wafers.value[index])


def add_map_terms(found: WaferStatistics, wafers: Wafers, radius_mm: float) -> None:
    """Tilt and bowl of each wafer by least squares, in the unit of the readings (edge scale)."""
    size = len(wafers.table)
    for name in MAP_TERMS:
        found.terms[name] = np.full(size, np.nan)
    for block in layout_blocks(without_flyers(wafers, found)):
        xy = wafers.places.coordinates[block.places, :2]
        if block.places.size < 2 or not np.isfinite(xy).all():
            continue
        try:
            basis = map_terms(xy[:, 0], xy[:, 1], radius_mm, ("mean", *MAP_TERMS))
        except ValueError as error:
            found.notes.append(f"no map terms: {error} (bay.wafer_radius_mm)")
            continue
        if block.places.size <= len(basis.names):
            continue  # the terms would fit every site exactly
        fit = fit_basis(block.values[:, :, 0], basis)
        for name in set(MAP_TERMS) & set(fit.names):
            found.terms[name][block.rows] = fit.term(name)


def overlay_statistics(wafers: Wafers) -> WaferStatistics:
    """Overlay terms of each wafer; squares and df are those of the residual of the model.

    A layout that cannot separate wafer terms gives none, with the reason in the notes; one that
    only lacks field terms gives the others.
    """
    size = len(wafers.table)
    found = WaferStatistics(np.zeros(size), np.zeros(size))
    for name in OVERLAY_TERMS:
        found.terms[name] = np.full(size, np.nan)
    for block in layout_blocks(wafers):
        x, y, u, v = wafers.places.coordinates[block.places].T
        try:
            layout = overlay_layout(x - u, y - v, u, v)
        except ValueError as error:
            found.notes.append(f"no overlay terms: {error}")
            continue
        fit = fit_layout(layout, block.values[:, :, 0], block.values[:, :, 1])
        for name in OVERLAY_TERMS:
            found.terms[name][block.rows] = fit.term(name)
        df = np.where(fit.estimable, fit.df.sum(axis=1), 0.0)
        found.df[block.rows] = df
        found.squares[block.rows] = np.where(df > 0, fit.residual_sigma**2 * df, 0.0)
    return found

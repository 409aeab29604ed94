"""The fixed site signature: what the same places on every wafer have in common.

A bowl or a tilt that every wafer shows is not noise. It is estimated by two-way additive least
squares, reading = wafer + site, and taken out before the site variance is estimated.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components

from spc.stats.grouping import (
    FloatArray,
    IntArray,
    as_codes,
    as_values,
    parent_of,
    starts_of,
    sum_by,
)


@dataclass(frozen=True)
class SiteSignatures:
    """The signatures of several streams; one row for each (stream, site) seen.

    Attributes
    ----------
    stream, site : (r,) int arrays
        The codes of each row, sorted by stream, then site.
    effect : (r,) float array
        The signature, in the unit of the readings. Weighted by `count` it sums to zero over each
        connected group of sites.
    count : (r,) int array
        Readings behind each row.
    group : (r,) int array
        Connected group of sites. Two sites are connected when a chain of wafers compares them;
        the difference between two groups cannot be told from a difference between wafers.
    df : (n_streams,) int array
        Degrees of freedom that each signature takes: sites less groups.
    row : (n,) int array
        The row of each reading.
    residual : (n,) float array
        Readings with the signature taken out.
    """

    stream: IntArray
    site: IntArray
    effect: FloatArray
    count: IntArray
    group: IntArray
    df: IntArray
    row: IntArray
    residual: FloatArray


@dataclass(frozen=True)
class SiteSignature:
    """The signature of one stream.

    `effect` is indexed by site code (NaN for codes that do not occur), so that
    `values - effect[site]` takes it out; `residual` is just that for the readings of the fit.
    `df` are the degrees of freedom it takes and `n_groups` the number of disconnected groups of
    sites (1 for a usual layout).
    """

    effect: FloatArray
    count: IntArray
    df: int
    n_groups: int
    residual: FloatArray

    def remove(self, values: ArrayLike, site: ArrayLike) -> FloatArray:
        """Take the signature out of other readings, shape (n,); sites it never saw stay as is."""
        data = as_values(values)
        codes = as_codes(site, "site", data.size)
        effect = np.zeros(max(int(codes.max(initial=-1)) + 1, self.effect.size))
        effect[: self.effect.size] = np.nan_to_num(self.effect)
        return data - effect[codes]


def site_signature(values: ArrayLike, wafer: ArrayLike, site: ArrayLike) -> SiteSignature:
    """Fit the site signature of one stream by two-way additive least squares.

    Parameters
    ----------
    values : (n,) array_like of float
        Readings, any unit.
    wafer, site : (n,) array_like of int
        Codes from 0. The layout may be unbalanced: wafers may miss sites.

    Returns
    -------
    SiteSignature

    Raises
    ------
    ValueError, TypeError
        If shapes differ, codes are negative or not integers, or a reading is not finite.

    Notes
    -----
    Reference: Searle, Linear Models (1971), chapter 7 (two-way crossed, no interaction).
    With one wafer the signature is that wafer's map and no degrees of freedom are left.
    """
    data = as_values(values)
    many = site_signatures(np.zeros(data.size, dtype=np.int64), wafer, site, data)
    size = int(many.site.max(initial=-1)) + 1
    effect = np.full(size, np.nan)
    effect[many.site] = many.effect
    count = np.zeros(size, dtype=np.int64)
    count[many.site] = many.count
    n_groups = int(np.unique(many.group).size)
    return SiteSignature(effect, count, int(many.df.sum()), n_groups, many.residual)


def site_signatures(
    stream: ArrayLike, wafer: ArrayLike, site: ArrayLike, values: ArrayLike
) -> SiteSignatures:
    """Fit the site signatures of many streams at once; see `site_signature`.

    `wafer` codes are unique over streams; `site` codes may be used again by each stream.
    """
    data = as_values(values)
    streams = as_codes(stream, "stream", data.size)
    wafers = as_codes(wafer, "wafer", data.size)
    sites = as_codes(site, "site", data.size)
    if data.size == 0:
        none = np.zeros(0, dtype=np.int64)
        return SiteSignatures(none, none, np.zeros(0), none, none, none, none, np.zeros(0))
    wafer_stream = parent_of(wafers, streams, "wafer", "stream")
    n_streams = int(streams.max()) + 1
    width = int(sites.max()) + 1
    keys, row = _rows(streams * width + sites)
    count = np.bincount(row, minlength=keys.size).astype(np.int64)

    per_wafer = np.maximum(np.bincount(wafers), 1)
    wafer_mean = sum_by(wafers, data, per_wafer.size) / per_wafer
    deviation = data - wafer_mean[wafers]
    right = sum_by(row, deviation, keys.size)

    design = _layouts(wafers, row, wafer_stream)
    group = _groups(design, keys.size)
    effect = _solve(design, keys // width, count, right, group)
    n_groups = int(group.max()) + 1
    offset = sum_by(group, count * effect, n_groups) / sum_by(group, count, n_groups)
    effect -= offset[group]

    row_stream = keys // width
    n_sites = np.bincount(row_stream, minlength=n_streams)
    group_stream = np.zeros(n_groups, dtype=np.int64)
    group_stream[group] = row_stream
    df = n_sites - np.bincount(group_stream, minlength=n_streams)
    residual = data - effect[row]
    return SiteSignatures(row_stream, keys % width, effect, count, group, df, row, residual)


def _rows(key: IntArray) -> tuple[IntArray, IntArray]:
    """Sorted distinct keys and the row of each; by table look-up where the keys are dense."""
    top = int(key.max()) + 1
    if top > 4 * key.size + 1024:
        keys, inverse = np.unique(key, return_inverse=True)
        return keys, inverse.astype(np.int64)
    keys = np.flatnonzero(np.bincount(key, minlength=top)).astype(np.int64)
    table = np.zeros(top, dtype=np.int64)
    table[keys] = np.arange(keys.size)
    return keys, table[key]


@dataclass(frozen=True)
class _Layouts:
    """Distinct wafer layouts: entry i says row `row[i]` occurs `times[i]` in layout `layout[i]`."""

    layout: IntArray
    row: IntArray
    times: FloatArray
    n_wafers: FloatArray  # wafers of each layout
    n_sites: FloatArray  # readings on a wafer of each layout


def _layouts(wafers: IntArray, row: IntArray, wafer_stream: IntArray) -> _Layouts:
    # Most wafers of a stream share one layout, so the normal equations are built from the distinct
    # layouts and not from every pair of sites on every wafer. A layout is recognised by the sum of
    # random 63-bit marks of its rows (rows belong to one stream, so the sum tells the stream too).
    marks = np.random.default_rng(20_25).integers(1, 2**62, size=int(row.max()) + 1)
    total = np.zeros(wafer_stream.size, dtype=np.int64)
    with np.errstate(over="ignore"):
        np.add.at(total, wafers, marks[row])
    present = np.flatnonzero(wafer_stream >= 0)
    _, first, times = np.unique(total[present], return_index=True, return_counts=True)
    example = np.full(wafer_stream.size, -1, dtype=np.int64)
    example[present[first]] = np.arange(first.size)
    picked = example[wafers] >= 0
    n_rows = int(row.max()) + 1
    entry, repeats = np.unique(example[wafers[picked]] * n_rows + row[picked], return_counts=True)
    layout = entry // n_rows
    n_sites = sum_by(layout, repeats, first.size)
    return _Layouts(
        layout, entry % n_rows, repeats.astype(float), times.astype(float), n_sites.astype(float)
    )


def _groups(design: _Layouts, n_rows: int) -> IntArray:
    """Connected groups of rows: each row is linked to the first row of its layout."""
    first = design.row[starts_of(design.layout)][design.layout]
    ones = np.ones(design.row.size)
    graph = coo_matrix((ones, (first, design.row)), shape=(n_rows, n_rows))
    return connected_components(graph, directed=False)[1].astype(np.int64)


def _solve(
    design: _Layouts, row_stream: IntArray, count: IntArray, right: FloatArray, group: IntArray
) -> FloatArray:
    """Solve the site equations with the wafers eliminated, streams of equal size together."""
    starts = starts_of(row_stream)
    sizes = np.diff(np.append(starts, row_stream.size))
    block = np.repeat(np.arange(starts.size), sizes)
    place = np.arange(row_stream.size) - starts[block]
    effect = np.zeros(row_stream.size)
    layout_block = block[design.row[starts_of(design.layout)]]
    for size in np.unique(sizes):
        mine = np.flatnonzero(sizes == size)
        slot = np.full(starts.size, -1, dtype=np.int64)
        slot[mine] = np.arange(mine.size)
        matrix = np.zeros((mine.size, size, size))
        _add_layouts(matrix, design, slot[layout_block], place)
        rows = starts[mine][:, None] + np.arange(size)
        matrix[:, np.arange(size), np.arange(size)] += count[rows]
        # The equations are singular by one constant for each group. Adding a multiple of the
        # group's all-ones block picks the solution that sums to zero and changes no residual.
        same = group[rows][:, :, None] == group[rows][:, None, :]
        matrix += same * (count[rows].mean(axis=1) / size)[:, None, None]
        effect[rows] = np.linalg.solve(matrix, right[rows][:, :, None])[:, :, 0]
    return effect


def _add_layouts(
    matrix: FloatArray, design: _Layouts, layout_slot: IntArray, place: IntArray
) -> None:
    """Subtract sum over wafers of c c' / n from the site matrices (in place)."""
    keep = layout_slot[design.layout] >= 0
    layout, row, times = design.layout[keep], design.row[keep], design.times[keep]
    begin = starts_of(layout)
    length = np.diff(np.append(begin, layout.size))
    repeat = np.repeat(length, length)
    left = np.repeat(np.arange(layout.size), repeat)
    step = np.arange(left.size) - np.repeat(np.cumsum(repeat) - repeat, repeat)
    other = np.repeat(np.repeat(begin, length), repeat) + step
    kind = layout[left]
    weight = design.n_wafers[kind] / design.n_sites[kind]
    np.add.at(
        matrix,
        (layout_slot[kind], place[row[left]], place[row[other]]),
        -weight * times[left] * times[other],
    )

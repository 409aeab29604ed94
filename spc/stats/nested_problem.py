"""From one row a wafer to the sums that the restricted likelihood needs.

Decides for each stream which components the data can tell apart, and how to name them.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from spc.stats.grouping import (
    BoolArray,
    FloatArray,
    IntArray,
    as_codes,
    centred_sums,
    parent_of,
    starts_of,
    sum_by,
)
from spc.stats.reml import LOT, SITE, TOOL, WAFER, Cells, Contrasts, Problem
from spc.stats.wafer_summary import WaferSummary


@dataclass(frozen=True)
class Layout:
    """All streams, arranged for fitting; arrays by stream unless said otherwise.

    `fitted` lists the streams with something to fit; `start`, `free` and `problem` cover those
    only. `names` reorders the solver's variances into site, wafer, lot, tool; `unknown`
    (n_streams, 4) marks components on which there are no data.
    """

    centre: FloatArray
    scale: FloatArray
    n_tools: IntArray
    n_lots: IntArray
    n_wafers: IntArray
    n_sites: IntArray
    site_df: FloatArray
    constant: BoolArray
    degenerate: BoolArray
    unknown: BoolArray
    names: IntArray
    pooled: tuple[str, ...]
    loglik_offset: FloatArray
    fitted: IntArray
    start: FloatArray
    free: BoolArray
    problem: Problem

    def blocks(self, cells_at_once: int) -> Iterator[tuple[int, int, Problem]]:
        """Cut the streams into blocks: first stream, one past the last, their data."""
        whole, cells = self.problem, self.problem.cells
        first_lot = np.append(cells.tool_start, cells.lot_start.size)
        first_cell = np.append(cells.lot_start, cells.k.size)
        bounds = np.append(cells.stream_start, cells.tool_start.size)
        cell_at = first_cell[first_lot[bounds]]
        a = 0
        while a < self.fitted.size:
            b = int(np.searchsorted(cell_at, cell_at[a] + cells_at_once, side="right")) - 1
            b = min(max(b, a + 1), self.fitted.size)
            t0, t1 = bounds[a], bounds[b]
            l0, l1 = first_lot[t0], first_lot[t1]
            c0, c1 = first_cell[l0], first_cell[l1]
            con = whole.contrasts
            mine = slice(*np.searchsorted(con.stream, [a, b]))
            yield (
                a,
                b,
                Problem(
                    whole.site_df[a:b],
                    whole.site_ss[a:b],
                    Contrasts(con.stream[mine] - a, con.n[mine], con.df[mine], con.ss[mine]),
                    Cells(
                        cells.k[c0:c1],
                        cells.n[c0:c1],
                        cells.mean[c0:c1],
                        cells.lot_start[l0:l1] - c0,
                        cells.tool_start[t0:t1] - l0,
                        cells.stream_start[a:b] - t0,
                    ),
                ),
            )
            a = b


@dataclass(frozen=True)
class _Counts:
    """Numbers and sums of squares of each stream, on scaled data."""

    tools: IntArray
    lots: IntArray
    wafers: IntArray
    sites: IntArray
    site_df: FloatArray
    site_ss: FloatArray
    wafer_ss: FloatArray  # of wafer means about their lot mean
    lot_ss: FloatArray  # of lot means about the mean of lot means
    inverse_sites: FloatArray  # mean of 1 / sites a wafer


def arrange(summary: WaferSummary, site_df_lost: IntArray, tool: ArrayLike | None) -> Layout:
    """Sort, scale and sum the wafers of all streams; see `Layout`."""
    size, rows = summary.n_streams, summary.mean.size
    tools = summary.lot if tool is None else as_codes(tool, "tool", rows)
    lot_tool = parent_of(summary.lot, tools, "lot", "tool")
    lot_stream = parent_of(summary.lot, summary.stream, "lot", "stream")
    lots = np.flatnonzero(lot_stream >= 0)
    lots = lots[np.lexsort((lot_tool[lots], lot_stream[lots]))]
    rank = np.zeros(lot_stream.size, dtype=np.int64)
    rank[lots] = np.arange(lots.size)
    lot_stream, lot_tool = lot_stream[lots], lot_tool[lots]

    sites, centre, _ = centred_sums(summary.stream, summary.mean, size)
    total = sum_by(summary.stream, summary.n_sites, size)
    about = (summary.mean - centre[summary.stream]) ** 2 * summary.n_sites + summary.ss
    spread = sum_by(summary.stream, about, size) / np.maximum(total, 1)
    largest = np.zeros(size)
    np.maximum.at(largest, summary.stream, np.abs(summary.mean))
    noise = 16.0 * np.finfo(float).eps * largest
    constant = spread <= noise**2
    scale = np.where(constant | (sites == 0), 1.0, np.sqrt(spread))

    mean = (summary.mean - centre[summary.stream]) / scale[summary.stream]
    counts = _count(summary, mean, rank[summary.lot], lot_stream, lot_tool, scale, site_df_lost)
    return _assemble(
        summary, counts, _Rows(rank[summary.lot], mean, lot_stream, lot_tool), (centre, scale),
        noise / scale, constant, tool is not None,
    )  # fmt: skip


@dataclass(frozen=True)
class _Rows:
    """Wafers (rank of their lot, scaled mean) and lots (stream, tool) in order."""

    lot: IntArray
    mean: FloatArray
    lot_stream: IntArray
    lot_tool: IntArray


def _count(
    summary: WaferSummary,
    mean: FloatArray,
    lot: IntArray,
    lot_stream: IntArray,
    lot_tool: IntArray,
    scale: FloatArray,
    lost: IntArray,
) -> _Counts:
    size = scale.size
    _, lot_mean, wafer_ss = centred_sums(lot, mean, lot_stream.size)
    lots, _, lot_ss = centred_sums(lot_stream, lot_mean, size)
    wafers = np.bincount(summary.stream, minlength=size)
    sites = sum_by(summary.stream, summary.n_sites, size).astype(np.int64)
    site_ss = sum_by(summary.stream, summary.ss, size) / scale**2
    new_tool = np.ones(lot_tool.size, dtype=bool)
    new_tool[1:] = (np.diff(lot_tool) != 0) | (np.diff(lot_stream) != 0)
    inverse = sum_by(summary.stream, 1.0 / summary.n_sites, size)
    return _Counts(
        np.bincount(lot_stream[new_tool], minlength=size).astype(np.int64),
        lots,
        wafers.astype(np.int64),
        sites,
        np.maximum(sites - wafers - lost, 0).astype(np.float64),
        site_ss,
        sum_by(lot_stream, wafer_ss, size),
        lot_ss,
        inverse / np.maximum(wafers, 1),
    )


def _assemble(
    summary: WaferSummary,
    counts: _Counts,
    rows: _Rows,
    shape: tuple[FloatArray, FloatArray],
    noise: FloatArray,
    constant: BoolArray,
    with_tool: bool,
) -> Layout:
    centre, scale = shape
    has_site = counts.site_df > 0
    one_wafer = counts.wafers == counts.lots
    no_site = has_site & (counts.site_ss <= counts.sites * noise**2)
    free_site = has_site & ~no_site
    # No site variance and wafers of a lot exactly alike: only the lot means are left to fit.
    alike = ~free_site & ~one_wafer & (counts.wafer_ss <= counts.wafers * noise**2)
    alone = one_wafer | alike
    many_lots = counts.lots > 1
    free = np.zeros((scale.size, 4), dtype=bool)
    free[:, SITE] = free_site
    free[:, WAFER] = np.where(alone, many_lots, True)
    free[:, LOT] = ~alone & many_lots
    tool_known = with_tool & (counts.tools > 1)
    free[:, TOOL] = tool_known & (counts.tools < counts.lots)
    fit = free.any(axis=1) & ~constant & (counts.wafers > 0)
    tool_is_lot = tool_known & (counts.tools == counts.lots)

    start = np.where(free, _start(counts, alone), 0.0)
    unknown = np.zeros((scale.size, 4), dtype=bool)
    unknown[:, LOT] = ~many_lots
    unknown[:, WAFER] = one_wafer & ~many_lots
    unknown[:, SITE] = unknown[:, WAFER] & ~has_site
    unknown[:, TOOL] = with_tool & (counts.tools < 2)
    unknown[counts.wafers == 0] = True

    names = np.tile(np.arange(4), (scale.size, 1))
    names[np.ix_(alone, [WAFER, LOT])] = [LOT, WAFER]
    names[tool_is_lot, TOOL], names[tool_is_lot, LOT] = names[tool_is_lot, LOT], TOOL
    problem, log_counts = _problem(summary, counts, rows, scale, np.flatnonzero(fit), alike)
    dof = counts.site_df + counts.wafers - 1
    offset = -0.5 * (dof * np.log(2.0 * np.pi * scale**2) + log_counts)
    return Layout(
        centre, scale, counts.tools * with_tool, counts.lots, counts.wafers, counts.sites,
        counts.site_df, constant & (counts.wafers > 0), constant | no_site | alike | ~fit,
        unknown, names, _words(counts, has_site, one_wafer, with_tool), offset, np.flatnonzero(fit),
        start[fit], free[fit], problem,
    )  # fmt: skip


def _start(counts: _Counts, alone: BoolArray) -> FloatArray:
    """Analysis of variance on wafer means, pushed off zero: exact when the layout is balanced."""
    site = counts.site_ss / np.maximum(counts.site_df, 1)
    extra = np.maximum(counts.wafers - counts.lots, 1)
    within = counts.wafer_ss / extra
    between = counts.lot_ss / np.maximum(counts.lots - 1, 1)
    wafer = within - site * counts.inverse_sites
    lot = between - within * counts.lots / np.maximum(counts.wafers, 1)
    lone = between - site * counts.inverse_sites
    floor = 0.02 * (site + within + between)
    wafer = np.maximum(np.where(alone, lone, wafer), floor)
    tool = np.maximum(0.3 * lot, floor)
    return np.stack([np.maximum(site, floor), wafer, np.maximum(lot, floor), tool], axis=1)


def _problem(
    summary: WaferSummary,
    counts: _Counts,
    rows: _Rows,
    scale: FloatArray,
    fitted: IntArray,
    alike: BoolArray,
) -> tuple[Problem, FloatArray]:
    """Sum wafers into cells and cells' sums of squares into contrasts; keep the fitted streams."""
    size = scale.size
    n_sites = np.where(alike[summary.stream], 1, summary.n_sites)
    base = int(n_sites.max(initial=0)) + 1
    key = rows.lot * base + n_sites
    order = np.argsort(key, kind="stable")
    start = starts_of(key[order])
    cell_key = key[order][start]
    lot, n = cell_key // base, (cell_key % base).astype(np.float64)
    k = np.diff(np.append(start, order.size)).astype(np.float64)
    y = rows.mean[order]
    mean = np.add.reduceat(y, start) / k if start.size else np.zeros(0)
    deviation = y - np.repeat(mean, k.astype(np.int64))
    ss = np.add.reduceat(deviation**2, start) if start.size else np.zeros(0)
    stream = rows.lot_stream[lot]
    k = np.where(alike[stream], 1.0, k)
    log_counts = sum_by(stream, np.log(k), size) + sum_by(summary.stream, np.log(n_sites), size)

    new_index = np.full(size, -1, dtype=np.int64)
    new_index[fitted] = np.arange(fitted.size)
    keep = new_index[stream] >= 0
    lot, stream = lot[keep], stream[keep]
    n, k, mean, ss = n[keep], k[keep], mean[keep], ss[keep]
    many = k > 1
    con_key, where = np.unique(stream[many] * base + n[many].astype(np.int64), return_inverse=True)
    contrasts = Contrasts(
        new_index[con_key // base],
        (con_key % base).astype(np.float64),
        sum_by(where, k[many] - 1.0, con_key.size),
        sum_by(where, ss[many], con_key.size),
    )
    lot_start = starts_of(lot)
    tool_key = rows.lot_tool[lot[lot_start]]
    lot_stream = stream[lot_start]
    fresh = np.ones(lot_start.size, dtype=bool)
    fresh[1:] = (np.diff(tool_key) != 0) | (np.diff(lot_stream) != 0)
    tool_start = np.flatnonzero(fresh)
    cells = Cells(k, n, mean, lot_start, tool_start, starts_of(lot_stream[tool_start]))
    return Problem(counts.site_df[fitted], counts.site_ss[fitted], contrasts, cells), log_counts


def _words(
    counts: _Counts, has_site: BoolArray, one_wafer: BoolArray, with_tool: bool
) -> tuple[str, ...]:
    """Say for each stream what was pooled or could not be estimated."""

    def say(i: int) -> str:
        if counts.wafers[i] == 0:
            return "no data"
        parts = []
        if not has_site[i]:
            parts.append("site pooled into wafer (no degrees of freedom within wafers)")
        if one_wafer[i]:
            parts.append("wafer pooled into lot (one wafer a lot)")
        if counts.lots[i] == 1:
            parts.append("lot not estimable (one lot)")
        if with_tool and counts.tools[i] == 1:
            parts.append("tool not estimable (one tool)")
        elif with_tool and counts.tools[i] == counts.lots[i]:
            parts.append("lot pooled into tool (one lot a tool)")
        return "; ".join(parts)

    return tuple(say(i) for i in range(counts.wafers.size))

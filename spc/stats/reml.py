"""Restricted likelihood of nested variance components, for many streams at once.

The model of a reading is mean + tool + lot + wafer + site, all random but the mean. The
variance matrix of a unit (lot, tool) is that of its children side by side, plus one variance times
a matrix of ones; its inverse is that of the children less a rank-one term. So everything that the
likelihood, its gradient and the expected information need climbs from wafers to lots to
tools to the stream by sums alone. Fitting the mean is one more step of the same kind, with an
infinite variance at the top.

References: Patterson & Thompson (1971), Biometrika 58; Searle, Casella & McCulloch, Variance
Components (1992), chapter 6 (Fisher scoring); Harville (1977), JASA 72.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from spc.stats.grouping import BoolArray, FloatArray, IntArray, sum_by

SITE, WAFER, LOT, TOOL = range(4)


@dataclass(frozen=True)
class Contrasts:
    """Independent sums of squares: `ss` ~ (s2_wafer + s2_site / n) chi-square(df), by stream.

    Rows come from wafers of one lot with equal numbers of sites.
    """

    stream: IntArray
    n: FloatArray
    df: FloatArray
    ss: FloatArray


@dataclass(frozen=True)
class Cells:
    """Wafers of one lot with equal numbers of sites, sorted by stream, tool, lot.

    `mean` is the mean of `k` wafer means of `n` sites each. `lot_start`, `tool_start` and
    `stream_start` index the children of each unit: cells of lots, lots of tools, tools of streams.
    """

    k: FloatArray
    n: FloatArray
    mean: FloatArray
    lot_start: IntArray
    tool_start: IntArray
    stream_start: IntArray


@dataclass(frozen=True)
class Problem:
    """A block of streams to be fitted: sites within wafers, wafers within lots, and the rest."""

    site_df: FloatArray
    site_ss: FloatArray
    contrasts: Contrasts
    cells: Cells

    @property
    def n_streams(self) -> int:
        """Streams in the block."""
        return int(self.site_df.size)


@dataclass
class Evaluation:
    """Likelihood, gradient, expected information, mean and its variance, by stream."""

    loglik: FloatArray
    score: FloatArray
    information: FloatArray
    mean: FloatArray
    mean_variance: FloatArray


class _Unit:
    """Sums of a block of units M (inverse variance matrix) with data y.

    q = 1'M1, s = 1'My, quad = y'My, logdet = log|V|; for each component r with matrix V_r:
    h = 1'M V_r M1, hy = 1'M V_r My, yy = y'M V_r My, t = tr(M V_r); and for each pair
    g = 1'M V_r M V_s M1, tt = tr(M V_r M V_s). Arrays end in the axis of units.
    """

    __slots__ = ("g", "h", "hy", "logdet", "q", "quad", "s", "t", "tt", "yy")

    def __init__(self, n_components: int, n_units: int) -> None:
        single, pair = (n_components, n_units), (n_components, n_components, n_units)
        self.q, self.s, self.quad, self.logdet = np.zeros((4, n_units))
        self.h, self.hy, self.yy, self.t = np.zeros((4, *single))
        self.g, self.tt = np.zeros((2, *pair))


def _leaves(cells: Cells, variance: FloatArray, owner: IntArray) -> _Unit:
    """Cells as units: scalars with variance (s2_wafer + s2_site / n) / k."""
    site, wafer = variance[owner, SITE], variance[owner, WAFER]
    spread = (wafer + site / cells.n) / cells.k
    unit = _Unit(2, cells.k.size)
    w = unit.q = 1.0 / spread
    unit.s = w * cells.mean
    unit.quad = unit.s * cells.mean
    unit.logdet = np.log(spread)
    share = np.stack([1.0 / (cells.n * cells.k), 1.0 / cells.k])
    unit.t = share * w
    unit.h = unit.t * w
    unit.hy = unit.t * unit.s
    unit.yy = share * unit.s**2
    unit.tt = unit.t[:, None] * unit.t[None]
    unit.g = unit.tt * w
    return unit


def _gather(unit: _Unit, starts: IntArray) -> _Unit:
    """Sum the children of each parent."""
    size = unit.q.size
    if starts.size == size:
        return unit
    short = size < 8 * starts.size
    owner = np.repeat(np.arange(starts.size), np.diff(np.append(starts, size)))

    def add(row: FloatArray) -> FloatArray:
        # Of the two ways to sum runs, each is faster for its length of run.
        if short:
            return sum_by(owner, row, starts.size)
        return np.asarray(np.add.reduceat(row, starts))

    n = unit.t.shape[0]
    out = _Unit(n, starts.size)
    out.q, out.s, out.quad, out.logdet = (
        add(row) for row in (unit.q, unit.s, unit.quad, unit.logdet)
    )
    for r in range(n):
        for name in ("h", "hy", "yy", "t"):
            getattr(out, name)[r] = add(getattr(unit, name)[r])
        for s in range(r + 1):
            out.g[r, s] = out.g[s, r] = add(unit.g[r, s])
            out.tt[r, s] = out.tt[s, r] = add(unit.tt[r, s])
    return out


def _join(child: _Unit, gamma: FloatArray, kappa: FloatArray) -> _Unit:
    """Subtract the rank-one term: M = blockdiag(children) - gamma u u', u = children 1.

    `kappa` is 1 - gamma q, given by the caller in the form that keeps its digits.
    """
    out = _Unit(0, 0)
    out.q = kappa * child.q
    out.s = kappa * child.s
    out.quad = child.quad - gamma * child.s**2
    out.t = child.t - gamma * child.h
    out.h = kappa**2 * child.h
    out.hy = kappa * (child.hy - gamma * child.s * child.h)
    lean = gamma * child.s
    out.yy = child.yy - lean * (2.0 * child.hy - lean * child.h)
    outer = child.h[:, None] * child.h[None]
    out.tt = child.tt - gamma * (2.0 * child.g - gamma * outer)
    out.g = kappa**2 * (child.g - gamma * outer)
    out.logdet = child.logdet
    return out


def _climb(children: _Unit, starts: IntArray, variance: FloatArray) -> _Unit:
    """From children to parents that share a random effect of the given variance."""
    total = _gather(children, starts)
    growth = 1.0 + variance * total.q
    out = _join(total, variance / growth, 1.0 / growth)
    out.logdet = total.logdet + np.log(growth)
    q, s, n = out.q, out.s, total.h.shape[0]
    grown = _Unit(n + 1, q.size)
    for name in ("q", "s", "quad", "logdet"):
        setattr(grown, name, getattr(out, name))
    grown.h[:n], grown.h[n] = out.h, q**2
    grown.hy[:n], grown.hy[n] = out.hy, q * s
    grown.yy[:n], grown.yy[n] = out.yy, s**2
    grown.t[:n], grown.t[n] = out.t, q
    grown.g[:n, :n], grown.g[n, n] = out.g, q**3
    grown.g[n, :n] = grown.g[:n, n] = q * out.h
    grown.tt[:n, :n], grown.tt[n, n] = out.tt, q**2
    grown.tt[n, :n] = grown.tt[:n, n] = out.h
    return grown


def evaluate(problem: Problem, variance: FloatArray) -> Evaluation:
    """Evaluate the restricted likelihood at `variance`, shape (n_streams, 4).

    The log-likelihood leaves out terms that do not depend on the variances.
    """
    cells = problem.cells
    tool_owner = np.repeat(
        np.arange(problem.n_streams),
        np.diff(np.append(cells.stream_start, cells.tool_start.size)),
    )
    lot_owner = np.repeat(tool_owner, np.diff(np.append(cells.tool_start, cells.lot_start.size)))
    cell_owner = np.repeat(lot_owner, np.diff(np.append(cells.lot_start, cells.k.size)))
    unit = _climb(_leaves(cells, variance, cell_owner), cells.lot_start, variance[lot_owner, LOT])
    if cells.tool_start.size < cells.lot_start.size:
        unit = _climb(unit, cells.tool_start, variance[tool_owner, TOOL])
    total = _gather(unit, cells.stream_start)
    top = _join(total, 1.0 / total.q, np.zeros(problem.n_streams))
    n = top.t.shape[0]
    t, yy = np.zeros((2, 4, problem.n_streams))
    tt = np.zeros((4, 4, problem.n_streams))
    t[:n], yy[:n], tt[:n, :n] = top.t, top.yy, top.tt
    logdet = total.logdet + np.log(total.q)
    quad = top.quad
    logdet, quad = _add_contrasts(problem, variance, (t, yy, tt), logdet, quad)
    return Evaluation(
        loglik=-0.5 * (logdet + quad),
        score=-0.5 * (t - yy).T,
        information=0.5 * np.moveaxis(tt, -1, 0),
        mean=total.s / total.q,
        mean_variance=1.0 / total.q,
    )


def _add_contrasts(
    problem: Problem,
    variance: FloatArray,
    sums: tuple[FloatArray, FloatArray, FloatArray],
    logdet: FloatArray,
    quad: FloatArray,
) -> tuple[FloatArray, FloatArray]:
    """Add the sums of squares within wafers and within cells (`sums` in place)."""
    t, yy, tt = sums
    con, streams = problem.contrasts, problem.n_streams

    def add(weights: FloatArray) -> FloatArray:
        return sum_by(con.stream, weights, streams)

    spread = variance[con.stream, WAFER] + variance[con.stream, SITE] / con.n
    share = {SITE: 1.0 / con.n, WAFER: np.ones(con.n.size)}
    logdet = logdet + add(con.df * np.log(spread))
    quad = quad + add(con.ss / spread)
    for r, a in share.items():
        t[r] += add(con.df * a / spread)
        yy[r] += add(con.ss * a / spread**2)
        for s, b in share.items():
            tt[r, s] += add(con.df * a * b / spread**2)
    used = problem.site_df > 0
    site = np.where(used, variance[:, SITE], 1.0)
    site = np.where(site > 0, site, 1.0)
    df, ss = np.where(used, problem.site_df, 0.0), np.where(used, problem.site_ss, 0.0)
    t[SITE] += df / site
    yy[SITE] += ss / site**2
    tt[SITE, SITE] += df / site**2
    return logdet + df * np.log(site), quad + ss / site


@dataclass(frozen=True)
class Fit:
    """Result of `maximise`: variances (S, 4), the evaluation there, and how it went."""

    variance: FloatArray
    at: Evaluation
    converged: BoolArray
    iterations: int


def maximise(
    problem: Problem,
    start: FloatArray,
    free: BoolArray,
    *,
    tolerance: float = 1e-10,
    max_iterations: int = 200,
) -> Fit:
    """Maximise the restricted likelihood over non-negative variances.

    Parameters
    ----------
    problem : Problem
        Data scaled so that variances are of order 1.
    start : (n_streams, 4) float array
        Start values, positive where free, 0 elsewhere.
    free : (n_streams, 4) bool array
        Which variances are estimated; the others stay at their start.
    tolerance : float
        Convergence when no variance moves by more than this, relative to their sum.

    Notes
    -----
    Fisher scoring. A variance that would turn negative is put to zero and stays there
    while the likelihood falls away from it; a step that lowers the likelihood is halved.
    """
    free = np.asarray(free, dtype=bool)
    # The lowest free variance keeps the matrices invertible, so it may shrink but not vanish.
    lowest = np.zeros_like(free)
    lowest[:, SITE] = free[:, SITE]
    lowest[:, WAFER] = free[:, WAFER] & ~free[:, SITE]
    best = np.array(start, dtype=np.float64)
    at = evaluate(problem, best)
    step = _step(at, best, free)
    done = _small(best, step, lowest, tolerance)
    iteration = 0
    while not done.all() and iteration < max_iterations:
        iteration += 1
        trial = _project(best, np.where(done[:, None], 0.0, step), lowest)
        new = evaluate(problem, trial)
        slack = 1e-11 * (1.0 + np.abs(at.loglik))
        accept = new.loglik >= at.loglik - slack
        best = np.where(accept[:, None], trial, best)
        for name in ("loglik", "score", "information", "mean", "mean_variance"):
            old, fresh = getattr(at, name), getattr(new, name)
            keep = accept.reshape(accept.shape + (1,) * (old.ndim - 1))
            setattr(at, name, np.where(keep, fresh, old))
        step = np.where(accept[:, None], _step(at, best, free), 0.5 * step)
        done = done | _small(best, step, lowest, tolerance)
    return Fit(best, at, done, iteration)


def _project(best: FloatArray, step: FloatArray, lowest: BoolArray) -> FloatArray:
    floor = np.where(lowest, 0.1 * best, 0.0)
    return np.maximum(best + step, floor)


def _small(best: FloatArray, step: FloatArray, lowest: BoolArray, tolerance: float) -> BoolArray:
    moved = np.abs(_project(best, step, lowest) - best).max(axis=1)
    return moved <= tolerance * best.sum(axis=1)


def _step(at: Evaluation, best: FloatArray, free: BoolArray) -> FloatArray:
    """Fisher step in the variances that are free and not held at zero."""
    held = (best <= 0.0) & (at.score <= 0.0)
    moving = free & ~held
    pair = moving[:, :, None] & moving[:, None, :]
    matrix = np.where(pair, at.information, np.eye(4))
    right = np.where(moving, at.score, 0.0)
    size = np.sqrt(np.maximum(np.einsum("sii->si", matrix), 1e-300))
    scaled = matrix / (size[:, :, None] * size[:, None, :]) + 1e-14 * np.eye(4)
    return np.linalg.solve(scaled, (right / size)[:, :, None])[:, :, 0] / size

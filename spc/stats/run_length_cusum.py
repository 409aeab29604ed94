"""Run length of two-sided CUSUM charts by the integral equation.

Each side is a Markov chain on an atom at zero and Gauss-Legendre nodes (Lucas & Crosier 1982,
Technometrics 24:199-205).  When one side signals the other is at zero, so the run length of
both together follows exactly from those of the sides: van Dobben de Bruyn (1968) for the mean,
here by the same renewal argument for the variance and the whole distribution.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import ArrayLike, NDArray

from spc.stats.designs import CusumDesign
from spc.stats.run_length_chain import (
    RunLength,
    Solver,
    check_counts,
    gauss_legendre,
    run_length_of_masses,
)

FloatArray = NDArray[np.float64]

# Beyond this ratio of their means the moments of the two sides lose digits together.
_FAR_APART = 1e3
_MOST_NODES = 2_000
_MOST_STEPS = 16_384


@dataclass(frozen=True)
class _Side:
    """One side: chain, and its start states (at zero, and where the chart starts)."""

    step: FloatArray
    leave: FloatArray
    zero: FloatArray
    start: FloatArray
    mean: FloatArray
    square: FloatArray

    @property
    def moments(self) -> tuple[float, float, float, float]:
        """E[N] and E[N^2] from the start, then from zero."""
        if np.isinf(self.mean).all():
            return math.inf, math.inf, math.inf, math.inf
        return (
            float(self.start @ self.mean),
            float(self.start @ self.square),
            float(self.zero @ self.mean),
            float(self.zero @ self.square),
        )


def cusum_run_length(
    design: CusumDesign,
    shift: float,
    n: ArrayLike | None = None,
    steady_state: bool = False,
) -> RunLength:
    """Run length of a two-sided CUSUM for independent normal points.

    Parameters
    ----------
    design : CusumDesign
    shift : float
        Shift of the mean in sigmas of the plotted point, from the first point on.
    n : int or array of int, optional
        Counts for `prob_within`.
    steady_state : bool
        Start from the long-run state in control, given no signal so far; the head start is
        then without effect.

    Returns
    -------
    RunLength
        `relative_error` is the change of the mean when a quarter more nodes are used.

    Raises
    ------
    ValueError
        For a head start above ``h/2 + k`` (one side could then signal while the other is not
        at zero), or a decision interval that needs too many nodes.
    """
    if design.head_start > design.h / 2.0 + design.k and not steady_state:
        raise ValueError(
            f"{design.text}: the run length is exact for a head start up to H/2 + K = "
            f"{design.h / 2.0 + design.k:g} only"
        )
    nodes = node_count(design)
    if nodes > _MOST_NODES:
        raise ValueError(f"{design.text}: H needs {nodes} nodes, at most {_MOST_NODES} are used")
    rough = [_mean_of(_side(design, shift, steady_state, nodes, sign)) for sign in (1, -1)]
    coarse = _both_means(*rough[0], *rough[1])
    upper, lower = (
        _side(design, shift, steady_state, nodes + nodes // 4, sign) for sign in (1, -1)
    )
    asked = check_counts(n)
    masses, left, rate = _walk(upper, lower, int(asked.max()) if asked.size else 0)
    walked = run_length_of_masses(masses, left, rate, n, "integral equation")
    arl = _both_means(*_mean_of(upper), *_mean_of(lower))
    ends = sorted((upper.moments[2], lower.moments[2]))
    far_apart = ends[1] > _FAR_APART * ends[0]
    sdrl = walked.sdrl if far_apart else _both_sds(upper, lower, arl)
    return replace(walked, arl=arl, sdrl=sdrl, relative_error=abs(coarse / arl - 1.0))


def cusum_arl(k: float, h: float, shift: float) -> float:
    """Zero-state mean run length without head start; the quick path of a design search."""
    design = CusumDesign(k, h)
    means = [_mean_of(_side(design, shift, False, node_count(design), sign)) for sign in (1, -1)]
    return _both_means(*means[0], *means[1])


def node_count(design: CusumDesign) -> int:
    """About four nodes to each sigma of the kernel, and some for the ends."""
    return math.ceil(4.0 * design.h) + 20


def _side(design: CusumDesign, shift: float, steady_state: bool, count: int, sign: int) -> _Side:
    """The upper side (sign +1) or the lower one (-1) as a chain; moments are solved at once."""
    head = 0.0 if steady_state else design.head_start
    step, leave, extra = _kernel(design, sign * shift, head, count)
    zero = np.zeros(leave.size)
    zero[0] = 1.0
    if steady_state:
        start = _steady_marginal(*_kernel(design, 0.0, 0.0, count)[:2], zero)
    else:
        start = np.zeros(leave.size)
        start[extra] = 1.0
    if leave.max() < 1e-200:
        never = np.full(leave.size, math.inf)
        return _Side(step, leave, zero, start, never, never)
    solver = Solver(step, leave)
    mean = solver.solve(np.ones(leave.size))
    square = 2.0 * solver.solve(mean) - mean
    return _Side(step, leave, zero, start, mean, square)


def _kernel(
    design: CusumDesign, shift: float, head: float, count: int
) -> tuple[FloatArray, FloatArray, int]:
    """Chain of an upper side; states are zero, the nodes, and the head start where there is one."""
    from scipy.special import ndtr

    nodes, weights = gauss_legendre(count)
    inner = 0.5 * design.h * (nodes + 1.0)
    source = np.concatenate(([0.0], inner, [head] if head > 0.0 else []))
    push = design.k - source - shift
    step = np.zeros((source.size, source.size))
    step[:, 0] = ndtr(push)
    z = inner[None, :] + push[:, None]
    step[:, 1 : count + 1] = np.exp(-0.5 * z**2) * (
        0.5 * design.h * weights / math.sqrt(2.0 * math.pi)
    )
    leave = ndtr(-(design.h + push))
    return step, leave, source.size - 1 if head > 0.0 else 0


def _mean_of(side: _Side) -> tuple[float, float]:
    return side.moments[0], side.moments[2]


def _both_means(upper: float, upper0: float, lower: float, lower0: float) -> float:
    """Mean of the first of two sides: renewal at zero of the side that has not signalled."""
    if math.isinf(upper0) or math.isinf(lower0):
        return min(upper, lower)
    rates = 1.0 / upper0 + 1.0 / lower0
    return (upper / upper0 + lower / lower0 - 1.0) / rates


def _both_sds(upper: _Side, lower: _Side, mean: float) -> float:
    a, a2, a0, a20 = upper.moments
    b, b2, b0, b20 = lower.moments
    lower_first, upper_first = (a - mean) / a0, (b - mean) / b0
    # E[N_up^2] = E[N^2] + 2 E[N; lower first] a0 + P(lower first) a20, and its mirror.
    total = (a2 - lower_first * a20) / (2.0 * a0) + (b2 - upper_first * b20) / (2.0 * b0) - mean
    square = total / (0.5 / a0 + 0.5 / b0)
    return math.sqrt(max(square - mean**2, 0.0))


def _steady_marginal(step: FloatArray, leave: FloatArray, zero: FloatArray) -> FloatArray:
    """Long-run distribution of one side in control, given that neither has signalled.

    Both together survive at the rate 1/z where ``A(z)^2 = 1``, A the generating function of
    the run length of a side from zero; past its pole A is negative, so ``A(z) = -1``.  There
    the state of a side is distributed as ``zero (I - z T)^-1``.
    """
    identity = np.eye(leave.size)

    def inverse_function(z: float) -> float:
        return 1.0 / float(z * (zero @ np.linalg.solve(identity - z * step, leave)))

    mean = float(np.linalg.solve(identity - step, np.ones(leave.size))[0])
    # 1/A falls almost in a straight line, by the mean for each unit of z.
    z, before = 1.0 + 2.0 / mean, 1.0
    value, value_before = inverse_function(z), 1.0
    for _ in range(60):
        if abs(value + 1.0) < 1e-13 or value == value_before:
            break
        z, before = z - (value + 1.0) * (z - before) / (value - value_before), z
        value, value_before = inverse_function(z), value
    state = np.linalg.solve((identity - z * step).T, zero)
    return np.asarray(state / state.sum())


def _walk(upper: _Side, lower: _Side, target: int) -> tuple[FloatArray, float, float | None]:
    """Chances of the first points, what is left, and the rate of the geometric tail if any."""
    steps = 256
    while True:
        masses = _both_masses(upper, lower, steps)
        left = max(1.0 - float(masses.sum()), 0.0)
        if left <= 1e-12:
            return masses, 0.0, None
        survival = np.maximum(1.0 - np.cumsum(masses), 1e-15)
        before, last = masses[-2:] / survival[-3:-1]
        settled = before > 0.0 and abs(last / before - 1.0) < 1e-9 / steps
        if settled or steps >= max(_MOST_STEPS, min(target, 2 * _MOST_STEPS)):
            return masses, left, float(last) if last > 0.0 else None
        steps *= 4


def _both_masses(upper: _Side, lower: _Side, steps: int) -> FloatArray:
    """Chance that the first signal of both comes at point 1, 2, ..., `steps`."""
    up, up0 = _masses(upper, steps)
    down, down0 = _masses(lower, steps)
    first_up, first_down = np.zeros(steps), np.zeros(steps)
    # A side signals first, or the other has and it starts again from zero.
    for i in range(steps):
        first_up[i] = up[i] - first_down[:i] @ up0[:i][::-1]
        first_down[i] = down[i] - first_up[:i] @ down0[:i][::-1]
    return np.maximum(first_up + first_down, 0.0)


def _masses(side: _Side, steps: int) -> tuple[FloatArray, FloatArray]:
    """Chances of the run length of one side, from the start and from zero."""
    from_start, from_zero = np.empty(steps), np.empty(steps)
    signal = side.leave
    for i in range(steps):
        from_start[i] = side.start @ signal
        from_zero[i] = side.zero @ signal
        signal = side.step @ signal
    return from_start, from_zero

"""Run length of two-sided EWMA charts by the integral equation.

Crowder (1987), Journal of Quality Technology 19:161-169: the kernel is smooth between the
limits, so Gauss-Legendre nodes make a Markov chain whose error falls faster than any power of
their number.  Limits that vary with time are followed step by step until they no longer move.
"""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
from numpy.typing import ArrayLike, NDArray

from spc.stats.designs import EwmaDesign
from spc.stats.ewma import limit_factors
from spc.stats.run_length_chain import (
    Chain,
    RunLength,
    Solver,
    gauss_legendre,
    run_length_of,
    steady_start,
)

FloatArray = NDArray[np.float64]

_SETTLED_LIMITS = 1e-12
_MOST_NODES = 2_001


def ewma_run_length(
    design: EwmaDesign,
    shift: float,
    n: ArrayLike | None = None,
    steady_state: bool = False,
) -> RunLength:
    """Run length of an EWMA chart that starts on target, for independent normal points.

    Parameters
    ----------
    design : EwmaDesign
    shift : float
        Shift of the mean in sigmas of the plotted point, from the first point on.
    n : int or array of int, optional
        Counts for `prob_within`.
    steady_state : bool
        Start from the long-run state in control, given no signal so far (settled limits).

    Returns
    -------
    RunLength
        `relative_error` is the change of the mean when a quarter more nodes are used.

    Raises
    ------
    ValueError
        Where the limits are so wide in steps of the EWMA that too many nodes would be needed.
    """
    nodes = node_count(design)
    if nodes > _MOST_NODES:
        raise ValueError(
            f"{design.text}: an exact run length needs {nodes} nodes, at most {_MOST_NODES} are "
            "used; take a larger lambda or narrower limits"
        )
    coarse = run_length_of(_chain(design, shift, steady_state, nodes), None, "")
    fine = run_length_of(
        _chain(design, shift, steady_state, nodes + 2 * (nodes // 8)), n, "integral equation"
    )
    return replace(fine, relative_error=abs(coarse.arl / fine.arl - 1.0))


def ewma_arl(lam: float, limit: float, shift: float) -> float:
    """Zero-state mean run length with fixed limits; the quick path of a design search."""
    design = EwmaDesign(lam, limit)
    chain = _chain(design, shift, False, node_count(design))
    solved = Solver(chain.step, chain.leave).solve(np.ones(chain.leave.size))
    return float(chain.start @ solved)


def node_count(design: EwmaDesign) -> int:
    """Odd number of nodes: about four to each sigma of the kernel, and some for the ends."""
    width = 2.0 * design.limit / math.sqrt(design.lam * (2.0 - design.lam))
    return 2 * math.ceil(2.0 * width + 10.0) + 1


def _half_width(design: EwmaDesign) -> float:
    return design.limit * math.sqrt(design.lam / (2.0 - design.lam))


def _kernel(
    design: EwmaDesign, shift: float, source: FloatArray, target: float, count: int
) -> tuple[FloatArray, FloatArray]:
    """Chances from points to the nodes between +-target, and out of +-target."""
    from scipy.special import ndtr

    nodes, weights = gauss_legendre(count)
    held = (1.0 - design.lam) * source
    z = (target * nodes[None, :] - held[:, None]) / design.lam - shift
    density = np.exp(-0.5 * z**2) * (target * weights / (design.lam * math.sqrt(2.0 * math.pi)))
    leave = ndtr((-target - held) / design.lam - shift) + ndtr(shift - (target - held) / design.lam)
    return density, leave


def _chain(design: EwmaDesign, shift: float, steady_state: bool, count: int) -> Chain:
    nodes, _ = gauss_legendre(count)
    width = _half_width(design)
    step, leave = _kernel(design, shift, width * nodes, width, count)
    if steady_state:
        return Chain(step, leave, steady_start(*_kernel(design, 0.0, width * nodes, width, count)))
    start = np.zeros(count)
    start[count // 2] = 1.0
    if not design.time_varying:
        return Chain(step, leave, start)
    widths = width * _unsettled_factors(design)
    early = np.empty(widths.size)
    if widths.size == 0:
        return Chain(step, leave, start)
    current, source = np.ones(1), np.zeros(1)
    for i, target in enumerate(widths.tolist()):
        density, out = _kernel(design, shift, source, target, count)
        early[i] = current @ out
        current = current @ density
        source = target * nodes
    return Chain(step, leave, current, early)


def _unsettled_factors(design: EwmaDesign) -> FloatArray:
    """Limits over their settled width at points 1, 2, ... until the difference is negligible."""
    count = 64
    while True:
        factors = limit_factors(design, np.arange(1, count + 1))
        settled = np.flatnonzero(np.abs(factors - 1.0) < _SETTLED_LIMITS)
        if settled.size:
            return factors[: settled[0]]
        count *= 4

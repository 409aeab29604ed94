"""Run length of a chart as the time to absorption of a Markov chain: the shared arithmetic.

The states may be exact (histories of zones) or the nodes of a quadrature (the statistic of an
EWMA or a CUSUM); the arithmetic is the same.  Brook & Evans (1972), Biometrika 59:539-549.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field, replace
from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike, NDArray

FloatArray = NDArray[np.float64]

# Beyond this mean run length the plain LU solve gives way to one without subtractions.
_LONG_RUN = 1e7
_SETTLED = 1e-13
_MOST_STEPS = 200_000


@dataclass(frozen=True)
class RunLength:
    """Distribution of the number of points up to and with the first signal.

    Attributes
    ----------
    arl, sdrl : float
        Mean and standard deviation, in points.
    median : float
        Least whole number of points by which the chance of a signal is at least one half.
    prob_within : float or array or None
        Chance of a signal within n points, in the shape of the n that was asked for.
    n : int or array or None
        The n of `prob_within`.
    method : str
        How it was computed.
    relative_error : float
        Stated error of `arl`: numerical for exact methods, one standard error for simulation.
    """

    arl: float
    sdrl: float
    median: float
    prob_within: float | FloatArray | None = None
    n: int | NDArray[np.int64] | None = None
    method: str = "exact"
    relative_error: float = 0.0


@dataclass(frozen=True)
class Chain:
    """A transient Markov chain and where it stands.

    Attributes
    ----------
    step : array, shape (states, states)
        Chances to go from a state (row) to a state (column) without a signal.
    leave : array, shape (states,)
        Chance of a signal at the next point, computed without subtraction from 1.
    start : array, shape (states,)
        Distribution at the start (sums to 1 less what `early` holds).
    early : array, shape (steps,)
        Chance of a signal at each of the points before the chain takes over.
    """

    step: FloatArray
    leave: FloatArray
    start: FloatArray
    early: FloatArray = field(default_factory=lambda: np.empty(0))


@lru_cache(maxsize=64)
def gauss_legendre(count: int) -> tuple[FloatArray, FloatArray]:
    """Nodes and weights on [-1, 1]; an odd count has a node at 0."""
    nodes, weights = np.polynomial.legendre.leggauss(count)
    for table in (nodes, weights):
        table.flags.writeable = False
    return nodes, weights


class Solver:
    """Solve ``(I - T) x = b``, T the transient part of a chain, also where nearly singular."""

    def __init__(self, step: FloatArray, leave: FloatArray) -> None:
        from scipy.linalg import lu_factor

        # The diagonal of I - T as what leaves the state: no subtraction from 1.
        matrix = -step.copy()
        np.fill_diagonal(matrix, 0.0)
        np.fill_diagonal(matrix, leave - matrix.sum(axis=1))
        self._matrix = matrix
        self._leave = leave
        self._lu = lu_factor(matrix, check_finite=False)
        self._careful: tuple[FloatArray, FloatArray] | None = None
        if not np.max(np.abs(self.solve(np.ones(leave.size)))) < _LONG_RUN:
            self._careful = _eliminate(step, leave)

    def solve(self, right: FloatArray) -> FloatArray:
        """Solve for a right side that is nowhere negative."""
        from scipy.linalg import lu_solve

        if self._careful is not None:
            return _substitute(*self._careful, right)
        return np.asarray(lu_solve(self._lu, right, check_finite=False))

    def solve_left(self, left: FloatArray) -> FloatArray:
        """Solve ``x (I - T) = left``."""
        from scipy.linalg import lu_solve

        return np.asarray(lu_solve(self._lu, left, trans=1, check_finite=False))


def _eliminate(step: FloatArray, leave: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Eliminate states from the last to the first with sums alone (all terms are positive).

    Grassmann, Taksar & Heyman (1985), Operations Research 33:1107-1116, for an absorbing chain.
    """
    work, out = step.copy(), leave.copy()
    flow = np.empty(leave.size)
    for last in range(leave.size - 1, -1, -1):
        flow[last] = work[last, :last].sum() + out[last]
        share = work[:last, last] / flow[last]
        work[:last, :last] += share[:, None] * work[last, :last]
        out[:last] += share * out[last]
    return work, flow


def _substitute(work: FloatArray, flow: FloatArray, right: FloatArray) -> FloatArray:
    values = right.astype(np.float64)
    for last in range(flow.size - 1, 0, -1):
        values[:last] += work[:last, last] / flow[last] * values[last]
    for state in range(flow.size):
        values[state] = (values[state] + work[state, :state] @ values[:state]) / flow[state]
    return values


def steady_start(step: FloatArray, leave: FloatArray) -> FloatArray:
    """Return the long-run distribution over states, given that no signal has come yet.

    Left eigenvector of the largest eigenvalue, by inverse iteration.

    Raises
    ------
    ValueError
        Where the iteration does not settle.
    """
    solver = Solver(step, leave)
    current = np.full(leave.size, 1.0 / leave.size)
    for _ in range(500):
        following = np.maximum(solver.solve_left(current), 0.0)
        following /= following.sum()
        if np.max(np.abs(following - current)) < 1e-14:
            return following
        current = following
    raise ValueError("the steady state of this design does not settle")


def run_length_of(chain: Chain, n: ArrayLike | None, method: str) -> RunLength:
    """Mean, sd, median and chances of a signal within n points of a chain.

    Notes
    -----
    Moments are those of the points after the first, so that an sd far below 1 keeps its digits.
    """
    solver = Solver(chain.step, chain.leave)
    steps = chain.early.size
    once = solver.solve(np.ones(chain.leave.size))
    twice = solver.solve(once)
    # survival[i] is the chance of no signal within i points, for the points before the chain.
    survival = 1.0 - np.concatenate(([0.0], np.cumsum(chain.early)))
    counts = np.arange(1, steps)
    head = survival[1:steps]
    if steps:
        first = head.sum() + chain.start @ once
        second = (2 * counts - 1) @ head
        second += (2 * steps - 1) * (chain.start @ once) + 2.0 * (
            chain.start @ (chain.step @ twice)
        )
    else:
        first = chain.start @ (chain.step @ once)
        second = 2.0 * (chain.start @ (chain.step @ twice)) - first
    variance = max(float(second - first**2), 0.0)
    median, chances = _quantiles(chain, n)
    found = RunLength(float(1.0 + first), math.sqrt(variance), median, method=method)
    return _filled(found, n, chances)


def check_counts(n: ArrayLike | None) -> NDArray[np.int64]:
    """Return the counts asked for as whole numbers, at least 1, in one row."""
    asked = np.atleast_1d(np.asarray([] if n is None else n))
    if asked.size and (not np.all(asked == np.floor(asked)) or asked.min() < 1):
        raise ValueError(f"the number of points must be whole and at least 1, not {n!r}")
    return asked.astype(np.int64)


def _quantiles(chain: Chain, n: ArrayLike | None) -> tuple[float, FloatArray]:
    """Median, and chances of a signal within n points, by walking the chain.

    The walk stops when the distribution over states no longer changes; from there the run
    length is geometric.
    """
    asked = check_counts(n)
    target = int(asked.max()) if asked.size else 0
    masses = list(chain.early)
    total = float(np.sum(chain.early))
    current = chain.start
    left = float(current.sum())
    shape = current / left
    rate: float | None = None
    while (total < 0.5 or len(masses) < target) and left > 0.0:
        signal = float(current @ chain.leave)
        masses.append(signal)
        total += signal
        current = current @ chain.step
        left = float(current.sum())
        if left <= 0.0:
            break
        following = current / left
        if np.max(np.abs(following - shape)) < _SETTLED or len(masses) >= _MOST_STEPS:
            rate = float(following @ chain.leave)
            break
        shape = following
    return geometric_quantiles(np.asarray(masses), left, rate, asked)


def geometric_quantiles(
    masses: FloatArray, left: float, rate: float | None, asked: NDArray[np.int64]
) -> tuple[float, FloatArray]:
    """Median and chances within n from the chances of each of the first points and a tail.

    Parameters
    ----------
    masses : array
        Chance of a signal at point 1, 2, ...
    left : float
        Chance of no signal at those points.
    rate : float or None
        Chance of a signal at each later point, given none before; None where not needed.
    asked : int array
        The n.
    """
    cumulated = np.cumsum(masses)
    known = cumulated.size
    if known and cumulated[-1] >= 0.5:
        # A hair of rounding must not push an exact one half to the next point.
        median = float(np.searchsorted(cumulated, 0.5 * (1.0 - 1e-14)) + 1)
    elif rate is None:
        median = math.inf
    else:
        more = math.log(0.5 / left) / math.log1p(-rate) if rate < 1.0 else 1.0
        median = float(known + max(1, math.ceil(more - 1e-9)))
    chances = np.empty(asked.size)
    for i, count in enumerate(asked.tolist()):
        if count <= known:
            chances[i] = cumulated[count - 1]
        else:
            tail = 1.0 if rate is None else -math.expm1((count - known) * math.log1p(-rate))
            chances[i] = (cumulated[-1] if known else 0.0) + left * tail
    return median, np.clip(chances, 0.0, 1.0)


def run_length_of_masses(
    masses: FloatArray, left: float, rate: float | None, n: ArrayLike | None, method: str
) -> RunLength:
    """Run length from the chance of a signal at each of the first points and a geometric tail.

    Parameters
    ----------
    masses : array
        Chance of the first signal at point 1, 2, ...
    left : float
        Chance of no signal at those points.
    rate : float or None
        Chance of a signal at each later point, given none before; None where `left` is nothing.
    n : int or array of int, optional
        Counts for `prob_within`.
    method : str
    """
    asked = check_counts(n)
    median, chances = geometric_quantiles(masses, left, rate, asked)
    survival = left + np.cumsum(masses[::-1])[::-1][1:]
    count = np.arange(1, masses.size)
    first, second = float(survival.sum()), float((2 * count - 1) @ survival)
    if rate is not None:
        first += left / rate
        second += left * ((2 * masses.size - 1) / rate + 2.0 * (1.0 - rate) / rate**2)
    sd = math.sqrt(max(second - first**2, 0.0))
    return _filled(RunLength(1.0 + first, sd, median, method=method), n, chances)


def _filled(found: RunLength, n: ArrayLike | None, chances: FloatArray) -> RunLength:
    """The same with the chances within n, in the shape of the n that was asked for."""
    if n is None:
        return found
    if np.ndim(n) == 0:
        return replace(found, n=int(np.asarray(n)), prob_within=float(chances[0]))
    return replace(found, n=check_counts(n), prob_within=chances)

"""Run length by simulation through the evaluator, for rules without a finite chain."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike, NDArray

from spc.stats.designs import RuleDesign
from spc.stats.rules import evaluate
from spc.stats.run_length_chain import RunLength, check_counts

FloatArray = NDArray[np.float64]

_SEED = 19560101
_STREAMS = 20_000
_MOST_POINTS = 12_000_000
_MOST_LENGTH = 1_000_000


def simulated_run_length(
    design: RuleDesign,
    shift: float,
    n: ArrayLike | None = None,
    steady_state: bool = False,
) -> RunLength:
    """Run length of any set of rules from simulated charts; the same seed every time.

    Parameters
    ----------
    design : RuleDesign
    shift : float
        Shift of the mean in sigmas of the plotted point.
    n : int or array of int, optional
        Counts for `prob_within`.
    steady_state : bool
        Charts run in control first, ten windows long; those that signal are left out.

    Returns
    -------
    RunLength
        `relative_error` is one standard error of the mean over the mean.

    Raises
    ------
    ValueError
        Where signals are too rare to be simulated.
    """
    asked = check_counts(n)
    rng = np.random.default_rng(_SEED)
    window = max(rule.m for rule in design.rules)
    history = _histories(design, rng, window, steady_state)
    lengths, observed = _simulate(design, rng, shift, history)
    mean = float(lengths.mean())
    sd = float(lengths.std(ddof=1))
    chances = np.array([np.mean(lengths <= count) for count in asked.tolist()])
    single = n is not None and np.ndim(n) == 0
    return RunLength(
        arl=mean,
        sdrl=sd,
        median=float(np.sort(lengths)[(lengths.size - 1) // 2]),
        prob_within=None if n is None else (float(chances[0]) if single else chances),
        n=None if n is None else (int(asked[0]) if single else asked),
        method=f"simulation of {lengths.size} charts",
        relative_error=max(sd / math.sqrt(lengths.size) / mean, observed**-0.5 * sd / mean),
    )


def _histories(
    design: RuleDesign, rng: np.random.Generator, window: int, steady_state: bool
) -> FloatArray:
    """Points before the first counted one, shape (charts, window - 1 or 0)."""
    if not steady_state:
        return np.empty((_STREAMS, 0))
    burn = 10 * window
    kept: list[FloatArray] = []
    count = 0
    for _ in range(50):
        points = rng.standard_normal((_STREAMS // 2, burn))
        quiet = ~evaluate(points, design.rules).any.any(axis=1)
        kept.append(points[quiet, burn - (window - 1) :] if window > 1 else points[quiet, :0])
        count += int(quiet.sum())
        if count >= _STREAMS:
            return np.concatenate(kept)[:_STREAMS]
    raise ValueError(f"{design.text} signals too often in control for a steady state")


def _simulate(
    design: RuleDesign, rng: np.random.Generator, shift: float, history: FloatArray
) -> tuple[NDArray[np.int64], int]:
    """Run lengths of the charts, and how many of them were seen to their end.

    Charts still quiet go on with the points that still matter.  Those quiet to the end of the
    work that is allowed get a geometric rest: a chart that has long been quiet has no memory.
    """
    keep = max(rule.m for rule in design.rules) - 1
    finished: list[NDArray[np.int64]] = []
    done, width, spent = 0, 64, 0
    while history.shape[0]:
        points = rng.standard_normal((history.shape[0], width)) + shift
        joined = np.concatenate((history, points), axis=1)
        hits = evaluate(joined, design.rules).any[:, history.shape[1] :]
        found = hits.any(axis=1)
        finished.append(done + 1 + hits[found].argmax(axis=1))
        done += width
        spent += points.size
        history = joined[~found, max(joined.shape[1] - keep, 0) :]
        if spent > _MOST_POINTS or done >= _MOST_LENGTH:
            break
        width = min(2 * width, max(64, 2_000_000 // max(history.shape[0], 1)), 65_536)
    lengths = np.concatenate(finished)
    observed = lengths.size
    if history.shape[0]:
        lengths = _with_tail(design, lengths, history.shape[0], done, rng)
    return lengths, observed


def _with_tail(
    design: RuleDesign,
    lengths: NDArray[np.int64],
    quiet: int,
    done: int,
    rng: np.random.Generator,
) -> NDArray[np.int64]:
    """Give the charts that are still quiet a geometric rest, at the rate seen so far."""
    late = lengths[lengths > done // 4]
    exposure = float((late - done // 4).sum()) + quiet * (done - done // 4)
    if late.size < 100:
        raise ValueError(
            f"{design.text} signals too rarely to be simulated ({lengths.size} signals of "
            f"{lengths.size + quiet} charts within {done} points) and has no exact chain"
        )
    rest = done + rng.geometric(late.size / exposure, size=quiet)
    return np.concatenate((lengths, rest.astype(np.int64)))

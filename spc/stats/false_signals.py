"""How often run rules signal while nothing is wrong.

Two counts, both per plotted point in the long run, while the chart goes on after a signal as
the evaluator does:

* *signals*: points that complete a rule;
* *events*: signals whose point before was none (later points of the same run are the same
  event, :func:`spc.stats.rules.first_of_run`).

Each is given for every rule by itself and for the set (points at which any rule signals).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from spc.stats.design_search import DesignChoice, least_delay_designs
from spc.stats.ewma import first_order_recursion
from spc.stats.rule_states import NotAChainError, RuleMachine, rule_machine
from spc.stats.rules import Rule, evaluate, first_of_run

__all__ = [
    "DesignChoice",
    "ExpectedSignals",
    "SignalRates",
    "baseline_grid",
    "expected_false_signals",
    "least_delay_designs",
    "signal_rates",
]

FloatArray = NDArray[np.float64]

_SEED = 19870804
_SIMULATED_POINTS = 1_000_000
_BASELINES = (10, 15, 20, 30, 50, 100, 200, 500)


@dataclass(frozen=True)
class SignalRates:
    """Signals and events per point.

    Attributes
    ----------
    signals, events : float
        For the set: any rule.
    signals_by_rule, events_by_rule : tuple of float
        For each rule by itself, in the order of the set.
    method : str
    relative_error : float
        One standard error of `signals` over its value; 0 for exact values.
    """

    signals: float
    events: float
    signals_by_rule: tuple[float, ...]
    events_by_rule: tuple[float, ...]
    method: str
    relative_error: float = 0.0


@dataclass(frozen=True)
class ExpectedSignals:
    """Expected false signals in a number of points.

    Attributes
    ----------
    n_points : float
    signals, events : float
        Points at which any rule signals, and rows of such points.
    by_rule : tuple of (name, signals, events)
        For each rule by itself; they add up to more than the set, for a point may complete
        several rules.
    method : str
    relative_error : float
        As in :class:`SignalRates`.
    """

    n_points: float
    signals: float
    events: float
    by_rule: tuple[tuple[str, float, float], ...]
    method: str
    relative_error: float


def expected_false_signals(
    rules: tuple[Rule, ...],
    n_points: float,
    baseline: int | None = None,
    phi: float = 0.0,
    sigma_df: float | None = None,
) -> ExpectedSignals:
    """Expected false signals of a set of rules in a number of points in control.

    Parameters
    ----------
    rules : tuple of Rule
    n_points : float
        Points, or expected points (as in "3.2 a night").
    baseline : int, optional
        Points that the limits were estimated from; None for known limits.
    phi : float
        Lag-1 autocorrelation of the points.
    sigma_df : float, optional
        Degrees of freedom of the sigma of the limits; `baseline` - 1 where not given.

    Returns
    -------
    ExpectedSignals

    Raises
    ------
    ValueError
        For a negative number of points, and as :func:`signal_rates`.
    """
    if not (math.isfinite(n_points) and n_points >= 0.0):
        raise ValueError(f"the number of points must be 0 or above, not {n_points:g}")
    rates = signal_rates(tuple(rules), baseline, phi, sigma_df)
    return ExpectedSignals(
        n_points=float(n_points),
        signals=n_points * rates.signals,
        events=n_points * rates.events,
        by_rule=tuple(
            (rule.name, n_points * signals, n_points * events)
            for rule, signals, events in zip(
                rules, rates.signals_by_rule, rates.events_by_rule, strict=True
            )
        ),
        method=rates.method,
        relative_error=rates.relative_error,
    )


def signal_rates(
    rules: tuple[Rule, ...],
    baseline: int | None = None,
    phi: float = 0.0,
    sigma_df: float | None = None,
) -> SignalRates:
    """False signals and events per point of a set of rules, in the long run.

    Parameters
    ----------
    rules : tuple of Rule
    baseline : int, optional
        Points that centre and sigma of the limits were estimated from, 3 or more: the rate is
        the average over their errors (centre normal with variance 1/baseline, sigma with the
        chi distribution of `sigma_df` degrees of freedom).  None for known limits.
    phi : float
        Lag-1 autocorrelation of the points, an AR(1) process, in (-1, 1).  The limits are taken
        as made from the sd of the points themselves.
    sigma_df : float, optional
        Degrees of freedom of sigma; `baseline` - 1 where not given.

    Returns
    -------
    SignalRates

    Raises
    ------
    ValueError
        For no rule, fewer than 3 baseline points, phi outside (-1, 1).

    Notes
    -----
    Independent points: exact, from the machine of the rules and, with a baseline, Gauss
    quadrature over both errors.  Autocorrelated points: the exact rate times a ratio from a
    simulation with common random numbers, interpolated over a grid of phi (steps of 0.1) and
    of the baseline.
    """
    if not rules:
        raise ValueError("expected signals need at least one rule")
    if not -1.0 < phi < 1.0:
        raise ValueError(f"the lag-1 autocorrelation must be between -1 and 1, not {phi:g}")
    if baseline is not None and baseline < 3:
        raise ValueError(f"a baseline needs at least 3 points, not {baseline}")
    df = float(baseline - 1) if sigma_df is None and baseline is not None else sigma_df
    if df is not None and not df >= 1.0:
        raise ValueError(f"sigma needs at least 1 degree of freedom, not {df:g}")
    base = _independent_rates(tuple(rules), baseline, df)
    if phi == 0.0:
        return base
    ratios, error = _autocorrelation_ratios(tuple(rules), baseline, phi)
    count = len(rules)
    return SignalRates(
        signals=min(1.0, float(base.signals * ratios[count])),
        events=min(1.0, float(base.events * ratios[-1])),
        signals_by_rule=_scaled(base.signals_by_rule, ratios[:count]),
        events_by_rule=_scaled(base.events_by_rule, ratios[count + 1 : -1]),
        method=f"{base.method}, AR(1) ratio by simulation",
        relative_error=math.hypot(base.relative_error, error),
    )


def _scaled(values: tuple[float, ...], ratios: FloatArray) -> tuple[float, ...]:
    return tuple(min(1.0, v * r) for v, r in zip(values, ratios.tolist(), strict=True))


def baseline_grid(baseline: int, sigma_df: float) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Quadrature over the errors of limits made from a baseline.

    Parameters
    ----------
    baseline : int
        Points behind the centre, whose error is normal with variance 1/baseline.
    sigma_df : float
        Degrees of freedom of sigma: ``sigma^2 df / true^2`` is chi-square.

    Returns
    -------
    center, sigma, weight : arrays, shape (points,)
        Estimated centre (in true sigmas, true centre 0; one sign for both, which serves any
        quantity that is even in it), estimated sigma over the true one, and weights.
    """
    from scipy.special import gammaincinv

    z, wz = np.polynomial.hermite_e.hermegauss(16)
    half = z > 0.0
    center, wc = z[half] / math.sqrt(baseline), wz[half] / wz[half].sum()
    nodes, weights = np.polynomial.legendre.leggauss(24)
    low, high = (
        math.sqrt(2.0 * float(gammaincinv(sigma_df / 2.0, p)) / sigma_df)
        for p in (1e-12, 1.0 - 1e-12)
    )
    sigma = 0.5 * (high + low) + 0.5 * (high - low) * nodes
    log_density = (sigma_df - 1.0) * np.log(sigma) - 0.5 * sigma_df * sigma**2
    ws = weights * np.exp(log_density - log_density.max())
    weight = np.outer(wc, ws / ws.sum()).reshape(-1)
    return np.repeat(center, sigma.size), np.tile(sigma, center.size), weight


@lru_cache(maxsize=4096)
def _independent_rates(
    rules: tuple[Rule, ...], baseline: int | None, sigma_df: float | None
) -> SignalRates:
    try:
        machine = rule_machine(rules, False)
    except NotAChainError:
        sums, error = _simulated_rates(rules, baseline, 0.0)
        count = len(rules)
        return SignalRates(
            float(sums[count]),
            float(sums[-1]),
            tuple(sums[:count].tolist()),
            tuple(sums[count + 1 : -1].tolist()),
            "simulation",
            error,
        )
    if baseline is None:
        mean, sd, weight = np.zeros(1), np.ones(1), np.ones(1)
    else:
        assert sigma_df is not None
        center, sigma, weight = baseline_grid(baseline, sigma_df)
        # A point x ~ N(0, 1) is plotted as (x - center) / sigma.
        mean, sd = -center / sigma, 1.0 / sigma
    window = max(rule.m for rule in rules)
    signals, events = _machine_rates(machine, mean, sd, len(rules), window)
    totals, starts = signals @ weight, events @ weight
    return SignalRates(
        signals=float(totals[-1]),
        events=float(starts[-1]),
        signals_by_rule=tuple(totals[:-1].tolist()),
        events_by_rule=tuple(starts[:-1].tolist()),
        method="exact" if baseline is None else f"exact over a baseline of {baseline}",
    )


def _machine_rates(
    machine: RuleMachine, mean: FloatArray, sd: FloatArray, rules: int, window: int
) -> tuple[FloatArray, FloatArray]:
    """Signals and events per point, shape (rules + 1, processes), the set last.

    The state depends on the last points of the longest window alone, so that many steps from
    the start give the long-run distribution exactly.
    """
    from scipy.sparse import csr_array

    chances = machine.zone_chances(mean, sd)
    states, zones = machine.following.shape
    everyone = np.arange(states)
    moves = [
        csr_array((np.ones(states), (machine.following[:, c], everyone)), shape=(states, states))
        for c in range(zones)
    ]
    held = np.zeros((states, mean.size))
    held[0] = 1.0

    def advance(mass: FloatArray, through: FloatArray) -> FloatArray:
        """Mass of the states after a point, where only some zones lead on (states, zones)."""
        after = np.zeros_like(mass)
        for c in range(zones):
            after += np.asarray(moves[c] @ (mass * through[:, [c]])) * chances[:, c]
        return after

    for _ in range(window):
        held = advance(held, np.ones((states, zones)))
    signals = np.empty((rules + 1, mean.size))
    events = np.empty_like(signals)
    for i in range(rules + 1):
        bits = (machine.completes != 0) if i == rules else (machine.completes >> i) & 1
        done = bits.astype(np.float64)
        # Chance to signal next, from each state: (states, processes).
        soon = done @ chances.T
        after = advance(held, done)
        signals[i] = (held * soon).sum(axis=0)
        events[i] = signals[i] - (after * soon).sum(axis=0)
    return signals, events


def _autocorrelation_ratios(
    rules: tuple[Rule, ...], baseline: int | None, phi: float
) -> tuple[FloatArray, float]:
    """Rates at phi over rates at 0, interpolated in the logarithm between grid points."""
    near = None if baseline is None else min(_BASELINES, key=lambda m: abs(math.log(m / baseline)))
    if abs(phi) > 0.9:
        return _ratio_at(rules, near, round(phi, 2) if abs(phi) < 0.99 else phi)
    low = math.floor(round(phi * 10.0, 9))
    share = phi * 10.0 - low
    ratio_low, error_low = _ratio_at(rules, near, low / 10.0)
    if share < 1e-9:
        return ratio_low, error_low
    ratio_high, error_high = _ratio_at(rules, near, (low + 1) / 10.0)
    both = (1.0 - share) * np.log(ratio_low) + share * np.log(ratio_high)
    return np.exp(both), max(error_low, error_high)


@lru_cache(maxsize=1024)
def _ratio_at(
    rules: tuple[Rule, ...], baseline: int | None, phi: float
) -> tuple[FloatArray, float]:
    if phi == 0.0:
        return np.ones(2 * len(rules) + 2), 0.0
    free, error_free = _simulated_rates(rules, baseline, 0.0)
    bound, error = _simulated_rates(rules, baseline, phi)
    # Half a signal each keeps a rule that never signalled from ratios of 0 or infinity.
    half = 0.5 / _SIMULATED_POINTS
    return (bound + half) / (free + half), math.hypot(error, error_free)


@lru_cache(maxsize=1024)
def _simulated_rates(
    rules: tuple[Rule, ...], baseline: int | None, phi: float
) -> tuple[FloatArray, float]:
    """Signals by rule and of the set, then events likewise, per point of simulated charts.

    The same random numbers for every phi.  Each chart is standardised with the mean and sd of
    its own baseline where there is one; the points that follow start a new stretch of the
    process (the long run, not the first points after the baseline).
    """
    length = 250 if baseline is not None else 1000
    charts = _SIMULATED_POINTS // length
    window = max(rule.m for rule in rules)
    rng = np.random.default_rng(_SEED)

    def process(count: int) -> FloatArray:
        noise = rng.standard_normal((charts, count))
        noise[:, 1:] *= math.sqrt(1.0 - phi**2)
        return first_order_recursion(noise, phi, np.zeros(charts))

    points = process(length + window)
    if baseline is not None:
        past = process(baseline)
        points -= past.mean(axis=1, keepdims=True)
        points /= past.std(axis=1, ddof=1, keepdims=True)
    found = evaluate(points, rules)
    hits = np.concatenate((found.hits, found.any[None]))
    starts = first_of_run(hits)[..., window:]
    signals = hits[..., window:].mean(axis=2)
    rates = np.concatenate((signals.mean(axis=1), starts.mean(axis=(1, 2))))
    error = float(signals[-1].std(ddof=1) / math.sqrt(charts) / max(rates[len(rules)], 1e-300))
    return rates, error

"""Time the variance components of a large bay: python -m tests.benchmarks.bench_components

Prints processor seconds and ratios to a plain pass over the same wafers (one bincount of their
means), so that runs on different machines can be compared. Set OMP_NUM_THREADS=1 for one core.
"""

from __future__ import annotations

import time
from collections.abc import Callable

import numpy as np

from spc.stats.components import WaferSummary, nested_components, site_signatures, summarise
from spc.stats.limits import LimitOptions, mean_limits, robust_baseline, spread_score

STREAMS, LOTS, WAFERS, SITES = 1000, 300, 3, 9


def wafers(rng: np.random.Generator, balanced: bool) -> WaferSummary:
    """Summaries of all wafers; unbalanced: a fifth of the wafers and some sites are missing."""
    lot = np.repeat(np.arange(STREAMS * LOTS), WAFERS)
    if not balanced:
        lot = lot[rng.random(lot.size) < 0.8]
    sites = np.full(lot.size, SITES) if balanced else rng.integers(5, SITES + 1, lot.size)
    mean = 1200.0 + rng.normal(size=STREAMS * LOTS)[lot] + 0.7 * rng.normal(size=lot.size)
    mean += 0.5 / np.sqrt(sites) * rng.normal(size=lot.size)
    return WaferSummary(lot // LOTS, lot, sites, mean, 0.25 * rng.chisquare(sites - 1))


def timed(work: Callable[[], object], repeat: int = 3) -> float:
    """Least processor seconds of some runs (the machine may be busy with other work)."""
    best = np.inf
    for _ in range(repeat):
        start = time.process_time()
        work()
        best = min(best, time.process_time() - start)
    return best


def main() -> None:
    """Print the table."""
    rng = np.random.default_rng(1)
    even, uneven = wafers(rng, True), wafers(rng, False)
    tool = uneven.lot // 30
    base = timed(lambda: np.bincount(even.lot, weights=even.mean))
    fit = nested_components(even)
    points = rng.integers(0, STREAMS, 300_000)
    few = np.repeat(np.arange(STREAMS), 30)
    values = rng.normal(size=few.size)
    part = 100 * LOTS * WAFERS * SITES  # readings of 100 streams
    wafer = np.arange(part) // SITES
    lot, site = wafer // WAFERS, np.arange(part) % SITES
    readings = rng.normal(size=part)
    wide = LimitOptions(widen=True)
    rows: list[tuple[str, Callable[[], object]]] = [
        ("nested_components, balanced", lambda: nested_components(even)),
        ("nested_components, unbalanced", lambda: nested_components(uneven)),
        ("nested_components, unbalanced, tools", lambda: nested_components(uneven, tool=tool)),
        ("summarise, 810 000 readings", lambda: summarise(lot // LOTS, lot, wafer, readings)),
        ("site_signatures, same", lambda: site_signatures(lot // LOTS, wafer, site, readings)),
        ("mean_limits, 300 000 points", lambda: mean_limits(fit, 3, 9, stream=points)),
        ("mean_limits, widened", lambda: mean_limits(fit, 3, 9, stream=points, options=wide)),
        ("robust_baseline, 1000 x 30", lambda: robust_baseline(values, stream=few)),
        ("spread_score, 30 000 points", lambda: spread_score(np.abs(values), 1.0, 8)),
    ]
    print(f"{STREAMS} streams x {LOTS} lots x {WAFERS} wafers x {SITES} sites")
    print(f"{'one bincount of the wafers':40s} {base:8.4f} s     1.0")
    for name, work in rows:
        seconds = timed(work)
        print(f"{name:40s} {seconds:8.4f} s {seconds / base:7.1f}")


if __name__ == "__main__":
    main()

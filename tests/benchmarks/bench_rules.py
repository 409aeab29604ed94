"""Speed of rules, EWMA, CUSUM and exact run lengths, as ratios in one run on one core.

Run by hand from the root of the project:

    OMP_NUM_THREADS=1 OPENBLAS_NUM_THREADS=1 python -m tests.benchmarks.bench_rules

The baseline is what an engineer would write with pandas: rolling counts, `ewm`.  The floor is
one pass of numpy over the same points (a cumulative sum along each stream).
"""

from __future__ import annotations

import argparse
import platform
import subprocess
import sys
import time
from collections.abc import Callable

import numpy as np
import pandas as pd

from spc.stats.cusum import cusum
from spc.stats.designs import CusumDesign, EwmaDesign, RuleDesign
from spc.stats.ewma import ewma_chart
from spc.stats.false_signals import least_delay_designs, signal_rates
from spc.stats.rule_states import rule_machine
from spc.stats.rules import WESTERN_ELECTRIC, evaluate
from spc.stats.run_length import run_length


def best_of(
    work: Callable[[], object], repeats: int, clock: Callable[[], float] = time.process_time
) -> float:
    """Seconds of the fastest of some runs; processor time, so that a busy machine counts less."""
    times = []
    for _ in range(repeats):
        begin = clock()
        work()
        times.append(clock() - begin)
    return min(times)


def pandas_rules(z: np.ndarray) -> list[pd.DataFrame]:
    """The four rules with rolling counts, streams as columns."""
    frame = pd.DataFrame(z.T)
    found = []
    for rule in WESTERN_ELECTRIC:
        hits = pd.DataFrame(False, index=frame.index, columns=frame.columns)
        for side in (1, -1):
            zone = side * frame > rule.s
            count = zone if rule.m == 1 else zone.rolling(rule.m, min_periods=1).sum() >= rule.k
            hits |= count & zone
        found.append(hits)
    return found


def engine(z: np.ndarray) -> None:
    """All four rules, an EWMA and a CUSUM chart of every stream."""
    evaluate(z, WESTERN_ELECTRIC)
    ewma_chart(z, EwmaDesign(0.2, 2.962))
    cusum(z, CusumDesign(0.5, 4.77))


def charts(streams: int, points: int, repeats: int) -> None:
    """Print millions of points a second, and ratios to the baseline and the floor."""
    z = np.random.default_rng(1).standard_normal((streams, points))
    some = z[: max(1, streams // 10)]
    slow = best_of(lambda: pandas_rules(some), 2) / some.size
    slow_ewma = best_of(lambda: pd.DataFrame(some.T).ewm(alpha=0.2, adjust=False).mean(), 2)
    floor = best_of(lambda: np.cumsum(z, axis=1), repeats) / z.size
    codes = np.arange(points) // 500
    cases: list[tuple[str, Callable[[], object]]] = [
        ("rules", lambda: evaluate(z, WESTERN_ELECTRIC)),
        ("rules, new limits each 500 points", lambda: evaluate(z, WESTERN_ELECTRIC, codes)),
        ("EWMA", lambda: ewma_chart(z, EwmaDesign(0.2, 2.962))),
        ("CUSUM", lambda: cusum(z, CusumDesign(0.5, 4.77))),
        ("rules + EWMA + CUSUM", lambda: engine(z)),
    ]
    print(f"{streams} streams x {points} points, float64, one core")
    print(f"{'pandas rolling, rules alone':36s} {1e-6 / slow:7.1f} M points/s      1.00 x pandas")
    print(f"{'pandas ewm, average alone':36s} {1e-6 * some.size / slow_ewma:7.1f} M points/s")
    for name, work in cases:
        each = best_of(work, repeats) / z.size
        print(
            f"{name:36s} {1e-6 / each:7.1f} M points/s  {slow / each:7.2f} x pandas"
            f"  {each / floor:6.2f} x floor"
        )


def run_lengths(repeats: int) -> None:
    """Print milliseconds of the exact run lengths."""
    rules = RuleDesign(WESTERN_ELECTRIC)

    def cold() -> object:
        rule_machine.cache_clear()
        return run_length(rules)

    def rates() -> object:
        rule_machine.cache_clear()
        return signal_rates(WESTERN_ELECTRIC, int(next(counts)))

    counts = iter(np.arange(30, 1000))
    cases: list[tuple[str, Callable[[], object]]] = [
        ("run length of the four rules, machine built", cold),
        ("run length of the four rules, machine kept", lambda: run_length(rules, 1.0)),
        ("run length of EWMA 0.2,2.962", lambda: run_length(EwmaDesign(0.2, 2.962), 1.0)),
        ("same, time-varying limits", lambda: run_length(EwmaDesign(0.2, 2.962, True), 1.0)),
        ("run length of CUSUM 0.5,4.77", lambda: run_length(CusumDesign(0.5, 4.77), 1.0)),
        ("false signals, limits from a baseline", rates),
        ("least-delay designs, ARL 370, shift 1", lambda: least_delay_designs(1 / 370.4, 1.0)),
    ]
    for name, work in cases:
        work()
        print(f"{name:46s} {1e3 * best_of(work, repeats):8.1f} ms")
    code = (
        "from spc.stats.run_length import *;"
        "print(run_length(design_from_text(rules='beyond-3s,2of3-beyond-2s,4of5-beyond-1s,8-one-side')).arl)"
    )
    command = [sys.executable, "-c", code]
    whole = best_of(
        lambda: subprocess.run(command, check=True, capture_output=True), 3, time.perf_counter
    )
    print(f"{'the same in a fresh process, imports and all':46s} {1e3 * whole:8.1f} ms")


def main() -> None:
    """Print everything."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--streams", type=int, default=2000)
    parser.add_argument("--points", type=int, default=5000)
    parser.add_argument("--repeats", type=int, default=3)
    given = parser.parse_args()
    print(f"Python {platform.python_version()}, numpy {np.__version__}, pandas {pd.__version__}")
    charts(given.streams, given.points, given.repeats)
    run_lengths(given.repeats)


if __name__ == "__main__":
    main()

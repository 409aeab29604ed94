"""Evaluation of a bay: the first pass, and whether a night stays as quick as the history grows.

    python -m tests.benchmarks.bench_evaluation [--streams 300] [--days 30 300]

Printed, in processor seconds of this process (other work on the machine hits them less than the
wall time): the first pass over 60 lots a stream; then, on 20 streams with three lots a day each,
a night with one day's lots after each history, their ratio to the first, and a night with nothing
new.
"""

from __future__ import annotations

import argparse
import tempfile
import time
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import numpy as np
from sqlalchemy import Engine

from config.load import Bay
from spc.monitoring.evaluation import Evaluation, evaluate
from spc.records.sessions import open_database
from tests.monitoring.bench import Wafer, add, bay_with, hours, lots_of

STREAMS_A_LAYER = 15


def _bay(layers: int) -> Bay:
    return bay_with(
        *(
            {
                "name": f"L{layer} thickness",
                "parameter": "resist_thickness",
                "unit": "nm",
                "where": {"layer": f"L{layer}"},
                "stream_by": ("tool", "module"),
                "lower_spec": 1176.0,
                "upper_spec": 1224.0,
            }
            for layer in range(layers)
        )
    )


def _fill(engine: Engine, streams: int, lots: int, every: float) -> None:
    """Lots of three wafers with seven sites, `every` hours one on each stream."""
    rng = np.random.default_rng(20260501)

    def batches() -> Iterator[list[Wafer]]:
        for stream in range(streams):
            layer, module = f"L{stream // STREAMS_A_LAYER}", f"C{stream % STREAMS_A_LAYER}"
            made = lots_of(rng, lots, module=module, layer=layer, every=every)
            yield [replace(one, lot=layer + one.lot) for one in made]

    for batch in batches():
        add(engine, batch)


def _timed(engine: Engine, bay: Bay, clock: float) -> tuple[float, Evaluation]:
    start = time.process_time()
    result = evaluate(engine, bay, hours(clock))
    return time.process_time() - start, result


def first_pass(folder: Path, streams: int) -> None:
    """Everything at once, 60 lots a stream."""
    engine = open_database(f"sqlite:///{folder}/first.db")
    _fill(engine, streams, 60, 4.0)
    seconds, result = _timed(engine, _bay(-(-streams // STREAMS_A_LAYER)), 1000.0)
    print(
        f"first pass, {result.streams} streams x 60 lots: {seconds:.1f} s, "
        f"{result.points_evaluated} points, {result.points_evaluated / seconds:,.0f} points/s"
    )
    engine.dispose()


def growth(folder: Path, days: list[int]) -> None:
    """A night of one day after each history, and a night with nothing new."""
    base, bay = 0.0, _bay(2)
    for number in days:
        engine = open_database(f"sqlite:///{folder}/days{number}.db")
        _fill(engine, 20, 3 * number + 6, 8.0)
        end = 24.0 * number
        _timed(engine, bay, end)
        nights = [_timed(engine, bay, end + 24.0 * night) for night in (1, 2)]
        best, result = min(nights, key=lambda one: one[0])
        quiet, _ = _timed(engine, bay, end + 48.1)
        base = base or best
        print(
            f"a night after {number} days: {best:.3f} s for {result.points_evaluated} points "
            f"({best / base:.2f} of the first); with nothing new {quiet:.3f} s"
        )
        engine.dispose()


def main() -> None:
    """Run both."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--streams", type=int, default=300)
    parser.add_argument("--days", type=int, nargs="+", default=[30, 300])
    options = parser.parse_args()
    with tempfile.TemporaryDirectory() as name:
        growth(Path(name), options.days)
        first_pass(Path(name), options.streams)


if __name__ == "__main__":
    main()

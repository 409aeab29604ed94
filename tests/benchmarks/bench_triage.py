"""Triage of a night with a thousand streams: evaluation, and the search for causes.

    python -m tests.benchmarks.bench_triage [--layers 40] [--cups 25] [--lots 24]

A bay of layers x cups streams, two wafers of seven sites a lot, every lot through one cup. After a
history without faults one track reads 8 nm high for a day: 2 sigma of a lot. Printed, in processor
seconds: the first evaluation of the history, and of the night its evaluation and its triage.
"""

from __future__ import annotations

import argparse
import tempfile
import time
from dataclasses import replace
from pathlib import Path

import numpy as np
from sqlalchemy import Engine

from config.load import Bay
from spc.monitoring.evaluation import evaluate_in
from spc.monitoring.triage import update_excursions
from spc.records.sessions import open_database
from tests.monitoring.bench import add, bay_with, hours, lots_of

EVERY = 6.0  # hours between lots of one stream
CUPS_A_TRACK = 5


def bay_of(layers: int) -> Bay:
    """A characteristic a layer."""
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
                "baseline_points": 20,
            }
            for layer in range(layers)
        )
    )


def fill(engine: Engine, shape: tuple[int, int], lots: int, night: int) -> None:
    """The history of each stream, and the lots of the night; track 1 moves in the night."""
    rng = np.random.default_rng(20260501)
    layers, cups = shape
    for layer in range(layers):
        wafers = []
        for cup in range(cups):
            track, module = f"TRK{cup // CUPS_A_TRACK}", f"C{cup % CUPS_A_TRACK}"
            where = {"tool": track, "module": module, "layer": f"L{layer}", "every": EVERY}
            made = lots_of(rng, lots, wafers=2, **where)  # type: ignore[arg-type]
            shift = 8.0 if track == "TRK1" else 0.0
            made += lots_of(rng, night, first=lots, wafers=2, shift=shift, **where)  # type: ignore[arg-type]
            wafers += [replace(one, lot=f"L{layer}{one.lot}") for one in made]
        add(engine, wafers)


def one_pass(engine: Engine, bay: Bay, clock: float) -> None:
    """Evaluate and triage as of a clock, and print what it took."""
    as_of = hours(clock)
    with engine.begin() as connection:
        start = time.process_time()
        found = evaluate_in(connection, bay, as_of, lambda _w, _d, _t: None)
        evaluated = time.process_time()
        changes = update_excursions(connection, bay, as_of)
        done = time.process_time()
    print(
        f"{found.streams} streams, {found.points_evaluated} points: evaluation "
        f"{evaluated - start:.1f} s CPU, triage {done - evaluated:.1f} s CPU "
        f"({len(changes.opened)} opened; aim 10 s for a night)",
        flush=True,
    )


def main() -> None:
    """Print both passes."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--layers", type=int, default=40)
    parser.add_argument("--cups", type=int, default=25)
    parser.add_argument("--lots", type=int, default=24)
    options = parser.parse_args()
    night = int(24 / EVERY)
    with tempfile.TemporaryDirectory() as name:
        engine = open_database(f"sqlite:///{Path(name)}/triage.db")
        fill(engine, (options.layers, options.cups), options.lots, night)
        bay = bay_of(options.layers)
        end = EVERY * options.lots
        print("history: ", end="")
        one_pass(engine, bay, end)
        print("night:   ", end="")
        one_pass(engine, bay, end + 24.5)
        engine.dispose()


if __name__ == "__main__":
    main()

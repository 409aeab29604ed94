"""What the benchmarks share: processor time of child processes, medians in turns, versions."""

from __future__ import annotations

import os
import platform
import resource
import sqlite3
import statistics
import subprocess
import sys
import time
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from importlib.metadata import version

PACKAGES = (
    *("numpy", "scipy", "pandas", "pyarrow", "SQLAlchemy", "psycopg", "pydantic", "typer"),
    *("altair", "vl-convert-python", "jinja2"),
)


@dataclass(frozen=True)
class Took:
    """Seconds: processor time of a process and its children, and by the clock on the wall."""

    cpu: float
    wall: float


def run(command: Sequence[str], cwd: str | None = None) -> Took:
    """Run a command to its end. Raises subprocess.CalledProcessError when it fails."""
    before = resource.getrusage(resource.RUSAGE_CHILDREN)
    start = time.perf_counter()
    subprocess.run(command, check=True, stdout=subprocess.DEVNULL, cwd=cwd)
    wall = time.perf_counter() - start
    after = resource.getrusage(resource.RUSAGE_CHILDREN)
    cpu = after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime
    return Took(cpu, wall)


def in_turns(commands: Mapping[str, Sequence[str]], repeat: int) -> dict[str, Took]:
    """Medians of commands that take turns, so that what else the machine does hits all of them."""
    took: dict[str, list[Took]] = {name: [] for name in commands}
    for _ in range(repeat):
        for name, command in commands.items():
            took[name].append(run(command))
    return {
        name: Took(statistics.median(t.cpu for t in all_), statistics.median(t.wall for t in all_))
        for name, all_ in took.items()
    }


def versions() -> str:
    """The machine, the load on it, and the versions of what does the work."""
    load = ", ".join(f"{one:.1f}" for one in os.getloadavg())
    packages = ", ".join(f"{name} {version(name)}" for name in PACKAGES)
    return (
        f"Python {platform.python_version()} on {platform.system()} {platform.machine()}, "
        f"{os.cpu_count()} cores, load {load}\n"
        f"SQLite {sqlite3.sqlite_version}, {packages}"
    )


def program() -> list[str]:
    """The command line of this checkout, as its script runs it."""
    return [sys.executable, "-c", "from service.cli import main; main()"]

"""How soon it answers: the help against the import of typer, and a night with nothing new.

    python -m tests.benchmarks.bench_start [--repeat 9]

Processes take turns; printed are medians of processor time (user and system) and of wall time. The
night is a pass on the demo bay after its last one, when no file has come; its silent gauge is left
out of the plan, for telling of a silence that goes on is not nothing.
"""

from __future__ import annotations

import argparse
import re
import sys
import tempfile
from datetime import datetime, timedelta
from pathlib import Path

from fixtures.demo import write_demo
from tests.benchmarks.measure import Took, in_turns, program, run


def start(repeat: int) -> None:
    """The help, and a command that computes something small."""
    typer = [sys.executable, "-c", "import typer"]
    help_ = [*program(), "--help"]
    length = [*program(), "runlength", "--rules", "beyond-3s", "--json"]
    took = in_turns({"typer": typer, "help": help_, "runlength": length}, repeat)
    base = took["typer"]
    label = "python -c 'import typer'"
    print(f"{label:40s} {base.cpu:7.3f} s CPU {base.wall:7.3f} s wall")
    for name, label in (("help", "yellowbay --help"), ("runlength", "yellowbay runlength")):
        one, aim = took[name], " (aim 1.5)" if name == "help" else ""
        print(
            f"{label:40s} {one.cpu:7.3f} s CPU {one.wall:7.3f} s wall "
            f"{one.cpu / base.cpu:6.2f} x typer{aim}"
        )


def quiet_night(folder: Path, repeat: int) -> Took:
    """A pass with nothing new on the demo bay, its best of some."""
    demo = write_demo(folder)
    plan = folder / "control_plan.toml"
    plan.write_text(re.sub(r"(?m)^expected_every.*\n", "", plan.read_text("utf-8")), "utf-8")
    last = demo.nights[-1]

    def night(as_of: datetime) -> Took:
        return run([*program(), "nightly", "--config", str(demo.config), "--as-of",
                    as_of.isoformat()])  # fmt: skip

    night(last)
    passes = [night(last + timedelta(minutes=i + 1)) for i in range(repeat)]
    return min(passes[1:], key=lambda one: one.cpu)


def main() -> None:
    """Print both."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--repeat", type=int, default=9)
    options = parser.parse_args()
    start(options.repeat)
    with tempfile.TemporaryDirectory() as name:
        quiet = quiet_night(Path(name) / "demo", 5)
    print(
        f"{'a night with nothing new, whole process':40s} {quiet.cpu:7.3f} s CPU "
        f"{quiet.wall:7.3f} s wall (aim 1.5)"
    )


if __name__ == "__main__":
    main()

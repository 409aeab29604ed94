"""Whether a night stays as quick as the history grows: whole passes on a growing bay.

    python -m tests.benchmarks.bench_nights [--days 10 30 60 100 200 300] [--figure FILE]

Twenty streams, forty lots a day of three wafers with seven sites, all in control. The history comes
in one pass for each age; then seven more days come, one file and one pass a day: files taken in,
points evaluated, causes looked for, page and mail made. Printed are the medians of the last three,
in processor seconds of this process and by the wall, their ratio to the night after 30 days, and
the size of the database; `--figure` draws both against the age.
"""

from __future__ import annotations

import argparse
import statistics
import tempfile
import time
from collections.abc import Iterator
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np

from config.load import load_bay
from service.context import Session
from service.night import run_night

START = datetime(2026, 1, 1, tzinfo=UTC)
LOTS_A_DAY = 2  # of each stream
# At each age: nights that settle what one pass over many days has opened, then those measured.
SETTLING, NIGHTS = 4, 3
READINGS_A_DAY = 2 * 10 * LOTS_A_DAY * 3 * 7
HEADER = "measured_at,processed_at,parameter,value,unit,lot,wafer,site,x_mm,y_mm,layer,tool,module"
BAY = """
[bay]
name = "growing bay"
time_zone = "UTC"
control_plan = "control_plan.toml"
[drops]
settle_seconds = 0
[nightly]
false_excursions_per_night = 0.02
[mail]
to = ["shift@example.com"]
"""
PLAN = """
[[characteristic]]
name = "{layer} thickness"
parameter = "resist_thickness"
unit = "nm"
where = {{ layer = "{layer}" }}
stream_by = ["tool", "module"]
lower_spec = 1176.0
upper_spec = 1224.0
"""


@dataclass(frozen=True)
class Age:
    """A night at one age of the history."""

    days: int
    cpu: float
    wall: float
    megabytes: float


def rows_of(day: int, rng: np.random.Generator) -> Iterator[str]:
    """The readings of one day."""
    for part in range(LOTS_A_DAY):
        at = START + timedelta(days=day, hours=10 * part + 1)
        for stream in range(20):
            layer, tool, module = f"M{stream // 10}", f"TRK{stream % 10 // 5}", f"C{stream % 5}"
            lot = f"{layer}{tool}{module}D{day:04d}{part}"
            level = 1200 + rng.normal(0, 4)
            for wafer in range(1, 4):
                values = level + rng.normal(0, 2) + rng.normal(0, 3, 7)
                stamp = at + timedelta(minutes=stream, seconds=wafer)
                front = f"{stamp:%Y-%m-%dT%H:%M:%SZ},{at:%Y-%m-%dT%H:%M:%SZ},resist_thickness,"
                back = f"{layer},{tool},{module}"
                for site, value in enumerate(values.tolist()):
                    place = f"{site},{site * 20 - 60},{(site * 3 % 7) * 20 - 60}"
                    yield f"{front}{value:.3f},nm,{lot},{wafer},{place},{back}"


def drop(folder: Path, days: range, rng: np.random.Generator) -> None:
    """One file with the readings of some days."""
    rows = [HEADER, *(row for day in days for row in rows_of(day, rng))]
    (folder / "drops" / f"d{days[0]:04d}.csv").write_text("\n".join(rows) + "\n")


def ages(folder: Path, days: list[int]) -> Iterator[Age]:
    """Let the bay grow, and measure a night at each age."""
    (folder / "drops").mkdir(parents=True)
    (folder / "bay.toml").write_text(BAY)
    (folder / "control_plan.toml").write_text("".join(PLAN.format(layer=m) for m in ("M0", "M1")))
    session = Session(load_bay(folder / "bay.toml"))
    rng = np.random.default_rng(20260501)
    done = 0
    for age in days:
        for first in range(done, age, 10):
            drop(folder, range(first, min(first + 10, age)), rng)
        run_night(session, START + timedelta(days=age))
        done, took = age + SETTLING + NIGHTS, []
        for day in range(age, done):
            drop(folder, range(day, day + 1), rng)
            cpu, wall = time.process_time(), time.perf_counter()
            night = run_night(session, START + timedelta(days=day + 1)).as_json()
            if day >= age + SETTLING:
                took.append((time.process_time() - cpu, time.perf_counter() - wall))
            assert night["readings"]["loaded"] == READINGS_A_DAY
        size = sum(file.stat().st_size for file in folder.glob("bay.db*"))
        cpu, wall = (statistics.median(column) for column in zip(*took, strict=True))
        yield Age(age, cpu, wall, size / 1e6)


def figure(found: list[Age], file: Path) -> None:
    """Draw the nights and the database against the age of the history."""
    import altair as alt
    import vl_convert

    def panel(values: list[dict[str, Any]], title: str) -> Any:
        x = alt.X("days:Q").title("days of history").scale(zero=True)
        y = alt.Y("value:Q").title(title).scale(zero=True)
        base = alt.Chart(alt.Data(values=values), width=260, height=180)
        return base.mark_line(point=True, color="#1f5c8b").encode(x=x, y=y)

    nights = [{"days": one.days, "value": round(one.cpu, 3)} for one in found]
    sizes = [{"days": one.days, "value": round(one.megabytes, 2)} for one in found]
    chart = panel(nights, "a night, s CPU") | panel(sizes, "database, MB")
    file.write_text(vl_convert.vegalite_to_svg(chart.to_dict(), vl_version="6.1"), "utf-8")


def main() -> None:
    """Print the table, and draw it."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--days", type=int, nargs="+", default=[10, 30, 60, 100, 200, 300])
    parser.add_argument("--figure", type=Path)
    options = parser.parse_args()
    found: list[Age] = []
    base = None
    with tempfile.TemporaryDirectory() as name:
        for one in ages(Path(name) / "bay", sorted(options.days)):
            found.append(one)
            base = one if base is None or one.days <= 30 else base
            print(
                f"a night after {one.days:3d} days: {one.cpu:6.3f} s CPU {one.wall:6.3f} s wall, "
                f"{one.cpu / base.cpu:5.2f} x that after {base.days} (aim 1.2); "
                f"database {one.megabytes:6.1f} MB",
                flush=True,
            )
    readings = (found[-1].days + SETTLING + NIGHTS) * READINGS_A_DAY
    print(f"{1e6 * found[-1].megabytes / readings:.0f} bytes a reading, evaluation included")
    if options.figure:
        figure(found, options.figure)


if __name__ == "__main__":
    main()

"""A bay of one characteristic and some forty lots: small, so that a pass takes little time.

Two cups of one track, two lots a cup and night; on the last nights cup C2 prints too thick. The
numbers are made up; nothing here checks the statistics.
"""

from __future__ import annotations

import hashlib
import io
import json
import os
import shutil
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from contextlib import redirect_stderr, redirect_stdout
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np
from sqlalchemy import Engine, LargeBinary, select

from spc.records.retention_tables import metadata
from tests import on_postgres

FIRST = datetime(2026, 10, 17, 5, 30, tzinfo=UTC)
NIGHTS = 10
SHIFTED_FROM = 8  # the night whose lots are the first with the fault
HEADER = "measured_at,processed_at,parameter,value,unit,lot,wafer,site,layer,tool,module,gauge"
LOG_HEADER = "processed_at,lot,wafer,layer,step,tool,module"

PLAN = """
[[characteristic]]
name = "M1 thickness"
parameter = "resist_thickness"
unit = "nm"
where = { layer = "M1" }
stream_by = ["tool", "module"]
statistics = ["mean", "within-wafer"]
lower_spec = 1176.0
upper_spec = 1224.0
baseline_points = 10
owners = ["owner@example.com"]
"""


def night(number: int) -> datetime:
    """Clock of the pass of a night, from 0."""
    return FIRST + timedelta(days=number)


@dataclass(frozen=True)
class SmallBay:
    """A folder with a configuration and drops."""

    root: Path

    @property
    def config(self) -> Path:
        """Its bay.toml."""
        return self.root / "bay.toml"

    @property
    def url(self) -> str:
        """URL of its SQLite database."""
        return f"sqlite:///{self.root / 'bay.db'}"

    def drop(self, name: str, content: str) -> Path:
        """Write a drop that has settled long ago."""
        file = self.root / "drops" / name
        file.parent.mkdir(parents=True, exist_ok=True)
        file.write_text(content, "utf-8")
        then = (FIRST - timedelta(days=9)).timestamp()
        os.utime(file, (then, then))
        return file

    def drops_of(self, number: int, *, cups: tuple[str, ...] = ("C1", "C2")) -> None:
        """Land the drops of one night: readings a cup, the log, and now and then a broken row."""
        for cup in cups:
            rows, _log = lots_of(number, cup)
            if number % 3 == 1:
                rows.append(rows[-1].replace(",resist_thickness,", ",resist_thickness,x", 1))
            self.drop(f"{number:02d}_{cup}.csv", "\n".join([HEADER, *rows]) + "\n")
        logs = [line for cup in cups for line in lots_of(number, cup)[1]]
        self.drop(f"{number:02d}_log.csv", "\n".join([LOG_HEADER, *logs]) + "\n")

    def run(self, *words: str, **options: Any) -> subprocess.CompletedProcess[str]:
        """Run a command in a process of its own."""
        return subprocess.run(
            [*command(), *words, "--config", str(self.config)],
            capture_output=True,
            text=True,
            check=False,
            timeout=240,
            **options,
        )

    def json(self, *words: str) -> Any:
        """The document of a command run in this process; it must end with status 0."""
        status, out, told = self.here(*words, "--json")
        assert status == 0, told
        return json.loads(out)

    def here(self, *words: str) -> tuple[int, str, str]:
        """Run a command in this process: (status, standard output, standard error)."""
        from service.cli import main

        out, told = io.StringIO(), io.StringIO()
        before, sys.argv = sys.argv, ["yellowbay", *words, "--config", str(self.config)]
        status = 0
        try:
            with redirect_stdout(out), redirect_stderr(told):
                main()
        except SystemExit as end:
            status = int(end.code or 0)
        finally:
            sys.argv = before
        return status, out.getvalue(), told.getvalue()

    def nightly(self, number: int) -> Any:
        """The pass of one night, in this process."""
        return self.json("nightly", "--as-of", night(number).isoformat())

    def page(self, number: int) -> bytes:
        """The report of a night."""
        [file] = (self.root / "reports").rglob(f"*{night(number):%Y-%m-%d}*.html")
        return file.read_bytes()

    def pages(self) -> dict[str, bytes]:
        """All pages, by name."""
        return {p.name: p.read_bytes() for p in sorted((self.root / "reports").rglob("*.html"))}

    def mails(self) -> dict[str, bytes]:
        """Kept messages, by name."""
        return {p.name: p.read_bytes() for p in sorted((self.root / "mail").glob("*.eml"))}

    def copy(self, to: Path) -> SmallBay:
        """The same bay elsewhere, with all it holds."""
        shutil.copytree(self.root, to)
        on_postgres.copy(self.root, to)
        return SmallBay(to)


def command() -> list[str]:
    """The console script, without depending on where it is installed."""
    return [sys.executable, "-c", "from service.cli import main; main()"]


def make(root: Path, *, extra: str = "", plan: str = PLAN, nights: int = 0) -> SmallBay:
    """Write a bay, with the drops of its first nights; `extra` is added to bay.toml."""
    root.mkdir(parents=True, exist_ok=True)
    (root / "drops").mkdir(exist_ok=True)
    (root / "control_plan.toml").write_text(plan, "utf-8")
    mail = "" if "[mail]" in extra else '[mail]\nfrom = "a@example.com"\nto = ["b@example.com"]\n'
    (root / "bay.toml").write_text(
        '[bay]\nname = "Small bay"\ntime_zone = "Europe/Dublin"\n'
        f'control_plan = "control_plan.toml"\n{mail}{extra}',
        "utf-8",
    )
    bay = SmallBay(root)
    for number in range(nights):
        bay.drops_of(number)
    return bay


def lots_of(number: int, cup: str) -> tuple[list[str], list[str]]:
    """Rows of the two lots of a cup and night, and their rows of the process log."""
    rng = np.random.default_rng([number, int(cup[1:])])
    shift = 9.0 if cup == "C2" and number >= SHIFTED_FROM else 0.0
    rows, log = [], []
    for k in range(2):
        lot = f"L{number:02d}{cup[1:]}{k}"
        at = night(number) - timedelta(hours=14 - 5 * k)
        level = 1200 + shift + rng.normal(0, 1.5)
        for wafer in ("1", "2"):
            values = level + rng.normal(0, 0.8) + rng.normal(0, 0.6, 5)
            measured = (at + timedelta(hours=1)).isoformat()
            rows += [
                f"{measured},{at.isoformat()},resist_thickness,{value:.3f},nm,{lot},{wafer},"
                f"{site},M1,TRK1,{cup},G1"
                for site, value in enumerate(values, 1)
            ]
            log.append(f"{at.isoformat()},{lot},{wafer},M1,coat,TRK1,{cup}")
    return rows, log


# ---- what a database holds, whatever the numbers of its rows are ------------------------------

# Absolute places, moments of sending, and what only says how far the evaluation has looked.
VOLATILE = {"sent_us", "report", "modified_ns", "last_measurement_id", "last_log_id"}


def content(engine: Engine) -> dict[str, list[str]]:
    """Every row of every table as text, sorted, with references written out as what they mean."""
    with engine.connect() as connection:
        raw = {
            t.name: list(connection.execute(select(t)).mappings()) for t in metadata.tables.values()
        }
    names = _names(raw)
    found = {}
    for table in metadata.tables.values():
        lines = []
        for row in raw[table.name]:
            parts = {}
            for column in table.columns:
                if column.name in VOLATILE or column.name == "id":
                    continue
                value = row[column.name]
                for key in column.foreign_keys:
                    value = names[key.column.table.name].get(value)
                if isinstance(column.type, LargeBinary) and value is not None:
                    value = hashlib.sha256(bytes(value)).hexdigest()
                if table.name == "passes" and column.name == "result":
                    value = _without_places(value)
                parts[column.name] = value
            lines.append(json.dumps(parts, sort_keys=True))
        found[table.name] = sorted(lines)
    return found


def _names(raw: dict[str, list[Any]]) -> dict[str, dict[int, str]]:
    keyed = {
        "files": "content_hash",
        "contexts": "digest",
        "layouts": "digest",
        "excursions": "identity",
    }
    names: dict[str, dict[int, str]] = {
        table: {row["id"]: str(row[key]) for row in raw[table]} for table, key in keyed.items()
    }
    names["streams"] = {r["id"]: f"{r['characteristic']} {r['context']}" for r in raw["streams"]}
    names["baselines"] = {
        r["id"]: f"{names['streams'][r['stream_id']]} {r['status']} {r['from_us']}"
        for r in raw["baselines"]
    }
    return names


def _without_places(text: str) -> Any:
    document = json.loads(text)
    document.pop("report", None)
    return document


# ---- a child to be killed ------------------------------------------------------------------------


def fork_and_kill(work: Callable[[], Any], after: float | None) -> bool:
    """Do the work in a forked child and kill it after some seconds; whether it was killed at work.

    A fork costs no start of the interpreter and no imports, so that hundreds of kills are cheap.
    With `after` None the child is let finish.
    """
    child = os.fork()
    if child == 0:
        status = 1
        try:
            devnull = os.open(os.devnull, os.O_WRONLY)
            os.dup2(devnull, 1)
            os.dup2(devnull, 2)
            work()
            status = 0
        finally:
            os._exit(status)
    if after is not None:
        time.sleep(after)
        os.kill(child, signal.SIGKILL)
    _pid, status = os.waitpid(child, 0)
    if os.WIFSIGNALED(status):
        return True
    assert os.WEXITSTATUS(status) == 0, "the child failed by itself"
    return False

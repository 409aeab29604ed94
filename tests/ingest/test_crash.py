"""A pass that is killed at any moment, and passes of several workers at once.

The state to compare with is that of one undisturbed pass over the same files.
"""

from __future__ import annotations

import random
import signal
import subprocess
import sys
import threading
import time
from pathlib import Path

import pytest
from sqlalchemy import Engine

from config.load import load_bay
from ingest.load import take_in
from spc.records.sessions import open_database
from tests.ingest.intake import CLOCK, Intake, reading, sheet, write_bay

PASS = """
import sys
from datetime import datetime
from pathlib import Path
from config.load import load_bay
from ingest.load import take_in
from spc.records.sessions import open_database
bay = load_bay(Path(sys.argv[1]))
engine = open_database(bay.database_url)
print("ready", flush=True)
take_in(engine, bay, datetime.fromisoformat(sys.argv[2]))
print("done", flush=True)
"""


def fill(intake: Intake, files: int = 8) -> None:
    """Drops of all kinds that overlap: measured again, repeated, in conflict, broken."""
    rng = random.Random(5)
    for i in range(files):
        rows = [
            reading(
                1200 + (w + s + i) % 3,
                at=f"2026-05-01T1{rng.randrange(4)}:00:00Z",
                lot=f"N{rng.randrange(4)}",
                wafer=str(w),
                site=str(s),
                tool=f"TRK{w % 2}",
            )
            for w in range(40)
            for s in range(9)
        ]
        intake.drop(f"{i:02d}.csv", sheet(*rows, "broken", reading("x")))
    intake.drop("log.csv", "processed_at,lot,wafer,tool\n2026-05-01T08:00:00Z,N1,1,TRK1\n")
    intake.drop("junk.csv", "hello\n")
    intake.drop("copy.csv", sheet(reading()))
    intake.drop("copy_again.csv", sheet(reading()))


def state(intake: Intake) -> tuple[object, ...]:
    """Everything that matters in the database, whatever the ids are."""
    return (
        sorted(map(repr, intake.readings())),
        sorted(intake.query("SELECT content_hash, outcome, rows, loaded, rejected FROM files")),
        sorted(intake.query("SELECT path, content_hash FROM sightings")),
        sorted(intake.query("SELECT line, value, reason FROM rejects"), key=repr),
        sorted(intake.query("SELECT lot, wafer, tool FROM process_log")),
        sorted(intake.query("SELECT columns FROM contexts")),
        sorted(intake.query("SELECT sites FROM layouts")),
    )


def undisturbed(intake: Intake, folder: Path) -> tuple[object, ...]:
    """State after one pass over the same files into another database."""
    engine = open_database(f"sqlite:///{folder / 'undisturbed.db'}")
    other = Intake(engine, intake.root, intake.bay)
    other.take()
    found = state(other)
    engine.dispose()
    return found


def kill_passes(root: Path, kills: int, seed: int) -> int:
    """Start passes and kill them at random moments; how many were killed at work."""
    rng = random.Random(seed)
    killed = 0
    for _ in range(kills):
        command = [sys.executable, "-c", PASS, str(root / "bay.toml"), CLOCK.isoformat()]
        with subprocess.Popen(command, stdout=subprocess.PIPE, text=True) as process:
            assert process.stdout is not None
            assert process.stdout.readline() == "ready\n"
            time.sleep(rng.random() * 0.25)
            process.send_signal(signal.SIGKILL)
            killed += "done" not in process.stdout.read()
    return killed


def crash_and_recover(tmp_path: Path, kills: int, seed: int) -> None:
    bay = load_bay(write_bay(tmp_path))
    engine = open_database(bay.database_url)
    intake = Intake(engine, tmp_path, bay)
    fill(intake)
    killed = kill_passes(tmp_path, kills, seed)
    intake.take()
    assert state(intake) == undisturbed(intake, tmp_path)
    if engine.dialect.name == "sqlite":
        assert intake.query("PRAGMA integrity_check") == [("ok",)]
        assert intake.query("PRAGMA foreign_key_check") == []
    assert killed > 0
    engine.dispose()


def test_killed_passes_leave_whole_files_only(tmp_path: Path) -> None:
    crash_and_recover(tmp_path, kills=2, seed=11)


@pytest.mark.slow
@pytest.mark.parametrize("seed", range(20))
def test_many_killed_passes(tmp_path: Path, seed: int) -> None:
    crash_and_recover(tmp_path, kills=10, seed=seed)


def test_workers_share_a_folder(engine: Engine, tmp_path: Path) -> None:
    intake = Intake.make(engine, tmp_path)
    fill(intake)
    failures: list[BaseException] = []
    reports = []

    def work() -> None:
        try:
            reports.append(take_in(engine, intake.bay, CLOCK))
        except BaseException as error:
            failures.append(error)

    threads = [threading.Thread(target=work) for _ in range(3)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert failures == []
    last = intake.take()  # what a worker left waiting for another one is in by now
    assert all(f.outcome != "waiting" for f in last.files)
    # Which of two conflicting files came first may differ; nothing may be lost or doubled.
    keys = [row[:6] for row in intake.readings()]
    assert len(keys) == len(set(keys))
    assert sum(r.readings["loaded"] for r in reports) + last.readings["loaded"] == len(keys)
    assert len(intake.query("SELECT id FROM files")) == 11
    expected = undisturbed(intake, tmp_path)
    assert len(expected[0]) == len(keys)  # type: ignore[arg-type]
    assert [row[:2] for row in state(intake)[1]] == [row[:2] for row in expected[1]]  # type: ignore[attr-defined,index]

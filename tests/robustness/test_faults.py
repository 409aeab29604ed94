"""What goes wrong around a pass: one clear line, exit 1, and the next pass recovers by itself."""

from __future__ import annotations

import json
import os
import shutil
import signal
import sqlite3
import subprocess
from collections.abc import Iterator
from contextlib import closing
from datetime import datetime, timedelta
from pathlib import Path

import pytest

from spc.records.sessions import open_database
from tests.robustness.smallbay import SmallBay, command, content, make, night

FEW = 3  # nights in the drop folder; too few for limits, so that a pass is quick


@pytest.fixture(scope="module")
def template(tmp_path_factory: pytest.TempPathFactory) -> SmallBay:
    """A bay with a database and one finished night; two nights of drops have not been looked at."""
    bay = make(tmp_path_factory.mktemp("faults") / "bay", nights=1)
    bay.nightly(0)
    for number in range(1, FEW):
        bay.drops_of(number)
    return bay


@pytest.fixture(scope="module")
def undisturbed(template: SmallBay, tmp_path_factory: pytest.TempPathFactory) -> SmallBay:
    bay = template.copy(tmp_path_factory.mktemp("faults") / "undisturbed")
    bay.nightly(FEW - 1)
    return bay


@pytest.fixture
def bay(template: SmallBay, tmp_path: Path) -> SmallBay:
    return template.copy(tmp_path / "bay")


def state(bay: SmallBay) -> dict[str, list[str]]:
    engine = open_database(bay.url)
    try:
        return content(engine)
    finally:
        engine.dispose()


def night_fails(bay: SmallBay, *words: str) -> str:
    """Run the night; it must end with status 1 and one line, which is returned."""
    status, out, told = bay.here("nightly", "--as-of", night(FEW - 1).isoformat(), "--json", *words)
    assert status == 1, (status, told)
    assert out == ""
    return one_line(told)


def one_line(told: str) -> str:
    lines = told.splitlines()
    assert len(lines) == 1, told
    assert lines[0].startswith("yellowbay: ")
    assert "unexpected" not in lines[0]
    assert "Traceback" not in told
    return lines[0]


def assert_recovers(bay: SmallBay, undisturbed: SmallBay) -> None:
    bay.nightly(FEW - 1)
    found, expected = state(bay), state(undisturbed)
    for table, rows in expected.items():
        assert found[table] == rows, table
    assert bay.page(FEW - 1) == undisturbed.page(FEW - 1)
    assert bay.mails() == undisturbed.mails()


# ---- folders and disks ---------------------------------------------------------------------------


def test_a_drop_folder_that_vanished_is_no_quiet_night(
    bay: SmallBay, undisturbed: SmallBay
) -> None:
    (bay.root / "drops").rename(bay.root / "elsewhere")
    line = night_fails(bay)
    assert "drop folder" in line
    assert "No such file" in line
    (bay.root / "elsewhere").rename(bay.root / "drops")
    assert_recovers(bay, undisturbed)


def test_a_file_in_the_way_of_the_reports_folder(bay: SmallBay, undisturbed: SmallBay) -> None:
    shutil.rmtree(bay.root / "reports")
    (bay.root / "reports").write_text("in the way")
    assert "reports" in night_fails(bay)
    (bay.root / "reports").unlink()
    assert_recovers(bay, undisturbed)


@pytest.fixture
def small_disk(tmp_path: Path) -> Iterator[Path]:
    """A file system of its own that a test can fill or make read-only."""
    from tests.conftest import skip_or_fail

    place = tmp_path / "disk"
    place.mkdir()
    mount = ["mount", "-t", "tmpfs", "-o", "size=900k", "tmpfs", str(place)]
    if subprocess.run(mount, capture_output=True, check=False).returncode:
        skip_or_fail("no tmpfs can be mounted here: needs root and CAP_SYS_ADMIN")
    yield place
    subprocess.run(["umount", "-l", str(place)], check=True)


def on_disk(bay: SmallBay, folder: str, disk: Path) -> None:
    """Put a folder of the bay on the small disk."""
    shutil.copytree(bay.root / folder, disk / folder)
    shutil.rmtree(bay.root / folder)
    (bay.root / folder).symlink_to(disk / folder)


def test_reports_on_a_full_disk(bay: SmallBay, undisturbed: SmallBay, small_disk: Path) -> None:
    on_disk(bay, "reports", small_disk)
    fill_up(small_disk)
    line = night_fails(bay)
    assert "the disk is full" in line
    assert "reports" in line
    (small_disk / "filling").unlink()
    assert_recovers(bay, undisturbed)


def fill_up(disk: Path) -> None:
    with (disk / "filling").open("wb", buffering=0) as file:
        for size in (65536, 512):
            try:
                while True:
                    file.write(b"0" * size)
            except OSError:
                continue


def test_reports_on_a_disk_mounted_read_only(
    bay: SmallBay, undisturbed: SmallBay, small_disk: Path
) -> None:
    on_disk(bay, "reports", small_disk)
    subprocess.run(["mount", "-o", "remount,ro", str(small_disk)], check=True)
    line = night_fails(bay)
    assert "no permission to write" in line
    assert "reports" in line
    subprocess.run(["mount", "-o", "remount,rw", str(small_disk)], check=True)
    assert_recovers(bay, undisturbed)


@pytest.mark.sqlite
def test_the_database_on_a_full_disk(
    template: SmallBay, undisturbed: SmallBay, small_disk: Path, tmp_path: Path
) -> None:
    bay = template.copy(tmp_path / "bay")
    for file in bay.root.glob("bay.db*"):
        shutil.move(file, small_disk / file.name)
    text = bay.config.read_text("utf-8")
    bay.config.write_text(text + f'[database]\nurl = "sqlite:///{small_disk / "bay.db"}"\n')
    fill_up(small_disk)
    assert "the disk is full" in night_fails(bay)
    (small_disk / "filling").unlink()
    bay.nightly(FEW - 1)
    engine = open_database(f"sqlite:///{small_disk / 'bay.db'}")
    found = content(engine)
    engine.dispose()
    assert found["measurements"] == state(undisturbed)["measurements"]
    assert found["points"] == state(undisturbed)["points"]
    assert bay.page(FEW - 1) == undisturbed.page(FEW - 1)


def test_a_mail_folder_that_cannot_be_written_keeps_the_mail_waiting(
    bay: SmallBay, undisturbed: SmallBay
) -> None:
    shutil.move(bay.root / "mail", bay.root / "kept")
    (bay.root / "mail").write_text("in the way")
    status, out, told = bay.here("nightly", "--as-of", night(FEW - 1).isoformat(), "--json")
    assert status == 1
    assert json.loads(out)["mail"] == {"queued": 1, "sent": 0, "failed": 1}
    assert "cannot write to the mail folder" in one_line(told)
    (bay.root / "mail").unlink()
    shutil.move(bay.root / "kept", bay.root / "mail")
    bay.nightly(FEW - 1)
    assert bay.mails() == undisturbed.mails()


# ---- the database --------------------------------------------------------------------------------


@pytest.mark.sqlite
def test_a_database_locked_by_another_program(
    bay: SmallBay, undisturbed: SmallBay, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("spc.records.sessions.BUSY_SECONDS", 0.2)
    other = sqlite3.connect(bay.root / "bay.db", isolation_level=None)
    other.execute("BEGIN IMMEDIATE")
    assert "the database is locked by another program" in night_fails(bay)
    other.execute("ROLLBACK")
    other.close()
    assert_recovers(bay, undisturbed)


@pytest.mark.sqlite
def test_a_database_that_is_none(bay: SmallBay) -> None:
    for file in bay.root.glob("bay.db*"):
        file.unlink()
    (bay.root / "bay.db").write_bytes(b"this is no database, whatever its name says" * 100)
    assert "damaged" in night_fails(bay)


@pytest.mark.sqlite
def test_a_damaged_page_in_the_middle(bay: SmallBay) -> None:
    file = bay.root / "bay.db"
    # Everything into the file itself, or the damage would be mended from the log beside it.
    with closing(sqlite3.connect(file)) as connection:
        connection.execute("PRAGMA wal_checkpoint(TRUNCATE)")
    data = bytearray(file.read_bytes())
    data[8192:-4096] = os.urandom(len(data) - 8192 - 4096)
    file.write_bytes(bytes(data))
    line = night_fails(bay)
    assert "restore the last backup" in line


def test_another_pass_that_does_not_end(bay: SmallBay, undisturbed: SmallBay) -> None:
    from service.lock import pass_lock

    engine = open_database(bay.url)
    with pass_lock(engine, 0):
        status, _out, told = bay.here(
            "nightly", "--as-of", night(FEW - 1).isoformat(), "--json", "--wait", "0.1"
        )
    engine.dispose()
    assert status == 1
    assert "another pass is running" in told.splitlines()[-1]
    assert_recovers(bay, undisturbed)


# ---- the clock -----------------------------------------------------------------------------------


def test_a_clock_set_back_and_forth(bay: SmallBay, undisturbed: SmallBay) -> None:
    bay.nightly(FEW - 1)
    back = bay.nightly(0)
    assert back["excursions"]["opened"] == []
    bay.nightly(FEW - 1)
    for table in ("measurements", "points", "wafer_results", "baselines", "excursions"):
        assert state(bay)[table] == state(undisturbed)[table], table
    assert bay.mails().keys() == undisturbed.mails().keys(), "no night is mailed twice"


@pytest.mark.parametrize(
    ("first", "second", "gap"),
    [
        # IANA time-zone database: Europe/Dublin goes back on 2026-10-25, forward on 2027-03-28.
        ("2026-10-25T01:30:00+01:00", "2026-10-25T01:30:00+00:00", timedelta(hours=1)),
        ("2027-03-28T00:30:00+00:00", "2027-03-28T02:30:00+01:00", timedelta(hours=1)),
    ],
)
def test_passes_around_a_change_of_summer_time(
    bay: SmallBay, first: str, second: str, gap: timedelta
) -> None:
    stamps = []
    for stamp in (first, second):
        found = bay.json("nightly", "--as-of", stamp)
        stamps.append(found["as_of"])
        assert Path(found["report"]).is_file()
    assert stamps == [first, second]
    assert datetime.fromisoformat(stamps[1]) - datetime.fromisoformat(stamps[0]) == gap
    pages = [n for n in bay.pages() if n.startswith(f"night-{first[:10]}")]
    assert len(pages) == 2, "the second pass of the night does not write over the first"


# ---- a process that is asked to stop ------------------------------------------------------------


def test_interrupted_by_hand(bay: SmallBay, undisturbed: SmallBay) -> None:
    words = [*command(), "nightly", "--as-of", night(FEW - 1).isoformat()]
    with subprocess.Popen(
        [*words, "--config", str(bay.config)],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    ) as process:
        assert process.stderr is not None
        import time

        time.sleep(1.5)
        process.send_signal(signal.SIGINT)
        _out, told = process.communicate(timeout=60)
    assert "Traceback" not in told
    if process.returncode:
        assert process.returncode in (1, 130)
    assert_recovers(bay, undisturbed)

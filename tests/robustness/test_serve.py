"""`yellowbay serve` as a real process: catching up, stopping, and the lock."""

from __future__ import annotations

import signal
import subprocess
import time
from collections.abc import Iterator
from datetime import UTC, datetime, timedelta
from pathlib import Path

import pytest

from spc.records.sessions import open_database
from spc.records.stamps import to_us
from spc.records.tables import passes
from tests.robustness.smallbay import SmallBay, command, make


@pytest.fixture
def bay(tmp_path: Path) -> SmallBay:
    """A bay whose last pass was three days ago, with a night due a minute ago."""
    at = datetime.now(UTC) - timedelta(minutes=1)
    text = f'[nightly]\nat = "{at:%H:%M}"\n'
    made = make(tmp_path / "bay", extra=text, nights=1)
    made.config.write_text(made.config.read_text("utf-8").replace("Europe/Dublin", "UTC"), "utf-8")
    engine = open_database(made.url)
    with engine.begin() as connection:
        long_ago = to_us(at - timedelta(days=3))
        connection.execute(passes.insert().values(as_of_us=long_ago, finished=1, result="{}"))
    engine.dispose()
    return made


@pytest.fixture
def service(bay: SmallBay, tmp_path: Path) -> Iterator[subprocess.Popen[bytes]]:
    with (tmp_path / "log").open("wb") as log:
        process = subprocess.Popen(
            [*command(), "serve", "--config", str(bay.config)], stdout=log, stderr=log
        )
        yield process
        process.kill()
        process.wait()


def wait_for(log: Path, words: str, process: subprocess.Popen[bytes]) -> str:
    deadline = time.monotonic() + 60
    while True:
        text = log.read_text("utf-8")
        if words in text:
            return text
        assert process.poll() is None, text
        assert time.monotonic() < deadline, text
        time.sleep(0.05)


def test_a_missed_night_is_caught_up_and_the_service_stops_when_asked(
    bay: SmallBay, service: subprocess.Popen[bytes], tmp_path: Path
) -> None:
    log = tmp_path / "log"
    text = wait_for(log, "yellowbay.schedule serving", service)
    assert text.count("catching up a missed night") == 1, "three were missed, one is caught up"
    assert text.count("the night is done") == 1
    nights = [n for n in bay.pages() if n.startswith("night-")]
    assert len(nights) == 1
    assert len(bay.mails()) == 1
    # While it serves, a pass by hand gets the lock, and a person gets an answer.
    assert bay.json("health")["checks"][0]["well"]
    began = time.monotonic()
    service.send_signal(signal.SIGTERM)
    service.send_signal(signal.SIGTERM)
    assert service.wait(timeout=20) == 0
    assert time.monotonic() - began < 10
    text = log.read_text("utf-8")
    assert "stopped" in text.splitlines()[-1]
    assert "Traceback" not in text


def test_asked_to_stop_during_a_pass_it_ends_after_the_file_in_hand(
    bay: SmallBay, service: subprocess.Popen[bytes], tmp_path: Path
) -> None:
    wait_for(tmp_path / "log", "catching up", service)
    service.send_signal(signal.SIGTERM)
    assert service.wait(timeout=40) == 0
    engine = open_database(bay.url)
    if engine.dialect.name == "sqlite":
        with engine.connect() as connection:
            assert connection.exec_driver_sql("PRAGMA integrity_check").scalar() == "ok"
    engine.dispose()


def test_the_lock_keeps_a_pass_by_hand_waiting(bay: SmallBay) -> None:
    from service.lock import pass_lock

    engine = open_database(bay.url)
    words = [*command(), "--verbose", "nightly", "--as-of", "2026-10-17T05:30:00Z"]
    with pass_lock(engine, 0):
        process = subprocess.Popen(
            [*words, "--config", str(bay.config)], stdout=subprocess.PIPE, stderr=subprocess.PIPE
        )
        assert process.stderr is not None
        assert b"another pass is running" in process.stderr.readline()
        assert process.poll() is None
    out, told = process.communicate(timeout=60)
    engine.dispose()
    assert process.returncode == 0, told
    assert b"Page:" in out

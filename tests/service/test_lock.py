"""The lock of the pass, between real processes, on both databases."""

from __future__ import annotations

import subprocess
import sys
import textwrap
from collections.abc import Iterator
from contextlib import contextmanager

import pytest
from sqlalchemy import Engine

from service.lock import BusyError, pass_lock

HOLDER = textwrap.dedent(
    """
    import sys, time
    from sqlalchemy import create_engine
    from service.lock import pass_lock
    with pass_lock(create_engine(sys.argv[1]), 0, shared=sys.argv[2] == "shared"):
        print("held", flush=True)
        time.sleep(60)
    """
)


@contextmanager
def holder(engine: Engine, how: str) -> Iterator[None]:
    """Another process that holds the lock until it is killed."""
    url = engine.url.render_as_string(hide_password=False)
    command = [sys.executable, "-c", HOLDER, url, how]
    with subprocess.Popen(command, stdout=subprocess.PIPE) as other:
        assert other.stdout is not None
        assert other.stdout.readline().strip() == b"held"
        try:
            yield
        finally:
            other.kill()


def test_another_process_is_kept_out_and_its_death_frees_the_lock(engine: Engine) -> None:
    with (
        holder(engine, "alone"),
        pytest.raises(BusyError, match="another pass is running"),
        pass_lock(engine, 0.3),
    ):
        pass
    # A database server takes a moment to notice that the holder is gone.
    with pass_lock(engine, 30):
        pass


def test_workers_share_the_lock_and_a_pass_waits_for_them(engine: Engine) -> None:
    """On SQLite, which has one writer, workers take turns."""
    with holder(engine, "shared"):
        if engine.dialect.name == "postgresql":
            with pass_lock(engine, 0, shared=True), pass_lock(engine, 0, shared=True):
                pass
        else:
            with pytest.raises(BusyError), pass_lock(engine, 0, shared=True):
                pass
        with pytest.raises(BusyError), pass_lock(engine, 0.3):
            pass
    with pass_lock(engine, 5):
        pass


def test_no_worker_begins_beside_a_pass(engine: Engine) -> None:
    with holder(engine, "alone"), pytest.raises(BusyError), pass_lock(engine, 0, shared=True):
        pass


def test_the_lock_is_given_back(engine: Engine) -> None:
    for _ in range(2):
        with pass_lock(engine, 0):
            pass

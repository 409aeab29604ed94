"""The lock of the pass, between real processes."""

from __future__ import annotations

import subprocess
import sys
import textwrap
from pathlib import Path

import pytest
from sqlalchemy import Engine, create_engine

from service.lock import BusyError, pass_lock

HOLDER = textwrap.dedent(
    """
    import sys, time
    from sqlalchemy import create_engine
    from service.lock import pass_lock
    with pass_lock(create_engine(sys.argv[1]), 0):
        print("held", flush=True)
        time.sleep(60)
    """
)


@pytest.fixture
def database(tmp_path: Path) -> Engine:
    return create_engine(f"sqlite:///{tmp_path}/bay.db")


def test_another_process_is_kept_out_and_its_death_frees_the_lock(database: Engine) -> None:
    url = str(database.url)
    with subprocess.Popen([sys.executable, "-c", HOLDER, url], stdout=subprocess.PIPE) as holder:
        assert holder.stdout is not None
        assert holder.stdout.readline().strip() == b"held"
        with pytest.raises(BusyError, match="another pass is running"), pass_lock(database, 0.3):
            pass
        holder.kill()
    told: list[str] = []
    with pass_lock(database, 5, waiting=lambda: told.append("waiting")):
        assert told == []


def test_the_lock_is_given_back(database: Engine) -> None:
    for _ in range(2):
        with pass_lock(database, 0):
            pass

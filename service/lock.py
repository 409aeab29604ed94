"""One pass at a time, across processes and (with PostgreSQL) across machines.

SQLite: a file lock beside the database, which the system drops when its holder dies.
PostgreSQL: a session advisory lock, which the server drops when the connection dies. Workers that
only take files in share it: any number of them at once, but none beside a whole pass.
"""

from __future__ import annotations

import fcntl
import os
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

from sqlalchemy import Engine, text

# Not the keys of spc.records.ledger and spc.records.schema, or a pass would wait for itself.
_ADVISORY_KEY = 0x7965_6C6C_6F70
_PAUSE_SECONDS = 0.2


class BusyError(Exception):
    """Another pass holds the lock."""


@contextmanager
def pass_lock(
    engine: Engine,
    wait_seconds: float,
    *,
    shared: bool = False,
    waiting: Callable[[], None] = lambda: None,
) -> Iterator[None]:
    """Hold the lock of the pass.

    Parameters
    ----------
    wait_seconds : how long to wait for another pass to end.
    shared : let others that share it in as well. SQLite has one writer anyway: there it is for one.
    waiting : called once when there is something to wait for.

    Raises
    ------
    BusyError
        When the other pass does not end in time.
    """
    on_server = engine.dialect.name == "postgresql"
    with _advisory(engine, "_shared" if shared else "") if on_server else _file(engine) as take:
        deadline = time.monotonic() + wait_seconds
        told = False
        while not take():
            if not told:
                waiting()
                told = True
            if time.monotonic() >= deadline:
                raise BusyError(
                    "another pass is running on this database and did not end in "
                    f"{wait_seconds:g} s; try again when it has finished"
                )
            time.sleep(_PAUSE_SECONDS)
        yield


@contextmanager
def _file(engine: Engine) -> Iterator[Callable[[], bool]]:
    database = engine.url.database
    path = Path(f"{database}.lock") if database and database != ":memory:" else Path(os.devnull)
    with path.open("a") as file:

        def take() -> bool:
            try:
                fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
            except BlockingIOError:
                return False
            return True

        yield take  # closing the file drops the lock


@contextmanager
def _advisory(engine: Engine, kind: str) -> Iterator[Callable[[], bool]]:
    # Autocommit: a lock held for an hour must not hold a transaction open for an hour.
    with engine.connect().execution_options(isolation_level="AUTOCOMMIT") as connection:

        def take() -> bool:
            asked = text(f"SELECT pg_try_advisory_lock{kind}(:key)")  # nosec B608
            return bool(connection.execute(asked, {"key": _ADVISORY_KEY}).scalar())

        try:
            yield take
        finally:
            if not connection.invalidated:
                asked = text(f"SELECT pg_advisory_unlock{kind}(:key)")  # nosec B608
                connection.execute(asked, {"key": _ADVISORY_KEY})

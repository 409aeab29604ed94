"""Opening the database, and bringing its schema up to date."""

from __future__ import annotations

import os
import sqlite3
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from sqlalchemy import Connection, Engine, create_engine, event
from sqlalchemy.engine import make_url

# How long a writer of SQLite waits for another program before it gives up.
BUSY_SECONDS = 60.0
# PostgreSQL: both sides ask after this long whether the other is still there. A worker whose
# machine lost its power gives its files back within two minutes; the systems' default is two hours.
_IDLE_SECONDS = 60
_ALIVE = (
    f"-c tcp_keepalives_idle={_IDLE_SECONDS} -c tcp_keepalives_interval={_IDLE_SECONDS // 4} "
    "-c tcp_keepalives_count=4"
)
PASSWORD_VARIABLE = "YELLOWBAY_DATABASE_PASSWORD"  # nosec B105


def secret(variable: str) -> str | None:
    """A secret from the environment, or from the file that `<variable>_FILE` names.

    Raises OSError when the named file cannot be read.
    """
    value = os.environ.get(variable)
    if value is not None:
        return value
    named = os.environ.get(variable + "_FILE")
    return Path(named).read_text("utf-8").strip() if named else None


def open_database(
    url: str, *, pool_size: int = 4, statement_timeout_seconds: float = 600.0
) -> Engine:
    """Open the database and bring its schema up to date.

    Parameters
    ----------
    url : database URL without password; the password is `$YELLOWBAY_DATABASE_PASSWORD`.
    pool_size, statement_timeout_seconds : PostgreSQL only.

    Raises
    ------
    spc.records.schema.NewerSchemaError
        When the database was written by a newer version.
    """
    from spc.records.schema import upgrade

    engine = _engine(url, pool_size, statement_timeout_seconds)
    upgrade(engine)
    return engine


def _engine(url: str, pool_size: int, timeout: float) -> Engine:
    parsed = make_url(url)
    if parsed.get_backend_name() == "sqlite":
        if parsed.database and parsed.database != ":memory:":
            Path(parsed.database).parent.mkdir(parents=True, exist_ok=True)
        engine = create_engine(parsed, connect_args={"timeout": BUSY_SECONDS})
        event.listen(engine, "connect", _sqlite_pragmas)
        # The driver would commit before DDL; we open every transaction ourselves.
        event.listen(engine, "begin", _sqlite_begin)
        return engine
    if parsed.drivername == "postgresql":
        parsed = parsed.set(drivername="postgresql+psycopg")
    password = secret(PASSWORD_VARIABLE)
    if password is not None:
        parsed = parsed.set(password=password)
    return create_engine(
        parsed,
        pool_size=pool_size,
        pool_pre_ping=True,
        connect_args={
            "options": f"-c statement_timeout={int(timeout * 1000)} -c timezone=UTC {_ALIVE}",
            "connect_timeout": 10,
            "keepalives_idle": _IDLE_SECONDS,
            "keepalives_interval": _IDLE_SECONDS // 4,
            "keepalives_count": 4,
        },
    )


def _sqlite_pragmas(connection: Any, _record: Any) -> None:
    connection.isolation_level = None
    cursor = connection.cursor()
    _use_wal(cursor)
    cursor.execute("PRAGMA synchronous=NORMAL")
    cursor.execute("PRAGMA foreign_keys=ON")
    cursor.execute("PRAGMA cache_size=-65536")
    cursor.execute("PRAGMA temp_store=MEMORY")
    cursor.close()


def _use_wal(cursor: Any) -> None:
    """Turn the write-ahead log on. SQLite does not wait for others who turn it on for a new
    database at the same moment; we do."""
    for wait in (0.01, 0.02, 0.05, 0.1, 0.2, 0.5, 1.0, 2.0, 5.0):
        try:
            cursor.execute("PRAGMA journal_mode=WAL")
            return
        except sqlite3.OperationalError as error:
            if "locked" not in str(error) and "busy" not in str(error):
                raise
        time.sleep(wait)
    cursor.execute("PRAGMA journal_mode=WAL")


def _sqlite_begin(connection: Any) -> None:
    # IMMEDIATE: a writer that waits is better than one that fails half-way for the lock.
    # Readers (see `reading`) do not wait for writers at all.
    read_only = connection.get_execution_options().get("read_only", False)
    connection.exec_driver_sql("BEGIN" if read_only else "BEGIN IMMEDIATE")


@contextmanager
def reading(engine: Engine) -> Iterator[Connection]:
    """A connection for questions only: one consistent view, no wait for a writer."""
    with engine.connect() as connection:
        if engine.dialect.name == "postgresql":
            # The server's default takes a new view for every statement.
            connection = connection.execution_options(isolation_level="REPEATABLE READ")
        yield connection.execution_options(read_only=True)

"""Bringing the schema up to date by Alembic, forward only, with a copy of the old one kept."""

from __future__ import annotations

import os
import sqlite3
from contextlib import closing
from pathlib import Path

from sqlalchemy import Engine, inspect

MIGRATIONS = Path(__file__).parent / "migrations"
_UPGRADE_LOCK = 0x79656C6C6F78  # key of the PostgreSQL advisory lock: one migrates, others wait


class NewerSchemaError(Exception):
    """The database was written by a newer yellowbay than this one."""


def latest_revision() -> str:
    """Revision that this version of the program works with."""
    from alembic.script import ScriptDirectory

    head = ScriptDirectory.from_config(_alembic()).get_current_head()
    assert head is not None  # the migrations are part of the package
    return head


def current_revision(engine: Engine) -> str | None:
    """Revision of the database, None for an empty one."""
    from sqlalchemy import text

    with engine.connect() as connection:
        if not inspect(connection).has_table("alembic_version"):
            return None
        return connection.execute(text("SELECT version_num FROM alembic_version")).scalar()


def upgrade(engine: Engine) -> None:
    """Run the migrations that the database lacks, all in one transaction.

    A SQLite database that holds something is copied first, to `<file>.before-<revision>` with the
    revision it is brought to; a migration by accident can so be undone. PostgreSQL is not copied
    (see docs/operations.md).

    Raises
    ------
    NewerSchemaError
        When the database has a revision that this program does not know.
    """
    known = _known_revisions()
    current = current_revision(engine)
    if current == known[-1]:
        return
    if current is not None and current not in known:
        raise NewerSchemaError(
            f"the database has schema {current}, this program knows up to {known[-1]}: "
            "install the newer yellowbay that wrote it"
        )
    from alembic import command

    if current is not None and engine.dialect.name == "sqlite":
        _keep_a_copy(engine, known[-1])
    config = _alembic()
    with engine.begin() as connection:
        if engine.dialect.name == "postgresql":
            connection.exec_driver_sql(f"SELECT pg_advisory_xact_lock({_UPGRADE_LOCK})")
        config.attributes["connection"] = connection
        command.upgrade(config, "head")


def _keep_a_copy(engine: Engine, revision: str) -> Path | None:
    """Copy a SQLite file aside; None for one in memory. An earlier copy is never written over."""
    database = engine.url.database
    if not database or database == ":memory:":
        return None
    copy = Path(f"{database}.before-{revision}")
    number = 1
    while copy.exists():
        number += 1
        copy = Path(f"{database}.before-{revision}.{number}")
    part = copy.with_name(f".{copy.name}.part")
    part.unlink(missing_ok=True)
    with closing(sqlite3.connect(database)) as here, closing(sqlite3.connect(part)) as there:
        here.backup(there)
        there.execute("PRAGMA journal_mode=DELETE")
    with part.open("rb") as file:
        os.fsync(file.fileno())
    part.replace(copy)
    return copy


def _alembic():  # type: ignore[no-untyped-def]
    from alembic.config import Config

    config = Config()
    config.set_main_option("script_location", str(MIGRATIONS))
    return config


def _known_revisions() -> list[str]:
    """Oldest first, from the file names: cheaper than loading Alembic on every start."""
    return sorted(p.stem.split("_")[0] for p in (MIGRATIONS / "versions").glob("[0-9]*.py"))

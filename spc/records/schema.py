"""Bringing the schema up to date by Alembic, forward only."""

from __future__ import annotations

from pathlib import Path

from sqlalchemy import Engine, inspect

MIGRATIONS = Path(__file__).parent / "migrations"


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
    """Run the migrations that the database lacks.

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

    config = _alembic()
    with engine.begin() as connection:
        config.attributes["connection"] = connection
        command.upgrade(config, "head")


def _alembic():  # type: ignore[no-untyped-def]
    from alembic.config import Config

    config = Config()
    config.set_main_option("script_location", str(MIGRATIONS))
    return config


def _known_revisions() -> list[str]:
    """Oldest first, from the file names: cheaper than loading Alembic on every start."""
    return sorted(p.stem.split("_")[0] for p in (MIGRATIONS / "versions").glob("[0-9]*.py"))

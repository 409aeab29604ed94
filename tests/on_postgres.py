"""The whole suite on PostgreSQL: `YELLOWBAY_TEST_DATABASE=postgresql python -m pytest`.

Most tests open a SQLite file in a folder of their own. With the setting, every file `*.db` stands
for a database of a real PostgreSQL server instead: `install` turns its URL into that of a database
named after the path, made on first use. It reaches the commands that tests run in processes of
their own as well (`tests/site_postgres/sitecustomize.py`). Backups stay files, and what is about
SQLite alone is marked `sqlite` and left out.
"""

from __future__ import annotations

import hashlib
import os
import sys
from contextlib import suppress
from importlib.abc import Loader, MetaPathFinder
from importlib.machinery import ModuleSpec, PathFinder
from pathlib import Path
from types import ModuleType
from typing import Any

SETTING = "YELLOWBAY_TEST_DATABASE"
SERVER = "YELLOWBAY_TEST_SERVER"  # URL of the server, for processes that tests start
TEMPLATE = "with_schema"
SITE = Path(__file__).resolve().parent / "site_postgres"


def wanted() -> bool:
    """Whether the suite is to run on PostgreSQL. Raises ValueError for an unknown database."""
    asked = os.environ.get(SETTING, "")
    if asked not in ("", "sqlite", "postgresql"):
        raise ValueError(f"{SETTING}={asked}: write sqlite or postgresql")
    return asked == "postgresql"


def name_of(file: str) -> str:
    """Name of the database that stands for a file."""
    return "f_" + hashlib.sha256(os.path.abspath(file).encode()).hexdigest()[:40]


def _run(statement: str) -> None:
    import psycopg

    server = os.environ[SERVER].replace("+psycopg", "")
    with psycopg.connect(server, autocommit=True) as connection:
        connection.execute(statement)  # type: ignore[call-overload]


def _exists(name: str) -> bool:
    import psycopg

    with psycopg.connect(os.environ[SERVER].replace("+psycopg", "")) as connection:
        query = "SELECT 1 FROM pg_database WHERE datname = %s"
        return connection.execute(query, (name,)).fetchone() is not None


def url_of(file: str) -> str:
    """URL of the database that stands for a file; it is made where it is not there yet."""
    import psycopg
    from sqlalchemy.engine import make_url

    name = name_of(file)
    if not _exists(name):
        with suppress(psycopg.errors.DuplicateDatabase):  # another process was quicker
            _run(f'CREATE DATABASE "{name}" TEMPLATE "{TEMPLATE}" STRATEGY FILE_COPY')
        Path(file).parent.mkdir(parents=True, exist_ok=True)
        Path(file).touch()  # tests look whether there is a database
    url = make_url(os.environ[SERVER]).set(database=name)
    return url.render_as_string(hide_password=False)


def copy(source: Path, target: Path) -> None:
    """Let the databases of a copied folder be copies of those of the folder; not on SQLite."""
    if not wanted():
        return
    for file in source.rglob("*.db"):
        name, new = name_of(str(file)), name_of(str(target / file.relative_to(source)))
        if _exists(name):
            _run(f"SELECT pg_terminate_backend(pid) FROM pg_stat_activity WHERE datname = '{name}'")
            _run(f'CREATE DATABASE "{new}" TEMPLATE "{name}" STRATEGY FILE_COPY')


def _patched(module: Any) -> None:
    from sqlalchemy.engine import make_url

    real = module._engine

    def _engine(url: str, pool_size: int, timeout: float) -> Any:
        parsed = make_url(url)
        file = parsed.database or ""
        if parsed.get_backend_name() == "sqlite" and file.endswith(".db"):
            url = url_of(file)
        return real(url, pool_size, timeout)

    module._engine = _engine


class _Finder(MetaPathFinder):
    """Changes `spc.records.sessions` when it is first imported, and imports nothing before."""

    def find_spec(self, name: str, path: Any, target: Any = None) -> ModuleSpec | None:
        if name != "spc.records.sessions":
            return None
        spec = PathFinder.find_spec(name, path, target)
        assert spec is not None
        loader = spec.loader

        class Patching(Loader):
            def create_module(self, spec: ModuleSpec) -> ModuleType | None:
                return loader.create_module(spec) if loader else None

            def exec_module(self, module: ModuleType) -> None:
                assert loader is not None
                loader.exec_module(module)
                _patched(module)

        spec.loader = Patching()
        return spec


def install() -> None:
    """Let every `*.db` stand for a database of the server from now on."""
    sys.meta_path.insert(0, _Finder())
    if "spc.records.sessions" in sys.modules:
        _patched(sys.modules["spc.records.sessions"])

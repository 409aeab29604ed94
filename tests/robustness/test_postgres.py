"""The whole job on PostgreSQL: the same answers as on SQLite, one pass at a time, a server that
restarts, and the move from one to the other."""

from __future__ import annotations

import subprocess
import uuid
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from sqlalchemy import create_engine, text
from sqlalchemy.engine import make_url
from sqlalchemy.exc import OperationalError, ProgrammingError

from spc.records.sessions import open_database
from tests.robustness.smallbay import SHIFTED_FROM, SmallBay, command, content, make, night

pytestmark = pytest.mark.postgres
NIGHT = SHIFTED_FROM


def use(bay: SmallBay, url: str) -> SmallBay:
    """Let the bay keep its records there. The server of the tests trusts without a password."""
    plain = make_url(url).set(password=None).render_as_string(hide_password=False)
    words = bay.config.read_text("utf-8")
    bay.config.write_text(words + f'[database]\nurl = "{plain}"\n', "utf-8")
    return bay


@pytest.fixture
def url(postgres_server: Callable[[str], str]) -> str:
    return postgres_server(f"r_{uuid.uuid4().hex}")


def answers(bay: SmallBay) -> dict[str, Any]:
    return {
        "excursions": bay.json("excursions"),
        "points": bay.json("points", "--characteristic", "M1 thickness"),
        "baselines": bay.json("baseline"),
    }


def without_places(document: dict[str, Any]) -> dict[str, Any]:
    return {k: v for k, v in document.items() if k != "report"}


def test_the_same_answers_as_on_sqlite_and_the_move(url: str, tmp_path: Path) -> None:
    """Two nights on either; then the SQLite one is moved and goes on."""
    lite = make(tmp_path / "lite", nights=NIGHT)
    shared = use(make(tmp_path / "shared", nights=NIGHT), url)
    for bay in (lite, shared):
        bay.drops_of(NIGHT)
    first = [without_places(bay.nightly(NIGHT - 1)) for bay in (lite, shared)]
    assert first[0] == first[1]
    second = [without_places(bay.nightly(NIGHT)) for bay in (lite, shared)]
    assert second[0] == second[1]
    assert second[0]["excursions"]["opened"], "the night had something to find"
    assert answers(lite) == answers(shared)
    assert lite.page(NIGHT) == shared.page(NIGHT)
    assert lite.mails() == shared.mails()


@pytest.fixture
def shared(url: str, tmp_path: Path) -> SmallBay:
    return use(make(tmp_path / "shared", nights=2), url)


def test_two_passes_at_once_run_one_after_the_other(shared: SmallBay) -> None:
    words = [*command(), "nightly", "--config", str(shared.config), "--json", "--as-of"]
    both = [
        subprocess.Popen([*words, night(1).isoformat()], stdout=subprocess.PIPE, text=True)
        for _ in range(2)
    ]
    import json

    found = [json.loads(process.communicate(timeout=120)[0]) for process in both]
    assert [process.returncode for process in both] == [0, 0]
    assert sorted(one["drops"]["loaded"] for one in found) == [0, 6]
    assert sorted(one["mail"]["sent"] for one in found) == [0, 1]
    assert len(shared.mails()) == 1


def test_the_server_restarts_between_passes(shared: SmallBay, url: str) -> None:
    """What a restart does to us is that every connection of the pool is dead."""
    shared.nightly(1)
    engine = open_database(url)
    with engine.connect() as connection:
        mine = connection.scalar(text("SELECT pg_backend_pid()"))
    other = open_database(url)
    with other.connect() as connection:
        connection.execute(text("SELECT pg_terminate_backend(:pid)"), {"pid": mine})
        connection.commit()
    other.dispose()
    with engine.connect() as connection:
        again = connection.scalar(text("SELECT pg_backend_pid()"))
    engine.dispose()
    assert again != mine


def test_a_statement_that_takes_too_long_is_ended(url: str) -> None:
    from service.failures import explain

    engine = open_database(url, statement_timeout_seconds=0.2)
    with engine.connect() as connection, pytest.raises(OperationalError) as caught:
        connection.execute(text("SELECT pg_sleep(5)"))
    engine.dispose()
    words, status = explain(caught.value)
    assert status == 1
    assert "statement timeout" in words
    assert len(words.splitlines()) == 1


def test_a_database_is_moved_and_the_nights_go_on(url: str, tmp_path: Path) -> None:
    bay = make(tmp_path / "bay", nights=2)
    bay.nightly(1)
    lite = open_database(bay.url)
    before = content(lite)
    lite.dispose()
    plain = make_url(url).set(password=None).render_as_string(hide_password=False)
    moved = bay.json("move", "--to", plain)
    assert moved["rows"] == sum(map(len, before.values()))
    use(bay, url)
    there = open_database(url)
    assert content(there) == before
    there.dispose()
    again = bay.nightly(1)
    assert again["drops"]["loaded"] == 0
    bay.drops_of(2)
    assert bay.nightly(2)["readings"]["loaded"] == 40
    status, _out, told = bay.here("move", "--to", plain)
    assert status == 1
    assert "has rows in" in told
    assert len(told.splitlines()) == 1


def test_backup_of_postgres_restores_to_sqlite(shared: SmallBay, tmp_path: Path) -> None:
    shared.nightly(1)
    file = tmp_path / "bay.backup"
    rows = shared.json("backup", str(file))["rows"]
    other = make(tmp_path / "other")
    assert other.json("restore", str(file))["rows"] == rows
    points = [b.json("points", "--characteristic", "M1 thickness") for b in (shared, other)]
    assert points[0] == points[1]
    assert shared.json("audit")["whole"]


def test_a_server_that_is_not_there_is_one_line(tmp_path: Path) -> None:
    bay = use(make(tmp_path / "bay", nights=1), "postgresql+psycopg://spc@127.0.0.1:1/bay")
    status, out, told = bay.here("nightly", "--json")
    assert status == 1
    assert out == ""
    [line] = told.splitlines()
    assert "the database server is not to be reached" in line


def test_the_privileges_of_the_documentation_are_enough(
    postgres_server: Callable[[str], str], tmp_path: Path
) -> None:
    """The statements of docs/operations.md, run as they stand; then a night as that user."""
    words = (Path(__file__).resolve().parents[2] / "docs" / "operations.md").read_text("utf-8")
    block = words.split("```sql\n")[1].split("```")[0]
    here = make_url(postgres_server(f"r_{uuid.uuid4().hex}"))
    for line in block.splitlines():
        if line.startswith("\\c "):
            here = here.set(database=line.split()[1])
            continue
        server = create_engine(here, isolation_level="AUTOCOMMIT")
        with server.connect() as connection:
            connection.execute(text(line))
        server.dispose()
    mine = here.set(username="yellowbay").render_as_string(hide_password=False)
    bay = use(make(tmp_path / "bay", nights=2), mine)
    assert bay.nightly(1)["readings"]["loaded"] == 80
    assert bay.json("health")["checks"][0]["well"]
    server = create_engine(mine)
    with server.connect() as connection, pytest.raises(ProgrammingError):
        connection.execute(text("CREATE ROLE other"))
    server.dispose()

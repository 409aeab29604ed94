"""Several ingest workers on one PostgreSQL: every file once, and what a dead worker had in hand."""

from __future__ import annotations

import json
import subprocess
import sys
import textwrap
import uuid
from collections import Counter
from collections.abc import Callable
from pathlib import Path

import pytest
from sqlalchemy import create_engine, text

from spc.records.ledger import claimed
from spc.records.sessions import open_database
from tests.robustness.smallbay import SmallBay, command, content, make, night
from tests.robustness.test_postgres import use

pytestmark = pytest.mark.postgres
NIGHTS = 12
CLOCK = night(NIGHTS).isoformat()

HOLDER = textwrap.dedent(
    """
    import sys, time
    from spc.records.ledger import claimed
    from spc.records.sessions import open_database
    with claimed(open_database(sys.argv[1]), sys.argv[2]) as got:
        print("held" if got else "not held", flush=True)
        time.sleep(60)
    """
)


@pytest.fixture
def url(postgres_server: Callable[[str], str]) -> str:
    return postgres_server(f"w_{uuid.uuid4().hex}")


@pytest.fixture
def shared(url: str, tmp_path: Path) -> SmallBay:
    return use(make(tmp_path / "shared", nights=NIGHTS), url)


def without_moments(found: dict[str, list[str]]) -> dict[str, list[str]]:
    return {table: rows for table, rows in found.items() if table != "sightings"}


def test_workers_on_one_database_take_each_file_in_once(
    shared: SmallBay, url: str, tmp_path: Path
) -> None:
    """Three processes begin at once; what they leave is what one worker leaves."""
    words = [*command(), "ingest", "--config", str(shared.config), "--json", "--as-of", CLOCK]
    workers = [
        subprocess.Popen(words, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)
        for _ in range(3)
    ]
    reports = []
    for worker in workers:
        out, told = worker.communicate(timeout=120)
        assert worker.returncode == 0, told
        reports.append(json.loads(out))
    loaded = Counter(
        file["path"] for one in reports for file in one["files"] if file["outcome"] == "loaded"
    )
    assert set(loaded.values()) == {1}, "no file was taken in twice"
    assert len(loaded) == 3 * NIGHTS
    others = {file["outcome"] for one in reports for file in one["files"]} - {"loaded"}
    assert others <= {"waiting"}
    assert sum(one["readings"]["loaded"] for one in reports) == 40 * NIGHTS
    alone = make(tmp_path / "alone", nights=NIGHTS)
    alone.json("ingest", "--as-of", CLOCK)
    lite, engine = open_database(alone.url), open_database(url)
    assert without_moments(content(engine)) == without_moments(content(lite))
    lite.dispose()
    engine.dispose()
    assert shared.json("ingest", "--as-of", CLOCK)["files"] == []


def test_what_a_dead_worker_had_in_hand_is_taken_over(shared: SmallBay, url: str) -> None:
    mine = "03_C1.csv"
    with subprocess.Popen([sys.executable, "-c", HOLDER, url, mine], stdout=subprocess.PIPE) as one:
        assert one.stdout is not None
        assert one.stdout.readline().strip() == b"held"
        report = shared.json("ingest", "--as-of", CLOCK)
        [waiting] = [file for file in report["files"] if file["outcome"] == "waiting"]
        assert waiting["path"] == mine
        assert waiting["reasons"][0]["reason"] == "another worker has it in hand"
        assert report["drops"]["loaded"] == 3 * NIGHTS - 1
        one.kill()
    again = shared.json("ingest", "--as-of", CLOCK)
    assert [(f["path"], f["outcome"]) for f in again["files"]] == [(mine, "loaded")]


def test_a_claim_lasts_until_it_is_given_back(url: str) -> None:
    engine = open_database(url)
    with claimed(engine, "a.csv") as first, claimed(engine, "a.csv") as second:
        assert (first, second) == (True, False)
        with claimed(engine, "b.csv") as other:
            assert other
    with claimed(engine, "a.csv") as again:
        assert again
    assert engine.pool.checkedout() == 0  # type: ignore[attr-defined]
    engine.dispose()


def test_both_sides_notice_a_machine_that_is_gone(url: str) -> None:
    """A worker whose machine lost its power: its connection must not live for two hours."""
    engine = open_database(url)
    with engine.connect() as connection:
        idle = connection.connection.driver_connection.info.get_parameters()  # type: ignore[union-attr]
        asked = connection.scalar(
            text("SELECT setting FROM pg_settings WHERE name = 'tcp_keepalives_idle'")
        )
    engine.dispose()
    assert (idle["keepalives_idle"], idle["keepalives_count"]) == ("60", "4")
    assert asked in ("60", "0"), "0 is what a connection through a socket file says"


def test_the_pool_holds_no_more_connections_than_it_may(url: str) -> None:
    engine = open_database(url, pool_size=2)
    server = create_engine(url)
    for _ in range(3):
        with engine.connect() as one, engine.connect() as two, engine.connect() as three:
            for connection in (one, two, three):
                connection.execute(text("SELECT 1"))
    query = text(
        "SELECT count(*) FROM pg_stat_activity WHERE datname = current_database() "
        "AND pid <> pg_backend_pid()"
    )
    with server.connect() as connection:
        assert connection.scalar(query) == 2
    engine.dispose()
    server.dispose()

"""`kill -9` at any moment of a pass, then one clean pass: all is as if nothing had happened.

Compared with an uninterrupted run: every row of every table (but row numbers, times of sending and
absolute places), every page byte for byte, and every mail.
"""

from __future__ import annotations

import json
import multiprocessing
import random
import sys
import time
import uuid
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest
from sqlalchemy.engine import make_url

from spc.records.sessions import open_database
from tests.robustness import moments
from tests.robustness.smallbay import NIGHTS, SHIFTED_FROM, SmallBay, content, fork_and_kill, make

# Forks a process that has drawn nothing yet: see test_in_its_own_process.py.
pytestmark = pytest.mark.forks

NIGHT = SHIFTED_FROM  # the night that is killed opens an excursion


@dataclass(frozen=True)
class Undisturbed:
    """A bay before the night, and all that the night leaves behind."""

    before: SmallBay
    moments: int
    seconds: float
    content: dict[str, list[str]]
    pages: dict[str, bytes]
    mails: dict[str, bytes]


def state(bay: SmallBay) -> dict[str, list[str]]:
    engine = open_database(bay.url)
    try:
        return content(engine)
    finally:
        engine.dispose()


@pytest.fixture(scope="module")
def undisturbed(tmp_path_factory: pytest.TempPathFactory) -> Undisturbed:
    folder = tmp_path_factory.mktemp("crash")
    moments.load_all(folder)
    before = make(folder / "before", nights=NIGHT)
    moments.in_child(before, NIGHT - 1)
    before.drops_of(NIGHT)
    done = before.copy(folder / "done")
    began = time.perf_counter()
    count = moments.moments_of(done, NIGHT)
    seconds = time.perf_counter() - began
    return Undisturbed(before, count, seconds, state(done), done.pages(), done.mails())


def assert_as_undisturbed(bay: SmallBay, undisturbed: Undisturbed) -> None:
    found = state(bay)
    for table, rows in undisturbed.content.items():
        assert found[table] == rows, table
    assert bay.pages() == undisturbed.pages
    assert bay.mails() == undisturbed.mails
    left = [p.name for p in bay.root.rglob(".*") if p.name.endswith(".part")]
    assert left == [], "what a kill left half-written is gone"


def crash_and_recover(undisturbed: Undisturbed, root: Path, rng: random.Random, kills: int) -> int:
    """Kill the night so many times at random moments, let it run once; the kills that struck."""
    bay = undisturbed.before.copy(root)
    struck = 0
    for part in range(kills):
        # Each kill in a later part of the night than the one before: all parts are struck.
        low, high = (undisturbed.moments * k // kills for k in (part, part + 1))
        struck += moments.killed_at(bay, NIGHT, rng.randint(low + 1, high))
    moments.in_child(bay, NIGHT)
    assert_as_undisturbed(bay, undisturbed)
    return struck


def test_the_night_that_is_killed_is_worth_it(undisturbed: Undisturbed) -> None:
    assert undisturbed.moments > 100
    assert len(undisturbed.content["excursions"]) >= 1
    assert len(undisturbed.mails) == 3, "two nights for the shift, one excursion for its owner"
    assert len(undisturbed.content["measurements"]) == 4 * 2 * (NIGHT + 1)
    assert NIGHTS > NIGHT


def test_a_night_killed_again_and_again(undisturbed: Undisturbed, tmp_path: Path) -> None:
    struck = crash_and_recover(undisturbed, tmp_path / "bay", random.Random(20261130), kills=4)
    assert struck >= 3


@pytest.mark.slow
@pytest.mark.parametrize("seed", range(50))
def test_many_kills_at_chosen_moments(undisturbed: Undisturbed, tmp_path: Path, seed: int) -> None:
    """200 kills: 50 nights killed 1 to 7 times each."""
    kills = 1 + seed % 7
    struck = crash_and_recover(undisturbed, tmp_path / "bay", random.Random(seed), kills)
    print(f"seed {seed}: {struck} kills struck")  # the sum stands in docs/promises.md
    assert struck >= 1


@pytest.mark.slow
@pytest.mark.parametrize("seed", range(10))
def test_many_kills_by_the_clock(undisturbed: Undisturbed, tmp_path: Path, seed: int) -> None:
    """40 kills after a random time, as the plug would be pulled."""
    rng = random.Random(seed)
    bay = undisturbed.before.copy(tmp_path / "bay")
    struck = sum(
        moments.in_child(bay, NIGHT, rng.uniform(0, undisturbed.seconds)) for _ in range(4)
    )
    moments.in_child(bay, NIGHT)
    assert_as_undisturbed(bay, undisturbed)
    print(f"seed {seed}: {struck} kills struck")
    assert struck >= 1


def test_a_night_that_died_is_told_by_the_next(undisturbed: Undisturbed, tmp_path: Path) -> None:
    """Killed after its excursions were opened: the next night writes its page and mails it."""
    bay = undisturbed.before.copy(tmp_path / "late")
    assert moments.killed_at(bay, NIGHT, last_before_the_page(bay, tmp_path / "probe"))
    assert bay.mails().keys() < undisturbed.mails.keys(), "the mail was not written yet"
    lock = bay.json("health")["checks"][2]
    assert (lock["well"], len(lock["unfinished"])) == (False, 1)
    bay.drops_of(NIGHT + 1)
    moments.in_child(bay, NIGHT + 1)
    assert bay.json("health")["checks"][2]["well"]
    told = bay.pages()
    for name, page in undisturbed.pages.items():
        assert name in told
        if name.startswith("night-"):
            assert told[name] == page, name
    for name, mail in undisturbed.mails.items():
        assert bay.mails()[name] == mail


def last_before_the_page(bay: SmallBay, probe: Path) -> int:
    """Number of the moment at which the page of the night is opened for writing."""
    copy = bay.copy(probe)
    found = multiprocessing.get_context("fork").Value("i", 0)

    def work() -> None:
        count = 0

        def note() -> None:
            nonlocal count
            count += 1

        def watch(name: str, args: tuple[Any, ...]) -> None:
            if name == "open" and "night-" in str(args[0]) and not found.value:
                found.value = count

        moments.at_each_moment(note)
        sys.addaudithook(watch)
        moments.one_pass(copy, NIGHT)

    fork_and_kill(work, None)
    assert found.value > 0
    return int(found.value)


def test_what_a_night_took_in_before_it_died_counts_in_the_next(
    undisturbed: Undisturbed, tmp_path: Path
) -> None:
    bay = undisturbed.before.copy(tmp_path / "early")
    assert moments.killed_at(bay, NIGHT, 60)
    bay.drops_of(NIGHT + 1)
    moments.in_child(bay, NIGHT + 1)
    accounts = [json.loads(row)["result"] for row in state(bay)["passes"]]
    taken = sum(a["readings"]["loaded"] for a in accounts)
    assert taken == 2 * 2 * 2 * 5 * (NIGHT + 2), "every reading stands in the account of one night"


@pytest.mark.slow
@pytest.mark.postgres
@pytest.mark.parametrize("seed", range(8))
def test_kills_on_postgres(
    undisturbed: Undisturbed,
    tmp_path: Path,
    postgres_server: Callable[[str], str],
    seed: int,
) -> None:
    """The same on PostgreSQL. Its numbers have gaps after a night that died, so what names an
    excursion by its number (the account of the pass, the mails) is counted and not compared."""
    rng = random.Random(seed)
    bay = undisturbed.before.copy(tmp_path / "bay")
    url = postgres_server(f"crash_{seed}_{uuid.uuid4().hex}")
    plain = make_url(url).set(password=None).render_as_string(hide_password=False)
    bay.json("move", "--to", plain)
    words = bay.config.read_text("utf-8")
    bay.config.write_text(f'{words}[database]\nurl = "{plain}"\n', "utf-8")
    struck = sum(
        moments.killed_at(bay, NIGHT, rng.randint(1, undisturbed.moments)) for _ in range(4)
    )
    moments.in_child(bay, NIGHT)
    engine = open_database(url)
    found = content(engine)
    engine.dispose()
    for table, rows in undisturbed.content.items():
        if table in ("passes", "outbox"):
            assert len(found[table]) == len(rows)
        else:
            assert found[table] == rows, table
    assert len(bay.mails()) == len(undisturbed.mails)
    print(f"seed {seed}: {struck} kills struck")
    assert struck >= 1

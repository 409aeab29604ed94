"""Thirty nights on PostgreSQL and on SQLite: equal results, flat memory, nothing left open.

Takes half an hour on one core: `python -m pytest -n 0 -m slow tests/robustness/test_soak.py -s`.
What is run, and what goes wrong in it, stands in `soak.py`; the figures in docs/promises.md.
"""

from __future__ import annotations

import json
import re
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest
from sqlalchemy.engine import URL

from spc.records.sessions import open_database
from tests.robustness.smallbay import SmallBay, content

ROOT = Path(__file__).resolve().parents[2]
DATABASES = ("sqlite", "postgresql")


# A p-value of 1e-33 differs in its fifth digit with the order in which sums were made; it is shown
# as "< 0.0001" in any case. Such numbers are taken as equal, all others must be so to the bit.
_TINY = re.compile(r"\d(?:\.\d+)?e-(?:[2-9]\d|\d{3})")


def told(page: bytes) -> str:
    """A page with its tiniest numbers left out."""
    return _TINY.sub("0", page.decode("utf-8"))


def state(file: Path) -> dict[str, list[str]]:
    """All rows of a database that is one file."""
    engine = open_database(URL.create("sqlite", database=str(file)).render_as_string())
    try:
        found = content(engine)
    finally:
        engine.dispose()
    return {table: sorted(_TINY.sub("0", row) for row in rows) for table, rows in found.items()}


def assert_equal_results(lite: Path, shared: Path) -> dict[str, int]:
    """Every row, page and mail of two folders is the same; how many of each."""
    rows, others = state(lite / "bay.db"), state(shared / "copy.backup")
    assert rows.keys() == others.keys()
    for table in rows:
        assert rows[table] == others[table], table
    one, other = SmallBay(lite), SmallBay(shared)
    assert one.pages().keys() == other.pages().keys()
    for name, page in one.pages().items():
        assert told(page) == told(other.pages()[name]), name
    assert one.mails() == other.mails()
    archives = [sorted(p.name for p in (at / "archive").rglob("*.gz")) for at in (lite, shared)]
    assert archives[0] == archives[1]
    return {
        "rows": sum(map(len, rows.values())),
        "readings": sum(json.loads(r)["n"] for r in rows["measurements"]),
        "excursions": len(rows["excursions"]),
        "pages": len(one.pages()),
        "mails": len(one.mails()),
        "archived": len(archives[0]),
    }


def assert_flat(nights: list[dict[str, Any]], pool: int = 4) -> None:
    """Memory of the last nights is that of the middle ones; nothing stays open."""
    third = len(nights) // 3
    middle = max(one["rss"] for one in nights[third : 2 * third])
    last = max(one["rss"] for one in nights[2 * third :])
    assert last < 1.10 * middle, (middle, last)
    assert {one["checked_out"] for one in nights} == {0}
    assert max(one["connections"] for one in nights) <= pool
    files = [one["files"] for one in nights[third:]]
    assert max(files) - min(files) <= pool + 2, files


def say(figures: dict[str, Any], database: str) -> str:
    nights = figures["nights"]
    rss = [f"{one['rss'] / 1e6:.0f}" for one in nights]
    return (
        f"{database}: {sum(one['seconds'] for one in nights) / len(nights):.1f} s a night; "
        f"MB after each night: {' '.join(rss)}; "
        f"open files {[one['files'] for one in nights]}; "
        f"connections {[one['connections'] for one in nights]}"
    )


@pytest.mark.slow
@pytest.mark.postgres
def test_thirty_nights(tmp_path: Path) -> None:
    figures = {}
    for database in DATABASES:
        command = [sys.executable, "-m", "tests.robustness.soak", str(tmp_path / database)]
        done = subprocess.run(
            [*command, "--database", database],
            cwd=ROOT,
            stdout=subprocess.PIPE,
            check=True,
            text=True,
        )
        figures[database] = json.loads(done.stdout)
        print(say(figures[database], database))
    documents = [[one["document"] for one in figures[d]["nights"]] for d in DATABASES]
    assert documents[0] == documents[1]
    print(assert_equal_results(tmp_path / "sqlite", tmp_path / "postgresql"))
    for database in DATABASES:
        assert_flat(figures[database]["nights"])

"""The retention of a night, killed at any moment: no drop lost, no site value without its sums.

And the whole of it from the outside: what the pass, the command and `health` say.
"""

from __future__ import annotations

import gzip
import hashlib
import json
from dataclasses import dataclass
from datetime import timedelta
from pathlib import Path
from typing import Any

import pytest

from config.load import load_bay
from service import clock
from service.context import Session
from spc.records.sessions import open_database
from tests.robustness import moments
from tests.robustness.smallbay import SmallBay, content, make, night

pytestmark = pytest.mark.forks

# October is over for a day: its site values go, and every drop taken in by the first pass.
TAKEN_IN, NIGHT = 6, 20
KEEP = """
[retention]
archive_drops_after_days = 5
aggregate_sites_after_days = 1
"""


@pytest.fixture(scope="module", autouse=True)
def later() -> Any:
    """The machine's clock stands after the nights of these tests, whatever it says."""
    patch = pytest.MonkeyPatch()
    patch.setattr(clock, "now", lambda: night(NIGHT) + timedelta(hours=1))
    yield
    patch.undo()


@dataclass(frozen=True)
class Undisturbed:
    """A bay with something to keep, and all that one run of the retention leaves behind."""

    before: SmallBay
    moments: int
    state: dict[str, Any]


def state(bay: SmallBay) -> dict[str, Any]:
    """All that the bay holds: tables, drops, archive."""
    engine = open_database(bay.url)
    try:
        found: dict[str, Any] = {**content(engine)}
    finally:
        engine.dispose()
    for name in ("drops", "archive"):
        files = [p for p in sorted((bay.root / name).rglob("*")) if p.is_file()]
        found[name] = {p.relative_to(bay.root).as_posix(): p.read_bytes() for p in files}
    return found


def keep(bay: SmallBay, number: int) -> None:
    """The retention of a night, as a pass runs it, without the rest of the pass."""
    from service.night import run_retention_alone

    session = Session(load_bay(bay.config))
    assert run_retention_alone(session, night(number)).failed == ()
    session.engine.dispose()


def judged(bay: SmallBay, number: int) -> None:
    """A night without page and mail."""
    from service.night import run_night

    session = Session(load_bay(bay.config))
    run_night(session, night(number), tell=False)
    session.engine.dispose()


@pytest.fixture(scope="module")
def undisturbed(tmp_path_factory: pytest.TempPathFactory) -> Undisturbed:
    folder = tmp_path_factory.mktemp("retention")
    before = make(folder / "before", extra="[nightly]\nkeep_history_days = 1\n", nights=TAKEN_IN)
    judged(before, TAKEN_IN)
    before.drops_of(NIGHT, cups=("C1",))  # a quiet night: nothing is drawn
    judged(before, NIGHT)
    with before.config.open("a", encoding="utf-8") as file:
        file.write(KEEP)
    done = before.copy(folder / "done")
    count = moments.moments_of(done, NIGHT, keep)
    return Undisturbed(before, count, state(done))


def assert_as_undisturbed(bay: SmallBay, undisturbed: Undisturbed) -> None:
    found = state(bay)
    for name, rows in undisturbed.state.items():
        assert found[name] == rows, name
    assert [p for p in bay.root.rglob(".*") if p.name.endswith(".part")] == []


def test_the_night_has_something_to_keep(undisturbed: Undisturbed) -> None:
    kept = undisturbed.state
    before = {p.name: p.read_bytes() for p in (undisturbed.before.root / "drops").iterdir()}
    old = {name for name in before if not name.startswith(f"{NIGHT}_")}
    assert set(kept["drops"]) == {f"drops/{name}" for name in before.keys() - old}
    assert len(kept["archived"]) == len(old) == 3 * TAKEN_IN
    packed = {gzip.decompress(data) for data in kept["archive"].values()}
    assert packed == {before[name] for name in old}
    assert all(path.startswith("archive/2026-10/") for path in kept["archive"])
    assert len(kept["kept_wafers"]) == 2 * 2 * 2 * TAKEN_IN
    assert sum('"site_values": null' in row for row in kept["measurements"]) == 8 * TAKEN_IN
    assert len(kept["kept_studies"]) == 1 + 2 + 1, "the whole, two cups, the tool"
    assert undisturbed.moments > 150


def crash_and_recover(undisturbed: Undisturbed, root: Path, kills: list[int]) -> int:
    bay = undisturbed.before.copy(root)
    struck = sum(moments.killed_at(bay, NIGHT, moment, keep) for moment in kills)
    keep(bay, NIGHT)
    assert_as_undisturbed(bay, undisturbed)
    return struck


def test_retention_killed_at_many_moments(undisturbed: Undisturbed, tmp_path: Path) -> None:
    """Once among the drops, twice in the step that takes site values away, and again and again."""
    last = undisturbed.moments
    struck = crash_and_recover(undisturbed, tmp_path / "end", [last - 40])
    struck += crash_and_recover(undisturbed, tmp_path / "last", [last - 12])
    struck += crash_and_recover(undisturbed, tmp_path / "often", [30, 25, 35, 20, 28])
    assert struck == 7


@pytest.mark.slow
@pytest.mark.parametrize("part", range(10))
def test_retention_killed_at_every_moment(
    undisturbed: Undisturbed, tmp_path: Path, part: int
) -> None:
    every = range(1, undisturbed.moments + 1)[part::10]
    struck = 0
    for moment in every:
        struck += crash_and_recover(undisturbed, tmp_path / f"bay{moment}", [moment])
    print(f"part {part}: {struck} kills struck")
    assert struck == len(every)


def test_what_the_pass_the_command_and_health_say(undisturbed: Undisturbed, tmp_path: Path) -> None:
    bay = undisturbed.before.copy(tmp_path / "bay")
    before = bay.json("retention")
    assert before["drops"]["due"] == before["drops"]["overdue"] == 3 * TAKEN_IN
    assert before["sites"]["due"]
    health = {one["what"]: one for one in bay.json("health")["checks"]}
    assert not health["retention"]["well"]
    assert "the nights fall behind" in health["retention"]["text"]
    assert bay.nightly(NIGHT)["retention"] == {
        "archived": 3 * TAKEN_IN,
        "archived_bytes": health["retention"]["drops"]["archived_bytes"]
        + sum(p.stat().st_size for p in (bay.root / "archive").rglob("*.gz")),
        "due": 0,
        "months": ["2026-10"],
        "measurements": 8 * TAKEN_IN,
        "site_values": 5 * 8 * TAKEN_IN,
        "failed": [],
    }
    health = {one["what"]: one for one in bay.json("health")["checks"]}
    assert health["retention"]["well"]
    assert health["retention"]["text"] == (
        f"drops: {3 * TAKEN_IN} archived "
        f"({health['retention']['drops']['archived_bytes'] / 1e6:.1f} MB), 0 due (after 5 days); "
        "site values: summed up until 2026-10"
    )
    [one] = bay.json("retention", "--find", "00_C1")
    content = gzip.decompress(Path(one["file"]).read_bytes())
    assert one["content_hash"] == hashlib.sha256(content).hexdigest()
    status, out, _ = bay.here("retention", "--find", "no such drop")
    assert (status, out) == (0, "no such drop is in the archive\n")
    assert bay.json("retention", "--run")["done"]["archived"] == 0
    rows = bay.json("capability", "--month", "2026-10")
    assert {row["site_values"] for row in rows} == {"kept"}
    [page] = (bay.root / "reports" / "reviews").glob("*.html")
    assert "taken away by the retention rule" in page.read_text("utf-8")


def test_a_slip_of_the_clock_takes_nothing_away(undisturbed: Undisturbed, tmp_path: Path) -> None:
    bay = undisturbed.before.copy(tmp_path / "bay")
    words = bay.config.read_text("utf-8")
    bay.config.write_text(
        words.replace("sites_after_days = 1", "sites_after_days = 60").replace(
            "drops_after_days = 5", "drops_after_days = 60"
        ),
        "utf-8",
    )
    bay.json("nightly", "--as-of", "2036-01-01T05:30:00Z")
    assert bay.json("retention", "--run", "--as-of", "2036-01-01T05:30Z")["done"] == {
        "archived": 0, "archived_bytes": 0, "due": 0, "months": [], "measurements": 0,
        "site_values": 0, "failed": [],
    }  # fmt: skip


def test_an_archive_that_cannot_be_written_is_one_line_and_mends_itself(
    undisturbed: Undisturbed, tmp_path: Path
) -> None:
    bay = undisturbed.before.copy(tmp_path / "bay")
    (bay.root / "archive").write_text("a file in the way", "utf-8")
    status, out, told = bay.here("retention", "--run", "--json")
    assert status == 1
    assert json.loads(out)["done"]["archived"] == 0
    [line] = told.splitlines()
    assert line.startswith("yellowbay: retention: 00_C1.csv: ")
    assert str(bay.root / "archive") in line
    (bay.root / "archive").unlink()
    assert bay.json("retention", "--run")["done"]["archived"] == 3 * TAKEN_IN

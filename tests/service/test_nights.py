"""A small bay, night by night, from the outside: what the contract says of commands and JSON.

One cup of track T2 reads 8 nm high from lot 100 on (about 4 sigma of a plotted point) and the
gauge stops on the last days. Both are put into the drops here, so the truth is known.
"""

from __future__ import annotations

import csv
import json
from contextlib import redirect_stdout
from datetime import datetime, timedelta
from email import message_from_bytes
from email.policy import SMTP
from io import StringIO
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from service.cli import command_line

BAY = """
[bay]
name = "Small bay"
time_zone = "Europe/Dublin"
control_plan = "control_plan.toml"
[drops]
settle_seconds = 0
[mail]
to = ["shift@example.com"]
"""
PLAN = """
[[characteristic]]
name = "M1 resist thickness"
parameter = "resist_thickness"
unit = "nm"
where = { layer = "M1" }
stream_by = ["tool", "module"]
target = 1200.0
lower_spec = 1176.0
upper_spec = 1224.0
expected_every = "36h"
baseline_points = 15
"""
START = datetime(2026, 9, 1)  # noqa: DTZ001 - stamps without offset, as gauges write them
SITES = ((0, 0), (70, 0), (-70, 0), (0, 70), (0, -70))
LOTS, FIRST_BAD, LAST_MEASURED = 130, 100, 118


def ask(*words: str) -> Any:
    out = StringIO()
    with redirect_stdout(out), pytest.raises(SystemExit) as end:
        command_line()([*words, "--json"])
    assert not end.value.code
    return json.loads(out.getvalue())


def drops() -> tuple[list[list[object]], list[list[object]]]:
    rng = np.random.default_rng(5)
    readings, log = [], []
    for i in range(LOTS):
        at, lot = START + timedelta(hours=4 * i), f"L{i:04d}"
        tool, module = (("T1", "C1"), ("T1", "C2"), ("T2", "C1"), ("T2", "C2"))[i % 4]
        shift = 8.0 if (tool, module) == ("T2", "C1") and i >= FIRST_BAD else 0.0
        mean = 1200 + shift + rng.normal(0, 1.5)
        for wafer in range(1, 4):
            log.append([at.isoformat(), lot, wafer, tool, "coat", module, "M1", f"RB{i // 30}"])
        for wafer in (1, 3):
            level = mean + rng.normal(0, 1)
            for site, (x, y) in enumerate(SITES, 1):
                value = level + rng.normal(0, 0.8) + 2 * (x * x + y * y) / 150**2
                measured = (at + timedelta(hours=3)).isoformat()
                if i <= LAST_MEASURED:
                    readings.append(
                        [measured, at.isoformat(), "resist_thickness", f"{value:.3f}", "nm", lot,
                         wafer, site, x, y, "M1", tool, module, "G1"]
                    )  # fmt: skip
    return readings, log


def write(file: Path, header: str, rows: list[list[object]]) -> None:
    with file.open("w", newline="", encoding="utf-8") as stream:
        writer = csv.writer(stream)
        writer.writerow(header.split())
        writer.writerows(rows)


READINGS = (
    "measured_at processed_at parameter value unit lot wafer site x_mm y_mm layer tool module gauge"
)


def bay(folder: Path, order: int = 1) -> str:
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "bay.toml").write_text(BAY, "utf-8")
    (folder / "control_plan.toml").write_text(PLAN, "utf-8")
    (folder / "drops").mkdir()
    readings, log = drops()
    half = len(readings) // 2
    parts = [readings[:half], readings[half:]][::order]
    for number, part in enumerate(parts):
        write(folder / "drops" / f"film-{number}.csv", READINGS, part)
    write(
        folder / "drops" / "log.csv",
        "processed_at lot wafer tool step module layer resist_batch",
        log,
    )
    changed = (START + timedelta(hours=4 * FIRST_BAD - 3)).isoformat()
    event = [changed, "nozzle change", "T2", "C1", "=new"]
    write(folder / "drops" / "events.csv", "at kind tool module text", [event])
    return str(folder / "bay.toml")


NIGHTS = ("2026-09-16T05:30", "2026-09-18T05:30", "2026-09-20T05:30", "2026-09-23T05:30")


@pytest.fixture(scope="module")
def run(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, str, list[dict[str, Any]]]:
    folder = tmp_path_factory.mktemp("nights")
    config = bay(folder)
    return folder, config, [ask("nightly", "--config", config, "--as-of", n) for n in NIGHTS]


def test_counts_of_each_night(run: tuple[Path, str, list[dict[str, Any]]]) -> None:
    _, _, nights = run
    assert nights[0]["as_of"] == "2026-09-16T05:30:00+01:00"
    assert nights[0]["drops"] == {"loaded": 4, "duplicate": 0, "quarantined": 0, "waiting": 0}
    expected = (LAST_MEASURED + 1) * 2 * len(SITES)
    assert nights[0]["readings"]["loaded"] == expected
    assert [n["drops"]["loaded"] for n in nights[1:]] == [0, 0, 0]
    assert all(n["streams"] == 4 for n in nights)
    assert all(n["mail"] == {"queued": 1, "sent": 1, "failed": 0} for n in nights)


def test_the_fault_is_one_excursion_with_its_cause(
    run: tuple[Path, str, list[dict[str, Any]]],
) -> None:
    _, config, nights = run
    act = [e for e in ask("excursions", "--config", config) if e["tier"] == "act"]
    shift = next(e for e in act if e["pattern"] == "shift")
    assert [e["pattern"] for e in act if e["pattern"] != "silence"] == ["shift"]
    assert shift["opened_at"] == nights[1]["as_of"], "found by the first night that saw it"
    first = shift["suspects"][0]
    assert (first["factor"], first["level"]) == ("tool+module", "T2+C1")
    assert shift["magnitude"]["unit"] == "nm"
    assert shift["magnitude"]["low"] < 8.0 < shift["magnitude"]["high"]
    truth = (START + timedelta(hours=4 * 102)).isoformat()
    assert shift["onset"]["earliest"] <= truth <= shift["onset"]["latest"]
    lots = {one["lot"] for one in shift["lots_at_risk"]}
    touched = {f"L{i:04d}" for i in range(102, LOTS, 4)}
    assert touched <= lots
    assert len(lots - touched) <= 1, "at most the last good lot beside them"
    unmeasured = {one["lot"] for one in shift["lots_at_risk"] if not one["measured"]}
    assert unmeasured == {lot for lot in touched if int(lot[1:]) > LAST_MEASURED}
    assert [event["kind"] for event in shift["events"]] == ["nozzle change"]


def test_silence_is_one_excursion_of_the_gauge(
    run: tuple[Path, str, list[dict[str, Any]]],
) -> None:
    _, config, _ = run
    [silent] = [e for e in ask("excursions", "--config", config) if e["pattern"] == "silence"]
    assert len(silent["streams"]) == 4
    assert (silent["suspects"][0]["factor"], silent["suspects"][0]["level"]) == ("gauge", "G1")
    assert {one["lot"] for one in silent["lots_at_risk"]} == {
        f"L{i:04d}" for i in range(LAST_MEASURED + 1, LOTS)
    }
    assert all(not one["measured"] for one in silent["lots_at_risk"])


def test_a_night_again_changes_nothing(run: tuple[Path, str, list[dict[str, Any]]]) -> None:
    folder, config, nights = run
    page = Path(nights[-1]["report"])
    before = page.read_bytes()
    mails = sorted(p.name for p in (folder / "mail").iterdir())
    again = ask("nightly", "--config", config, "--as-of", NIGHTS[-1])
    assert again["excursions"] == nights[-1]["excursions"]
    assert again["mail"]["queued"] == 0
    assert sorted(p.name for p in (folder / "mail").iterdir()) == mails
    assert page.read_bytes() == before
    parsed = message_from_bytes((folder / "mail" / mails[0]).read_bytes(), policy=SMTP)
    assert parsed["To"] == "shift@example.com"


def test_the_same_drops_in_another_order_give_the_same_points(
    run: tuple[Path, str, list[dict[str, Any]]], tmp_path: Path
) -> None:
    _, config, nights = run
    other = bay(tmp_path / "other", order=-1)
    ask("nightly", "--config", other, "--as-of", NIGHTS[-1])
    asked = ("--characteristic", "M1 resist thickness")
    assert ask("points", "--config", other, *asked) == ask("points", "--config", config, *asked)
    twin = bay(tmp_path / "twin")
    reports = [Path(ask("nightly", "--config", twin, "--as-of", n)["report"]) for n in NIGHTS[:2]]
    assert reports[1].read_bytes() == Path(nights[1]["report"]).read_bytes(), "byte for byte"


def test_hand_actions_are_kept_in_order(run: tuple[Path, str, list[dict[str, Any]]]) -> None:
    folder, config, _ = run
    found = ask("excursions", "--config", config)
    number = str(next(e["id"] for e in found if (e["tier"], e["pattern"]) == ("act", "shift")))
    who = ("--who", "ana", "--config", config)
    assert ask("excursions", "contain", number, "-m", "lots held", *who)["status"] == "contained"
    ask("excursions", "comment", number, "nozzle looks bent", *who)
    closed = ask("excursions", "close", number, "--cause", "bent nozzle", *who)
    assert closed["status"] == "closed"
    assert [a["action"] for a in closed["actions"]] == ["contain", "comment", "close"]
    assert ask("excursions", "reopen", number, *who)["status"] == "open"
    assert ask("audit", "--config", config)["whole"] is True
    page = ask("investigate", number, "--config", config, "--lots-csv", str(folder / "hold.csv"))
    assert Path(page["page"]).is_file()
    assert (
        (folder / "hold.csv").read_text("utf-8").splitlines()[0].startswith("lot,wafers,measured")
    )

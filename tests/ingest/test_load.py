"""A whole pass: files to records, on SQLite and on PostgreSQL.

What is checked is the contract (sections 'Drops' and 'Rulings'); the numbers are counted by hand.
"""

from __future__ import annotations

import gzip
import os
import random
import subprocess
import sys
from collections.abc import Iterator
from datetime import timedelta
from pathlib import Path

import pytest
from sqlalchemy import Engine

import ingest.load
import ingest.store
from ingest.drops import DropFolderError, find_drops
from tests.ingest.intake import CLOCK, Intake, reading, sheet

LOG = "processed_at,lot,wafer,tool,module,step\n2026-05-01T08:00:00Z,N1,1,TRK1,C2,coat\n"
EVENTS = "at,kind,tool,text\n2026-05-01T07:00:00Z,maintenance,TRK1,bowl cleaned\n"


@pytest.fixture
def night(engine: Engine, tmp_path: Path) -> Iterator[Intake]:
    """A bay on either database."""
    return Intake.make(engine, tmp_path)


def test_three_kinds_are_told_by_their_header(night: Intake) -> None:
    night.drop("x/one.csv", sheet(reading(), reading("1201", site="2")))
    night.drop("two.csv.gz", LOG)
    night.drop("three.csv", EVENTS)
    report = night.take()
    assert {f.path: f.kind for f in report.files} == {
        "x/one.csv": "readings",
        "two.csv.gz": "process-log",
        "three.csv": "events",
    }
    assert report.as_json()["drops"] == {
        "loaded": 3,
        "duplicate": 0,
        "quarantined": 0,
        "waiting": 0,
    }
    assert report.readings == {"loaded": 2, "duplicate": 0, "superseded": 0, "rejected": 0}
    assert night.query("SELECT lot, wafer, step, tool, module FROM process_log") == [
        ("N1", "1", "coat", "TRK1", "C2")
    ]
    assert night.query("SELECT kind, tool, module, text FROM bay_events") == [
        ("maintenance", "TRK1", None, "bowl cleaned")
    ]
    [(n, mean, squares)] = night.query("SELECT n, mean, sum_squares FROM measurements")
    assert (n, mean, squares) == (2, 1200.75, 0.125)


def test_second_pass_counts_nothing(night: Intake) -> None:
    night.drop("a.csv", sheet(reading()))
    night.take()
    again = night.take()
    assert again.files == ()
    assert again.unchanged == 1
    assert again.readings["loaded"] == 0


def test_touched_file_is_not_counted_again(night: Intake) -> None:
    path = night.drop("a.csv", sheet(reading()))
    night.take()
    os.utime(path, (CLOCK.timestamp() - 600, CLOCK.timestamp() - 600))
    assert night.take().files == ()


def test_same_content_under_another_name_is_a_duplicate(night: Intake) -> None:
    night.drop("a.csv", sheet(reading()))
    night.drop("b.csv", sheet(reading()))
    first = night.take()
    assert {f.path: f.outcome for f in first.files} == {"a.csv": "loaded", "b.csv": "duplicate"}
    assert first.files[1].counts.rows == 0
    assert night.take().files == ()
    night.drop("c.csv.gz", sheet(reading()))
    later = night.take()
    assert [(f.path, f.outcome) for f in later.files] == [("c.csv.gz", "duplicate")]
    assert later.readings == {"loaded": 0, "duplicate": 0, "superseded": 0, "rejected": 0}


def test_grown_file_loads_only_what_is_new(night: Intake) -> None:
    night.drop("a.csv", sheet(reading()))
    night.take()
    night.drop("a.csv", sheet(reading(), reading(site="2")), age=60)
    report = night.take()
    assert report.readings == {"loaded": 1, "duplicate": 1, "superseded": 0, "rejected": 0}
    assert len(night.readings()) == 2


def test_file_being_written_waits(night: Intake) -> None:
    night.drop("a.csv", sheet(reading()), age=2)
    report = night.take()
    assert [(f.path, f.outcome) for f in report.files] == [("a.csv", "waiting")]
    assert report.drops["waiting"] == 1
    assert night.take(CLOCK + timedelta(seconds=10)).drops["loaded"] == 1


def test_age_of_files_is_held_against_the_time_of_day(night: Intake) -> None:
    night.drop("a.csv", sheet(reading()), age=2)
    back = CLOCK - timedelta(days=30)
    assert night.take(back, now=CLOCK).drops["waiting"] == 1
    assert night.take(back, now=CLOCK + timedelta(seconds=9)).drops["loaded"] == 1


@pytest.mark.parametrize("order", [("early", "late"), ("late", "early")])
def test_remeasured_wafer_supersedes_whichever_file_comes_first(
    night: Intake, order: tuple[str, str]
) -> None:
    files = {
        "early": sheet(reading("1200"), reading("1201", site="2")),
        "late": sheet(reading("1300", at="2026-05-01T15:00:00Z")),
    }
    total = 0
    for name in order:
        night.drop(f"{name}.csv", files[name])
        total += night.take().readings["superseded"]
    assert total == 1
    assert len(night.readings()) == 3


def test_counts_of_a_third_measurement(night: Intake) -> None:
    stamps = ["2026-05-01T12:00:00Z", "2026-05-01T13:00:00Z", "2026-05-01T14:00:00Z"]
    night.drop("a.csv", sheet(*(reading(1200 + i, at=at) for i, at in enumerate(stamps[:2]))))
    assert night.take().readings == {
        "loaded": 2,
        "duplicate": 0,
        "superseded": 1,
        "rejected": 0,
    }
    night.drop("b.csv", sheet(reading(1299, at=stamps[2]), reading(1201, at=stamps[1])))
    assert night.take().readings == {
        "loaded": 1,
        "duplicate": 1,
        "superseded": 1,
        "rejected": 0,
    }


def test_same_stamp_with_another_value_is_a_conflict(night: Intake) -> None:
    night.drop("a.csv", sheet(reading("1200"), reading("1201"), reading("1200.0")))
    [one] = night.take().files
    assert (one.counts.loaded, one.counts.duplicate, one.counts.rejected) == (1, 1, 1)
    assert (one.reasons[0].line, one.reasons[0].value) == (3, "1201")
    assert "another value" in one.reasons[0].reason
    night.drop("b.csv", sheet(reading("1202"), reading("1200")))
    [two] = night.take().files
    assert (two.counts.loaded, two.counts.duplicate, two.counts.rejected) == (0, 1, 1)
    assert [r[6] for r in night.readings()] == [1200.0]


def test_same_stamp_with_another_context_is_a_conflict(night: Intake) -> None:
    night.drop("a.csv", sheet(reading(), reading(tool="TRK2")))
    [one] = night.take().files
    assert (one.counts.loaded, one.counts.rejected) == (1, 1)
    assert "another context" in one.reasons[0].reason
    night.drop("b.csv", sheet(reading(tool="TRK3"), reading(site="2", tool="TRK1")))
    [two] = night.take().files
    assert (two.counts.loaded, two.counts.duplicate, two.counts.rejected) == (1, 0, 1)


def test_the_same_reading_in_another_unit_is_a_duplicate(night: Intake) -> None:
    # 1.005 um is 1005 nm, though 1.005 * 1000 is 1004.9999999999999 in doubles.
    night.drop("a.csv", sheet(reading("1005")))
    night.drop("b.csv", sheet(reading("1.005", unit="um"), reading("10050", unit="angstrom")))
    report = night.take()
    assert report.readings["loaded"] == 1
    assert report.readings["duplicate"] == 2


def test_sites_of_one_stamp_may_come_in_two_files(night: Intake) -> None:
    night.drop("a.csv", sheet(reading(site="1"), reading(site="2")))
    night.drop("b.csv", sheet(reading(site="2"), reading(site="3")))
    report = night.take()
    assert report.readings == {"loaded": 3, "duplicate": 1, "superseded": 0, "rejected": 0}


def test_any_order_of_files_ends_in_the_same_readings(night: Intake, tmp_path: Path) -> None:
    texts = [
        sheet(reading(1200 + i, at=f"2026-05-01T1{i}:00:00Z", lot=f"N{i % 2}")) for i in range(5)
    ]
    for i, text in enumerate(reversed(texts)):
        night.drop(f"{i}.csv", text)
    superseded = night.take().readings["superseded"]
    assert superseded == 3
    assert sorted(r[6] for r in night.readings()) == [1200, 1201, 1202, 1203, 1204]


def test_log_rows_are_duplicates_only_when_equal_in_every_respect(night: Intake) -> None:
    night.drop("a.csv", LOG)
    night.take()
    night.drop("b.csv", LOG + "2026-05-01T08:00:00Z,N1,1,TRK1,C3,coat\n" * 2)
    [one] = night.take().files
    assert (one.counts.loaded, one.counts.duplicate) == (1, 2)
    night.drop("c.csv", EVENTS)
    night.drop("d.csv", EVENTS + "2026-05-01T07:00:00Z,maintenance,TRK1,other\n")
    [three, four] = night.take().files
    assert (three.counts.loaded, four.counts.loaded, four.counts.duplicate) == (1, 1, 1)


def test_failure_in_a_file_leaves_nothing_of_it(
    night: Intake, monkeypatch: pytest.MonkeyPatch
) -> None:
    night.drop("a.csv", sheet(reading()))
    night.drop("b.csv", sheet(reading(lot="N2", tool="TRK9"), reading("x", lot="N2")))
    real = ingest.store.ledger.record_rejects
    calls = []

    def broken(*args: object) -> None:
        calls.append(args)
        if len(calls) == 3:  # the first reject of b.csv, when its readings are already written
            raise RuntimeError("pulled the plug")
        real(*args)  # type: ignore[arg-type]

    monkeypatch.setattr(ingest.store.ledger, "record_rejects", broken)
    with pytest.raises(RuntimeError, match="pulled the plug"):
        night.take()
    monkeypatch.undo()
    assert [r[2] for r in night.readings()] == ["N1"]
    assert night.query("SELECT path FROM files") == [("a.csv",)]
    report = night.take()
    assert [(f.path, f.counts.loaded, f.counts.rejected) for f in report.files] == [("b.csv", 1, 1)]
    assert [r[2] for r in night.readings()] == ["N1", "N2"]


def test_stop_is_asked_between_files(night: Intake) -> None:
    night.drop("a.csv", sheet(reading()))
    night.drop("b.csv", sheet(reading(lot="N2")))
    asked = iter([False, True])
    seen: list[tuple[int, int, str]] = []
    report = night.take(stop=lambda: next(asked), progress=lambda *at: seen.append(at))
    assert report.stopped
    assert [f.path for f in report.files] == ["a.csv"]
    assert seen == [(0, 2, "a.csv")]
    assert [f.path for f in night.take().files] == ["b.csv"]


def test_quarantined_file_stays_and_is_tried_again_under_other_settings(night: Intake) -> None:
    foreign = "Time;Par;Wert;Lot;Wf\n01.05.2026 12:00;resist_thickness;1200,5;N1;1\n"
    path = night.drop("g3/a.csv", foreign)
    [one] = night.take().files
    assert one.outcome == "quarantined"
    assert night.take().files == ()
    assert path.exists()
    night.reconfigure(
        """
[[feed]]
name = "gauge 3"
files = "g3/*.csv"
separator = ";"
decimal = ","
stamp_format = "%d.%m.%Y %H:%M"
columns = { measured_at = "Time", parameter = "Par", value = "Wert", lot = "Lot", wafer = "Wf" }
constants = { unit = "nm", gauge = "G3" }
"""
    )
    [one] = night.take().files
    assert (one.outcome, one.feed, one.counts.loaded) == ("loaded", "gauge 3", 1)
    assert night.query("SELECT outcome, reason FROM files") == [("loaded", None)]
    [stored] = night.readings()
    assert stored[5:] == ("2026-05-01T11:00:00+00:00", 1200.5, {"gauge": "G3"})
    assert night.take().files == ()


def test_links_that_lead_out_are_not_followed(night: Intake, tmp_path: Path) -> None:
    outside = tmp_path / "outside"
    outside.mkdir()
    (outside / "secret.csv").write_text(sheet(reading()))
    (night.drops / "link.csv").symlink_to(outside / "secret.csv")
    (night.drops / "folder").symlink_to(outside)
    (night.drops / "loop").symlink_to(night.drops)
    (night.drops / "dangling.csv").symlink_to(night.drops / "nothing.csv")
    night.drop("data/real.txt", sheet(reading()))
    (night.drops / "inside.csv").symlink_to(night.drops / "data" / "real.txt")
    assert [(f.path, f.outcome) for f in night.take().files] == [("inside.csv", "loaded")]


def test_what_is_no_drop_is_not_looked_at(night: Intake) -> None:
    night.drop(".hidden.csv", sheet(reading()))
    night.drop(".folder/a.csv", sheet(reading()))
    night.drop("notes.txt", "hello")
    os.mkfifo(night.drops / "pipe.csv")
    (night.drops / "folder.csv").mkdir()
    assert night.take().files == ()


def test_missing_folder_is_one_clear_line(night: Intake) -> None:
    night.drops.rmdir()
    with pytest.raises(DropFolderError, match=r"drops: No such file or directory\. Mount it"):
        night.take()


def test_unit_of_an_unplanned_parameter_is_fixed_by_its_first_reading(night: Intake) -> None:
    night.drop("a.csv", sheet(reading("3", parameter="dose", unit="mJ/cm2")))
    night.drop("b.csv", sheet(reading("4", parameter="dose", unit="V", site="2")))
    one, two = night.take().files
    assert (one.counts.loaded, two.counts.loaded, two.counts.rejected) == (1, 0, 1)
    assert "mJ/cm2" in two.reasons[0].reason
    night.drop("c.csv", sheet(reading("5", parameter="dose", unit="nm", site="3")))
    [three] = night.take().files
    assert three.counts.rejected == 1
    assert night.query("SELECT parameter, unit FROM parameters") == [("dose", "mJ/cm2")]


def test_late_feed_is_told(night: Intake) -> None:
    night.reconfigure('[[feed]]\nname = "g1"\nfiles = "g1/*.csv"\nexpected_every = "24h"\n')
    [late] = night.take().late
    assert (late.name, late.last_us) == ("g1", None)
    night.drop("g1/a.csv", sheet(reading()))
    assert night.take().late == ()
    [late] = night.take(CLOCK + timedelta(hours=25)).late
    assert late.last_us == int(CLOCK.timestamp()) * 1_000_000


def test_rejects_are_kept_with_line_and_text(night: Intake) -> None:
    night.drop("a.csv", sheet(reading(), reading("NaN", site="2"), "one,two"))
    night.take()
    assert night.query(
        'SELECT severity, line, "column", value, text FROM rejects ORDER BY line'
    ) == [
        ("rejected", 3, "value", "NaN", reading("NaN", site="2")),
        ("rejected", 4, None, "one,two", "one,two"),
    ]


def test_gzip_of_several_members(night: Intake) -> None:
    text = sheet(reading(), reading(site="2")).encode()
    night.drop("a.csv.gz", gzip.compress(text[:70]) + gzip.compress(text[70:]))
    assert night.take().readings["loaded"] == 2


def test_names_that_no_index_takes_are_rejected(night: Intake) -> None:
    # PostgreSQL refuses index rows of more than about 2700 bytes; random letters do not compress.
    rng = random.Random(1)
    letters = [chr(0x4E00 + i) for i in range(20000)]
    long, longest = ("".join(rng.choices(letters, k=n)) for n in (129, 128))
    rows = [reading(lot=long), reading(tool=long)]
    rows += [reading(lot=longest, wafer=longest, parameter=longest, layer=longest, site=longest)]
    night.drop("a.csv", sheet(*rows))
    [one] = night.take().files
    assert [(r.line, r.column) for r in one.reasons] == [(2, "lot"), (3, "tool")]
    assert one.counts.loaded == 1


def test_long_paths_have_short_names(night: Intake) -> None:
    deep = "/".join(["d" * 200] * 12)
    night.drop(f"{deep}/a.csv", sheet(reading()))
    [one] = night.take().files
    assert one.outcome == "loaded"
    assert len(one.path) < 250
    assert one.path.endswith("/a.csv")
    assert night.take().files == ()


def test_a_folder_that_cannot_be_read_is_told(
    night: Intake, monkeypatch: pytest.MonkeyPatch
) -> None:
    night.drop("a.csv", sheet(reading()))
    night.drop("shut/b.csv", sheet(reading()))
    real = os.scandir

    def scandir(path: str) -> object:
        if path.endswith("shut"):
            raise PermissionError(13, "Permission denied")
        return real(path)

    monkeypatch.setattr(os, "scandir", scandir)
    report = night.take()
    assert [(f.path, f.outcome) for f in report.files] == [
        ("a.csv", "loaded"),
        ("shut/", "waiting"),
    ]
    assert "Permission denied" in report.files[1].reasons[0].reason


def test_files_that_change_or_vanish_under_our_eyes_wait(
    night: Intake, monkeypatch: pytest.MonkeyPatch
) -> None:
    paths = [night.drop(f"{name}.csv", sheet(reading(lot=name))) for name in "abc"]
    found = find_drops(night.drops)
    paths[0].unlink()
    paths[1].write_text(sheet(reading()))
    monkeypatch.setattr(ingest.load, "find_drops", lambda _folder: found)
    report = night.take()
    assert [(f.path, f.outcome) for f in report.files] == [
        ("a.csv", "waiting"),
        ("b.csv", "waiting"),
        ("c.csv", "loaded"),
    ]
    assert "No such file" in report.files[0].reasons[0].reason
    assert "changed" in report.files[1].reasons[0].reason


def test_ingest_does_not_load_pandas(intake: Intake) -> None:
    # Loading it takes longer than a night's drops.
    intake.drop("a.csv", sheet(reading(), reading(site="2")))
    code = (
        "import sys; from datetime import *; from config.load import load_bay; "
        "from pathlib import Path; from ingest.load import take_in; "
        "from spc.records.sessions import open_database; bay = load_bay(Path(sys.argv[1])); "
        "r = take_in(open_database(bay.database_url), bay, datetime(2026, 5, 2, tzinfo=UTC)); "
        "print(r.readings['loaded'], 'pandas' in sys.modules)"
    )
    done = subprocess.run(
        [sys.executable, "-c", code, str(intake.root / "bay.toml")],
        capture_output=True,
        text=True,
        check=True,
    )
    assert done.stdout == "2 False\n"

"""Foreign layouts: separators, decimal commas, units, wide columns, constants, kinds."""

from __future__ import annotations

from datetime import timedelta

import pytest

from ingest.feeds import path_pattern
from tests.ingest.intake import CLOCK, HEADER, Intake, reading, sheet

WIDE = """
[[feed]]
name = "film gauge"
files = "film/*.csv"
separator = ";"
decimal = ","
thousands = "."
encoding = "cp1252"
stamp_format = "%d.%m.%Y %H:%M:%S"
time_zone = "Europe/Berlin"
skip_lines = 2
units = { "Ang." = "angstrom" }
expected_every = "24h"
columns = { measured_at = "Zeit", lot = "Los", wafer = "Scheibe", tool = "Gerät" }
constants = { unit = "Ang.", layer = "M1", gauge = "F1" }
[[feed.wide]]
columns = "T_*"
parameter = "resist_thickness"
places = { 1 = [0, 0], 2 = [50, 0], 3 = [0.5, -50, 1, 2] }
"""
LINES = """Film gauge 1;;
exported;;
Zeit;Los;Scheibe;Gerät;T_1;T_2;T_3
01.07.2026 12:00:00;000123;1;TRK1;12.005,5;12010;
01.07.2026 12:01:00;000123;2;TRK1;;;
01.07.2026 12:02:00;000123;3;TRK1;x;12000;12003,5
"""


def test_wide_layout(intake: Intake) -> None:
    intake.reconfigure(WIDE)
    report = intake.take_one(LINES.encode("cp1252"), "film/a.csv")
    assert (report.outcome, report.kind, report.feed) == ("loaded", "readings", "film gauge")
    # Four filled cells are numbers, one is not, and a line without any is one rejected row.
    assert (report.counts.rows, report.counts.loaded, report.counts.rejected) == (6, 4, 2)
    assert [(r.line, r.value, r.text) for r in report.reasons] == [
        (5, "", "01.07.2026 12:01:00;000123;2;TRK1;;;"),
        (6, "x", "01.07.2026 12:02:00;000123;3;TRK1;x;12000;12003,5"),
    ]
    stored = intake.readings()
    assert [(r[2], r[3], r[4], r[6]) for r in stored] == [
        ("000123", "1", "1", pytest.approx(1200.55)),
        ("000123", "1", "2", pytest.approx(1201.0)),
        ("000123", "3", "2", pytest.approx(1200.0)),
        ("000123", "3", "3", pytest.approx(1200.35)),
    ]
    assert stored[0][5] == "2026-07-01T10:00:00+00:00"
    assert stored[0][7] == {"layer": "M1", "tool": "TRK1", "gauge": "F1"}
    assert intake.query("SELECT sites FROM layouts ORDER BY sites") == [
        ('[["1", 0.0, 0.0, null, null], ["2", 50.0, 0.0, null, null]]',),
        ('[["2", 50.0, 0.0, null, null], ["3", 0.5, -50.0, 1.0, 2.0]]',),
    ]
    assert intake.query("SELECT feed, newest_us FROM files")[0][0] == "film gauge"


def test_wide_groups_of_several_parameters(intake: Intake) -> None:
    intake.reconfigure(
        """
[[feed]]
name = "two"
files = "*.csv"
columns = { measured_at = "t" }
constants = { unit = "nm" }
[[feed.wide]]
columns = "dx_*"
parameter = "overlay_x"
[[feed.wide]]
columns = "dy_*"
parameter = "overlay_y"
unit = "um"
"""
    )
    report = intake.take_one(
        "t,lot,wafer,dx_1,dx_2,dy_1,dy_2\n2026-05-01T12:00:00Z,N1,1,1,2,0.003,0.004\n"
    )
    assert report.counts.loaded == 4
    assert [(r[0], r[4], r[6]) for r in intake.readings()] == [
        ("overlay_x", "1", 1.0),
        ("overlay_x", "2", 2.0),
        ("overlay_y", "1", 3.0),
        ("overlay_y", "2", 4.0),
    ]


@pytest.mark.parametrize(
    ("header", "words"),
    [
        ("Zeit;Los;Scheibe;Gerät;U_1", "no column fits 'T_*'"),
        ("Zeit;Los;Gerät;T_1", "lacks wafer ('Scheibe' in the file); mend `columns` or "),
        ("Zeit;Los;Scheibe;lot;T_1", "columns 'Los' and 'lot' both give 'lot'"),
        ("Zeit;Los;Scheibe;value;T_1", "a column 'value' beside the wide columns"),
    ],
)
def test_headers_that_do_not_fit_their_feed(intake: Intake, header: str, words: str) -> None:
    intake.reconfigure(WIDE)
    report = intake.take_one(f"\n\n{header}\n".encode("cp1252"), "film/a.csv")
    assert report.outcome == "quarantined"
    assert words in report.reasons[0].reason
    assert report.reasons[0].line == 3


def test_the_first_feed_that_covers_a_path_has_it(intake: Intake) -> None:
    intake.reconfigure(
        '[[feed]]\nname = "a"\nfiles = "g/*.csv"\nconstants = { gauge = "A" }\n'
        '[[feed]]\nname = "b"\nfiles = "**/*.csv"\nconstants = { gauge = "B", tool = "no" }\n'
    )
    intake.drop("g/1.csv.gz", sheet(reading()))
    intake.drop("g/deeper/2.csv", sheet(reading(wafer="2")))
    intake.drop("3.csv", sheet(reading(wafer="3")))
    assert [f.feed for f in intake.take().files] == ["b", "a", "b"]
    assert sorted((r[3], r[7]["gauge"], r[7]["tool"]) for r in intake.readings()) == [
        ("1", "A", "TRK1"),
        ("2", "B", "TRK1"),
        ("3", "B", "TRK1"),
    ]


def test_a_feed_may_fix_the_kind(intake: Intake) -> None:
    intake.reconfigure('[[feed]]\nname = "log"\nfiles = "log/*.csv"\nkind = "process-log"\n')
    report = intake.take_one(sheet(reading()), "log/a.csv")
    assert report.outcome == "quarantined"
    assert "taken for process-log, the header lacks processed_at" in report.reasons[0].reason


def test_a_readings_file_with_the_columns_of_a_log_is_readings(intake: Intake) -> None:
    text = sheet(reading() + ",2026-05-01T08:00:00Z", header=HEADER + ",processed_at")
    assert intake.take_one(text).kind == "readings"


def test_late_feed_counts_loaded_files_only(intake: Intake) -> None:
    intake.reconfigure(WIDE)
    intake.drop("film/a.csv", "junk\n")
    assert [late.name for late in intake.take().late] == ["film gauge"]
    intake.drop("film/b.csv", LINES.encode("cp1252"))
    assert intake.take().late == ()
    assert len(intake.take(CLOCK + timedelta(hours=24, seconds=1)).late) == 1


@pytest.mark.parametrize(
    ("pattern", "path", "fits"),
    [
        ("g/*.csv", "g/a.csv", True),
        ("g/*.csv", "g/x/a.csv", False),
        ("g/**/*.csv", "g/x/y/a.csv", True),
        ("g/**/*.csv", "g/a.csv", True),
        ("**/*.csv", "a.csv", True),
        ("g?/a.csv", "g1/a.csv", True),
        ("g[1]/a.csv", "g1/a.csv", False),
    ],
)
def test_patterns_of_paths(pattern: str, path: str, fits: bool) -> None:
    assert bool(path_pattern(pattern).fullmatch(path)) == fits

"""Readings at the door: units, values, stamps, sites and plausibility, row by row.

Expected numbers are reckoned by hand; factors of units are those of the SI.
"""

from __future__ import annotations

import pytest

from ingest.report import FileReport
from tests.ingest.intake import HEADER, PLAN, Intake, reading, sheet


def reasons(report: FileReport) -> list[tuple[int | None, str | None, str | None]]:
    return [(r.line, r.column, r.value) for r in report.reasons]


@pytest.mark.parametrize(
    ("unit", "value", "nm"),
    [
        ("nm", "1200", 1200.0),
        ("um", "1.2", 1200.0),
        ("µm", "1.2", 1200.0),
        ("μm", "1.2", 1200.0),
        ("Å", "12000", 1200.0),
        ("\u212b", "12000", 1200.0),
        ("A", "12000", 1200.0),
        ("angstrom", "12000", 1200.0),
        ("mm", "0.0012", 1200.0),
        (" nm ", "1200", 1200.0),
    ],
)
def test_lengths_become_nanometres(intake: Intake, unit: str, value: str, nm: float) -> None:
    report = intake.take_one(sheet(reading(value, unit=unit)))
    assert report.counts.loaded == 1
    assert report.warnings == ()
    assert intake.readings()[0][6] == pytest.approx(nm, rel=1e-15)
    assert intake.query("SELECT unit FROM measurements") == [("nm",)]


def test_units_that_do_not_convert(intake: Intake) -> None:
    report = intake.take_one(
        sheet(
            reading(),
            reading(site="2", unit="kg"),
            reading(site="3", unit=""),
            reading("4", parameter="overlay_x", unit="um"),
            reading("5", parameter="overlay_x", unit="ppm", site="5"),
            reading("110", parameter="bake_temperature", unit="C"),
            reading("230", parameter="bake_temperature", unit="F", site="2"),
        )
    )
    assert reasons(report) == [
        (3, "unit", "kg"),
        (4, "unit", ""),
        (6, "unit", "ppm"),
        (8, "unit", "F"),
    ]
    assert "does not convert to nm" in report.reasons[0].reason
    assert [(r[0], r[6]) for r in intake.readings()] == [
        ("resist_thickness", 1200.5),
        ("overlay_x", 4000.0),
        ("bake_temperature", 110.0),
    ]


@pytest.mark.parametrize("value", ["1e400", "NaN", "inf", "", "1,200", "12 00", "n/a", "1e200"])
def test_values_that_are_no_numbers(intake: Intake, value: str) -> None:
    cell = f'"{value}"'
    report = intake.take_one(sheet(reading(), reading(cell, site="2")))
    assert (report.counts.loaded, report.counts.rejected) == (1, 1)
    assert reasons(report) == [(3, "value", value)]


def test_names_stay_text(intake: Intake) -> None:
    names = ["000123", "12E5", "NA", "1.0", "null", "=SUM(A1)", "<b>x</b>", "../etc", " N 1 ", "Ω"]
    report = intake.take_one(sheet(*(reading(lot=name, wafer=name) for name in names)))
    assert report.counts.loaded == len(names)
    assert [(r[2], r[3]) for r in intake.readings()] == [(n.strip(), n.strip()) for n in names]


def test_empty_names_and_line_breaks(intake: Intake) -> None:
    report = intake.take_one(
        sheet(
            reading(lot=""),
            reading(wafer=" "),
            reading(parameter=""),
            reading(lot='"N\n1"'),
            reading(layer="", tool=""),
        )
    )
    assert reasons(report) == [
        (2, "lot", ""),
        (3, "wafer", ""),
        (4, "parameter", ""),
        (5, "lot", "N\n1"),
    ]
    [stored] = intake.readings()
    assert stored[1] == ""
    assert stored[7] == {}


def test_context_holds_every_other_column_that_is_not_empty(intake: Intake) -> None:
    header = HEADER + ",gauge,recipe,operator's note"
    intake.take_one(sheet(reading() + ",G1,,a b", reading(site="2") + ",G1,R1,a b", header=header))
    base = {"layer": "M1", "tool": "TRK1", "gauge": "G1", "operator's note": "a b"}
    assert [r[7] for r in intake.readings()] == [base, {**base, "recipe": "R1"}]
    assert len(intake.query("SELECT id FROM measurements")) == 2


def test_rows_of_one_measurement_need_not_be_neighbours(intake: Intake) -> None:
    rows = [reading(1200 + s, wafer=str(w), site=str(s)) for s in (3, 1, 10, 2) for w in (1, 2)]
    intake.take_one(sheet(*rows))
    assert intake.query(
        "SELECT wafer, n, mean, first_line, last_line FROM measurements ORDER BY id"
    ) == [("1", 4, 1204.0, 2, 8), ("2", 4, 1204.0, 3, 9)]
    # One layout for both, in the natural order of the names.
    assert [r[4] for r in intake.readings()] == ["1", "2", "3", "10"] * 2
    assert len(intake.query("SELECT id FROM layouts")) == 1


def test_processed_at_is_kept_and_a_bad_one_rejects_the_row(intake: Intake) -> None:
    header = HEADER + ",processed_at"
    report = intake.take_one(
        sheet(
            reading() + ",2026-05-01T08:00:00Z",
            reading(site="2") + ",",
            reading(site="3") + ",soon",
            header=header,
        )
    )
    assert reasons(report) == [(4, "processed_at", "soon")]
    assert intake.query("SELECT n, processed_us FROM measurements ORDER BY id") == [
        (1, 1777622400000000),
        (1, None),
    ]


def test_local_stamps(intake: Intake) -> None:
    stamps = ["2026-07-01T12:00:00", "2026-10-25T01:30:00", "2026-03-29T01:30:00"]
    report = intake.take_one(sheet(*(reading(at=at, wafer=at) for at in stamps)))
    assert reasons(report) == [(4, "measured_at", "2026-03-29T01:30:00")]
    assert [r[5] for r in intake.readings()] == [
        "2026-07-01T11:00:00+00:00",
        "2026-10-25T00:30:00+00:00",
    ]


def test_rows_later_than_the_clock_are_stored(intake: Intake) -> None:
    assert intake.take_one(sheet(reading(at="2027-01-01T00:00:00Z"))).counts.loaded == 1


PLACES = "measured_at,parameter,value,unit,lot,wafer,x_mm,y_mm,field_x_mm,field_y_mm"


def place(value: int, *xyuv: str) -> str:
    return f"2026-05-01T12:00:00Z,resist_thickness,{value},nm,N1,1," + ",".join(xyuv)


def test_nameless_sites_take_their_place_as_a_name(intake: Intake) -> None:
    report = intake.take_one(
        sheet(
            place(1201, "10", "-20.50", "", ""),
            place(1202, "0", "0", "1", "-2"),
            place(1203, "10.0", "-20.5", "", ""),
            place(1204, "ten", "0", "", ""),
            place(1205, "", "0", "", ""),
            header=PLACES,
        )
    )
    assert [(r[4], r[6]) for r in intake.readings()] == [("0,0@1,-2", 1202.0), ("10,-20.5", 1201.0)]
    assert reasons(report) == [(4, "value", "1203"), (5, "x_mm", "ten"), (6, "x_mm", "")]
    assert intake.query("SELECT sites FROM layouts") == [
        ('[["0,0@1,-2", 0.0, 0.0, 1.0, -2.0], ["10,-20.5", 10.0, -20.5, null, null]]',)
    ]


def test_sites_without_name_and_place_are_counted(intake: Intake) -> None:
    header = "measured_at,parameter,value,unit,lot,wafer"

    def row(value: object, wafer: str, at: str = "2026-05-01T12:00:00Z") -> str:
        return f"{at},resist_thickness,{value},nm,N1,{wafer}"

    bad = sheet(row(1, "1"), row(2, "2"), row("bad", "1"), row(3, "1"), header=header)
    report = intake.take_one(bad)
    assert report.counts.rejected == 1
    assert [(r[3], r[4], r[6]) for r in intake.readings()] == [
        ("1", "1", 1.0),
        ("1", "3", 3.0),
        ("2", "1", 2.0),
    ]
    # The mended file gives the same names, so only the mended row is new.
    report = intake.take_one(bad.replace("bad", "1.5"), "mended.csv")
    assert (report.counts.loaded, report.counts.duplicate) == (1, 3)


def test_a_place_without_its_other_half_is_refused(intake: Intake) -> None:
    report = intake.take_one(sheet(reading() + ",1", header=HEADER + ",x_mm"))
    assert report.outcome == "quarantined"
    assert "x_mm is given without y_mm" in report.reasons[0].reason


def test_a_site_that_moved_is_a_conflict_at_the_same_stamp(intake: Intake) -> None:
    header = HEADER + ",x_mm,y_mm"
    report = intake.take_one(sheet(reading() + ",1,2", reading() + ",1,3", header=header))
    assert (report.counts.loaded, report.counts.rejected) == (1, 1)


def test_a_mixed_up_unit_is_warned_of_at_the_door(intake: Intake) -> None:
    report = intake.take_one(sheet(reading("12005"), reading("1200", site="2")))
    assert report.counts.loaded == 2
    assert report.reasons == ()
    assert [(w.line, w.column, w.value) for w in report.warnings] == [(2, "value", "12005 nm")]
    assert "0.5 to 2.5 um" in report.warnings[0].reason
    assert intake.query("SELECT severity, line FROM rejects") == [("warned", 2)]
    assert "warnings" in report.as_json()


def test_a_window_can_reject_and_be_changed(intake: Intake) -> None:
    intake.reconfigure(
        '[plausible.resist_thickness]\nlow = 1000\nhigh = 1400\nunit = "nm"\naction = "reject"\n'
        '[plausible.bake_temperature]\nlow = 80\nhigh = 130\nunit = "C"\n'
    )
    report = intake.take_one(
        sheet(
            reading("999.9"),
            reading("1000", site="2"),
            reading("1.5", unit="um", site="3"),
            reading("140", parameter="bake_temperature", unit="C"),
        )
    )
    assert (report.counts.loaded, report.counts.rejected) == (2, 2)
    assert [r.value for r in report.reasons] == ["999.9 nm", "1.5 um"]
    assert [w.value for w in report.warnings] == ["140 C"]


@pytest.mark.parametrize("parameter", ["spin_speed", "spin_time"])
def test_spin_recipe_windows(intake: Intake, parameter: str) -> None:
    unit, low, high = ("rpm", 1200, 4800) if parameter == "spin_speed" else ("s", 30, 60)
    rows = [
        reading(value, parameter=parameter, unit=unit, site=str(i))
        for i, value in enumerate((low - 1, low, high, high + 1))
    ]
    report = intake.take_one(sheet(*rows))
    assert report.counts.loaded == 4
    assert [w.line for w in report.warnings] == [2, 5]


def test_header_only_is_a_legal_empty_drop(intake: Intake) -> None:
    report = intake.take_one(HEADER + "\n")
    assert (report.outcome, report.kind, report.counts.rows) == ("loaded", "readings", 0)


@pytest.mark.parametrize(
    ("content", "words"),
    [
        ("", "the file is empty"),
        ("hello\nworld\n", "the header is that of no drop"),
        ("measured_at,parameter,value,lot,wafer\n", "lacks unit"),
        ("Measured_At,parameter,value,unit,lot,wafer\n", "rename 'Measured_At' for measured_at"),
        (HEADER + ",lot\n", "two columns have this name"),
        (b"\x1f\x8b\x08junk", "the header is"),
        ("processed_at,lot,wafer\n", "taken for process-log, the header lacks tool"),
        (HEADER.replace(",", ";") + "\n", "no drop"),
    ],
)
def test_files_that_are_no_drops(intake: Intake, content: str | bytes, words: str) -> None:
    report = intake.take_one(content)
    assert report.outcome == "quarantined"
    assert words in report.reasons[0].reason
    assert report.as_json()["reasons"][0].keys() == {"line", "column", "value", "reason"}
    assert (intake.drops / "a.csv").exists()
    [(outcome, reason)] = intake.query("SELECT outcome, reason FROM files")
    assert outcome == "quarantined"
    assert words in reason


@pytest.mark.parametrize("data", [b"\x1f\x8b\x08junk", b"plain", b""])
def test_broken_gzip(intake: Intake, data: bytes) -> None:
    path = intake.drop("a.csv", data)
    path.rename(intake.drops / "a.csv.gz")
    [report] = intake.take().files
    assert report.outcome == "quarantined"
    words = "is empty" if data == b"" else "cannot be unpacked"
    assert words in report.reasons[0].reason


def test_gzip_bomb_is_bounded(intake: Intake) -> None:
    intake.reconfigure('[drops]\nfolder = "drops"\nmax_file_bytes = 100000\n')
    report = intake.take_one(b"x" * 5_000_000, "bomb.csv.gz")
    assert report.outcome == "quarantined"
    assert "larger than 100000 bytes" in report.reasons[0].reason
    report = intake.take_one(b"x" * 100_001, "large.csv")
    assert "larger than 100000 bytes" in report.reasons[0].reason


def test_many_lots_and_parameters(intake: Intake) -> None:
    n = 20_000
    rows = [reading("5", lot=f"L{i}", parameter=f"p{i % 3000}", unit="V") for i in range(n)]
    report = intake.take_one(sheet(*rows))
    assert report.counts.loaded == n
    intake.drop("b.csv", sheet(*reversed(rows)))
    assert intake.take().readings["duplicate"] == n


def test_kept_rejects_are_bounded_but_all_are_counted(intake: Intake) -> None:
    intake.reconfigure('[drops]\nfolder = "drops"\nmax_rejects_kept = 5\n')
    report = intake.take_one(sheet(*(reading("x", site=str(i)) for i in range(40)), "ragged"))
    assert report.counts.rejected == 41
    assert len(report.reasons) == 5
    assert intake.query("SELECT count(*) FROM rejects") == [(5,)]


def test_plan_gives_the_unit_also_to_overlay() -> None:
    import tomllib

    from config.control_plan import ControlPlan
    from ingest.units import planned_units

    plan = ControlPlan.model_validate(tomllib.loads(PLAN))
    assert planned_units(plan) == {
        "resist_thickness": "nm",
        "overlay_x": "nm",
        "overlay_y": "nm",
        "bake_temperature": "C",
    }

"""The whole door under hostile input: nothing crashes it, every row is accounted for."""

from __future__ import annotations

import csv
import io
import json
import shutil
from collections.abc import Iterator
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from ingest.load import take_in
from spc.records.sessions import open_database
from tests.ingest.intake import CLOCK, HEADER, Intake, reading

QUIET = settings(
    max_examples=40,
    deadline=None,
    suppress_health_check=[HealthCheck.function_scoped_fixture, HealthCheck.too_slow],
)
WORDS = st.one_of(
    st.sampled_from(
        [
            *(
                "",
                " ",
                "nm",
                "um",
                "1e400",
                "NaN",
                "1200",
                "-0",
                "N1",
                "000123",
                "resist_thickness",
            ),
            *("2026-05-01T12:00:00Z", "2026-03-29T01:30:00", "M1", "=1+1", "<script>", "../../x"),
            *('"', "a\nb", "a\rb", "\0", "\ufeff", "\ufffd", "é", "x" * 5000, "1,5"),
        ]
    ),
    st.text(max_size=8).map(lambda t: t.encode("utf-8", "replace").decode()),
)
COLUMNS = st.lists(
    st.sampled_from([*HEADER.split(","), "x_mm", "y_mm", "at", "kind", "processed_at", "", "é"]),
    min_size=1,
    max_size=14,
)


@pytest.fixture
def door(_sqlite_template: Path, tmp_path: Path) -> Iterator[Intake]:
    """One bay for all examples; each example drops other files into it."""
    file = tmp_path / "bay.db"
    shutil.copy(_sqlite_template, file)
    engine = open_database(f"sqlite:///{file}")
    yield Intake.make(engine, tmp_path)
    engine.dispose()


def check(door: Intake, name: str, data: bytes) -> None:
    path = door.drop(name, data)
    report = door.take()
    again = door.take()
    path.unlink()
    assert again.files == ()
    json.dumps(report.as_json()).encode("utf-8")
    for one in report.files:
        assert one.outcome in ("loaded", "duplicate", "quarantined")
        assert one.outcome != "quarantined" or one.reasons
        assert len(one.reasons) == one.counts.rejected or one.outcome != "loaded"


def written(rows: list[list[str]], quoting: int) -> bytes:
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n", quoting=quoting, escapechar="\\")  # type: ignore[arg-type]
    writer.writerows(rows)
    return out.getvalue().encode("utf-8", "replace")


@given(st.binary(max_size=200), st.sampled_from(["a.csv", "a.csv.gz"]))
@QUIET
def test_any_bytes(door: Intake, data: bytes, name: str) -> None:
    path = door.drops / name
    path.write_bytes(data)
    report = take_in(door.engine, door.bay, CLOCK)
    path.unlink()
    assert len(report.files) <= 1


@given(st.binary(max_size=200))
@QUIET
def test_any_bytes_below_a_good_header(door: Intake, body: bytes) -> None:
    check(door, "a.csv", HEADER.encode() + b"\n" + reading().encode() + b"\n" + body)


@given(st.lists(st.lists(WORDS, min_size=9, max_size=9), max_size=6), st.booleans())
@QUIET
def test_any_words_in_the_right_columns(door: Intake, rows: list[list[str]], bare: bool) -> None:
    quoting = csv.QUOTE_NONE if bare else csv.QUOTE_ALL
    check(door, "a.csv", written([HEADER.split(","), *rows], quoting))


@given(COLUMNS, st.lists(st.lists(WORDS, max_size=14), max_size=4))
@QUIET
def test_any_columns(door: Intake, columns: list[str], rows: list[list[str]]) -> None:
    check(door, "a.csv", written([columns, *rows], csv.QUOTE_MINIMAL))


@pytest.mark.parametrize("name", ["=cmd().csv", "<b>.csv", "a'; DROP TABLE files;--.csv", "é.csv"])
def test_names_of_files_are_only_names(door: Intake, name: str) -> None:
    door.drop(name, HEADER + "\n" + reading() + "\n")
    [report] = door.take().files
    assert (report.path, report.outcome) == (name, "loaded")
    assert door.query("SELECT path FROM files") == [(name,)]


def test_a_name_that_is_no_text(door: Intake) -> None:
    path = bytes(door.drops) + b"/\xff.csv"
    with open(path, "wb") as file:
        file.write((HEADER + "\n").encode())
    [report] = door.take().files
    assert report.path == "\\udcff.csv"
    assert door.take().files == ()

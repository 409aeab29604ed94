"""Tables and their CSV.

Formula injection: OWASP, "CSV Injection" (fields that begin with = + - @, tab or carriage return,
and their full-width forms). CSV: RFC 4180, read back by the csv module of the standard library.
"""

from __future__ import annotations

import csv
import io

import pytest
from hypothesis import given
from hypothesis import strategies as st

from reports.numbers import LocalClock
from reports.tables import (
    Cell,
    Column,
    Row,
    csv_text,
    name_cell,
    number_cell,
    safe_text,
    time_cell,
)
from tests.reports import samples

COLUMNS = (Column("Lot", "lot"), Column("Value", "value", "number"), Column("When", "at", "time"))
CLOCK = LocalClock(samples.ZONE, samples.AS_OF)


def _read(rows: list[Row]) -> list[list[str]]:
    raw = csv_text(COLUMNS, rows)
    assert raw.startswith("\ufeff")
    return list(csv.reader(io.StringIO(raw[1:], newline="")))


@pytest.mark.parametrize("name", ["=1+1", "+1", "-1", "@A1", "\t=1", "\r=1", " =1", "\uff1d1"])
def test_formulas_become_text(name: str) -> None:
    assert safe_text(name) == "'" + name


@pytest.mark.parametrize("name", ["000123", "12E5", "NA", "L-4200", "a=b", "'=x", ""])
def test_names_stay_as_they_are(name: str) -> None:
    assert safe_text(name) == name


@given(st.text())
def test_no_text_field_begins_as_a_formula(name: str) -> None:
    rows = [Row((name_cell(name), number_cell(-5.5, "−5.5"), Cell("")))]
    lot, value, _ = _read(rows)[1]
    assert not lot.startswith(("=", "+", "-", "@", "\t", "\r"))
    assert value == "-5.5", "numbers stay numbers, the negative ones too"


def test_exports_are_whole_and_iso() -> None:
    rows = [
        Row((name_cell(name), number_cell(1194.123456, "1194.1"), time_cell(samples.ONSET, CLOCK)))
        for name in samples.HOSTILE
    ]
    read = _read(rows)
    assert read[0] == ["lot", "value", "at"]
    for name, line in zip(samples.HOSTILE, read[1:], strict=True):
        assert line[0] in (name, "'" + name)
        assert line[1:] == ["1194.123456", "2026-11-03T22:40:00+00:00"]


def test_a_turned_name_is_seen_but_exported_whole() -> None:
    cell = name_cell("lot\u202egnp")
    assert "\u202e" not in cell.text
    assert cell.raw == "lot\u202egnp"
    assert name_cell("L1").raw is None

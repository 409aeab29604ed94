"""The monthly review and its spreadsheet, read back with openpyxl."""

from __future__ import annotations

import io
import zipfile
from dataclasses import replace

import html5lib
import openpyxl
import pytest

from reports.model_pages import ReviewPage
from reports.numbers import plain
from reports.review import index_words, part_sentence, review_page, review_sentence
from reports.workbook import review_workbook
from tests.reports import samples, samples_pages


@pytest.fixture(scope="module")
def view() -> ReviewPage:
    return samples_pages.review(samples.HOSTILE)


def test_the_first_words_say_what_needs_a_decision() -> None:
    review = samples_pages.review()
    said = plain(review_sentence(review))
    assert said == (
        "October 2026: 1 of 2 characteristics in control, 1 below the goal of Ppk 1.33; "
        "3 things need a decision."
    )
    tree = html5lib.parse(review_page(review), namespaceHTMLElements=False)
    words = plain(" ".join("".join(next(tree.iter("main")).itertext()).split()))
    order = ["October 2026", "What needs a decision", "below the goal of 1.33", "What changed"]
    order += ["Ppk fell, from 1.41 to 1.11", "best TRK1 (Ppk 1.98)", "All characteristics"]
    places = [words.find(part) for part in order]
    assert -1 not in places
    assert places == sorted(places)


def test_no_index_is_bare() -> None:
    row = samples_pages.capability_row("M1 CD", {}, 6, 400.0, 2.4)
    assert "(" in index_words(row, "cpk")
    assert "not in control" in part_sentence(row), "the verdict stands beside the index"
    assert "normal" in part_sentence(row)
    lonely = replace(row, cp=None, intervals={})
    assert index_words(lonely, "cp") == "–"


def test_names_in_the_workbook_are_texts(view: ReviewPage) -> None:
    raw = review_workbook(view)
    book = openpyxl.load_workbook(io.BytesIO(raw))
    assert book.sheetnames == ["In words", "Capability", "Months", "Excursions"]
    with zipfile.ZipFile(io.BytesIO(raw)) as parts:
        sheets = [parts.read(n).decode() for n in parts.namelist() if "worksheets/" in n]
        assert not any("<f>" in sheet or "<hyperlink" in sheet for sheet in sheets)
    for sheet in book:
        for row in sheet.iter_rows():
            assert not [c.coordinate for c in row if c.data_type == "f"]
    names = {row[0].value for row in book["Capability"].iter_rows(min_row=2)}
    assert samples.HOSTILE[0] in names
    streams = {row[1].value for row in book["Capability"].iter_rows(min_row=2)}
    assert f"tool={samples.HOSTILE[1]}" in streams


def test_numbers_in_the_workbook_are_whole(view: ReviewPage) -> None:
    book = openpyxl.load_workbook(io.BytesIO(review_workbook(view)))
    sheet = book["Capability"]
    heads = [cell.value for cell in sheet[1]]
    row = view.rows[0]
    found = dict(zip(heads, [cell.value for cell in sheet[2]], strict=True))
    assert found["Ppk"] == pytest.approx(row.ppk, rel=1e-14)
    assert found["Ppk low"] == pytest.approx(row.intervals["ppk"][0], rel=1e-14)
    assert found["Mean"] == pytest.approx(row.mean, rel=1e-14)
    assert len(list(book["Months"].iter_rows(min_row=2))) == 12 * len(view.rows)


def test_missing_numbers_are_empty_cells(view: ReviewPage) -> None:
    bare = replace(view.rows[0], mean=None, cpk=None, ppk=float("nan"), intervals={}, history=())
    raw = review_workbook(replace(view, rows=(bare,)))
    sheet = openpyxl.load_workbook(io.BytesIO(raw))["Capability"]
    found = dict(zip([c.value for c in sheet[1]], [c.value for c in sheet[2]], strict=True))
    assert found["Mean"] is None
    assert found["Cpk"] is None
    assert found["Ppk"] is None


def test_the_same_review_gives_the_same_workbook(view: ReviewPage) -> None:
    assert review_workbook(view) == review_workbook(view)

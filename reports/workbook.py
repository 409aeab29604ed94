"""The monthly review as a spreadsheet (XLSX): every number whole, every name a text.

Names are written as strings, never as formulas or links, whatever they begin with. The file's own
dates are those of the pass, so that the same review gives the same bytes.
"""

from __future__ import annotations

import io
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC
from typing import Any

from reports.model_pages import CapabilityRow, ReviewPage
from reports.numbers import LocalClock, iso, plain
from reports.review import (
    change_sentence,
    decision_sentence,
    gap_sentence,
    month_name,
    review_sentence,
    stable_words,
)
from reports.sentences import headline
from reports.style import light
from reports.texts import shown, text

Value = str | float | int | bool | None

_INDICES = ("cp", "cpk", "pp", "ppk", "cpm")
_FORMATS = {"index": "0.00", "ppm": "0.##", "value": "General", "share": "0.0%", "text": "@"}


@dataclass(frozen=True)
class _Heading:
    words: str
    kind: str = "value"
    width: float = 11


def review_workbook(view: ReviewPage) -> bytes:
    """The review as the bytes of an XLSX file."""
    import xlsxwriter

    target = io.BytesIO()
    options = {
        "in_memory": True,
        "strings_to_formulas": False,
        "strings_to_numbers": False,
        "strings_to_urls": False,
        "nan_inf_to_errors": True,
    }
    book = xlsxwriter.Workbook(target, options)
    created = view.edition.as_of.astimezone(UTC).replace(tzinfo=None, microsecond=0)
    title = text("review.title", bay=shown(view.edition.bay), month=month_name(view.month))
    book.set_properties({"title": title, "created": created})
    formats = _formats(book)
    _words(book, formats, view)
    _sheet(book, formats, text("sheet.capability"), *_capability(view.rows))
    _sheet(book, formats, text("sheet.months"), *_months(view.rows))
    _sheet(book, formats, text("sheet.excursions"), *_excursions(view))
    book.close()
    return target.getvalue()


def _formats(book: Any) -> dict[str, Any]:
    made = {
        kind: book.add_format({"num_format": code, "valign": "top"})
        for kind, code in _FORMATS.items()
    }
    made["head"] = book.add_format(
        {"bold": True, "text_wrap": True, "valign": "top", "bg_color": light("band"), "bottom": 1}
    )
    made["title"] = book.add_format({"bold": True, "font_size": 14, "text_wrap": True})
    made["words"] = book.add_format({"text_wrap": True, "valign": "top"})
    made["bold"] = book.add_format({"bold": True})
    return made


def _put(sheet: Any, row: int, column: int, value: Value, form: Any) -> None:
    """One cell by its type: a text stays a text, a missing value stays empty."""
    if value is None or (isinstance(value, float) and value != value):
        sheet.write_blank(row, column, None, form)
    elif isinstance(value, str):
        sheet.write_string(row, column, value, form)
    else:
        sheet.write_number(row, column, value, form)


def _words(book: Any, formats: dict[str, Any], view: ReviewPage) -> None:
    """The first sheet says in words what changed and what needs a decision."""
    sheet = book.add_worksheet(text("sheet.words"))
    sheet.set_column(0, 0, 100)
    sheet.set_portrait()
    sheet.fit_to_pages(1, 0)
    blocks: list[tuple[str, Sequence[str]]] = [
        (text("review.decisions"), [decision_sentence(item) for item in view.decisions]),
        (text("review.changes"), [change_sentence(item) for item in view.changes]),
        (text("review.gaps"), [gap_sentence(gap) for gap in view.gaps]),
    ]
    _put(sheet, 0, 0, plain(review_sentence(view)), formats["title"])
    row = 2
    for head, lines in blocks:
        _put(sheet, row, 0, head, formats["bold"])
        for line in lines or (text("sheet.nothing"),):
            row += 1
            _put(sheet, row, 0, plain(line), formats["words"])
        row += 2


def _sheet(
    book: Any,
    formats: dict[str, Any],
    name: str,
    headings: Sequence[_Heading],
    rows: Sequence[Sequence[Value]],
) -> None:
    sheet = book.add_worksheet(name)
    for column, heading in enumerate(headings):
        sheet.set_column(column, column, heading.width)
        _put(sheet, 0, column, heading.words, formats["head"])
    for i, values in enumerate(rows):
        for column, (value, heading) in enumerate(zip(values, headings, strict=True)):
            _put(sheet, i + 1, column, value, formats[heading.kind])
    sheet.freeze_panes(1, 1)
    sheet.autofilter(0, 0, max(len(rows), 1), len(headings) - 1)
    sheet.repeat_rows(0)
    sheet.set_landscape()
    sheet.fit_to_pages(1, 0)


def _context(row: CapabilityRow) -> str:
    return " ".join(f"{key}={value}" for key, value in row.context.items())


def _capability(rows: Sequence[CapabilityRow]) -> tuple[list[_Heading], list[list[Value]]]:
    headings = [
        _Heading(text("column.characteristic"), "text", 26),
        _Heading(text("column.stream"), "text", 24),
        _Heading(text("column.month"), "text"),
        _Heading(text("column.unit"), "text", 7),
        _Heading(text("column.lots")),
        _Heading(text("column.wafers")),
        _Heading(text("column.readings")),
        _Heading(text("fact.mean")),
        _Heading(text("fact.sd_overall")),
        _Heading(text("fact.sd_within")),
    ]
    for key in _INDICES:
        name = text(f"index.{key}")
        headings.append(_Heading(name, "index", 8))
        headings.append(_Heading(text("sheet.low", index=name), "index", 8))
        headings.append(_Heading(text("sheet.high", index=name), "index", 8))
    headings += [
        _Heading(text("column.stable"), "text", 16),
        _Heading(text("column.ppm_expected"), "ppm"),
        _Heading(text("column.ppm_observed"), "ppm"),
        *(_Heading(text("sheet.variance", name=text(f"component.{c}"))) for c in _COMPONENTS),
        _Heading(text("component.gauge.name"), "share"),
        _Heading(text("column.distribution"), "text", 16),
        _Heading(text("sheet.excursions"), "text", 14),
    ]
    return headings, [_capability_row(row) for row in rows]


_COMPONENTS = ("lot", "wafer", "site")


def _capability_row(row: CapabilityRow) -> list[Value]:
    values: list[Value] = [
        row.characteristic,
        _context(row),
        row.month,
        row.unit,
        row.n_lots,
        row.n_wafers,
        row.n_readings,
        row.mean,
        row.sd_overall,
        row.sd_within,
    ]
    for key in _INDICES:
        low, high = row.intervals.get(key, (None, None))
        values += [getattr(row, key), low, high]
    values += [
        stable_words(row),
        row.ppm_expected,
        row.ppm_observed,
        *(row.components.get(name) for name in _COMPONENTS),
        row.gauge_share,
        row.distribution,
        ", ".join(str(number) for number in row.excursions),
    ]
    return values


def _months(rows: Sequence[CapabilityRow]) -> tuple[list[_Heading], list[list[Value]]]:
    headings = [
        _Heading(text("column.characteristic"), "text", 26),
        _Heading(text("column.stream"), "text", 24),
        _Heading(text("column.month"), "text"),
        *(
            _Heading(words, "index", 9)
            for key in ("cpk", "ppk")
            for words in (
                text(f"index.{key}"),
                text("sheet.low", index=text(f"index.{key}")),
                text("sheet.high", index=text(f"index.{key}")),
            )
        ),
        _Heading(text("column.stable"), "text", 16),
        _Heading(text("column.lots")),
    ]
    made: list[list[Value]] = []
    for row in rows:
        for month in row.history:
            verdict = text("stable.unknown")
            if month.stable is not None:
                verdict = text("stable.yes" if month.stable else "stable.no")
            made.append(
                [
                    row.characteristic,
                    _context(row),
                    month.month,
                    month.cpk,
                    month.cpk_low,
                    month.cpk_high,
                    month.ppk,
                    month.ppk_low,
                    month.ppk_high,
                    verdict,
                    month.n_lots,
                ]
            )
    return headings, made


def _excursions(view: ReviewPage) -> tuple[list[_Heading], list[list[Value]]]:
    clock = LocalClock(view.edition.zone, view.edition.as_of)
    headings = [
        _Heading(text("sheet.number")),
        _Heading(text("sheet.what"), "text", 60),
        _Heading(text("sheet.since"), "text", 26),
        _Heading(text("sheet.status"), "text"),
        _Heading(text("sheet.lots")),
        _Heading(text("sheet.cause"), "text", 40),
    ]
    rows: list[list[Value]] = [
        [
            item.excursion.id,
            plain(headline(item.excursion, clock)),
            iso(item.excursion.onset.estimate, view.edition.zone),
            text(f"status.{item.excursion.status}"),
            len(item.excursion.lots_at_risk),
            item.cause,
        ]
        for item in view.excursions
    ]
    return headings, rows

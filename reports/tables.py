"""Tables of pages: cells with what is shown and what is exported, and the CSV of both.

A CSV is made to be opened in a spreadsheet without harm: a text that would be taken for a formula
gets an apostrophe in front, and texts are quoted. Numbers stay numbers, stamps are ISO 8601.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Literal

from reports.numbers import LocalClock, iso
from reports.texts import shown

Kind = Literal["text", "number", "time"]
_LONG_WORD = 16

# Also behind blanks and marks of direction, and the wide forms that some programs read alike.
_FORMULA = re.compile(
    r"[\s\u200b-\u200f\u202a-\u202e\u2066-\u2069\ufeff]*[=+\-@\uff1d\uff0b\uff0d\uff20]|[\t\r\n]"
)


@dataclass(frozen=True)
class Column:
    """A column: its heading, its name in exports, and what its cells are."""

    heading: str
    name: str
    kind: Kind = "text"
    extra: bool = False  # left out on narrow screens where the table is tight

    @property
    def code(self) -> str:
        """Its kind for the page's script and styles: a text, a number or a stamp."""
        return {"text": "s", "number": "n", "time": "t"}[self.kind]

    @property
    def look(self) -> str:
        """Its classes in a page."""
        return f"{self.code} extra" if self.extra else self.code


@dataclass(frozen=True)
class Cell:
    """A cell: `text` is read, `raw` is sorted and exported (None: the text itself)."""

    text: str
    raw: str | None = None
    href: str | None = None

    @property
    def long(self) -> bool:
        """Whether it holds a word so long that it must be broken to keep the table whole."""
        return any(len(word) > _LONG_WORD for word in self.text.split())


@dataclass(frozen=True)
class Row:
    """A row; `marked` points broke a rule and carry that in words in one of their cells."""

    cells: tuple[Cell, ...]
    marked: bool = False


@dataclass(frozen=True)
class Table:
    """A table with its tools. `pick` lets rows be selected; `list_column` is what a list copies."""

    name: str
    caption: str
    columns: tuple[Column, ...]
    rows: tuple[Row, ...]
    file: str = ""
    pick: bool = False
    list_column: int | None = None


def name_cell(name: str | None, href: str | None = None) -> Cell:
    """A name from the data: marks that hide or turn text are shown, the export keeps the name."""
    raw = name or ""
    seen = shown(raw)
    return Cell(seen, None if seen == raw.strip() else raw, href)


def number_cell(value: float | None, written: str) -> Cell:
    """A number: written for reading, kept whole for sorting and export."""
    return Cell(written, "" if value is None or value != value else f"{value:.10g}")


def time_cell(stamp: datetime | None, clock: LocalClock) -> Cell:
    """A stamp: the bay's clock for reading, ISO 8601 for export."""
    return Cell(clock.moment(stamp), iso(stamp, clock.zone))


def safe_text(value: str) -> str:
    """The text as a spreadsheet may be given it: never a formula."""
    return "'" + value if _FORMULA.match(value) else value


def csv_text(columns: Sequence[Column], rows: Iterable[Row]) -> str:
    """The table as CSV (RFC 4180, with a byte order mark for spreadsheets)."""
    lines = [",".join(_quoted(safe_text(column.name)) for column in columns)]
    for row in rows:
        fields = []
        for column, cell in zip(columns, row.cells, strict=True):
            raw = cell.text if cell.raw is None else cell.raw
            number = column.kind == "number"
            fields.append(raw if number else _quoted(safe_text(raw)))
        lines.append(",".join(fields))
    return "\ufeff" + "\r\n".join(lines) + "\r\n"


def _quoted(value: str) -> str:
    return '"' + value.replace('"', '""') + '"'

"""The exact way through a file that is not regular: every physical line is accounted for.

A record that spans several lines and does not come out with the right number of fields is taken to
begin with a quote that was never closed: only its first line is rejected, and reading goes on with
the next line. So a stray quote costs one row, not the rest of the file.
"""

from __future__ import annotations

import csv
import io
from collections import deque
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from threading import Lock
from typing import TextIO

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from ingest import arrow
from ingest.report import Reason

_CHUNK = 50_000
_LONGEST_RECORD = 1000  # lines of one quoted field
SHOWN = 200
NUL = "holds a NUL byte"
NOT_IN_ENCODING = (
    "is not in the encoding of the file; save it as UTF-8, or give its `encoding` in a [[feed]]"
)
_limit_lock = Lock()


@dataclass(frozen=True)
class TextFormat:
    """How the bytes are written, and what is too much of them."""

    separator: str = ","
    encoding: str = "utf-8"
    skip_lines: int = 0
    max_field_characters: int = 4096
    max_rejects: int = 10_000


@dataclass(frozen=True)
class Header:
    """The names of the columns, the last line of the header and where the body begins."""

    names: tuple[str, ...]
    line: int
    body: int


@dataclass(frozen=True)
class Text:
    """A file as UTF-8 bytes without byte-order mark; `damaged` where bytes had to be replaced."""

    data: bytes
    damaged: bool


@contextmanager
def field_limit(characters: int) -> Iterator[None]:
    """Bound the fields of the csv module, whose limit is one for the whole process."""
    with _limit_lock:
        before = csv.field_size_limit(characters)
        try:
            yield
        finally:
            csv.field_size_limit(before)


class Lines:
    """Physical lines of a file, with their count, that can be given back."""

    def __init__(self, source: TextIO) -> None:
        self._source = source
        self._again: deque[str] = deque()
        self.seen: list[str] = []  # lines since the last call of `start`
        self.number = 0  # of the last line given

    def __iter__(self) -> Lines:
        """Be an iterator."""
        return self

    def __next__(self) -> str:
        """Next line, with its line break."""
        line = self._again.popleft() if self._again else self._source.readline()
        if not line:
            raise StopIteration
        self.seen.append(line)
        self.number += 1
        return line

    def start(self) -> None:
        """Begin a new record."""
        self.seen = []

    def give_back_all_but_first(self) -> None:
        """Read the lines of this record again, without its first."""
        rest = self.seen[1:]
        self._again.extendleft(reversed(rest))
        self.number -= len(rest)
        self.seen = self.seen[:1]


@dataclass
class Rows:
    """What the exact way found: columns of text, lines of the rows, and what it rejected."""

    columns: list[pa.StringArray]
    lines: NDArray[np.int64]
    reasons: list[Reason] = field(default_factory=list)
    n_rejected: int = 0


def rows(text: Text, header: Header, form: TextFormat) -> Rows:
    """Read the body of a file row by row; never raises for what stands in it."""
    body = io.BytesIO(text.data)
    body.seek(header.body)
    lines = Lines(io.TextIOWrapper(body, encoding="utf-8", newline=""))
    damaged = text.damaged
    width = len(header.names)
    collector = _Collector(width)
    reasons: list[Reason] = []
    n_rejected = 0
    with field_limit(form.max_field_characters):
        for line, row, fault in _records(lines, width, form):
            if fault is None:
                fault = _fault_of(row, damaged)
            if fault is None:
                collector.add(row, header.line + line)
                continue
            n_rejected += 1
            if len(reasons) < form.max_rejects:
                column, value, reason = fault
                name = header.names[column] if column is not None else None
                reasons.append(Reason(header.line + line, name, value, reason))
    columns, found = collector.finish()
    return Rows(columns, found, reasons, n_rejected)


_FaultAt = tuple[int | None, str | None, str]


def _records(
    lines: Lines, width: int, form: TextFormat
) -> Iterator[tuple[int, list[str], _FaultAt | None]]:
    """Each record with its first line; or the line that begins none, with the fault."""
    source = _OneRecord(lines)
    reader = csv.reader(source, delimiter=form.separator)
    while True:
        lines.start()
        reason = None
        try:
            row = next(reader)
            if source.cut:
                reason = "a quote is opened here and never closed"
        except StopIteration:
            return
        except csv.Error as error:
            row = []
            reason = _said(error, form)
        span = len(lines.seen)
        first = lines.number - span + 1
        if not row and reason is None:
            continue  # a blank line
        if len(row) == width and reason is None:
            yield first, row, None
            continue
        if span > 1 and reason is None:
            reason = "a quote is opened here and not closed where the field should end"
        if span > 1 or reason is not None:
            lines.give_back_all_but_first()
            source = _OneRecord(lines)
            reader = csv.reader(source, delimiter=form.separator)
        shown = form.separator.join(row)[:SHOWN] or None
        yield first, row, (None, shown, reason or ragged(len(row), width))


class _OneRecord:
    """Lines for the csv module, which asks for another one only while a quote is open.

    `cut` says that it asked in vain: the file ended, or the record grew without end.
    """

    def __init__(self, lines: Lines) -> None:
        self._lines = lines
        self.cut = False

    def __iter__(self) -> _OneRecord:
        return self

    def __next__(self) -> str:
        inside = bool(self._lines.seen)
        try:
            if len(self._lines.seen) >= _LONGEST_RECORD:
                raise StopIteration
            return next(self._lines)
        except StopIteration:
            self.cut = inside
            raise


def _said(error: csv.Error, form: TextFormat) -> str:
    if "field larger" in str(error):
        return too_long(form)
    return f"the row cannot be read: {error}"


def too_long(form: TextFormat) -> str:
    """Reason of a row with a huge field."""
    return (
        f"a field is longer than {form.max_field_characters} characters; "
        "shorten it, or raise [drops] max_field_characters"
    )


def ragged(found: int, width: int) -> str:
    """Reason of a row with too few or too many fields."""
    return f"has {found} fields where the header has {width}; quote fields that hold a separator"


def _fault_of(row: list[str], damaged: bool) -> _FaultAt | None:
    for number, cell in enumerate(row):
        if "\0" in cell:
            return number, cell[:SHOWN].replace("\0", "\u2400"), NUL
        if damaged and "\ufffd" in cell:
            return number, cell[:SHOWN], NOT_IN_ENCODING
    return None


class _Collector:
    """Gathers rows into Arrow columns, a chunk at a time, so that Python texts stay few."""

    def __init__(self, width: int) -> None:
        self._width = width
        self._rows: list[list[str]] = []
        self._lines: list[int] = []
        self._chunks: list[list[pa.Array]] = [[] for _ in range(width)]
        self._line_chunks: list[NDArray[np.int64]] = []

    def add(self, row: list[str], line: int) -> None:
        self._rows.append(row)
        self._lines.append(line)
        if len(self._rows) >= _CHUNK:
            self._flush()

    def _flush(self) -> None:
        for chunks, cells in zip(self._chunks, zip(*self._rows, strict=True), strict=False):
            chunks.append(arrow.strings(cells))
        self._line_chunks.append(np.array(self._lines, np.int64))
        self._rows, self._lines = [], []

    def finish(self) -> tuple[list[pa.StringArray], NDArray[np.int64]]:
        self._flush()
        nothing = [arrow.strings([])]
        columns = [pa.concat_arrays(chunks or nothing) for chunks in self._chunks]
        return columns, np.concatenate(self._line_chunks)

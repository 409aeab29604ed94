"""Bytes to columns of text (pure). A fast parser for files that are regular, an exact one else.

The fast way hands the body to Arrow and accepts the result only when each physical line became one
row of the right number of fields; then the line of a row follows from its place. Everything else
(quoted line breaks, ragged rows, NUL, bytes that are not in the encoding, huge fields, blank lines)
goes through `ingest.exact`, row by row.
"""

from __future__ import annotations

import csv
import io
from collections.abc import Collection
from dataclasses import dataclass

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.csv as pacsv

from ingest import arrow, exact
from ingest.report import Refused
from ingest.sheet import Sheet, Texts

MAX_COLUMNS = 2000
_BOM = b"\xef\xbb\xbf"
_DICTIONARY = pa.dictionary(pa.int32(), pa.string())


@dataclass(frozen=True)
class TextFormat:
    """How the bytes are written. `numeric` names columns that are mostly distinct numbers."""

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


def decode(data: bytes, encoding: str) -> Text:
    """Bring the bytes to UTF-8. What is not in the encoding becomes U+FFFD."""
    if encoding.lower().replace("_", "-") in ("utf-8", "utf8", "utf-8-sig"):
        if data.startswith(_BOM):
            data = data[len(_BOM) :]
        try:
            if not data.isascii():
                data.decode("utf-8")
        except UnicodeDecodeError:
            return Text(data.decode("utf-8", "replace").encode("utf-8"), damaged=True)
        return Text(data, damaged=False)
    damaged = False
    try:
        text = data.decode(encoding)
    except UnicodeError:
        try:
            text, damaged = data.decode(encoding, "replace"), True
        except UnicodeError as error:
            raise Refused(f"is not {encoding} ({error}); mend `encoding` of its feed") from error
    text = text.removeprefix("\ufeff")
    return Text(text.encode("utf-8", "replace"), damaged)


def read_header(text: Text, form: TextFormat) -> Header:
    """Read the first line that is not blank, after `skip_lines`.

    Raises
    ------
    Refused
        For an empty file, and for a header that no names can be read from.
    """
    start = 0
    for _ in range(form.skip_lines):
        start = text.data.find(b"\n", start) + 1
        if start == 0:
            raise Refused(f"ends before its header: the feed skips {form.skip_lines} lines", line=1)
    window_bytes = 64 * form.max_field_characters
    window = io.TextIOWrapper(
        io.BytesIO(text.data[start : start + window_bytes]),
        encoding="utf-8",
        errors="ignore",  # the window may cut a character
        newline="",
    )
    lines = exact.Lines(window)
    with exact.field_limit(form.max_field_characters):
        reader = csv.reader(lines, delimiter=form.separator)
        try:
            row = next((one for one in reader if any(cell.strip() for cell in one)), None)
        except csv.Error as error:
            line = form.skip_lines + lines.number
            raise Refused(f"the header cannot be read: {error}", line=line) from error
    line = form.skip_lines + lines.number
    if row is None:
        raise Refused(
            "the file is empty; its first line must name the columns", line=form.skip_lines + 1
        )
    names = tuple(cell.strip() for cell in row)
    _check_names(names, line, text.damaged)
    consumed = start + sum(len(one.encode("utf-8")) for one in lines.seen)
    if consumed >= start + window_bytes - 4 and consumed < len(text.data):
        raise Refused(f"the header is longer than {window_bytes} bytes", line=line)
    return Header(names, line, consumed)


def _check_names(names: tuple[str, ...], line: int, damaged: bool) -> None:
    if any("\0" in name for name in names):
        raise Refused(
            "the header holds NUL bytes: no text in this encoding; save it as UTF-8, or give its "
            "`encoding` in a [[feed]]",
            line=line,
        )
    if damaged and any("\ufffd" in name for name in names):
        name = next(name for name in names if "\ufffd" in name)
        raise Refused(
            "the header is not in this encoding; save it as UTF-8, or give its `encoding` in a "
            "[[feed]]",
            line=line,
            value=name[:80],
        )
    if len(names) > MAX_COLUMNS:
        raise Refused(f"the header has more than {MAX_COLUMNS} columns", line=line)
    seen = set()
    for name in names:
        if name and name in seen:
            raise Refused(
                "two columns have this name; rename one", line=line, column=name, value=name
            )
        seen.add(name)


def parse(text: Text, header: Header, form: TextFormat, plain: Collection[str] = ()) -> Sheet:
    """Read the body. Columns named in `plain` are numbers, mostly distinct.

    Raises
    ------
    Refused
        When a column without a name holds something.
    """
    columns = _fast(text, header, form, plain)
    if columns is None:
        found = exact.rows(text.data[header.body :], header, text.damaged, form)
        sheet = Sheet(
            header.names, header.line, {}, found.lines, tuple(found.reasons), found.n_rejected
        )
        arrays = found.columns
    else:
        lines = np.arange(len(columns[0]), dtype=np.int64) + header.line + 1
        sheet = Sheet(header.names, header.line, {}, lines)
        arrays = columns
    for number, (name, array) in enumerate(zip(header.names, arrays, strict=True), 1):
        column = (Texts.plain if name in plain else Texts.of)(name, array)
        if name:
            sheet.columns[name] = column
        elif not bool(column.empty.all()):
            raise Refused(
                f"column {number} has no name in the header but holds values; name it",
                line=header.line,
                value=column.at(int(np.flatnonzero(~column.empty)[0]))[:80],
            )
    return sheet


def _fast(
    text: Text, header: Header, form: TextFormat, plain: Collection[str]
) -> list[pa.Array] | None:
    """Columns, or None where the file is not regular enough to know the line of each row."""
    data = text.data
    end = _end_of_rows(data, header.body)
    if end == header.body:
        return [arrow.strings([]) for _ in header.names]
    if (
        text.damaged
        or not form.separator.isascii()
        or data.find(b"\0") >= 0
        or len(header.names) < 2
        or _lone_returns(data)
    ):
        return None
    names = [str(i) for i in range(len(header.names))]
    types = {
        key: pa.string() if name in plain else _DICTIONARY
        for key, name in zip(names, header.names, strict=True)
    }
    irregular = []

    def skip(row: pacsv.InvalidRow) -> str:
        irregular.append(row.number)
        return "skip"

    body = memoryview(data)[header.body : end]
    quotes = data.count(b'"', header.body) if data.find(b'"', header.body) >= 0 else 0
    if quotes % 2:
        return None  # one of them is not closed
    try:
        table = pacsv.read_csv(
            pa.BufferReader(pa.py_buffer(body)),
            read_options=pacsv.ReadOptions(
                column_names=names, use_threads=False, block_size=min(len(body), 2**30) + 1
            ),
            parse_options=pacsv.ParseOptions(
                delimiter=form.separator,
                newlines_in_values=quotes > 0,
                invalid_row_handler=skip,
            ),
            convert_options=pacsv.ConvertOptions(
                column_types=types, null_values=[], strings_can_be_null=False
            ),
        )
    except pa.ArrowInvalid:
        return None
    n_lines = data.count(b"\n", header.body, end) + 1
    if irregular or table.num_rows != n_lines:
        return None
    columns = [column.chunk(0) for column in table.columns]  # one block, one chunk
    return columns if _short_enough(columns, form.max_field_characters) else None


def _end_of_rows(data: bytes, start: int) -> int:
    """End of the last row without the line breaks behind it."""
    end = len(data)
    while end > start and data[end - 1] in b"\r\n":
        end -= 1
    return end


def _lone_returns(data: bytes) -> bool:
    return data.find(b"\r") >= 0 and data.count(b"\r") != data.count(b"\r\n")


def _short_enough(columns: list[pa.Array], limit: int) -> bool:
    for column in columns:
        texts = column.dictionary if pa.types.is_dictionary(column.type) else column
        # Bytes first: only where they are too many does the count of characters matter.
        if arrow.lengths(texts).max() > limit and pc.max(pc.utf8_length(texts)).as_py() > limit:
            return False
    return True

"""Bytes to columns of text (pure): the encoding, the header, and one of two ways for the body.

`ingest.fast` takes the files that are regular enough, `ingest.exact` the others, row by row. Both
give the same for what both can read.
"""

from __future__ import annotations

import csv
import io
from collections.abc import Collection

import numpy as np

from ingest import exact, fast
from ingest.exact import Header, Text, TextFormat
from ingest.report import Refused
from ingest.sheet import Sheet, Texts

__all__ = ["MAX_COLUMNS", "Header", "Text", "TextFormat", "decode", "parse", "read_header"]

MAX_COLUMNS = 2000
_BOM = b"\xef\xbb\xbf"


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
    found = fast.rows(text, header, form, plain)
    if found is None:
        found = exact.rows(text, header, form)
    reasons = tuple(found.reasons)
    sheet = Sheet(header.names, header.line, {}, found.lines, reasons, found.n_rejected)
    for number, (name, array) in enumerate(zip(header.names, found.columns, strict=True), 1):
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

"""The fast way through a file, by Arrow: for files in which each line that is not blank is a row.

That is so where no quote is in the file, or where every line became one row. Then the line of each
row is known from its place. Rows with the wrong number of fields, and rows with a NUL, a huge field
or bytes that are not in the encoding, are taken out with their reason; anything else that is not
regular (stray quotes, quoted line breaks, lone carriage returns) is left to `ingest.exact`.
"""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass, field

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.csv as pacsv
from numpy.typing import NDArray

from ingest import arrow
from ingest.exact import (
    NOT_IN_ENCODING,
    NUL,
    SHOWN,
    Header,
    Rows,
    Text,
    TextFormat,
    ragged,
    too_long,
)
from ingest.report import Reason

_DICTIONARY = pa.dictionary(pa.int32(), pa.string())
_BLOCK = 8 * 1024 * 1024  # bytes parsed at a time, so that a large file is never held twice


@dataclass
class _Irregular:
    """Rows that Arrow found to be ragged: their numbers among the rows that are not blank."""

    keep: int
    numbers: list[int] = field(default_factory=list)
    kept: list[tuple[str, str]] = field(default_factory=list)

    def skip(self, row: pacsv.InvalidRow) -> str:
        """Handler of ragged rows."""
        self.numbers.append(-1 if row.number is None else row.number - 1)
        if len(self.kept) < self.keep:
            reason = ragged(row.actual_columns, row.expected_columns)
            self.kept.append((row.text[:SHOWN], reason))
        return "skip"


def rows(text: Text, header: Header, form: TextFormat, plain: Collection[str]) -> Rows | None:
    """Rows of the body, or None where the file has to be read the exact way."""
    data, start = text.data, header.body
    end = _end_of_rows(data, start)
    if end == start:
        return Rows([arrow.strings([]) for _ in header.names], np.zeros(0, np.int64))
    if not form.separator.isascii() or len(header.names) < 2 or _lone_returns(data):
        return None
    quotes = data.count(b'"', start) if data.find(b'"', start) >= 0 else 0
    if quotes % 2:
        return None  # one of them is not closed
    irregular = _Irregular(form.max_rejects)
    body = memoryview(data)[start:end]
    try:
        table = _read(body, header, form, plain, (irregular, quotes > 0))
    except pa.ArrowInvalid:
        return None
    n_lines = data.count(b"\n", start, end) + 1
    if table.num_rows == n_lines:
        lines = np.arange(header.line + 1, header.line + 1 + n_lines)
        found = Rows(_columns(table), lines)
    elif quotes:
        return None
    else:
        ragged_rows = _without_ragged(table, body, header, irregular)
        if ragged_rows is None:
            return None
        found = ragged_rows
    return _without_broken_cells(found, text, header, form)


def _read(
    body: memoryview,
    header: Header,
    form: TextFormat,
    plain: Collection[str],
    handling: tuple[_Irregular, bool],
) -> pa.Table:
    irregular, quoted = handling
    keys = [str(i) for i in range(len(header.names))]
    types = {
        key: pa.string() if name in plain else _DICTIONARY
        for key, name in zip(keys, header.names, strict=True)
    }
    return pacsv.read_csv(
        pa.BufferReader(pa.py_buffer(body)),
        read_options=pacsv.ReadOptions(
            column_names=keys, use_threads=False, block_size=min(len(body) + 1, _BLOCK)
        ),
        parse_options=pacsv.ParseOptions(
            delimiter=form.separator,
            newlines_in_values=quoted,
            invalid_row_handler=irregular.skip,
        ),
        convert_options=pacsv.ConvertOptions(
            column_types=types,
            null_values=[],
            strings_can_be_null=False,
            check_utf8=False,  # the text was brought to UTF-8 before
        ),
    )


def _columns(table: pa.Table) -> list[pa.Array]:
    columns = []
    for column in table.columns:
        if column.num_chunks == 1:
            columns.append(column.chunk(0))
        else:
            columns.append(pa.concat_arrays(column.unify_dictionaries().chunks))
    return columns


def _without_ragged(
    table: pa.Table, body: memoryview, header: Header, irregular: _Irregular
) -> Rows | None:
    """Rows with their lines where some lines are blank or ragged."""
    breaks = np.append(arrow.places(body, ord("\n")), len(body))
    begins = np.append(0, breaks[:-1] + 1)
    length = breaks - begins
    one = length == 1
    one[one] = np.frombuffer(body, np.uint8)[begins[one]] == ord("\r")
    candidates = np.flatnonzero((length > 0) & ~one)
    bad = np.array(irregular.numbers, np.int64)
    if table.num_rows + len(bad) != len(candidates) or (len(bad) and bad.min() < 0):
        return None
    lines = candidates + header.line + 1
    reasons = [
        Reason(int(lines[number]), None, shown or None, reason)
        for number, (shown, reason) in zip(bad.tolist(), irregular.kept, strict=False)
    ]
    return Rows(_columns(table), np.delete(lines, bad), reasons, len(bad))


def _without_broken_cells(found: Rows, text: Text, header: Header, form: TextFormat) -> Rows:
    """Take out rows that hold a NUL, a huge field, or bytes that are not in the encoding."""
    broken = np.zeros(len(found.lines), bool)
    nul = text.data.find(b"\0", header.body) >= 0
    told: dict[int, tuple[int, str]] = {}
    for number, column in enumerate(found.columns):
        encoded = pa.types.is_dictionary(column.type)
        cells = column.dictionary if encoded else column
        for wrong, reason in _wrong_cells(cells, nul, text.damaged, form):
            here = wrong[arrow.codes(column.indices)] if encoded else wrong
            for row in np.flatnonzero(here & ~broken)[: form.max_rejects].tolist():
                told[row] = (number, reason)
            broken |= here
    if not broken.any():
        return found
    reasons = list(found.reasons)
    for row, (number, reason) in sorted(told.items()):
        cell = found.columns[number][row].as_py()[:SHOWN].replace("\0", "\u2400")
        reasons.append(Reason(int(found.lines[row]), header.names[number], cell, reason))
    reasons.sort(key=lambda one: one.line or 0)
    keep = np.flatnonzero(~broken)
    return Rows(
        [column.take(arrow.indices(keep)) for column in found.columns],
        found.lines[keep],
        reasons[: form.max_rejects],
        found.n_rejected + int(broken.sum()),
    )


def _wrong_cells(
    cells: pa.StringArray, nul: bool, damaged: bool, form: TextFormat
) -> list[tuple[NDArray[np.bool_], str]]:
    found = []
    # Bytes first: only where they are too many does the count of characters matter.
    if len(cells) and arrow.lengths(cells).max() > form.max_field_characters:
        long = arrow.codes(pc.utf8_length(cells)) > form.max_field_characters
        found.append((long, too_long(form)))
    if nul:
        found.append((arrow.mask(pc.match_substring(cells, "\0")), NUL))
    if damaged:
        found.append((arrow.mask(pc.match_substring(cells, "\ufffd")), NOT_IN_ENCODING))
    return found


def _end_of_rows(data: bytes, start: int) -> int:
    """End of the last row without the line breaks behind it."""
    end = len(data)
    while end > start and data[end - 1] in b"\r\n":
        end -= 1
    return end


def _lone_returns(data: bytes) -> bool:
    return data.find(b"\r") >= 0 and data.count(b"\r") != data.count(b"\r\n")

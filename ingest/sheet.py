"""A parsed file: columns of text with line numbers. No meaning is given to anything yet."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from functools import cached_property

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from ingest import arrow
from ingest.report import Reason

Codes = NDArray[np.int32]
Mask = NDArray[np.bool_]


@dataclass(frozen=True)
class Texts:
    """A column of text: the distinct texts, trimmed, and a code a row.

    `name` is the name of the column as the file has it, for people.
    """

    name: str
    codes: Codes
    distinct: pa.StringArray

    @classmethod
    def of(cls, name: str, column: pa.Array) -> Texts:
        """Trim and encode an Arrow array of strings, or of a dictionary of strings."""
        if not pa.types.is_dictionary(column.type):
            column = column.dictionary_encode()
        codes = arrow.codes(column.indices)
        distinct = column.dictionary
        trimmed = pc.utf8_trim_whitespace(distinct)
        if not trimmed.equals(distinct):
            merged = trimmed.dictionary_encode()
            codes = arrow.codes(merged.indices)[codes]
            distinct = merged.dictionary
        return cls(name, codes, distinct)

    @classmethod
    def plain(cls, name: str, column: pa.StringArray) -> Texts:
        """Encode a column of mostly distinct texts by its rows, without looking for equal ones."""
        return cls(name, np.arange(len(column), dtype=np.int32), column)

    @classmethod
    def constant(cls, name: str, text: str, rows: int) -> Texts:
        """The same text in every row."""
        return cls(name, np.zeros(rows, np.int32), arrow.strings([text.strip()]))

    @cached_property
    def texts(self) -> list[str]:
        """The distinct texts."""
        return self.distinct.to_pylist()

    @cached_property
    def empty(self) -> Mask:
        """Whether each row is empty."""
        if not len(self.distinct):
            return np.zeros(len(self.codes), bool)
        blank = arrow.lengths(pc.utf8_trim_whitespace(self.distinct)) == 0
        return blank[self.codes]

    def take(self, rows: NDArray[np.int64]) -> Texts:
        """The column at some rows, with repetitions where wanted."""
        return Texts(self.name, self.codes[rows], self.distinct)

    def at(self, row: int) -> str:
        """Text of one row."""
        return self.distinct[int(self.codes[row])].as_py()


@dataclass(frozen=True)
class Sheet:
    """All rows of a file that have the right number of fields.

    `columns` by the name in the header; `lines` is the first physical line of each row; `reasons`
    says why the other rows were rejected.
    """

    header: tuple[str, ...]
    header_line: int
    columns: dict[str, Texts]
    lines: NDArray[np.int64]
    reasons: tuple[Reason, ...] = ()
    n_rejected: int = 0

    @property
    def n_rows(self) -> int:
        """Number of rows with the right number of fields."""
        return len(self.lines)


@dataclass(frozen=True)
class _Fault:
    column: str | None
    value: Callable[[int], str | None]
    reason: str


@dataclass
class Faults:
    """What is wrong with which row. The first fault of a row is the one that is told."""

    n_rows: int
    code: NDArray[np.int32] = field(init=False)
    _known: list[_Fault] = field(default_factory=list)

    def __post_init__(self) -> None:
        """Begin without a fault."""
        self.code = np.zeros(self.n_rows, np.int32)

    @property
    def clean(self) -> Mask:
        """Rows without a fault."""
        return self.code == 0

    def add(
        self,
        rows: Mask | NDArray[np.int64],
        reason: str,
        column: Texts | None = None,
        *,
        name: str | None = None,
        value: Callable[[int], str | None] | None = None,
    ) -> None:
        """Mark rows (a mask or indices). The value told is that of `column`, or `value(row)`."""
        index = np.flatnonzero(rows) if rows.dtype == bool else rows
        index = index[self.code[index] == 0]
        if not len(index):
            return
        if column is not None:
            name = name or column.name
            value = value or column.at
        self._known.append(_Fault(name, value or (lambda _row: None), reason))
        self.code[index] = len(self._known)

    def reasons(self, lines: NDArray[np.int64], limit: int) -> list[Reason]:
        """The first `limit` faults in the order of the rows."""
        found = []
        for row in np.flatnonzero(self.code)[: max(limit, 0)].tolist():
            fault = self._known[int(self.code[row]) - 1]
            found.append(Reason(int(lines[row]), fault.column, fault.value(row), fault.reason))
        return found

    def __len__(self) -> int:
        """Number of rows with a fault."""
        return int(np.count_nonzero(self.code))


def combined(columns: Sequence[NDArray[np.integer]]) -> tuple[NDArray[np.int64], int]:
    """One code for each combination of codes, and a bound above all of them.

    Codes are mixed as digits of a number and renumbered only where the number would grow too large.
    """
    total = np.zeros(len(columns[0]), np.int64)
    bound = 1
    for column in columns:
        size = int(column.max()) + 1 if len(column) else 1
        if bound > 2**62 // size:
            _, total = np.unique(total, return_inverse=True)
            bound = int(total.max()) + 1
            if bound > 2**62 // size:  # pragma: no cover - more rows than fit in memory
                raise OverflowError("too many combinations")
        total = total * size + column
        bound *= size
    return total, bound


def numbered(mixed: NDArray[np.int64], bound: int) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Distinct codes as numbers: the first place of each in order of the codes, and their numbers.

    The same as `numpy.unique`, without sorting where the codes are dense. `bound` is above all.
    """
    if bound > 8 * len(mixed) + 1024:
        _, first, number = np.unique(mixed, return_index=True, return_inverse=True)
        return first, number
    n = len(mixed)
    place = np.full(bound, n, np.int64)
    place[mixed[::-1]] = np.arange(n - 1, -1, -1)  # of equal codes the first place is written last
    present = place < n
    number_of = np.cumsum(present) - 1
    return place[present], number_of[mixed]

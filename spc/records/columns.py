"""A table as plain numpy columns.

The nightly pass handles many small tables; a data frame costs more to make and to index than the
arithmetic on such a table. Text is kept as Python text in object arrays.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

Array = NDArray[Any]
IntArray = NDArray[np.int64]


class Columns:
    """Columns of equal length, by name. They are not changed, only replaced in a new table."""

    def __init__(self, arrays: Mapping[str, Array]) -> None:
        """Raises ValueError when the columns differ in length."""
        self._arrays = dict(arrays)
        lengths = {len(array) for array in self._arrays.values()}
        if len(lengths) > 1:
            raise ValueError(f"columns differ in length: {sorted(lengths)}")
        self._length = lengths.pop() if lengths else 0

    def __len__(self) -> int:
        return self._length

    def __iter__(self) -> Iterator[str]:
        return iter(self._arrays)

    def __contains__(self, name: object) -> bool:
        return name in self._arrays

    def __getitem__(self, name: str) -> Array:
        return self._arrays[name]

    def take(self, which: Array) -> Columns:
        """Rows by a mask or by positions."""
        return Columns({name: array[which] for name, array in self._arrays.items()})

    def pick(self, names: Iterable[str]) -> Columns:
        """Some of the columns."""
        return Columns({name: self._arrays[name] for name in names})

    def having(self, **arrays: Array) -> Columns:
        """The same table with more or other columns."""
        return Columns({**self._arrays, **arrays})

    def rows(self, names: Sequence[str]) -> Iterator[tuple[Any, ...]]:
        """Rows of some columns as plain Python values."""
        return zip(*(self._arrays[name].tolist() for name in names), strict=True)


def of_rows(rows: Sequence[Sequence[Any]], kinds: Mapping[str, str]) -> Columns:
    """Table of rows from the database.

    `kinds` gives each column, in order, its kind: ``i`` whole numbers, ``f`` numbers (None becomes
    NaN), ``o`` anything else.
    """
    if not rows:
        types = {"i": np.int64, "f": np.float64, "o": object}
        return Columns({name: np.zeros(0, types[kind]) for name, kind in kinds.items()})
    out: dict[str, Array] = {}
    for (name, kind), values in zip(kinds.items(), zip(*rows, strict=True), strict=True):
        if kind == "o":
            column = np.empty(len(values), dtype=object)
            column[:] = values
            out[name] = column
        else:
            out[name] = np.array(values, dtype=np.int64 if kind == "i" else np.float64)
    return Columns(out)


def joined(tables: Sequence[Columns]) -> Columns:
    """Tables of the same columns below one another."""
    names = list(tables[0])
    return Columns({name: np.concatenate([table[name] for table in tables]) for name in names})


def text(value: str, length: int) -> Array:
    """A column of the same text."""
    out = np.empty(length, dtype=object)
    out[:] = value
    return out


def codes_of(values: Array) -> tuple[IntArray, list[Any]]:
    """Code of each value, and the distinct values in their order."""
    if values.dtype != object:
        distinct, codes = np.unique(values, return_inverse=True)
        return codes.astype(np.int64), distinct.tolist()
    plain = values.tolist()
    known = sorted(set(plain))
    number = {value: code for code, value in enumerate(known)}
    return np.fromiter(map(number.__getitem__, plain), np.int64, len(plain)), known


def row_codes(columns: Sequence[Array]) -> IntArray:
    """One code for each distinct row of some columns, from 0, in the order of the rows' values."""
    code = np.zeros(len(columns[0]), np.int64)
    for column in columns:
        part, distinct = codes_of(column)
        code = np.unique(code * max(len(distinct), 1) + part, return_inverse=True)[1]
    return code.astype(np.int64)


def order_of(columns: Sequence[Array]) -> IntArray:
    """Positions that sort by the columns, the first one first; equal rows stay in order."""
    keys = [codes_of(column)[0] if column.dtype == object else column for column in columns]
    return np.lexsort(keys[::-1])


def starts_of_groups(columns: Sequence[Array]) -> NDArray[np.bool_]:
    """Whether each row begins a group of equal neighbours."""
    length = len(columns[0])
    new = np.ones(length, dtype=bool)
    if length:
        new[1:] = False
        for column in columns:
            new[1:] |= column[1:] != column[:-1]
    return new

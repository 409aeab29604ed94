"""Sites of readings: their names and places, and names for those that have none.

A reading belongs to a site by name. Where the file gives no name it is made from the place
(`12.5,-30`, in mm; with a place in the field `12.5,-30@3,4`); where it gives neither, it is the
place of the row among the nameless rows of its wafer, parameter, layer and stamp: `1`, `2`, … So
the same file read again gives the same names.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from ingest.columns import PLACE_COLUMNS, Rows
from ingest.numbers import parse_numbers
from ingest.sheet import Faults, Texts, combined, numbered

_NOT_GIVEN = -1
_SORTED_UP_TO = 20_000

Place = tuple[str, float | None, float | None, float | None, float | None]


@dataclass(frozen=True)
class Places:
    """Each (site, x_mm, y_mm, field_x_mm, field_y_mm) of a file once."""

    places: list[Place]

    @cached_property
    def names(self) -> list[str]:
        """Name of the site of each place."""
        return [place[0] for place in self.places]

    @cached_property
    def rank(self) -> NDArray[np.int64]:
        """Order of the places in a measurement, so that layouts do not depend on the row order."""
        n = len(self.places)
        if n > _SORTED_UP_TO:
            return np.arange(n)
        order = sorted(range(n), key=lambda i: (natural(self.places[i][0]), repr(self.places[i])))
        rank = np.empty(n, np.int64)
        rank[order] = np.arange(n)
        return rank


def natural(text: str) -> list[tuple[int, int, str]]:
    """Sort key that puts `site 10` behind `site 9`."""
    return [
        (0, int(part), "") if part.isascii() and part.isdigit() and len(part) < 19 else (1, 0, part)
        for part in re.split(r"([0-9]+)", text)
    ]


def read_places(
    rows: Rows, measured: NDArray[np.int64], keyed: NDArray[np.bool_], faults: Faults
) -> tuple[NDArray[np.int64], Places]:
    """Place of each row (an index into the places), shape (rows,).

    `keyed` says which rows have a readable wafer and stamp; others get no place. Rows with a place
    that is no number are marked.
    """
    house = rows.house
    columns, numbers = [], []
    for name in PLACE_COLUMNS:
        if name in house:
            column, values = _coordinate(house[name], faults)
            columns.append(column)
            numbers.append(values)
        else:
            columns.append(np.full(rows.n, _NOT_GIVEN, np.int32))
            numbers.append(np.zeros(0))
    _pairs(columns, house, faults)
    if "site" in house:
        named = ~house["site"].empty
        site_texts = house["site"].texts
        site_codes = np.where(named, house["site"].codes, _NOT_GIVEN)
    else:
        named = np.zeros(rows.n, bool)
        site_texts, site_codes = [], np.full(rows.n, _NOT_GIVEN)
    nameless = keyed & ~named & (columns[0] == _NOT_GIVEN) & (columns[2] == _NOT_GIVEN)
    turn = np.zeros(rows.n, np.int64)
    if nameless.any():
        index = np.flatnonzero(nameless)
        turn[index] = _turns(rows, measured, index) + 1
    first, place = numbered(*combined([site_codes + 1, turn, *(c + 1 for c in columns)]))
    found: list[Place] = []
    for row in first.tolist():
        xyuv = [
            None if column[row] == _NOT_GIVEN else float(values[column[row]])
            for column, values in zip(columns, numbers, strict=True)
        ]
        site = site_texts[site_codes[row]] if named[row] else ""
        if site and rows.places and xyuv[0] is None:
            given = rows.places.get(site, ())
            xyuv = [*given, *[None] * (4 - len(given))]
        x, y, u, v = xyuv
        found.append((site or _name(xyuv) or str(turn[row]), x, y, u, v))
    return place, Places(found)


def _coordinate(column: Texts, faults: Faults) -> tuple[NDArray[np.int32], NDArray[np.float64]]:
    """Codes (or not given) and the number of each code."""
    numbers, good = parse_numbers(column.distinct)
    empty = column.empty
    bad = ~good[column.codes] & ~empty if len(good) else empty
    faults.add(bad, "is no place in mm; write a number, or nothing", column)
    distinct, renumber = np.unique(numbers + 0.0, return_inverse=True)  # 1.0 and 1 are one place
    codes = renumber.astype(np.int32)[column.codes] if len(good) else column.codes
    return np.where(empty | bad, _NOT_GIVEN, codes).astype(np.int32), distinct


def _pairs(columns: list[NDArray[np.int32]], house: dict[str, Texts], faults: Faults) -> None:
    for first in (0, 2):
        half = (columns[first] == _NOT_GIVEN) != (columns[first + 1] == _NOT_GIVEN)
        if half.any():
            x, y = PLACE_COLUMNS[first : first + 2]
            faults.add(half, f"{x} and {y} must be given together", house[x])


def _turns(rows: Rows, measured: NDArray[np.int64], index: NDArray[np.int64]) -> NDArray[np.int64]:
    """Place of each of the rows among those of its wafer, parameter, layer and stamp, from 0."""
    keys = [rows.house[name] for name in ("parameter", "lot", "wafer")]
    keys += [rows.context["layer"]] if "layer" in rows.context else []
    _, stamp = np.unique(measured[index], return_inverse=True)
    mixed, _ = combined([*(key.codes[index] for key in keys), stamp])
    order = np.argsort(mixed, kind="stable")
    ordered = mixed[order]
    starts = np.flatnonzero(np.concatenate([[True], ordered[1:] != ordered[:-1]]))
    sizes = np.diff(np.append(starts, len(order)))
    turns = np.empty(len(index), np.int64)
    turns[order] = np.arange(len(order)) - np.repeat(starts, sizes)
    return turns


def _name(xyuv: list[float | None]) -> str:
    """Name of a nameless site from its place."""
    at = [",".join(_number(v) for v in pair if v is not None) for pair in (xyuv[:2], xyuv[2:])]
    return "@".join(at) if at[1] else at[0]


def _number(value: float) -> str:
    text = repr(round(value, 6) + 0.0)
    return text.removesuffix(".0")

"""House columns of a parsed sheet: from the file, from constants, or from wide columns."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from ingest import arrow
from ingest.feeds import Mapping, Source, WideGroup
from ingest.sheet import Sheet, Texts

PLACE_COLUMNS = ("x_mm", "y_mm", "field_x_mm", "field_y_mm")


@dataclass(frozen=True)
class Rows:
    """Rows with house columns and context, and the first line of each in the file.

    In a wide layout a row is one cell. `places` are those that the feed gives, by site.
    """

    house: dict[str, Texts]
    context: dict[str, Texts]
    lines: NDArray[np.int64]
    places: dict[str, tuple[float, ...]]

    @property
    def n(self) -> int:
        """Number of rows."""
        return len(self.lines)


def rows_of(sheet: Sheet, mapping: Mapping, units: dict[str, str]) -> Rows:
    """Rows of a sheet. `units` replaces texts of the unit column (those of the feed)."""
    if mapping.wide:
        rows = _wide_rows(sheet, mapping)
    else:
        n = sheet.n_rows
        house = {name: _column(sheet, source, n) for name, source in mapping.house.items()}
        context = {name: _column(sheet, source, n) for name, source in mapping.context.items()}
        rows = Rows(house, context, sheet.lines, {})
    if units and "unit" in rows.house:
        unit = rows.house["unit"]
        said = arrow.strings([units.get(text, text) for text in unit.texts])
        rows.house["unit"] = Texts.of(unit.name, said.take(arrow.indices(unit.codes)))
    return rows


def _column(sheet: Sheet, source: Source, n: int) -> Texts:
    if source.column is not None:
        return sheet.columns[source.column]
    return Texts.constant("(constant)", source.constant or "", n)


def _wide_rows(sheet: Sheet, mapping: Mapping) -> Rows:
    """One row a filled cell, line by line; an empty cell says that the site was not measured.

    A line without any filled cell gives one row, which is then rejected for its empty value.
    """
    cells = [(group, column, site) for group in mapping.wide for column, site in group.columns]
    n, k = sheet.n_rows, len(cells)
    filled = np.empty((n, k), bool)
    for j, (_, column, _) in enumerate(cells):
        filled[:, j] = ~sheet.columns[column].empty
    filled[~filled.any(axis=1), 0] = True
    of_line, of_cell = np.nonzero(filled)
    base = {name: _column(sheet, source, n) for name, source in mapping.house.items()}
    house = {name: texts.take(of_line) for name, texts in base.items()}
    house["value"] = _values(sheet, [column for _, column, _ in cells], of_line, of_cell)
    house["site"] = _per_cell("site", [site for _, _, site in cells], of_cell)
    for name in ("parameter", "unit"):
        given = [getattr(group, name) for group, _, _ in cells]
        if all(given):
            house[name] = _per_cell(name, given, of_cell)
        elif any(given):
            house[name] = _mixed(house[name], given, of_cell)
    context = {
        name: _column(sheet, source, n).take(of_line) for name, source in mapping.context.items()
    }
    return Rows(house, context, sheet.lines[of_line], _places(mapping.wide))


def _values(
    sheet: Sheet, columns: list[str], of_line: NDArray[np.int64], of_cell: NDArray[np.int64]
) -> Texts:
    arrays = [sheet.columns[column].distinct for column in columns]
    together = pa.concat_arrays(arrays)
    starts = np.cumsum([0] + [len(a) for a in arrays[:-1]])
    codes = np.stack([sheet.columns[column].codes for column in columns])
    place = starts[of_cell] + codes[of_cell, of_line]
    return Texts.plain("(wide columns)", together.take(arrow.indices(place)))


def _per_cell(name: str, texts: list[str], of_cell: NDArray[np.int64]) -> Texts:
    return Texts.of(name, arrow.strings(texts).take(arrow.indices(of_cell)))


def _mixed(column: Texts, given: list[str | None], of_cell: NDArray[np.int64]) -> Texts:
    """The text of the wide group where it has one, else that of the column."""
    own = column.distinct.take(arrow.indices(column.codes))
    theirs = pa.array(given, pa.string()).take(arrow.indices(of_cell))
    return Texts.of(column.name, pc.coalesce(theirs, own))


def _places(wide: tuple[WideGroup, ...]) -> dict[str, tuple[float, ...]]:
    places: dict[str, tuple[float, ...]] = {}
    for group in wide:
        places |= group.places
    return places

"""A sheet of readings to checked arrays (pure): one entry a reading, nothing stored yet."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import tzinfo

import numpy as np
import pyarrow.compute as pc
from numpy.typing import NDArray

from config.settings import PlausibleSettings
from config.values import unit_factor
from ingest import arrow, moments, sites, units
from ingest.columns import Rows
from ingest.numbers import parse_numbers, reason_of
from ingest.sheet import Faults, Texts, combined, numbered
from spc.records.contexts import context_text
from spc.records.readings import WaferKey

NO_STAMP = np.iinfo(np.int64).min
# PostgreSQL has no index for keys of more than some 2700 bytes; a key has up to four names.
LONGEST_NAME = 128
NAMES = (
    *("parameter", "lot", "wafer", "site", "layer", "tool", "module", "gauge", "product"),
    *("recipe", "step"),
)
_KEY_COLUMNS = ("parameter", "lot", "wafer")


@dataclass(frozen=True)
class Rules:
    """What the configuration says about readings of one file."""

    zone: tzinfo
    known_units: units.KnownUnits
    plausible: dict[str, PlausibleSettings]
    stamp_format: str | None = None
    decimal: str = "."
    thousands: str | None = None


@dataclass(frozen=True)
class Runs:
    """Neighbouring rows with everything alike but site and value: arrays of shape (runs,)."""

    wafer: NDArray[np.int64]  # index into `Batch.wafers`
    measured_us: NDArray[np.int64]
    processed_us: NDArray[np.int64]  # NO_STAMP where not given
    context: NDArray[np.int64]  # index into `Batch.contexts`


@dataclass(frozen=True)
class Batch:
    """The good readings of one file; arrays of shape (readings,) unless said otherwise."""

    wafers: list[WaferKey]
    contexts: list[str]
    units: dict[str, str]  # house unit of each parameter
    places: sites.Places
    runs: Runs
    run: NDArray[np.int64]
    place: NDArray[np.int64]  # index into `places`
    value: NDArray[np.float64]  # in the house unit
    line: NDArray[np.int64]
    row: NDArray[np.int64]  # index of the row among those read, for faults found later
    values: Texts  # the values as they stand in the file, of all rows

    @property
    def n(self) -> int:
        """Number of readings."""
        return len(self.value)


def read_batch(rows: Rows, rules: Rules, faults: Faults, warnings: Faults) -> Batch:
    """Check every row, mark the faulty ones, and return the others."""
    house = rows.house
    for name in _KEY_COLUMNS:
        faults.add(house[name].empty, f"{name} is empty", house[name])
    for name in NAMES:
        if name in house or name in rows.context:
            check_names(house.get(name) or rows.context[name], faults)
    measured = stamps_of(house["measured_at"], rules.zone, rules.stamp_format, faults)
    processed = np.full(rows.n, NO_STAMP, np.int64)
    if "processed_at" in house:
        given = ~house["processed_at"].empty
        found = stamps_of(house["processed_at"], rules.zone, rules.stamp_format, faults, given)
        processed[given] = found[given]
    # Nameless sites are counted before values are judged, so that a mended row keeps its name.
    keyed = faults.clean
    place, places = sites.read_places(rows, measured, keyed, faults)
    value = _values(house["value"], rules, faults)
    factor, known = units.factors(house["parameter"], house["unit"], rules.known_units, faults)
    value = value * factor
    huge = ~(np.abs(value) <= 1e100)
    if huge.any():
        faults.add(huge, "is beyond the range of a measurement", house["value"])
    _plausible(value, house, known, rules, (faults, warnings))
    good = np.flatnonzero(faults.clean)
    return _batch(rows, good, (measured, processed), (place, places), value, known)


def stamps_of(
    column: Texts,
    zone: tzinfo,
    stamp_format: str | None,
    faults: Faults,
    given: NDArray[np.bool_] | None = None,
) -> NDArray[np.int64]:
    """Stamps of a column, shape (rows,); rows without a stamp are marked, but those not given."""
    stamps, wrong = moments.parse_stamps(column.distinct, zone, stamp_format)
    for reason, mask in wrong.items():
        rows = mask[column.codes]
        faults.add(rows if given is None else rows & given, reason, column)
    return stamps[column.codes] if len(stamps) else np.zeros(len(column.codes), np.int64)


def check_names(column: Texts, faults: Faults) -> None:
    """Mark rows whose name holds a line break (a quote that was not closed) or is too long."""
    if not len(column.distinct):
        return
    broken = arrow.mask(pc.match_substring_regex(column.distinct, r"[\r\n]"))
    if broken.any():
        reason = f"{column.name} holds a line break; close the quote, or take the break out"
        faults.add(broken[column.codes], reason, column)
    if arrow.lengths(column.distinct).max() > LONGEST_NAME:
        long = np.array([len(text) > LONGEST_NAME for text in column.texts], bool)
        reason = f"{column.name} is longer than {LONGEST_NAME} characters"
        faults.add(long[column.codes], reason, column)


def contexts_of(
    columns: dict[str, Texts], index: NDArray[np.int64]
) -> tuple[NDArray[np.int64], list[str]]:
    """Code of the context of some rows, and the JSON of each context."""
    names = list(columns)
    if not names:
        return np.zeros(len(index), np.int64), [context_text({})]
    codes = [columns[name].codes[index] for name in names]
    first, inverse = numbered(*combined(codes))
    texts = [columns[name].texts for name in names]
    found = [
        context_text({name: text[code] for name, text, code in zip(names, texts, one, strict=True)})
        for one in zip(*(c[first].tolist() for c in codes), strict=True)
    ]
    # Two combinations can give the same JSON where an empty text and an absent column meet.
    unique = {text: i for i, text in enumerate(dict.fromkeys(found))}
    renumber = np.array([unique[text] for text in found], np.int64)
    return renumber[inverse], list(unique)


def _values(column: Texts, rules: Rules, faults: Faults) -> NDArray[np.float64]:
    values, good = parse_numbers(column.distinct, rules.decimal, rules.thousands)
    if not good.all():
        bad = np.flatnonzero(~good[column.codes])
        bad = bad[faults.code[bad] == 0]
        by_reason: dict[str, list[int]] = {}
        for row in bad.tolist():
            by_reason.setdefault(reason_of(column.at(row), rules.decimal), []).append(row)
        for reason, which in by_reason.items():
            faults.add(np.array(which, np.int64), reason, column)
    return values[column.codes]


def _plausible(
    value: NDArray[np.float64],
    house: dict[str, Texts],
    known: dict[str, str],
    rules: Rules,
    into: tuple[Faults, Faults],
) -> None:
    """Warn of, or reject, values outside the window of their parameter."""
    faults, warnings = into
    parameter, unit = house["parameter"], house["unit"]
    for code, name in enumerate(parameter.texts):
        window = rules.plausible.get(name)
        factor = unit_factor(window.unit, known[name]) if window and name in known else None
        if window is None or factor is None:
            continue
        rows = np.flatnonzero(parameter.codes == code)
        outside = (value[rows] < window.low * factor) | (value[rows] > window.high * factor)
        which = rows[outside & faults.clean[rows]]
        if len(which):
            reason = (
                f"lies outside the plausible {window.low:g} to {window.high:g} {window.unit}; "
                "a wrong unit?"
            )

            def shown(row: int) -> str:
                return f"{house['value'].at(row)} {unit.at(row)}"

            target = faults if window.action == "reject" else warnings
            target.add(which, reason, house["value"], value=shown)


def _batch(
    rows: Rows,
    good: NDArray[np.int64],
    stamps: tuple[NDArray[np.int64], NDArray[np.int64]],
    place: tuple[NDArray[np.int64], sites.Places],
    value: NDArray[np.float64],
    known: dict[str, str],
) -> Batch:
    house, (measured, processed) = rows.house, stamps
    key_columns = [house["parameter"], *_optional(rows.context, "layer"), house["lot"]]
    key_columns.append(house["wafer"])
    codes: list[NDArray[np.integer]] = [c.codes[good] for c in key_columns]
    codes += [c.codes[good] for name, c in rows.context.items() if name != "layer"]
    starts = run_starts([*codes, measured[good], processed[good]])
    first = good[starts]
    run = np.cumsum(np.isin(np.arange(len(good)), starts, assume_unique=True)) - 1
    wafer, wafers = _wafers(rows, first)
    context, contexts = contexts_of(rows.context, first)
    return Batch(
        wafers=wafers,
        contexts=contexts,
        units=known,
        places=place[1],
        runs=Runs(wafer, measured[first], processed[first], context),
        run=run,
        place=place[0][good],
        value=value[good],
        line=rows.lines[good],
        row=good,
        values=house["value"],
    )


def _optional(columns: dict[str, Texts], name: str) -> list[Texts]:
    return [columns[name]] if name in columns else []


def run_starts(columns: Sequence[NDArray[np.integer]]) -> NDArray[np.int64]:
    """Where a row differs from the one before it in any of the columns."""
    n = len(columns[0])
    changed = np.zeros(n, bool)
    changed[:1] = True
    for column in columns:
        changed[1:] |= column[1:] != column[:-1]
    return np.flatnonzero(changed)


def _wafers(rows: Rows, first: NDArray[np.int64]) -> tuple[NDArray[np.int64], list[WaferKey]]:
    house = rows.house
    columns = [house["parameter"], *_optional(rows.context, "layer"), house["lot"], house["wafer"]]
    codes = [c.codes[first] for c in columns]
    place, inverse = numbered(*combined(codes))
    texts = [
        np.array(c.texts, object)[code[place]].tolist()
        for c, code in zip(columns, codes, strict=True)
    ]
    if len(columns) == 3:
        texts.insert(1, [""] * len(place))
    return inverse, list(zip(*texts, strict=True))

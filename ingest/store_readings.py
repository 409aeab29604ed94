"""Storing the readings of one file: compared with what is there, packed into measurements."""

from __future__ import annotations

import json
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from itertools import repeat

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Connection

from ingest.readings import NO_STAMP, Batch, run_starts
from ingest.remeasured import (
    CONFLICT_CONTEXT,
    CONFLICT_VALUE,
    Compared,
    judge,
    suspicious,
    together,
)
from ingest.sheet import Faults, combined, numbered
from ingest.sites import Place
from spc.records.interned import Vocabulary
from spc.records.readings import (
    StoredMeasurement,
    insert_measurements,
    layout_sites,
    stored_measurements,
    stored_values,
)

_NOTHING = np.zeros(0, np.int64)
_EMPTY = Compared(_NOTHING, _NOTHING, _NOTHING, np.zeros(0), _NOTHING, _NOTHING, _NOTHING)


@dataclass(frozen=True)
class Stored:
    """Readings of one file by what became of them."""

    loaded: int
    duplicate: int
    superseded: int


def store_readings(
    connection: Connection, file_id: int, batch: Batch, vocabulary: Vocabulary, faults: Faults
) -> Stored:
    """Store the readings that are new; mark the rows of those in conflict with stored ones."""
    if not batch.n:
        return Stored(0, 0, 0)
    context_ids = np.array(vocabulary.contexts.ids(connection, batch.contexts), np.int64)
    keep, duplicate, superseded = _compare(connection, batch, context_ids, faults)
    rows = np.flatnonzero(keep)
    insert_measurements(
        connection, _measurements(connection, file_id, batch, rows, context_ids, vocabulary)
    )
    return Stored(len(rows), duplicate, superseded)


def _compare(
    connection: Connection, batch: Batch, context_ids: NDArray[np.int64], faults: Faults
) -> tuple[NDArray[np.bool_], int, int]:
    """Which readings to keep, how many are duplicates, how many readings are now superseded."""
    names: dict[str, int] = {}
    site_of_place = np.array([names.setdefault(s, len(names)) for s in batch.places.names])
    known = stored_measurements(connection, batch.wafers)
    stored_wafers = {one.wafer for one in known}
    known_wafer = np.array([wafer in stored_wafers for wafer in batch.wafers], bool)
    site = site_of_place[batch.place]
    runs = batch.runs
    look = np.flatnonzero(suspicious(runs.wafer, batch.run, site, known_wafer))
    keep = np.ones(batch.n, bool)
    if not len(look):
        return keep, 0, 0
    run = batch.run[look]
    new = Compared(
        wafer=runs.wafer[run],
        site=site[look],
        stamp=runs.measured_us[run],
        value=batch.value[look],
        context=context_ids[runs.context[run]],
        processed=runs.processed_us[run],
        place=batch.place[look],
    )
    verdict = judge(_stored(connection, batch, known, names), new)
    keep[look] = verdict.keep
    faults.add(batch.row[look[verdict.other_value]], CONFLICT_VALUE, batch.values)
    faults.add(batch.row[look[verdict.other_context]], CONFLICT_CONTEXT, batch.values)
    return keep, int(verdict.duplicate.sum()), verdict.superseded


def _stored(
    connection: Connection,
    batch: Batch,
    found: Sequence[StoredMeasurement],
    names: dict[str, int],
) -> Compared:
    """Stored readings of the wafers of the batch, in its codes; `names` grows by their sites.

    Values are fetched only where a stamp meets one of the batch; elsewhere they do not matter.
    """
    wafers = {wafer: i for i, wafer in enumerate(batch.wafers)}
    places = {place: i for i, place in enumerate(batch.places.places)}
    meeting = set(zip(batch.runs.wafer.tolist(), batch.runs.measured_us.tolist(), strict=True))
    meets = [one.id for one in found if (wafers[one.wafer], one.measured_us) in meeting]
    values = stored_values(connection, meets)
    codes = {}
    for number, sites in layout_sites(connection, {one.layout_id for one in found}).items():
        site = [names.setdefault(str(place[0]), len(names)) for place in sites]
        place = [places.setdefault(_place(one), len(places)) for one in sites]
        codes[number] = (np.array(site, np.int64), np.array(place, np.int64))
    parts = [_EMPTY]
    for one in found:
        site_codes, place_codes = codes[one.layout_id]
        n = len(site_codes)
        kept = values.get(one.id)
        parts.append(
            Compared(
                wafer=np.full(n, wafers[one.wafer], np.int64),
                site=site_codes,
                stamp=np.full(n, one.measured_us, np.int64),
                value=np.full(n, np.nan) if kept is None else kept,
                context=np.full(n, one.context_id, np.int64),
                processed=np.full(
                    n, NO_STAMP if one.processed_us is None else one.processed_us, np.int64
                ),
                place=place_codes,
            )
        )
    return together(parts)


def _place(site: Sequence[object]) -> Place:
    name, *xyuv = site
    x, y, u, v = (None if at is None else float(at) for at in xyuv)  # type: ignore[arg-type]
    return str(name), x, y, u, v


def _measurements(
    connection: Connection,
    file_id: int,
    batch: Batch,
    rows: NDArray[np.int64],
    context_ids: NDArray[np.int64],
    vocabulary: Vocabulary,
) -> Iterator[tuple[object, ...]]:
    """Rows of the table of measurements, in the order in which they begin in the file."""
    if not len(rows):
        return iter(())
    measurement, run_of = _measurement_of_run(batch)
    of_reading = measurement[batch.run[rows]]
    n_places = len(batch.places.places)
    order = of_reading * n_places + batch.places.rank[batch.place[rows]]
    if not (order[1:] > order[:-1]).all():
        sort = np.argsort(order, kind="stable")
        rows, of_reading = rows[sort], of_reading[sort]
    starts = run_starts([of_reading])
    ends = np.append(starts[1:], len(rows))
    n = ends - starts
    value = batch.value[rows]
    mean = np.add.reduceat(value, starts) / n
    squares = np.add.reduceat((value - np.repeat(mean, n)) ** 2, starts)
    line = batch.line[rows]
    run = run_of[of_reading[starts]]
    wafer = batch.runs.wafer[run]
    keys = np.array(batch.wafers, object).reshape(-1, 4)[wafer]
    units = np.array([batch.units[key[0]] for key in batch.wafers], object)[wafer]
    processed = batch.runs.processed_us[run]
    given = processed.astype(object)
    given[processed == NO_STAMP] = None
    packed = value.astype("<f8").tobytes()
    bounds = zip((8 * starts).tolist(), (8 * ends).tolist(), strict=True)
    return zip(
        repeat(file_id),
        *(keys[:, i].tolist() for i in range(4)),
        batch.runs.measured_us[run].tolist(),
        given.tolist(),
        context_ids[batch.runs.context[run]].tolist(),
        _layout_ids(connection, batch, batch.place[rows], (starts, ends), vocabulary),
        units.tolist(),
        n.tolist(),
        mean.tolist(),
        squares.tolist(),
        [packed[s:e] for s, e in bounds],
        np.minimum.reduceat(line, starts).tolist(),
        np.maximum.reduceat(line, starts).tolist(),
        strict=False,  # the file's number goes on for ever
    )


def _measurement_of_run(batch: Batch) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Number of the measurement of each run, by first appearance, and the first run of each."""
    runs = batch.runs
    _, stamp = np.unique(runs.measured_us, return_inverse=True)
    _, processed = np.unique(runs.processed_us, return_inverse=True)
    first, inverse = numbered(*combined([runs.wafer, stamp, processed, runs.context]))
    by_appearance = np.argsort(first)
    renumber = np.empty(len(first), np.int64)
    renumber[by_appearance] = np.arange(len(first))
    return renumber[inverse], first[by_appearance]


def _layout_ids(
    connection: Connection,
    batch: Batch,
    place: NDArray[np.int64],
    bounds: tuple[NDArray[np.int64], NDArray[np.int64]],
    vocabulary: Vocabulary,
) -> list[int]:
    """Id of the layout of each measurement: the sequence of its places."""
    codes = place.astype(np.int32).tobytes()
    known: dict[bytes, int] = {}
    of_measurement = [
        known.setdefault(codes[s:e], len(known))
        for s, e in zip((4 * bounds[0]).tolist(), (4 * bounds[1]).tolist(), strict=True)
    ]
    places = batch.places.places
    sequences = [np.frombuffer(key, np.int32).tolist() for key in known]
    texts = [json.dumps([places[i] for i in one], ensure_ascii=False) for one in sequences]
    sizes = [len(one) for one in sequences]
    ids = vocabulary.layouts.ids(connection, texts, sizes)
    return [ids[i] for i in of_measurement]

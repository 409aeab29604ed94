"""The capability of months whose site values were taken away, as it was before they went.

A review of such a month gives the kept figures as long as they still answer what is asked: the same
specification, target and unit, the same wafers, and none of them with site values again. Otherwise
the figures come from the sums of the wafers, and the review says so.
"""

from __future__ import annotations

import json
from collections.abc import Iterator, Mapping
from datetime import datetime

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Connection

from config.control_plan import Characteristic
from config.load import Bay
from spc.monitoring.review_rows import LEVEL, Ask, UnitStudy, empty_row, study_units
from spc.monitoring.review_sites import LogBook, Readings, Window, read_months
from spc.monitoring.review_units import units_of
from spc.monitoring.wafers import Stores
from spc.records.aggregation import KeptStudy, StudyKey
from spc.records.contexts import ContextStore
from spc.records.measurements import LayoutStore
from spc.records.stamps import iso, to_us

IntArray = NDArray[np.int64]

READ, KEPT, SUMS = "read", "kept", "sums"  # where the figures of a row come from
WHOLE = "{}"


def asked(one: Characteristic) -> str:
    """What of the plan shapes a study, as text."""
    parts = [one.unit, one.target, one.lower_spec, one.upper_spec, one.gauge_sd]
    return json.dumps(parts)


def tool_key(tool: str) -> str:
    """Context (JSON) of the study of a tool with several streams."""
    return json.dumps({"tool": tool}, ensure_ascii=False)


def studies_of_month(
    connection: Connection, bay: Bay, window: Window, as_of: datetime
) -> dict[StudyKey, KeptStudy]:
    """Studies of every unit of a window of one month whose wafers all have their site values."""
    stores = Stores(ContextStore(connection), LayoutStore(connection))
    plan = bay.plan.characteristic
    book = LogBook(connection, window, tuple({p for one in plan for p in one.parameters}))
    found: dict[StudyKey, KeptStudy] = {}
    for one in plan:
        readings = read_months(connection, stores, one, book)
        for keys, labels in _units(one, readings):
            counts = wafers_of(readings, labels)
            units, behind = units_of(labels)
            studies = study_units(readings, units, Ask.of(one, False))
            for label, study in zip(behind.tolist(), studies, strict=True):
                n, bare = counts[label]
                if not bare:
                    found[one.name, keys[label], window.months[-1]] = KeptStudy(
                        asked(one), n, to_us(as_of), study.row, study.ppk_verdict
                    )
    return found


def _units(one: Characteristic, readings: Readings) -> Iterator[tuple[list[str], IntArray]]:
    """Keys and labels of the characteristic as a whole, of its streams, and of its tools."""
    if not len(readings.stream):
        return
    yield [WHOLE], np.zeros(len(readings.stream), np.int64)
    yield list(readings.keys), readings.stream
    if "tool" in one.stream_by and len(one.stream_by) > 1:
        tools = [json.loads(key)["tool"] for key in readings.keys]
        names = sorted(set(tools))
        code = np.array([names.index(tool) for tool in tools], np.int64)
        yield [tool_key(name) for name in names], code[readings.stream]


def wafers_of(readings: Readings, labels: IntArray) -> dict[int, tuple[int, int]]:
    """Wafers of each label, and how many of them have no site value any more."""
    size = len(readings.stream)
    bare = np.bincount(readings.wafer, minlength=size) == 0
    distinct, of = np.unique(labels, return_inverse=True)
    n = np.bincount(of, minlength=distinct.size).tolist()
    gone = np.bincount(of, weights=bare, minlength=distinct.size).astype(int).tolist()
    return dict(zip(distinct.tolist(), zip(n, gone, strict=True), strict=True))


def chosen(
    kept: Mapping[StudyKey, KeptStudy],
    key: StudyKey,
    one: Characteristic,
    counts: tuple[int, int],
    study: UnitStudy | None,
) -> tuple[UnitStudy | None, str]:
    """The study to show of a unit in a month, and where its figures come from.

    Parameters
    ----------
    kept : what was kept; empty where it does not answer (the gauge's share is to be taken out).
    counts : wafers of the unit, and those without site values.
    study : the study from the readings and sums that are there.
    """
    n, bare = counts
    if not bare:
        return study, READ
    found = kept.get(key)
    if found is None or (found.asked, found.n_wafers) != (asked(one), n) or bare != n:
        return study, SUMS
    p_value = found.numbers.get("fit_p_value")
    fits = None if p_value is None else p_value >= LEVEL
    row = {**empty_row(), **found.numbers}
    return UnitStudy(row, np.zeros(0), None, fits, found.verdict), KEPT


def notes_of(
    one: Characteristic, states: Mapping[str, str], kept: Mapping[StudyKey, KeptStudy], bay: Bay
) -> list[str]:
    """What a review must say of months (YYYY-MM) of a characteristic without site values."""
    notes = []
    for month, state in sorted(states.items()):
        if state == KEPT:
            made = iso(kept[one.name, WHOLE, month].made_us, bay.settings.bay.zone)
            notes.append(
                f"{one.name}, {month}: the site values were taken away by the retention rule; the "
                f"figures are those they gave on {str(made)[:10]}, without the histogram"
            )
        elif state == SUMS:
            notes.append(
                f"{one.name}, {month}: site values were taken away by the retention rule; figures "
                "of units without them come from the sums of wafers: the law of the readings is "
                "not tested, the share out of specification is not counted, and the fixed pattern "
                "of the sites is in the components"
            )
    return notes

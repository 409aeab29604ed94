"""Readings that meet others of the same site (pure): duplicates, conflicts, superseded ones.

The key of a reading is (parameter, layer, lot, wafer, site). Of two with the same key and stamp the
first stays: a second one that is equal in every respect is a duplicate, any other a conflict. Of
readings with one key and several stamps all but the latest are superseded, whichever came first;
nothing is marked for that, the readers of the records pick the latest stamp up to their clock.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

# Two texts of one number in different units differ by the rounding of the conversion.
_ROUNDING = 1e-12

CONFLICT_VALUE = (
    "another value for the same parameter, layer, lot, wafer, site and stamp was taken in"
)
CONFLICT_CONTEXT = (
    "the same parameter, layer, lot, wafer, site and stamp was taken in with another context"
)


@dataclass(frozen=True)
class Compared:
    """Readings to be compared, all arrays of shape (n,): key, stamp and everything else of each.

    `value` is NaN where it is no longer kept; then it equals any other.
    """

    wafer: NDArray[np.int64]
    site: NDArray[np.int64]
    stamp: NDArray[np.int64]
    value: NDArray[np.float64]
    context: NDArray[np.int64]
    processed: NDArray[np.int64]
    place: NDArray[np.int64]

    def take(self, rows: NDArray[np.int64]) -> Compared:
        """Some of them."""
        return Compared(*(getattr(self, name)[rows] for name in self.__dataclass_fields__))


@dataclass(frozen=True)
class Verdict:
    """What becomes of the new readings: masks of shape (new,), and the count of superseded ones."""

    keep: NDArray[np.bool_]
    duplicate: NDArray[np.bool_]
    other_value: NDArray[np.bool_]
    other_context: NDArray[np.bool_]
    superseded: int


def together(parts: Sequence[Compared]) -> Compared:
    """Readings one after another."""
    return Compared(
        *(
            np.concatenate([getattr(part, name) for part in parts])
            for name in Compared.__dataclass_fields__
        )
    )


def judge(stored: Compared, new: Compared) -> Verdict:
    """Compare new readings, in the order of their rows, with the stored ones and each other."""
    n_stored, n_new = len(stored.wafer), len(new.wafer)
    both = together([stored, new])
    order = np.lexsort((np.arange(n_stored + n_new), both.stamp, both.site, both.wafer))
    wafer, site, stamp = both.wafer[order], both.site[order], both.stamp[order]
    new_key = np.ones(len(order), bool)
    new_key[1:] = (wafer[1:] != wafer[:-1]) | (site[1:] != site[:-1])
    new_stamp = new_key.copy()
    new_stamp[1:] |= stamp[1:] != stamp[:-1]
    # Compare each reading with the first of its key and stamp.
    first = order[np.maximum.accumulate(np.where(new_stamp, np.arange(len(order)), 0))]
    value, reference = both.value[order], both.value[first]
    same_value = np.abs(value - reference) <= _ROUNDING * np.abs(reference)
    same_value |= np.isnan(value) | np.isnan(reference)
    same_context = both.context[order] == both.context[first]
    same_context &= both.processed[order] == both.processed[first]
    same_context &= both.place[order] == both.place[first]
    repeated = ~new_stamp
    by_row = np.empty((4, n_stored + n_new), bool)
    by_row[0, order] = new_stamp
    by_row[1, order] = repeated & same_value & same_context
    by_row[2, order] = repeated & ~same_value
    by_row[3, order] = repeated & same_value & ~same_context
    keep, duplicate, other_value, other_context = by_row[:, n_stored:]
    return Verdict(
        keep,
        duplicate,
        other_value,
        other_context,
        _superseded(order, new_key, new_stamp, n_stored),
    )


def _superseded(
    order: NDArray[np.int64],
    new_key: NDArray[np.bool_],
    new_stamp: NDArray[np.bool_],
    n_stored: int,
) -> int:
    """Readings that became superseded: each new stamp of a key that has another one makes one."""
    key = np.cumsum(new_key) - 1
    stamps = np.bincount(key[new_stamp], minlength=key[-1] + 1 if len(key) else 0)
    old = new_stamp & (order < n_stored)
    before = np.bincount(key[old], minlength=len(stamps))
    return int((np.maximum(stamps - 1, 0) - np.maximum(before - 1, 0)).sum())


def suspicious(
    wafer: NDArray[np.int64],
    run: NDArray[np.int64],
    site: NDArray[np.int64],
    known_wafer: NDArray[np.bool_],
) -> NDArray[np.bool_]:
    """Readings that have to be compared at all, shape (readings,).

    They are those of wafers that are stored already, of wafers with several runs of rows (several
    stamps or contexts), and of wafers where a site comes twice in a run. `wafer` is of the
    runs, `run` and `site` of the readings, `known_wafer` of the wafers.
    """
    several = np.bincount(wafer, minlength=len(known_wafer)) > 1
    look = (known_wafer | several)[wafer]
    mixed = run * (int(site.max()) + 1 if len(site) else 1) + site
    if not (mixed[1:] > mixed[:-1]).all():
        ordered = np.sort(mixed)
        twice = ordered[1:][ordered[1:] == ordered[:-1]] // (int(site.max()) + 1)
        look[twice] = True  # numbers of runs
    return look[run]

"""Duplicates, conflicts and superseded readings against a plain row-by-row account."""

from __future__ import annotations

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from ingest.remeasured import Compared, judge

ROW = st.tuples(*(st.integers(0, high) for high in (1, 1, 2, 1, 1)))  # wafer site stamp value ctx


def compared(rows: list[tuple[int, ...]]) -> Compared:
    a = np.array(rows, np.int64).reshape(-1, 5)
    zero = np.zeros(len(a), np.int64)
    return Compared(a[:, 0], a[:, 1], a[:, 2], a[:, 3].astype(float), a[:, 4], zero, zero)


def superseded_in(store: dict[tuple[int, ...], tuple[int, ...]]) -> int:
    """Readings that have a later one of the same key."""
    return sum(any(o[:2] == key[:2] and o[2] > key[2] for o in store) for key in store)


@given(st.lists(ROW, max_size=12), st.lists(ROW, max_size=14))
@settings(max_examples=100, deadline=None)
def test_agrees_with_taking_one_row_after_another(
    before: list[tuple[int, ...]], rows: list[tuple[int, ...]]
) -> None:
    store: dict[tuple[int, ...], tuple[int, ...]] = {}
    for row in before:
        store.setdefault(row[:3], row[3:])
    stored = [(*key, *rest) for key, rest in store.items()]
    was = superseded_in(store)
    expected = []
    for row in rows:
        expected.append(store.setdefault(row[:3], row[3:]) == row[3:])
    verdict = judge(compared(stored), compared(rows))
    fates = np.stack([verdict.keep, verdict.duplicate, verdict.other_value, verdict.other_context])
    assert (fates.sum(axis=0) == 1).all()  # every row has exactly one fate
    fine = verdict.keep | verdict.duplicate
    assert fine.tolist() == expected
    assert int(verdict.keep.sum()) == len(store) - len(stored)
    assert verdict.superseded == superseded_in(store) - was
    for row, other in zip(rows, verdict.other_value.tolist(), strict=True):
        assert other == (store[row[:3]][0] != row[3])


def test_values_that_are_no_longer_kept_equal_any_other() -> None:
    stored = compared([(0, 0, 0, 5, 0)])
    stored.value[:] = np.nan
    verdict = judge(stored, compared([(0, 0, 0, 7, 0), (0, 0, 0, 7, 1)]))
    assert verdict.duplicate.tolist() == [True, False]
    assert verdict.other_context.tolist() == [False, True]


def test_rounding_of_a_conversion_is_no_other_value() -> None:
    one = compared([(0, 0, 0, 0, 0)] * 2)
    one.value[:] = [1005, 1.005 * 1000]
    assert one.value[0] != one.value[1]
    assert judge(compared([]), one).duplicate.tolist() == [False, True]

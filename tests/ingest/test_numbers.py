"""Texts to numbers, against the float of the standard library."""

from __future__ import annotations

import math
import re

import pyarrow as pa
import pytest
from hypothesis import given
from hypothesis import strategies as st

from ingest.numbers import LARGEST, parse_numbers, reason_of

PLAIN = re.compile(r"[+-]?([0-9]+(\.[0-9]*)?|\.[0-9]+)([eE][+-]?[0-9]+)?")


def parse(*texts: str, decimal: str = ".", thousands: str | None = None) -> list[float | None]:
    values, good = parse_numbers(pa.array(texts, pa.string()), decimal, thousands)
    return [v if ok else None for v, ok in zip(values.tolist(), good.tolist(), strict=True)]


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("1200.5", 1200.5),
        ("-3", -3.0),
        ("+3", 3.0),
        (" 3 ", 3.0),
        (".5", 0.5),
        ("5.", 5.0),
        ("1e3", 1000.0),
        ("1E-3", 0.001),
        ("1e-400", 0.0),
        ("0e999", 0.0),
        ("1e+05", 100000.0),
        ("1e005", 100000.0),
        ("1e400", None),
        ("-1e400", None),
        ("1e101", None),
        ("NaN", None),
        ("nan", None),
        ("inf", None),
        ("-Infinity", None),
        ("", None),
        (" ", None),
        ("1,5", None),
        ("1_000", None),
        ("0x10", None),
        ("1200 nm", None),
        ("١٢", None),
        ("1.2.3", None),
        ("--1", None),
        ("e5", None),
        ("NULL", None),
        ("=1+1", None),
    ],
)
def test_forms(text: str, value: float | None) -> None:
    assert parse(text) == [value]
    assert parse("1.5", text, "2") == [1.5, value, 2.0]


def test_decimal_comma_and_thousands() -> None:
    assert parse("1200,5", "1200.5", decimal=",") == [1200.5, None]
    assert parse("1.200,5", "12.00,5", "1200,5", decimal=",", thousands=".") == [
        1200.5,
        None,
        1200.5,
    ]
    assert parse("1'200.5", "1'200'300", "1'2003", thousands="'") == [1200.5, 1200300.0, None]
    assert parse("1,200", thousands=",") == [1200.0]


@given(st.lists(st.floats(-1e99, 1e99), max_size=5))
def test_written_floats_come_back(values: list[float]) -> None:
    assert parse(*map(repr, values)) == values


@given(st.lists(st.text(alphabet="0123456789.eE+-, ", max_size=12), min_size=1, max_size=4))
def test_agrees_with_the_standard_library(texts: list[str]) -> None:
    for text, found in zip(texts, parse(*texts), strict=True):
        bare = text.strip(" ")
        if PLAIN.fullmatch(bare) and abs(float(bare)) <= LARGEST:
            assert found == float(bare)
        else:
            assert found is None


@given(st.lists(st.text(max_size=20), min_size=1, max_size=4))
def test_any_text_is_a_finite_number_or_not(texts: list[str]) -> None:
    clean = [t.encode("utf-8", "replace").decode() for t in texts]
    for text, found in zip(clean, parse(*clean), strict=True):
        assert found is None or math.isfinite(found)
        assert reason_of(text)


def test_reasons() -> None:
    assert reason_of("") == "is empty; a reading needs a number"
    assert "decimal = ','" in reason_of("1200,5")
    assert "finite" in reason_of("-inf")
    assert "in range" in reason_of("1e400")

"""Texts to numbers, a whole column at a time, with nothing guessed."""

from __future__ import annotations

import re

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from ingest import arrow

# Sums of squares of larger readings would leave the range of a double.
LARGEST = 1e100
_EXPONENT = r"([eE][+-]?[0-9]+)?"


def parse_numbers(
    texts: pa.Array, decimal: str = ".", thousands: str | None = None
) -> tuple[NDArray[np.float64], NDArray[np.bool_]]:
    """Numbers of texts, shape (n,), and which of them are numbers. Spaces around do not matter.

    A number is plain decimal notation with an optional exponent. `nan`, `inf`, hexadecimal and
    underscores are none, and neither is anything beyond `LARGEST`. Where it is no number the value
    is 0.
    """
    if decimal == "." and thousands is None:
        try:
            values = arrow.floats(pc.cast(texts, pa.float64()))
            good = np.abs(values) <= LARGEST
            if good.all():
                return values, good
        except pa.ArrowInvalid:
            pass
    return _slow(texts, decimal, thousands)


def _slow(
    texts: pa.Array, decimal: str, thousands: str | None
) -> tuple[NDArray[np.float64], NDArray[np.bool_]]:
    texts = pc.utf8_trim_whitespace(texts)
    form = _pattern(decimal, thousands)
    good = pc.match_substring_regex(texts, form)
    kept = pc.if_else(good, texts, "0")
    if thousands is not None:
        kept = pc.replace_substring(kept, thousands, "")
    if decimal != ".":
        kept = pc.replace_substring(kept, decimal, ".")
    kept = pc.utf8_ltrim(kept, "+")
    # The cast of Arrow refuses what leaves the range in some versions and gives inf in others.
    huge = pc.match_substring_regex(kept, r"[eE]\+?0*[1-9][0-9]{2,}$")
    tiny = pc.match_substring_regex(kept, r"[eE]-0*[1-9][0-9]{2,}$")
    rare = pc.or_(huge, tiny)
    values = arrow.floats(pc.cast(pc.if_else(rare, "0", kept), pa.float64()))
    which = arrow.mask(rare)
    if which.any():
        values = values.copy()
        values[which] = [float(text) for text in kept.filter(rare).to_pylist()]
    ok = arrow.mask(good) & (np.abs(values) <= LARGEST)
    return np.where(ok, values, 0.0), ok


def _pattern(decimal: str, thousands: str | None) -> str:
    point = re.escape(decimal)
    whole = "[0-9]+"
    if thousands is not None:
        whole = f"([0-9]{{1,3}}({re.escape(thousands)}[0-9]{{3}})+|[0-9]+)"
    return rf"^[+-]?({whole}({point}[0-9]*)?|{point}[0-9]+){_EXPONENT}$"


def reason_of(text: str, decimal: str = ".") -> str:
    """Why a text is no number, and what to do."""
    bare = text.strip()
    if not bare:
        return "is empty; a reading needs a number"
    if re.fullmatch(r"[+-]?(nan|inf|infinity|na|null|none|-+)", bare, re.IGNORECASE):
        return "is no finite number; leave the row out where nothing was measured"
    if decimal == "." and re.fullmatch(r"[+-]?[0-9.]*,[0-9]+" + _EXPONENT, bare):
        return "is no number; for a decimal comma set decimal = ',' in a [[feed]]"
    if re.fullmatch(r"[+-]?[0-9.,' ]+" + _EXPONENT, bare):
        return "is no number in range; write plain digits with one decimal point"
    return "is no number"

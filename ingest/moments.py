"""Texts to stamps (microseconds since 1970 UTC), a whole column at a time.

Stamps are ISO 8601 with a `T` or a space, an optional fraction, and an optional offset (`Z`,
`+02:00`, `+0200`, `+02`). Without an offset they are local time of the zone given: the hour that
happens twice is taken as the first, the hour that never happens is no stamp. A date alone is its
midnight. More than six digits of a fraction are cut off.
"""

from __future__ import annotations

import re
from datetime import UTC, datetime, timedelta, tzinfo

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from ingest import arrow

EARLIEST_YEAR = 1990
LATEST_YEAR = 2100

_EARLIEST = int(datetime(EARLIEST_YEAR, 1, 1, tzinfo=UTC).timestamp()) * 1_000_000
_LATEST = int(datetime(LATEST_YEAR + 1, 1, 1, tzinfo=UTC).timestamp()) * 1_000_000
_HOUR = 3_600_000_000
_EPOCH = datetime(1970, 1, 1)  # noqa: DTZ001 - local times are reckoned without a zone
_MICROSECOND = timedelta(microseconds=1)

# The form that Arrow reads; anything else goes to the standard library, text by text.
_REGULAR = r"^[0-9]{4}-[0-9]{2}-[0-9]{2}[T ][0-9]{2}:[0-9]{2}(:[0-9]{2}(\.[0-9]{1,6})?)?"
_LOCAL = _REGULAR + "$"
_OFFSET = _REGULAR + r"(Z|[+-][0-9]{2}(:?[0-9]{2})?)$"
_ANY = re.compile(
    r"(?P<date>[0-9]{4}-?(W[0-9]{2}-?[0-9]|[0-9]{2}-?[0-9]{2}))"
    r"([Tt ](?P<time>[0-9]{2}(:?[0-9]{2}(:?[0-9]{2}([.,][0-9]+)?)?)?)"
    r" ?(?P<offset>[Zz]|[+-][0-9]{2}(:?[0-9]{2})?)?)?"
)
_MIDNIGHT = re.compile(r"24(:?00(:?00([.,]0+)?)?)?")  # the end of the day

NOT_ISO = (
    "is no ISO 8601 stamp; write 2026-05-01T06:30:00+02:00, or give stamp_format in a [[feed]]"
)
NOT_OF_FORMAT = "does not fit the stamp_format {form!r} of its feed"
NEVER = "never happened: the clocks went forward then; write the offset"
ABSURD = f"lies outside the years {EARLIEST_YEAR} to {LATEST_YEAR}: a clock was not set"


def parse_stamps(
    texts: pa.StringArray, zone: tzinfo, stamp_format: str | None = None
) -> tuple[NDArray[np.int64], dict[str, NDArray[np.bool_]]]:
    """Stamps of trimmed texts, shape (n,), in microseconds UTC; 0 where there is none.

    Returns also, by reason, masks of the texts that are no stamp.
    """
    n = len(texts)
    stamps = np.zeros(n, np.int64)
    local = np.zeros(n, np.int64)
    is_local = np.zeros(n, bool)
    unread = np.ones(n, bool)
    if stamp_format is None:
        _regular(texts, stamps, local, is_local, unread)
    if unread.any():
        _one_by_one(texts, stamp_format, (stamps, local, is_local, unread))
    never = np.zeros(n, bool)
    if is_local.any():
        stamps[is_local], never[is_local] = to_utc(local[is_local], zone)
    absurd = ~unread & ~never & ((stamps < _EARLIEST) | (stamps >= _LATEST))
    wrong = NOT_ISO if stamp_format is None else NOT_OF_FORMAT.format(form=stamp_format)
    faults = {wrong: unread, NEVER: never, ABSURD: absurd}
    stamps[unread | never | absurd] = 0
    return stamps, {reason: mask for reason, mask in faults.items() if mask.any()}


def to_utc(local: NDArray[np.int64], zone: tzinfo) -> tuple[NDArray[np.int64], NDArray[np.bool_]]:
    """Local times (microseconds as if in UTC) to stamps, and which of them never happened.

    The zone is asked once for each hour that occurs; only in hours with a change of the clocks is
    it asked for each time.
    """
    hours, of_hour = np.unique(local // _HOUR, return_inverse=True)
    offsets = np.zeros(len(hours), np.int64)
    changing = np.zeros(len(hours), bool)
    for i, hour in enumerate(hours.tolist()):
        first, _ = _offset(hour * _HOUR, zone)
        last, _ = _offset((hour + 1) * _HOUR - 1, zone)
        before, _ = _offset(hour * _HOUR, zone, fold=1)
        offsets[i] = first
        changing[i] = not first == last == before
    stamps = local - offsets[of_hour]
    never = np.zeros(len(local), bool)
    for i in np.flatnonzero(changing[of_hour]).tolist():
        offset, never[i] = _offset(int(local[i]), zone)
        stamps[i] = local[i] - offset
    return stamps, never


def _offset(local: int, zone: tzinfo, fold: int = 0) -> tuple[int, bool]:
    """Offset from UTC of one local time in microseconds, and whether it never happened."""
    try:
        naive = (_EPOCH + local * _MICROSECOND).replace(fold=fold)
        moment = naive.replace(tzinfo=zone)
        offset = moment.utcoffset() or timedelta(0)
        back = moment.astimezone(UTC).astimezone(zone).replace(tzinfo=None)
    except (OverflowError, ValueError):
        return 0, False  # the very ends of the calendar: refused as absurd anyway
    return offset // _MICROSECOND, back != naive.replace(fold=0) and back != naive


def _regular(
    texts: pa.StringArray,
    stamps: NDArray[np.int64],
    local: NDArray[np.int64],
    is_local: NDArray[np.bool_],
    unread: NDArray[np.bool_],
) -> None:
    """Read the texts of the usual form in place, all of one kind at a time."""
    for form, zoned in ((_OFFSET, "UTC"), (_LOCAL, None)):
        fits = pc.match_substring_regex(texts, form)
        mask = arrow.mask(fits)
        if not mask.any():
            continue
        chosen = texts if mask.all() else texts.filter(fits)
        try:
            read = pc.cast(chosen, pa.timestamp("us", zoned)).cast(pa.int64())
        except pa.ArrowInvalid:
            continue  # one of them is no date; they are read one by one
        values = arrow.integers(read)
        if zoned:
            stamps[mask] = values
        else:
            local[mask], is_local[mask] = values, True
        unread[mask] = False
        if mask.all():
            return


def _one_by_one(
    texts: pa.StringArray,
    stamp_format: str | None,
    into: tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.bool_], NDArray[np.bool_]],
) -> None:
    stamps, local, is_local, unread = into
    rows = np.flatnonzero(unread)
    for row, text in zip(rows.tolist(), texts.take(arrow.indices(rows)).to_pylist(), strict=True):
        moment = _iso(text) if stamp_format is None else _formatted(text, stamp_format)
        if moment is None:
            continue
        unread[row] = False
        if moment.tzinfo is None:
            local[row], is_local[row] = (moment - _EPOCH) // _MICROSECOND, True
        else:
            naive = moment.replace(tzinfo=None)
            offset = moment.utcoffset() or timedelta(0)
            stamps[row] = (naive - _EPOCH - offset) // _MICROSECOND


def _iso(text: str) -> datetime | None:
    parts = _ANY.fullmatch(text)
    if parts is None:
        return None
    time, offset = parts["time"] or "00:00", (parts["offset"] or "").upper()
    next_day = _MIDNIGHT.fullmatch(time) is not None
    try:
        moment = datetime.fromisoformat(f"{parts['date']}T{'00:00' if next_day else time}{offset}")
        return moment + timedelta(days=1) if next_day else moment
    except (ValueError, OverflowError):
        return None


def _formatted(text: str, form: str) -> datetime | None:
    try:
        return datetime.strptime(text, form)  # noqa: DTZ007 - the zone is added by the caller
    except (ValueError, OverflowError):
        return None

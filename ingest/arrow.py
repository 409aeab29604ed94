"""Between Arrow and numpy without pandas.

Arrow's own conversions load pandas where it is installed, which takes longer than a night's drops.
These go through the buffers; they are for arrays without nulls, as all are here.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import TypeVar

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

T = TypeVar("T", bound=np.generic)
Buffer = bytes | memoryview

_PIECE = 4 * 1024 * 1024


def _of(array: pa.Array, dtype: type[T]) -> NDArray[T]:
    if not len(array):
        return np.zeros(0, dtype)
    return np.frombuffer(array.buffers()[1], dtype)[array.offset : array.offset + len(array)]


def codes(array: pa.Array) -> NDArray[np.int32]:
    """An Arrow array of int32, without copying."""
    return _of(array, np.int32)


def integers(array: pa.Array) -> NDArray[np.int64]:
    """An Arrow array of int64, without copying."""
    return _of(array, np.int64)


def floats(array: pa.Array) -> NDArray[np.float64]:
    """An Arrow array of float64, without copying."""
    return _of(array, np.float64)


def mask(array: pa.Array) -> NDArray[np.bool_]:
    """Truth values of an Arrow array."""
    return _of(pc.cast(array, pa.uint8()), np.uint8).astype(bool)


def indices(values: NDArray[np.integer]) -> pa.Array:
    """Row numbers, to take rows of Arrow arrays."""
    whole = np.ascontiguousarray(values, np.int64)
    return pa.Array.from_buffers(pa.int64(), len(whole), [None, pa.py_buffer(whole)])


def strings(texts: Sequence[str]) -> pa.StringArray:
    """Texts as an Arrow array."""
    raw = [text.encode("utf-8") for text in texts]
    offsets = np.zeros(len(raw) + 1, np.int32)
    np.cumsum([len(one) for one in raw], out=offsets[1:])
    return pa.StringArray.from_buffers(len(raw), pa.py_buffer(offsets), pa.py_buffer(b"".join(raw)))


def lengths(texts: pa.StringArray) -> NDArray[np.int32]:
    """Length of each text in bytes."""
    return codes(pc.binary_length(texts))


def places(data: Buffer, byte: int) -> NDArray[np.int64]:
    """Places of a byte in a buffer, looked for piece by piece to spare memory."""
    whole = np.frombuffer(data, np.uint8)
    pieces = [
        np.flatnonzero(whole[at : at + _PIECE] == byte) + at for at in range(0, len(whole), _PIECE)
    ]
    return np.concatenate(pieces) if pieces else np.zeros(0, np.int64)

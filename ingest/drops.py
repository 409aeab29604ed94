"""Which files are there: found, settled, and read without being tricked.

A drop is a regular file below the drop folder whose name ends in `.csv` or `.csv.gz` and no part of
whose path begins with a dot. Folders behind links are not entered (what lies inside the drop folder
is found under its own path anyway); a link to a file is followed only where it ends inside the drop
folder. Files stay where they are, whatever becomes of them: nothing here writes or deletes.
"""

from __future__ import annotations

import gzip
import hashlib
import os
import stat
import zlib
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO

from ingest.report import Refused

CHUNK = 1 << 20
_LONGEST_PATH = 1000  # bytes; PostgreSQL keeps no keys longer than some 2700


class DropFolderError(Exception):
    """The drop folder is not there or cannot be read: a share that is not mounted, a wrong path."""


class NotSettledError(Exception):
    """The file changed or vanished under our eyes: it waits for the next pass."""


@dataclass(frozen=True)
class Drop:
    """A file as it was found. `path` is below the drop folder, with forward slashes."""

    path: str
    full: str
    size: int
    modified_ns: int

    @property
    def gzipped(self) -> bool:
        """Whether the name says it is packed."""
        return self.path.lower().endswith(".gz")


@dataclass(frozen=True)
class Content:
    """The bytes of a drop, unpacked, and their SHA-256; `refused` instead where there are none.

    The hash is that of the unpacked bytes, so that a file packed again is still the same content.
    It is that of the file as it lies there where unpacking failed.
    """

    digest: str
    data: bytes = b""
    refused: Refused | None = None


@dataclass(frozen=True)
class Found:
    """The drops of a folder sorted by path, and the folders that could not be read, with why."""

    drops: list[Drop]
    unreadable: list[tuple[str, str]]


def find_drops(folder: Path) -> Found:
    """All drops below the folder.

    Raises
    ------
    DropFolderError
        When the folder itself is missing or cannot be read.
    """
    try:
        root = os.path.realpath(folder, strict=True)
        with os.scandir(root):
            pass
    except OSError as error:
        raise DropFolderError(
            f"drop folder {folder}: {error.strerror or error}. "
            "Mount it, mend its permissions, or mend [drops] folder."
        ) from error
    found = Found([], [])
    pending = [root]
    while pending:
        here = pending.pop()
        try:
            with os.scandir(here) as entries:
                pending += _look_through(root, entries, found.drops)
        except FileNotFoundError:
            continue  # taken away meanwhile
        except OSError as error:
            found.unreadable.append((_shown(os.path.relpath(here, root)), str(error.strerror)))
    found.drops.sort(key=lambda drop: drop.path)
    return found


def settled(drop: Drop, now_ns: int, settle_seconds: float) -> bool:
    """Whether the file was last changed long enough ago to be whole.

    A stamp a little in the future is a clock that runs ahead and counts as recent; one far in the
    future says nothing about writing, and the file is taken.
    """
    return abs(now_ns - drop.modified_ns) >= settle_seconds * 1e9 or settle_seconds == 0


def read_drop(drop: Drop, max_bytes: int) -> Content:
    """Read, unpack and hash one drop, never holding more than `max_bytes` of it.

    Raises
    ------
    NotSettledError
        When the file vanished, cannot be read now, or changed meanwhile.
    """
    try:
        handle = os.open(drop.full, os.O_RDONLY | os.O_NOFOLLOW | os.O_NONBLOCK)
    except OSError as error:
        raise NotSettledError(f"cannot be opened: {error.strerror or error}") from error
    with os.fdopen(handle, "rb") as file:
        try:
            before = os.fstat(file.fileno())
            if not stat.S_ISREG(before.st_mode) or _state(before) != (drop.size, drop.modified_ns):
                raise NotSettledError("changed since it was found")
            content = _gunzip(file, max_bytes) if drop.gzipped else _plain(file, drop, max_bytes)
            if _state(os.fstat(file.fileno())) != _state(before):
                raise NotSettledError("changed while it was read")
        except OSError as error:
            raise NotSettledError(f"cannot be read: {error.strerror or error}") from error
    return content


def _state(status: os.stat_result) -> tuple[int, int]:
    return status.st_size, status.st_mtime_ns


def _look_through(root: str, entries: Iterable[os.DirEntry[str]], drops: list[Drop]) -> list[str]:
    """Add the drops of one folder; return the folders in it."""
    folders = []
    for entry in entries:
        if entry.name.startswith("."):
            continue
        if entry.is_dir(follow_symlinks=False):
            folders.append(entry.path)
        elif entry.name.lower().endswith((".csv", ".csv.gz")):
            drop = _drop(root, entry)
            if drop is not None:
                drops.append(drop)
    return folders


def _drop(root: str, entry: os.DirEntry[str]) -> Drop | None:
    full = entry.path
    try:
        if entry.is_symlink():
            full = os.path.realpath(full, strict=True)
            if os.path.commonpath([root, full]) != root:
                return None
        status = os.stat(full, follow_symlinks=False)
    except OSError:
        return None  # a dangling link, or a file taken away meanwhile
    if not stat.S_ISREG(status.st_mode):
        return None
    return Drop(_shown(os.path.relpath(entry.path, root)), full, *_state(status))


def _shown(path: str) -> str:
    """Path that can be stored and printed, whatever bytes the name is made of and however many."""
    text = path.replace(os.sep, "/").encode("utf-8", "backslashreplace").decode("utf-8")
    if len(text.encode()) <= _LONGEST_PATH:
        return text
    digest = hashlib.sha256(text.encode()).hexdigest()[:16]
    return f"{text[:100]}…{digest}…{text[-100:]}"


def _plain(file: BinaryIO, drop: Drop, max_bytes: int) -> Content:
    if drop.size > max_bytes:
        return Content(_digest_of(file), refused=_too_large(max_bytes))
    data = file.read()
    return Content(hashlib.sha256(data).hexdigest(), data)


def _gunzip(file: BinaryIO, max_bytes: int) -> Content:
    parts: list[bytes] = []
    total = 0
    refused = None
    try:
        with gzip.GzipFile(fileobj=file, mode="rb") as packed:
            while chunk := packed.read(CHUNK):
                total += len(chunk)
                if total > max_bytes:
                    refused = _too_large(max_bytes)
                    break
                parts.append(chunk)
    except (gzip.BadGzipFile, EOFError, zlib.error) as error:
        refused = Refused(f"cannot be unpacked ({error}); send it again, or as plain .csv")
    if refused is not None:
        return Content(_digest_of(file), refused=refused)
    data = b"".join(parts)
    return Content(hashlib.sha256(data).hexdigest(), data)


def _digest_of(file: BinaryIO) -> str:
    """Hash of the file as it lies there, without holding it."""
    digest = hashlib.sha256()
    file.seek(0)
    while chunk := file.read(CHUNK):
        digest.update(chunk)
    return digest.hexdigest()


def _too_large(max_bytes: int) -> Refused:
    return Refused(
        f"larger than {max_bytes} bytes unpacked; split it, or raise [drops] max_file_bytes"
    )

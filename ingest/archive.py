"""Packing drops taken in long ago into the archive, a folder a month.

A drop goes only when its content is in the records, it lies there as it was taken in, and its time
is over; what was quarantined, waits or was changed since stays. Each drop goes in steps that may be
cut anywhere: the packed copy is written beside its place, synced, read back and compared by the
hash of the ledger, moved into place; the records are told where it lies; then the drop is removed.
After a crash the next run finds the copy whole and goes on from there, or makes it anew.
"""

from __future__ import annotations

import gzip
import hashlib
import os
import shutil
from collections.abc import Callable
from dataclasses import dataclass
from datetime import datetime, timedelta
from pathlib import Path

from sqlalchemy import Engine

from config.load import Bay
from ingest.drops import CHUNK, Drop, find_drops
from spc.records import archived
from spc.records.archived import ArchivedDrop
from spc.records.sessions import reading
from spc.records.stamps import from_us, to_us

_LONGEST_NAME = 200  # bytes; file systems take 255, and the name grows by a hash and an ending


class ArchiveError(Exception):
    """A drop could not be archived; it lies where it was."""


@dataclass(frozen=True)
class Due:
    """A drop whose time is over. `month` is that of the pass that took it in."""

    drop: Drop
    content_hash: str
    month: str


@dataclass(frozen=True)
class ArchiveReport:
    """What went into the archive, what is still due, and what failed and why."""

    archived: int = 0
    bytes: int = 0
    due: int = 0
    failed: tuple[str, ...] = ()


def due_drops(engine: Engine, bay: Bay, clock: datetime, grace_days: float = 0.0) -> list[Due]:
    """Drops that should be in the archive by now, oldest first; none without the setting.

    Raises
    ------
    ingest.drops.DropFolderError
        When the drop folder is missing or cannot be read.
    """
    days = bay.settings.retention.archive_drops_after_days
    if days is None:
        return []
    before_us = to_us(clock - timedelta(days=days + grace_days))
    with reading(engine) as connection:
        known = archived.taken_in_before(connection, before_us)
    root = os.path.realpath(bay.path(bay.settings.drops.folder))
    zone = bay.settings.bay.zone
    due = []
    for drop in find_drops(Path(root)).drops if known else []:
        if drop.path not in known or os.path.islink(os.path.join(root, drop.path)):
            continue
        seen, since_us = known[drop.path]
        if (seen.bytes, seen.modified_ns) == (drop.size, drop.modified_ns):
            month = f"{from_us(since_us, zone):%Y-%m}"
            due.append((since_us, Due(drop, seen.content_hash, month)))
    return [one for _, one in sorted(due, key=lambda pair: (pair[0], pair[1].drop.path))]


def archive_drops(
    engine: Engine,
    bay: Bay,
    clock: datetime,
    *,
    stop: Callable[[], bool] = lambda: False,
    progress: Callable[[int, int], None] = lambda _done, _total: None,
) -> ArchiveReport:
    """Pack the drops that are due into the archive folder.

    Parameters
    ----------
    clock : clock of the pass (aware); the age of a drop counts from the pass that took it in.
    stop : asked between drops; what is left stays due.

    Raises
    ------
    ingest.drops.DropFolderError
        When the drop folder is missing or cannot be read.
    sqlalchemy.exc.DBAPIError
        When the database fails; the drop in hand then lies in both places until the next run.
    """
    due = due_drops(engine, bay, clock)
    folder = bay.path(bay.settings.retention.archive)
    failed: list[str] = []
    done = total = 0
    for number, one in enumerate(due):
        if stop():
            break
        progress(number, len(due))
        try:
            kept = _keep(one, folder)
            moved = ArchivedDrop(
                one.drop.path,
                one.content_hash,
                kept.relative_to(folder).as_posix(),
                kept.stat().st_size,
                to_us(clock),
            )
            with engine.begin() as connection:
                archived.record(connection, moved)
            _remove(one)
        except ArchiveError as error:
            failed.append(f"{one.drop.path}: {error}")
            continue
        except OSError as error:
            # A full or failing disk fails every drop alike: it is said once.
            failed.append(f"{one.drop.path}: {_why(error)}")
            break
        done, total = done + 1, total + moved.bytes
    return ArchiveReport(done, total, len(due) - done, tuple(failed))


def _keep(one: Due, folder: Path) -> Path:
    """The packed copy of a drop in the archive, whole and synced; made where it is not there yet.

    Raises ArchiveError or OSError; nothing but a `.part` is then left behind.
    """
    if not os.access(os.path.dirname(one.drop.full), os.W_OK | os.X_OK):
        # Asked first, or every night would write a copy of what it cannot take away.
        raise ArchiveError("the folder of the drop is not ours to write; mend its permissions")
    wanted = _place(one, folder)
    for place in (wanted, _other(wanted, one.content_hash)):
        if not place.exists():
            _write(one, place)
            return place
        if _hash_of(place) == one.content_hash:
            return place
    raise ArchiveError(f"{wanted} is in the way; move it aside")


def _place(one: Due, folder: Path) -> Path:
    *folders, name = one.drop.path.split("/")
    if not one.drop.gzipped:
        name += ".gz"
    if len(name.encode()) > _LONGEST_NAME:
        name = f"{one.content_hash[:32]}.csv.gz"
    return folder.joinpath(one.month, *folders, name)


def _other(place: Path, content_hash: str) -> Path:
    """Another name, for a file of that name with another content in the same month."""
    stem = place.name.removesuffix(".gz").removesuffix(".csv")
    return place.with_name(f"{stem}.{content_hash[:12]}.csv.gz")


def _write(one: Due, place: Path) -> None:
    """Write, sync, read back, compare, and only then give it its name."""
    place.parent.mkdir(parents=True, exist_ok=True)
    part = place.with_name(f".{place.name}.part")
    handle = os.open(one.drop.full, os.O_RDONLY | os.O_NOFOLLOW)
    try:
        with os.fdopen(handle, "rb") as source, part.open("wb") as target:
            if one.drop.gzipped:
                shutil.copyfileobj(source, target, CHUNK)
            else:
                # No name and no time in it: the same drop packs to the same bytes.
                with gzip.GzipFile("", "wb", 6, target, mtime=0) as packed:
                    shutil.copyfileobj(source, packed, CHUNK)
            target.flush()
            os.fsync(target.fileno())
        if _hash_of(part) != one.content_hash:
            raise ArchiveError("the copy is not what was taken in; look at the drop and the disk")
        part.replace(place)
    except BaseException:
        part.unlink(missing_ok=True)
        raise
    _sync(place.parent)


def _hash_of(packed: Path) -> str | None:
    """SHA-256 of the unpacked bytes, None where they do not unpack."""
    digest = hashlib.sha256()
    try:
        with gzip.open(packed, "rb") as file:
            while chunk := file.read(CHUNK):
                digest.update(chunk)
    except (EOFError, gzip.BadGzipFile, ValueError):
        return None
    return digest.hexdigest()


def _remove(one: Due) -> None:
    """Take the drop away, unless it was changed since it was found."""
    status = os.lstat(one.drop.full)
    if (status.st_size, status.st_mtime_ns) != (one.drop.size, one.drop.modified_ns):
        raise ArchiveError("was changed just now; it stays, and the next pass takes it in")
    os.unlink(one.drop.full)
    _sync(Path(one.drop.full).parent)


def _sync(folder: Path) -> None:
    handle = os.open(folder, os.O_RDONLY | os.O_DIRECTORY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def _why(error: OSError) -> str:
    return f"{error.strerror or error}{f' ({error.filename})' if error.filename else ''}"

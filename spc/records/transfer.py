"""Copying a whole database into an empty one: backup, restore, and the move to PostgreSQL.

All three are the same thing: every row of every table is copied in one transaction of the target
and then compared by count and checksum. A backup is a SQLite file, whatever the source, so it can
be restored to either kind of database.
"""

from __future__ import annotations

import hashlib
import struct
from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from sqlalchemy import Connection, Engine, Table, bindparam, func, insert, select, update

from spc.records.retention_tables import metadata  # of all tables, these included
from spc.records.sessions import open_database, reading

_CHUNK = 5000
Progress = Callable[[str, int, int], None]


class TransferError(Exception):
    """The copy was not made, or does not equal its source."""


@dataclass(frozen=True)
class TableCopy:
    """One table: rows and checksum, equal on both sides."""

    table: str
    rows: int
    checksum: str


def copy_database(
    source: Engine, target: Engine, progress: Progress = lambda _what, _done, _total: None
) -> tuple[TableCopy, ...]:
    """Copy every row and compare both sides.

    Raises
    ------
    TransferError
        When the target has rows already, or differs from the source afterwards (nothing is then
        kept in the target).
    """
    tables = metadata.sorted_tables
    copies = []
    with reading(source) as origin, target.begin() as connection:
        for table in tables:
            if connection.scalar(select(func.count()).select_from(table)):
                raise TransferError(
                    f"the target has rows in {table.name} already; give an empty database"
                )
        for number, table in enumerate(tables):
            progress(f"copying {table.name}", number, len(tables))
            _fill(connection, table, _chunks(origin, table))
            _advance_sequence(connection, table)
            here, there = checksum(origin, table), checksum(connection, table)
            if here != there:
                raise TransferError(f"{table.name} differs after the copy: {here} and {there}")
            copies.append(TableCopy(table.name, here[0], here[1]))
    return tuple(copies)


def _fill(connection: Connection, table: Table, chunks: Iterable[Sequence[dict[str, Any]]]) -> None:
    """Insert rows; a column that names a row of the same table is set when all of them are there,
    since an excursion may be merged into a later one."""
    own = [c.name for c in table.columns if any(f.column.table is table for f in c.foreign_keys)]
    keys = [column.name for column in table.primary_key]
    later: list[dict[str, Any]] = []
    for rows in chunks:
        if own:
            later += [dict(row) for row in rows if any(row[name] is not None for name in own)]
            rows = [{**row, **dict.fromkeys(own)} for row in rows]
        connection.execute(insert(table), rows)
    if later:
        where = [table.c[name] == bindparam(f"key_{name}") for name in keys]
        values: dict[str, Any] = {name: bindparam(f"new_{name}") for name in own}
        connection.execute(
            update(table).where(*where).values(values),
            [
                {f"key_{name}": row[name] for name in keys}
                | {f"new_{name}": row[name] for name in own}
                for row in later
            ],
        )


def backup(source: Engine, file: Path, progress: Progress = lambda _w, _d, _t: None) -> int:
    """Write a backup; the file appears only when it is whole. Returns the number of rows.

    Raises
    ------
    TransferError
        When the file exists already: a backup is never written over.
    """
    if file.exists():
        raise TransferError(f"{file} exists already; name a new file")
    file.parent.mkdir(parents=True, exist_ok=True)
    part = file.with_name(f".{file.name}.part")
    for leftover in part.parent.glob(part.name + "*"):
        leftover.unlink()
    target = open_database(f"sqlite:///{part.absolute()}")
    try:
        copies = copy_database(source, target, progress)
        with target.connect() as connection:
            connection.connection.driver_connection.execute("PRAGMA journal_mode=DELETE")  # type: ignore[union-attr]
    finally:
        target.dispose()
    part.replace(file)
    for leftover in part.parent.glob(part.name + "-*"):
        leftover.unlink()
    return sum(copy.rows for copy in copies)


def checksum(connection: Connection, table: Table) -> tuple[int, str]:
    """Number of rows and SHA-256 over all of them in the order of the key."""
    digest, count = hashlib.sha256(), 0
    for rows in _chunks(connection, table):
        for row in rows:
            count += 1
            for name in sorted(row):
                digest.update(_bytes(row[name]))
    return count, digest.hexdigest()


def _bytes(value: Any) -> bytes:
    """Canonical bytes of a value: what both databases give back for the same thing."""
    if value is None:
        return b"n"
    if isinstance(value, float):
        return b"f" + struct.pack("<d", value)
    if isinstance(value, int):
        return b"i%d;" % value
    raw = value.encode() if isinstance(value, str) else bytes(value)
    return b"s%d:" % len(raw) + raw


def _chunks(connection: Connection, table: Table) -> Iterator[Sequence[dict[str, Any]]]:
    keys = list(table.primary_key.columns)
    # Text sorts by bytes on both sides, or the checksums would depend on the collation.
    order = [_bytewise(connection, column) for column in keys]
    # An option of this statement alone: on the connection it would turn inserts into cursors too.
    result = connection.execute(
        select(table).order_by(*order), execution_options={"stream_results": True}
    )
    for part in result.mappings().partitions(_CHUNK):
        yield [dict(row) for row in part]


def _bytewise(connection: Connection, column: Any) -> Any:
    if connection.dialect.name == "postgresql" and column.type.python_type is str:
        return column.collate("C")
    return column


def _advance_sequence(connection: Connection, table: Table) -> None:
    """PostgreSQL numbers new rows from a sequence, which a copy with given ids leaves behind."""
    if connection.dialect.name != "postgresql" or "id" not in table.c:
        return
    sequence = func.pg_get_serial_sequence(table.name, "id")
    largest = select(func.coalesce(func.max(table.c.id), 0)).scalar_subquery()
    connection.execute(select(func.setval(sequence, func.greatest(largest, 1))))

"""Many rows at once: one prepared statement on SQLite, COPY on PostgreSQL."""

from __future__ import annotations

import json
from collections.abc import Iterable, Iterator, Sequence
from itertools import chain, islice
from typing import Any

from sqlalchemy import (
    ARRAY,
    BigInteger,
    ColumnElement,
    Connection,
    Float,
    Integer,
    LargeBinary,
    Table,
    Text,
    func,
    literal,
    select,
)

_SQLITE_VARIABLES = 900  # in one statement; SQLite allowed 999 until 2020
_POSTGRES_TYPES = ((BigInteger, "int8"), (Integer, "int4"), (Float, "float8"))


def insert_rows(
    connection: Connection, table: Table, columns: Sequence[str], rows: Iterable[Sequence[Any]]
) -> None:
    """Insert rows of plain Python values, in the order of `columns`, in the open transaction.

    Faster than inserts through the toolkit by an order of magnitude: the values go to the driver as
    they are. Raises the errors of the driver as SQLAlchemy's own.
    """
    from sqlalchemy.exc import DBAPIError

    rows = iter(rows)
    first = next(rows, None)
    if first is None:
        return  # a copy of nothing costs the server three messages all the same
    rows = chain([first], rows)
    dialect = connection.dialect
    if not connection.in_transaction():
        connection.exec_driver_sql("SELECT 1")  # begins one
    names = ", ".join(_quoted(dialect, name) for name in columns)
    target = f"{_quoted(dialect, table.name)} ({names})"
    cursor: Any = connection.connection.cursor()
    errors: Any = dialect.dbapi
    try:
        if dialect.name == "sqlite":
            _insert_many(cursor, target, len(columns), rows)
        else:
            with cursor.copy(f"COPY {target} FROM STDIN (FORMAT BINARY)") as copy:
                copy.set_types([_postgres_type(table.c[name].type) for name in columns])
                for row in rows:
                    copy.write_row(row)
    except errors.Error as error:
        raise DBAPIError.instance(
            f"bulk insert into {target}", None, error, errors.Error, dialect=dialect
        ) from error
    finally:
        cursor.close()


def upsert(connection: Connection, table: Table) -> Any:
    """An insert of the dialect, which can say what to do about a row that is there already."""
    # The dialects are loaded by the engine that uses them, so this costs nothing.
    if connection.dialect.name == "postgresql":
        from sqlalchemy.dialects.postgresql import insert as insert_postgres

        return insert_postgres(table)
    from sqlalchemy.dialects.sqlite import insert as insert_sqlite

    return insert_sqlite(table)


def any_of(
    connection: Connection, column: ColumnElement[str], texts: Sequence[str]
) -> ColumnElement[bool]:
    """Whether a column is one of many texts, handed over as one value however many they are."""
    if connection.dialect.name == "sqlite":
        each = func.json_each(json.dumps(texts)).table_valued("value")
        return column.in_(select(each.c.value))
    return column == func.any(literal(list(texts), ARRAY(Text)))


def _insert_many(cursor: Any, target: str, width: int, rows: Iterator[Sequence[Any]]) -> None:
    """Several rows a statement: the driver gives up the interpreter at each, and so less often."""
    marks = f"({', '.join('?' * width)})"
    together = max(1, _SQLITE_VARIABLES // width)
    # Names of our own tables, quoted by the dialect; every value is a variable.
    many = f"INSERT INTO {target} VALUES {', '.join([marks] * together)}"  # nosec B608
    rest: list[Sequence[Any]] = []

    def batches() -> Iterator[list[Any]]:
        while batch := list(islice(rows, together)):
            if len(batch) < together:
                rest.extend(batch)
                return
            yield list(chain.from_iterable(batch))

    cursor.executemany(many, batches())
    cursor.executemany(f"INSERT INTO {target} VALUES {marks}", rest)  # nosec B608


def _quoted(dialect: Any, name: str) -> str:
    return str(dialect.identifier_preparer.quote(name))


def _postgres_type(kind: Any) -> str:
    if isinstance(kind, LargeBinary):
        return "bytea"
    for python_type, name in _POSTGRES_TYPES:
        if isinstance(kind, python_type):
            return name
    return "text"

"""Many rows at once: one prepared statement on SQLite, COPY on PostgreSQL."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Any

from sqlalchemy import BigInteger, Connection, Float, Integer, LargeBinary, Table

_POSTGRES_TYPES = ((BigInteger, "int8"), (Integer, "int4"), (Float, "float8"))


def insert_rows(
    connection: Connection, table: Table, columns: Sequence[str], rows: Iterable[Sequence[Any]]
) -> None:
    """Insert rows of plain Python values, in the order of `columns`, in the open transaction.

    Faster than inserts through the toolkit by an order of magnitude: the values go to the driver as
    they are. Raises the errors of the driver as SQLAlchemy's own.
    """
    from sqlalchemy.exc import DBAPIError

    dialect = connection.dialect
    connection.exec_driver_sql("SELECT 1")  # begins the transaction where there is none yet
    names = ", ".join(_quoted(dialect, name) for name in columns)
    target = f"{_quoted(dialect, table.name)} ({names})"
    cursor = connection.connection.cursor()
    statement = ""
    try:
        if dialect.name == "sqlite":
            marks = ", ".join("?" * len(columns))
            statement = f"INSERT INTO {target} VALUES ({marks})"
            cursor.executemany(statement, rows)  # type: ignore[arg-type]
        else:
            statement = f"COPY {target} FROM STDIN (FORMAT BINARY)"
            types = [_postgres_type(table.c[name].type) for name in columns]
            with cursor.copy(statement) as copy:  # type: ignore[attr-defined]
                copy.set_types(types)
                for row in rows:
                    copy.write_row(row)
    except dialect.dbapi.Error as error:  # type: ignore[union-attr]
        raise DBAPIError.instance(
            statement,
            None,
            error,
            dialect.dbapi.Error,  # type: ignore[union-attr]
            dialect=dialect,
        ) from error
    finally:
        cursor.close()


def _quoted(dialect: Any, name: str) -> str:
    return str(dialect.identifier_preparer.quote(name))


def _postgres_type(kind: Any) -> str:
    if isinstance(kind, LargeBinary):
        return "bytea"
    for python_type, name in _POSTGRES_TYPES:
        if isinstance(kind, python_type):
            return name
    return "text"

"""What measurements refer to is there, on either database, however it is held."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import pytest
from sqlalchemy import Connection, Engine, create_engine, delete, event, insert, select, update
from sqlalchemy.exc import DBAPIError, IntegrityError

from spc.records.readings import MEASUREMENT_COLUMNS, insert_measurements
from spc.records.tables import contexts, files, layouts, measurements

PARENTS = {"file_id": files, "context_id": contexts, "layout_id": layouts}


def parents(connection: Connection) -> None:
    connection.execute(
        insert(files),
        {"id": 1, "content_hash": "a", "path": "a.csv", "outcome": "loaded", "bytes": 1,
         "loaded_us": 0, "read_with": ""},
    )  # fmt: skip
    connection.execute(insert(contexts), {"id": 1, "digest": "a", "columns": "{}"})
    connection.execute(insert(layouts), {"id": 1, "digest": "a", "sites": "[]", "n": 1})


@pytest.fixture
def engine_with_one(engine: Engine) -> Engine:
    """A database with one measurement."""
    with engine.begin() as connection:
        parents(connection)
        insert_measurements(connection, [row()])
    return engine


def row(**changed: object) -> tuple[object, ...]:
    values: dict[str, object] = {
        "file_id": 1, "parameter": "cd", "layer": "", "lot": "L", "wafer": "1", "measured_us": 0,
        "processed_us": None, "context_id": 1, "layout_id": 1, "unit": "nm", "n": 1, "mean": 1.0,
        "sum_squares": 0.0, "site_values": b"", "first_line": 2, "last_line": 2,
    }  # fmt: skip
    return tuple((values | changed)[name] for name in MEASUREMENT_COLUMNS)


def refused(engine: Engine, act: Callable[[Connection], Any]) -> None:
    with pytest.raises(DBAPIError) as told, engine.begin() as connection:
        act(connection)
    assert isinstance(told.value, IntegrityError)


@pytest.mark.parametrize("column", PARENTS)
def test_a_measurement_refers_to_what_is_there(engine_with_one: Engine, column: str) -> None:
    rows = [row(), row(**{column: 999}), row()]
    refused(engine_with_one, lambda connection: insert_measurements(connection, rows))
    values = dict(zip(MEASUREMENT_COLUMNS, row(**{column: 999}), strict=True))
    refused(engine_with_one, lambda connection: connection.execute(insert(measurements), values))
    change = update(measurements).values({column: 999})
    refused(engine_with_one, lambda connection: connection.execute(change))
    with engine_with_one.connect() as connection:
        assert len(connection.execute(select(measurements.c.id)).all()) == 1


@pytest.mark.parametrize("column", PARENTS)
def test_what_measurements_refer_to_stays(engine_with_one: Engine, column: str) -> None:
    parent = PARENTS[column]
    refused(engine_with_one, lambda connection: connection.execute(delete(parent)))
    refused(engine_with_one, lambda connection: connection.execute(update(parent).values(id=2)))
    with engine_with_one.begin() as connection:
        connection.execute(delete(measurements))
        connection.execute(delete(parent))  # nothing refers to it any more


def test_what_says_nothing_of_references_is_left_alone(engine_with_one: Engine) -> None:
    with engine_with_one.begin() as connection:
        connection.execute(update(measurements).values(site_values=None))
        connection.execute(update(layouts).values(n=2))


@pytest.mark.postgres
def test_one_that_deletes_waits_for_one_that_stores(
    postgres_server: Callable[[str], str],
) -> None:
    """Neither foreign keys nor what stands for them let a row go while another refers to it."""
    engine = create_engine(postgres_server("references"))
    other = create_engine(engine.url)

    @event.listens_for(other, "connect")
    def _impatient(connection: Any, _record: Any) -> None:
        connection.execute("SET lock_timeout = '200ms'")
        connection.commit()

    with engine.begin() as connection:
        parents(connection)
    with engine.begin() as storing:
        insert_measurements(storing, [row()])
        for parent in PARENTS.values():
            with pytest.raises(DBAPIError, match="lock timeout"), other.begin() as deleting:
                deleting.execute(delete(parent))
    for parent in PARENTS.values():
        refused(other, lambda connection, table=parent: connection.execute(delete(table)))
    engine.dispose()
    other.dispose()

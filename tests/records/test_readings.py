"""Bulk rows, interned texts, the ledger and stored readings, on SQLite and on PostgreSQL."""

from __future__ import annotations

import threading

import numpy as np
import pytest
from sqlalchemy import Engine, func, select
from sqlalchemy.exc import IntegrityError

from spc.records import ledger, readings
from spc.records.bulk import insert_rows
from spc.records.interned import Vocabulary
from spc.records.tables import contexts, files, layouts, measurements, rejects

ENTRY = {
    "content_hash": "a" * 64,
    "path": "a.csv",
    "kind": "readings",
    "outcome": "loaded",
    "bytes": 10,
    "loaded_us": 1,
    "read_with": "old",
}


def measurement(file_id: int, ids: tuple[int, int], lot: str, at: int) -> tuple[object, ...]:
    values = np.array([1.5, -2.0]).astype("<f8")
    return (
        *(file_id, "cd", "M1", lot, "1", at, None, *ids, "nm", 2, -0.25, 6.125),
        *(values.tobytes(), 2, 3),
    )


@pytest.mark.parametrize("n", [0, 1, 55, 56, 57, 1000])
def test_bulk_rows_come_back_as_they_were(engine: Engine, n: int) -> None:
    with engine.begin() as connection:
        file_id = ledger.open_entry(connection, ENTRY, None)
        rows = [(file_id, "rejected", i, None, f"é\t\n\\{i}", "x", '","') for i in range(n)]
        names = ("file_id", "severity", "line", "column", "value", "reason", "text")
        insert_rows(connection, rejects, names, iter(rows))
        found = connection.execute(select(*(rejects.c[name] for name in names)).order_by("line"))
        assert [tuple(row) for row in found] == rows


def test_bulk_rows_are_part_of_the_transaction(engine: Engine) -> None:
    def write() -> None:
        with engine.begin() as connection:
            file_id = ledger.open_entry(connection, ENTRY, None)
            ledger.record_rejects(connection, file_id, "rejected", [(1, "a", "b", "c", "d")])
            raise RuntimeError("stop")

    with pytest.raises(RuntimeError, match="stop"):
        write()
    with engine.connect() as connection:
        assert connection.scalar(select(func.count()).select_from(rejects)) == 0
        assert connection.scalar(select(func.count()).select_from(files)) == 0


def test_bulk_errors_are_those_of_the_toolkit(engine: Engine) -> None:
    with engine.connect() as connection, pytest.raises(IntegrityError, match="rejects"):
        ledger.record_rejects(connection, 999, "rejected", [(1, "a", "b", None, "d")])


def test_interned_texts_are_stored_once_and_forgotten_after_a_rollback(engine: Engine) -> None:
    words = Vocabulary()
    with engine.connect() as connection:
        first = words.contexts.ids(connection, ['{"a": "1"}', "{}", '{"a": "1"}'])
        assert first[0] == first[2] != first[1]
        connection.rollback()
        words.forget()
        again = words.contexts.ids(connection, ["{}"])
        connection.commit()
        words.keep()
        assert words.contexts.ids(connection, ["{}"]) == again
        assert Vocabulary().contexts.ids(connection, ["{}"]) == again
        assert connection.scalar(select(func.count()).select_from(contexts)) == 1
        many = [f"[{i}]" for i in range(1200)]
        ids = words.layouts.ids(connection, many, [1] * 1200)
        assert len(set(ids)) == 1200
        query = select(layouts.c.sites, layouts.c.n).where(layouts.c.id == ids[7])
        assert tuple(connection.execute(query).one()) == ("[7]", 1)


def test_stored_measurements_and_their_values(engine: Engine) -> None:
    words = Vocabulary()
    with engine.begin() as connection:
        file_id = ledger.open_entry(connection, ENTRY, None)
        [context] = words.contexts.ids(connection, ["{}"])
        [layout] = words.layouts.ids(connection, ['[["1", 0.0, 0.0, null, null], ["2"]]'], [2])
        rows = [measurement(file_id, (context, layout), f"N{i % 3}", i) for i in range(700)]
        readings.insert_measurements(connection, rows)
        found = readings.stored_measurements(connection, [("cd", "M1", "N1", "1")])
        assert [one.measured_us for one in found] == list(range(1, 700, 3))
        assert readings.stored_measurements(connection, [("cd", "", "N1", "1")]) == []
        values = readings.stored_values(connection, [one.id for one in found])
        assert all(v is not None and v.tolist() == [1.5, -2.0] for v in values.values())
        connection.execute(measurements.update().values(site_values=None))
        assert readings.stored_values(connection, [found[0].id]) == {found[0].id: None}
        sites = readings.layout_sites(connection, [layout])
        assert sites == {layout: [["1", 0.0, 0.0, None, None], ["2"]]}


def test_ledger_and_sightings(engine: Engine) -> None:
    seen = ledger.Sighting("a.csv", 10, 123456789012345678, "a" * 64)
    with engine.begin() as connection:
        quarantined = {**ENTRY, "outcome": "quarantined", "reason": "no drop"}
        file_id = ledger.open_entry(connection, quarantined, None)
        ledger.record_rejects(connection, file_id, "warned", [(1, None, None, "c", None)])
        ledger.record_sighting(connection, seen, 5)
        ledger.record_sighting(connection, seen, 6)
        assert ledger.sightings_of(connection) == {"a.csv": seen}
        assert ledger.sighting_of(connection, "b.csv") is None
        assert ledger.stale_hashes(connection, "old") == set()
        assert ledger.stale_hashes(connection, "new") == {"a" * 64}
        entry = ledger.entry_of(connection, "a" * 64)
        assert entry is not None
        assert ledger.open_entry(connection, {**ENTRY, "read_with": "new"}, entry) == file_id
        ledger.close_entry(connection, file_id, {"rows": 3, "loaded": 3})
        assert connection.scalar(select(func.count()).select_from(rejects)) == 0
        assert ledger.stale_hashes(connection, "newer") == set()
        assert ledger.newest_by_feed(connection) == {}
        ledger.record_units(connection, {"cd": "nm"})
        assert ledger.parameter_units(connection) == {"cd": "nm"}


def test_a_file_is_claimed_by_one_worker(engine: Engine) -> None:
    postgres = engine.dialect.name == "postgresql"
    with ledger.claimed(engine, "a.csv") as first:
        assert first
        with ledger.claimed(engine, "a.csv") as second, ledger.claimed(engine, "b.csv") as other:
            assert second is (not postgres)
            assert other
    with ledger.claimed(engine, "a.csv") as third:
        assert third


def test_writers_store_one_after_another(engine: Engine) -> None:
    order: list[str] = []
    inside = threading.Event()

    def second() -> None:
        inside.wait(10)
        with engine.begin() as connection:
            ledger.begin_storing(connection)
            order.append("second")

    thread = threading.Thread(target=second)
    thread.start()
    with engine.begin() as connection:
        ledger.begin_storing(connection)
        inside.set()
        thread.join(0.3)
        order.append("first")
    thread.join(30)
    assert order == ["first", "second"]

"""Which lots a suspect touched, from a process log written by hand."""

from __future__ import annotations

from sqlalchemy import Engine, insert

from spc.monitoring.lots_at_risk import Suspicion, lots_at_risk
from spc.records.contexts import ContextStore
from spc.records.tables import files, process_log

HOUR = 3_600_000_000
# lot, hour, step, tool: T1 coats L1 and L4, and develops L2, which T2 coated.
LOG = (
    ("L1", 1, "coat", "T1"),
    ("L1", 2, "develop", "T2"),
    ("L2", 3, "coat", "T2"),
    ("L2", 4, "develop", "T1"),
    ("L3", 5, "coat", "T2"),
    ("L3", 6, "develop", "T2"),
    ("L4", 7, "coat", "T1"),
    ("L4", 8, "develop", "T1"),
)


def lots(engine: Engine, suspicion: Suspicion) -> list[str]:
    with engine.begin() as connection:
        file = connection.execute(
            insert(files).values(
                content_hash="00", path="log.csv", outcome="loaded", bytes=1, loaded_us=0
            )
        ).inserted_primary_key
        assert file is not None
        wanted = [{"step": step, "tool": tool, "layer": "M1"} for _, _, step, tool in LOG]
        ids = ContextStore(connection).ids_of(wanted)
        rows = [
            {
                "file_id": file[0],
                "processed_us": hour * HOUR,
                "lot": lot,
                "wafer": "1",
                "layer": "M1",
                "step": step,
                "tool": tool,
                "context_id": number,
            }
            for (lot, hour, step, tool), number in zip(LOG, ids, strict=True)
        ]
        connection.execute(insert(process_log), rows)
        found = lots_at_risk(connection, suspicion, ("resist_thickness",), 10 * HOUR)
    return [str(lot) for lot in found["lot"]]


def test_a_bare_tool_is_that_of_its_own_step(engine: Engine) -> None:
    found = lots(engine, Suspicion(("tool",), ("T1",), 0, 10 * HOUR, frozenset({"coat"})))
    assert found == ["L1", "L4"]


def test_a_bare_tool_without_a_known_step_is_that_of_any(engine: Engine) -> None:
    assert lots(engine, Suspicion(("tool",), ("T1",), 0, 10 * HOUR)) == ["L1", "L2", "L4"]


def test_a_named_step_and_the_span_bound_the_lots(engine: Engine) -> None:
    named = Suspicion(("develop.tool",), ("T1",), 0, 5 * HOUR, frozenset({"coat"}))
    assert lots(engine, named) == ["L2"]

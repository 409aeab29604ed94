"""What triage looks back on does not grow with the age of the bay."""

from __future__ import annotations

from sqlalchemy import Engine, insert

from spc.records.history import wafers_of
from spc.records.tables import baselines, contexts, streams, wafer_results

DAY = 86_400_000_000


def test_wafers_between_baseline_and_window_are_not_read(engine: Engine) -> None:
    with engine.begin() as connection:
        connection.execute(insert(contexts), {"id": 1, "digest": "a", "columns": "{}"})
        for stream in (1, 2):
            connection.execute(
                insert(streams), {"id": stream, "characteristic": str(stream), "context": "{}"}
            )
            # The second stream began later: its baseline lies where the first was long monitored.
            start = (stream - 1) * 90 * DAY
            connection.execute(
                insert(baselines),
                {"id": stream, "stream_id": stream, "status": "automatic", "from_us": start,
                 "first_us": start, "last_us": start + DAY, "n_points": 30, "payload": "{}",
                 "made_us": 0, "made_by": "", "reason": ""},
            )  # fmt: skip
        rows = [
            {"stream_id": stream, "lot": f"L{day}", "layer": "", "wafer": "1", "at_us": day * DAY,
             "measured_us": day * DAY, "context_id": 1, "step_context_id": 1, "n_sites": 1,
             "mean": 1.0, "sum_squares": 0.0, "df": 0.0, "statistics": b""}
            for stream in (1, 2)
            for day in range(200)
        ]  # fmt: skip
        connection.execute(insert(wafer_results), rows)
        found = wafers_of(connection, [1, 2], 190 * DAY, [1, 2])
    days = {s: sorted(part["at_us"] // DAY) for s, part in found.groupby("stream_id")}
    recent = list(range(183, 200))
    assert days == {1: [*range(9), *recent], 2: [*range(83, 99), *recent]}

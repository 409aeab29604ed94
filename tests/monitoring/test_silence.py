"""Who fell silent, and why: groups of silent streams by hand."""

from __future__ import annotations

from datetime import timedelta

from spc.monitoring.silence import SilentStream
from spc.monitoring.silence_findings import Seen, group_silent

HOUR = 3_600_000_000
NOW = 1000 * HOUR


def silent(number: int, tool: str, gauge: str, hours: int) -> SilentStream:
    last = NOW - hours * HOUR
    columns = {"tool": tool, "module": "C1", "gauge": gauge}
    patience = timedelta(hours=36)
    return SilentStream(number, "film", columns, last, last, last + 36 * HOUR, patience, columns)


def seen(one: SilentStream) -> Seen:
    return Seen(one.stream_id, one.columns, True, {one.columns["gauge"]: one.last_measured_us})


def test_a_tool_is_not_taken_for_a_gauge_that_measured_others_since() -> None:
    """Both streams of T3 were last on FILM1, and the newest wafer of the other on FILM2."""
    gone = [silent(1, "T3", "FILM1", 48), silent(2, "T3", "FILM1", 44)]
    other = Seen(
        3,
        {"tool": "T1", "module": "C1", "gauge": "FILM2"},
        False,
        {"FILM2": NOW - HOUR, "FILM1": NOW - 5 * HOUR},
    )
    (group,) = group_silent(gone, [*map(seen, gone), other])
    assert (group.factors, group.levels) == (("tool",), ("T3",))


def test_a_gauge_that_measured_nothing_since_is_the_reason() -> None:
    gone = [silent(1, "T3", "FILM1", 48), silent(2, "T2", "FILM1", 44)]
    other = Seen(
        3,
        {"tool": "T1", "module": "C1", "gauge": "FILM2"},
        False,
        {"FILM2": NOW - HOUR, "FILM1": NOW - 46 * HOUR},
    )
    (group,) = group_silent(gone, [*map(seen, gone), other])
    assert (group.factors, group.levels) == (("gauge",), ("FILM1",))
    assert len(group.streams) == 2

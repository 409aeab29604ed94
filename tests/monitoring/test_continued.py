"""Which excursion an effect goes on as, from night to night."""

from __future__ import annotations

from types import SimpleNamespace
from typing import Any, cast

from spc.monitoring.causes import continued
from spc.records.findings import Excursion
from spc.stats.attribution import Effect, Level

HOUR = 3_600_000_000
NOW = 500 * HOUR


def effect(factor: str, name: str) -> Effect:
    return cast(Effect, SimpleNamespace(level=Level((factor,), (name,))))


def payload(onset: tuple[int, int], end: int | None, *tools: str) -> dict[str, Any]:
    streams = [
        {"characteristic": "film", "statistic": "mean", "context": {"tool": tool}} for tool in tools
    ]
    return {
        "onset": {"earliest_us": onset[0] * HOUR, "latest_us": onset[1] * HOUR},
        "end_us": None if end is None else end * HOUR,
        "streams": streams,
    }


def excursion(number: int, factor: str, name: str, of: dict[str, Any], status: str) -> Excursion:
    engine = {"factors": [factor], "names": [name]}
    return cast(
        Excursion,
        SimpleNamespace(id=number, status=status, payload={**of, "engine": engine}),
    )


def test_its_own_level_comes_before_common_streams() -> None:
    """Two effects of one night each go on as their own, whichever is stronger."""
    known = [
        excursion(1, "tool", "T1", payload((100, 110), None, "T1"), "open"),
        excursion(2, "resist_batch", "B7", payload((100, 110), None, "T1", "T2"), "open"),
    ]
    effects = [effect("resist_batch", "B7"), effect("tool", "T1")]
    now = [payload((100, 108), None, "T1", "T2"), payload((102, 108), None, "T1")]
    found = continued(effects, now, known, NOW)
    assert {i: one.id for i, one in found.items()} == {0: 2, 1: 1}


def test_another_level_with_the_same_streams_and_onset_goes_on() -> None:
    known = [excursion(1, "gauge", "G1", payload((100, 110), None, "T1"), "open")]
    found = continued([effect("tool", "T1")], [payload((105, 112), None, "T1")], known, NOW)
    assert found[0].id == 1


def test_what_looked_over_and_came_back_is_the_beginning_of_the_longer_effect() -> None:
    """A first night's short jump, named for the gauge, is swallowed by the shift of the tool."""
    short = payload((116, 117), 120, "T1")
    longer = payload((106, 112), None, "T1")
    known = [excursion(1, "gauge", "G1", short, "open")]
    assert continued([effect("tool", "T1")], [longer], known, NOW)[0].id == 1
    closed = [excursion(1, "gauge", "G1", short, "closed")]
    assert continued([effect("tool", "T1")], [longer], closed, NOW) == {}
    others = [excursion(1, "gauge", "G1", payload((116, 117), 120, "T8"), "open")]
    assert continued([effect("tool", "T1")], [longer], others, NOW) == {}


def test_the_same_cause_long_after_is_another_excursion() -> None:
    known = [excursion(1, "tool", "T1", payload((10, 12), 30, "T1"), "open")]
    assert continued([effect("tool", "T1")], [payload((200, 210), None, "T1")], known, NOW) == {}

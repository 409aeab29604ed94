"""Stability of a month, its excursions, gaps between tools, changes and decisions."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta
from typing import Any

import numpy as np
import pytest
from scipy import stats
from sqlalchemy import Engine

from spc.monitoring.evaluation import evaluate
from spc.monitoring.life import Hand, close
from spc.monitoring.review import MonthReview
from spc.monitoring.review_findings import changes, decisions, difference_interval, gaps
from spc.monitoring.review_stability import (
    CHANCE,
    Rung,
    rings_too_often,
    signalled_or_more,
    stability,
)
from spc.records import findings
from spc.records.stamps import to_us
from tests.monitoring.bench import add, bay_with, lots_of
from tests.monitoring.test_review import LATER, THICKNESS, review_of

TRK1, TRK2 = ({"tool": tool, "module": "C1"} for tool in ("TRK1", "TRK2"))


def excursion(
    engine: Engine,
    onset: datetime,
    end: datetime | None,
    *,
    context: dict[str, str] = TRK1,
    tier: str = "act",
    pattern: str = "shift",
    as_of: datetime | None = None,
    **payload: Any,
) -> int:
    """An excursion of the mean of one stream, straight into the records."""
    stream = {
        "characteristic": "M1 thickness",
        "statistic": "mean",
        "context": context,
        "first_signal_at_us": to_us(onset),
        "rules": ["beyond-3s"],
    }
    stamp = to_us(onset)
    body = {
        "streams": [stream],
        "onset": {
            "estimate_us": stamp, "earliest_us": stamp, "latest_us": stamp, "lot": None,
        },
        "magnitude": {"value": 5.0, "low": 4.0, "high": 6.0, "unit": "nm", "sigmas": 3.0},
        "suspects": [],
        "lots_at_risk": [],
        "events": [],
        "forecast": None,
        "end_us": None if end is None else to_us(end),
        **payload,
    }  # fmt: skip
    with engine.begin() as connection:
        return findings.opened(
            connection,
            tier=tier,
            pattern=pattern,
            identity=f"x{stamp}{tier}{pattern}{context}",
            as_of=as_of or onset + timedelta(hours=8),
            payload=body,
        )


def two_tools(engine: Engine, shift: float = 0.0) -> None:
    """Two cups over March (90 lots, one in 8 h) and the first days of April."""
    rng = np.random.default_rng(21)
    wafers = lots_of(rng, 90, every=8.0) + lots_of(rng, 90, tool="TRK2", every=8.0, shift=shift)
    add(engine, wafers)
    evaluate(engine, bay_with(THICKNESS), LATER)


def verdicts_of(review: MonthReview) -> list[bool | None]:
    return [row["stable"] for row in review.rows]


def test_a_quiet_month_is_stable_and_one_without_limits_unknown(engine: Engine) -> None:
    two_tools(engine)
    review = review_of(engine, THICKNESS)
    assert verdicts_of(review) == [True, True, True]
    assert [row["excursions"] for row in review.rows] == [[], [], []]
    for row in review.rows:
        assert row["monitored_points"] > 100
        assert 0 < row["signal_events_expected"] < 20
    assert verdicts_of(review_of(engine, THICKNESS, "2026-01")) == [None, None, None]


def test_a_shifted_stream_rings_too_often(engine: Engine) -> None:
    """After 60 lots the level of one stream moves by 9 nm, two sigmas of a point, and stays."""
    rng = np.random.default_rng(22)
    wafers = lots_of(rng, 60, every=6.0) + lots_of(rng, 40, first=60, every=6.0, shift=9.0)
    add(engine, wafers + lots_of(rng, 100, tool="TRK2", every=6.0))
    evaluate(engine, bay_with(THICKNESS), LATER)
    review = review_of(engine, THICKNESS)
    assert verdicts_of(review) == [False, False, True]
    assert [row["verdict"] for row in review.rows][:2] == ["not stable", "not stable"]


def test_excursions_that_lie_on_the_month(engine: Engine) -> None:
    two_tools(engine)
    march = datetime(2026, 3, 1, tzinfo=UTC)
    day = timedelta(days=1)
    before = excursion(engine, march - 5 * day, march - 3 * day)
    into = excursion(engine, march - 2 * day, march + day)
    watched = excursion(engine, march + 9 * day, None, context=TRK2, tier="watch",
                        last_signal_us=to_us(march + 10 * day))  # fmt: skip
    going_on = excursion(engine, march + 20 * day, None)
    after = excursion(engine, march + 40 * day, march + 41 * day)
    whole, first, second = review_of(engine, THICKNESS).rows
    assert first["excursions"] == [into, going_on]
    assert second["excursions"] == [watched]
    assert whole["excursions"] == [into, watched, going_on]
    assert [whole["stable"], first["stable"], second["stable"]] == [False, False, True]
    april = review_of(engine, THICKNESS, "2026-04").rows
    assert april[1]["excursions"] == [going_on, after]
    assert april[2]["excursions"] == []
    february = review_of(engine, THICKNESS, "2026-02").rows
    assert february[0]["excursions"] == [before, into]


def test_a_false_alarm_and_a_silence_do_not_make_a_month_unstable(engine: Engine) -> None:
    two_tools(engine)
    day = datetime(2026, 3, 20, tzinfo=UTC)
    number = excursion(engine, day, None)
    silent = excursion(engine, day, day + timedelta(days=1), context=TRK2, pattern="silence")
    assert verdicts_of(review_of(engine, THICKNESS)) == [False, False, True]
    with engine.begin() as connection:
        close(connection, number, Hand("m.night", day + timedelta(days=2)), "false-alarm")
    review = review_of(engine, THICKNESS)
    assert verdicts_of(review) == [True, True, True]
    assert review.rows[0]["excursions"] == [number, silent]
    # Closed in March, it no longer lies on April.
    assert review_of(engine, THICKNESS, "2026-04").rows[1]["excursions"] == []


def test_an_excursion_is_as_the_clock_knew_it(engine: Engine) -> None:
    two_tools(engine)
    day = datetime(2026, 3, 20, tzinfo=UTC)
    number = excursion(engine, day, None, tier="watch", as_of=day)
    with engine.begin() as connection:
        known = findings.one(connection, number)
        findings.updated(
            connection, known, tier="act", pattern="shift",
            as_of=day + timedelta(days=3), payload=known.payload,
        )  # fmt: skip
    early = review_of(engine, THICKNESS, as_of=day + timedelta(days=1))
    assert (early.rows[1]["excursions"], early.rows[1]["stable"]) == ([number], True)
    assert review_of(engine, THICKNESS).rows[1]["stable"] is False
    assert review_of(engine, THICKNESS, as_of=day - timedelta(days=1)).rows[1]["excursions"] == []


def test_events_beyond_chance_follow_the_poisson_law() -> None:
    for expected in (0.3, 2.8, 17.0):
        limit = int(stats.poisson.isf(CHANCE, expected))
        assert not rings_too_often(Rung(500, limit, limit, expected, expected))
        assert rings_too_often(Rung(500, limit + 1, limit + 1, expected, 2 * expected))
    assert stability([], []).stable is None
    assert stability([Rung(40, 0, 0, 0.5, 0.8), Rung()], []).stable is True
    assert stability([Rung(40, 0, 0, 0.5, 0.8), Rung(40, 1, 30, 0.5, 0.8)], []).stable is False


def test_signals_in_rows_against_simulation() -> None:
    """Monte Carlo of a Poisson number of geometric rows; with rows of one it is the Poisson law."""
    rng = np.random.default_rng(30)
    rows = rng.poisson(3.0, 200_000)
    total = rows + rng.negative_binomial(np.maximum(rows, 1), 1 / 1.8) * (rows > 0)
    for count in (1, 3, 6, 12, 18):
        seen = float(np.mean(total >= count))
        assert signalled_or_more(count, 3.0, 1.8) == pytest.approx(seen, abs=0.004)
    assert signalled_or_more(5, 2.0, 1.0) == pytest.approx(stats.poisson.sf(4, 2.0))


# ---- gaps, changes, decisions --------------------------------------------------------------------


def test_the_interval_of_a_difference_of_means_is_the_usual_one() -> None:
    """With symmetric intervals the method is the normal interval of a difference (closed form)."""
    a, b, se_a, se_b = 1.6, 1.2, 0.05, 0.08
    z = stats.norm.ppf(0.975)
    found = difference_interval((a, a - z * se_a, a + z * se_a), (b, b - z * se_b, b + z * se_b))
    half = z * np.hypot(se_a, se_b)
    assert found == pytest.approx((0.4 - half, 0.4 + half))
    wider = difference_interval((a, 1.5, 1.7), (b, 1.1, 1.3), tools=6)
    plain = difference_interval((a, 1.5, 1.7), (b, 1.1, 1.3))
    assert wider[0] < plain[0] < plain[1] < wider[1]  # type: ignore[operator]
    assert difference_interval((a, None, 1.7), (b, 1.1, 1.3)) == (None, None)


def test_the_worse_tool_is_found_with_its_gap(engine: Engine) -> None:
    two_tools(engine, shift=9.0)
    review = review_of(engine, THICKNESS)
    (gap,) = gaps(review)
    assert (gap.best, gap.worst) == ("TRK1", "TRK2")
    rows = {tuple(row["context"].values()): row for row in review.rows}
    assert gap.best_ppk == pytest.approx(rows["TRK1", "C1"]["ppk"])
    assert gap.gap == pytest.approx(rows["TRK1", "C1"]["ppk"] - rows["TRK2", "C1"]["ppk"])
    assert 0 < gap.low < gap.gap < gap.high  # type: ignore[operator]
    found = decisions(review, [gap])
    kinds = [one.kind for one in found]
    assert "below-goal" in kinds
    assert "tool-gap" in kinds
    below = next(one for one in found if one.kind == "below-goal")
    assert below.high is not None
    assert below.high < 1.33
    assert {"tool": "TRK2", "module": "C1"} in (below.context, *below.streams)


def test_an_index_has_changed_when_its_intervals_are_apart(engine: Engine) -> None:
    rng = np.random.default_rng(23)
    wafers = lots_of(rng, 90, every=8.0) + lots_of(rng, 60, first=90, every=8.0, shift=10.0)
    wafers += lots_of(rng, 150, tool="TRK2", every=8.0)
    add(engine, wafers)
    found = changes(review_of(engine, THICKNESS, "2026-04"))
    moved = [(one.context.get("tool"), one.index) for one in found]
    assert ("TRK1", "ppk") in moved
    assert ("TRK1", "cpk") in moved
    assert ("TRK2", "ppk") not in moved
    one = next(c for c in found if c.context.get("tool") == "TRK1" and c.index == "ppk")
    assert one.after < one.before
    assert changes(review_of(engine, THICKNESS, "2026-03")) == []


def test_too_few_lots_and_a_coarse_gauge_are_said(engine: Engine) -> None:
    add(engine, lots_of(np.random.default_rng(24), 5))
    plan = {**THICKNESS, "gauge_sd": 3.0}
    review = review_of(engine, plan)
    kinds = {one.kind: one for one in decisions(review, [])}
    assert kinds["gauge"].value == pytest.approx(9.0 / review.rows[0]["sd_overall"] ** 2)
    assert "too-few" in kinds

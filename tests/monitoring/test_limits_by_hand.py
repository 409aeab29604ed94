"""Limits proposed, approved and withdrawn by people."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from sqlalchemy import Engine

from spc.monitoring import limits_by_hand as by_hand
from spc.monitoring.evaluation import evaluate
from spc.monitoring.life import Hand, NotPossibleError
from spc.monitoring.limits_by_hand import Window
from spc.monitoring.series import points_json
from spc.records import actions
from spc.records.sessions import reading
from tests.monitoring.bench import add, bay_with, hours, lots_of

BAY = bay_with(
    {
        "name": "M1 thickness",
        "parameter": "resist_thickness",
        "unit": "nm",
        "stream_by": ("tool", "module"),
        "statistics": ("mean", "within-wafer"),
    }
)
ANNA = Hand("Anna", hours(400))


@pytest.fixture
def shifted(engine: Engine) -> Engine:
    """40 lots on target, 20 lots 20 nm above it, on purpose; another cup with nothing wrong."""
    rng = np.random.default_rng(11)
    add(engine, lots_of(rng, 40) + lots_of(rng, 20, first=40, shift=20.0))
    add(engine, lots_of(rng, 40, module="C2"))
    evaluate(engine, BAY, hours(300))
    return engine


def means(engine: Engine, module: str = "C1") -> list[dict[str, Any]]:
    with reading(engine) as connection:
        points = points_json(connection, BAY, "M1 thickness", statistic="mean")
    return [p for p in points if p["context"]["module"] == module]


def test_approved_limits_replace_automatic_ones_from_their_stamp(shifted: Engine) -> None:
    before, other = means(shifted), means(shifted, "C2")
    assert sum(bool(p["rules"]) for p in before[40:]) >= 17
    window = Window({"module": "C1"}, first=hours(4 * 40 - 1), holds_from=hours(4 * 40 - 1))
    with shifted.begin() as connection:
        numbers = by_hand.propose(
            connection, BAY, "M1 thickness", window, ANNA, "new target since the resist change"
        )
        assert len(numbers) == 1
        by_hand.approve(connection, numbers[0], Hand("Bo", hours(401)), "agreed in the meeting")
    result = evaluate(shifted, BAY, hours(301))
    after = means(shifted)
    assert list(result.touched)
    assert [p["center"] for p in after[:40]] == [p["center"] for p in before[:40]]
    assert np.mean([p["value"] for p in after[40:]]) == pytest.approx(after[45]["center"], abs=0.5)
    assert not any(p["rules"] for p in after[40:])
    assert means(shifted, "C2") == other


def test_withdrawn_limits_give_way_to_those_before(shifted: Engine) -> None:
    before = means(shifted)
    with shifted.begin() as connection:
        window = Window({"module": "C1"}, first=hours(4 * 40 - 1))
        (number,) = by_hand.propose(connection, BAY, "M1 thickness", window, ANNA, "new target")
        by_hand.approve(connection, number, ANNA, "agreed")
    evaluate(shifted, BAY, hours(301))
    assert means(shifted) != before
    with shifted.begin() as connection:
        by_hand.withdraw(connection, number, ANNA, "the resist was changed back")
    evaluate(shifted, BAY, hours(302))
    assert means(shifted) == before
    with reading(shifted) as connection:
        document = by_hand.shown(connection, BAY, number)
        assert document["status"] == "withdrawn"
        assert document["decided_by"] == "Anna"
        assert [a["action"] for a in document["actions"]] == ["propose", "approve", "withdraw"]
        assert actions.verify(connection).broken_at is None


def test_a_proposal_alone_changes_nothing(shifted: Engine) -> None:
    before = means(shifted)
    with shifted.begin() as connection:
        numbers = by_hand.propose(connection, BAY, "M1 thickness", Window({}), ANNA, "to see")
    assert len(numbers) == 2
    result = evaluate(shifted, BAY, hours(301))
    assert result.points_evaluated == 0
    assert means(shifted) == before
    with reading(shifted) as connection:
        documents = by_hand.listed(connection, BAY, "M1 thickness", ["proposed"])
    assert [d["n_points"] for d in documents] == [30, 30]
    row = documents[0]["limits"][0]
    assert row["lower_limit"] < row["center"] < row["upper_limit"]


@pytest.mark.parametrize(
    ("window", "complaint"),
    [
        (Window({"module": "C9"}), "no stream with module=C9"),
        (Window({"module": "C1"}, first=hours(4 * 57)), "at least 5"),
    ],
)
def test_what_cannot_be_proposed_says_why(shifted: Engine, window: Window, complaint: str) -> None:
    with shifted.begin() as connection, pytest.raises(NotPossibleError, match=complaint):
        by_hand.propose(connection, BAY, "M1 thickness", window, ANNA, "to see")


def test_only_proposals_are_approved_and_automatic_limits_stay(shifted: Engine) -> None:
    with reading(shifted) as connection:
        number = by_hand.listed(connection, BAY)[0]["id"]
    with shifted.begin() as connection:
        with pytest.raises(NotPossibleError, match="only proposed"):
            by_hand.approve(connection, number, ANNA, "why not")
        with pytest.raises(NotPossibleError, match="approve others"):
            by_hand.withdraw(connection, number, ANNA, "why not")
        with pytest.raises(NotPossibleError, match="no limits 99"):
            by_hand.withdraw(connection, 99, ANNA, "why not")

"""Run rules: grammar, readings, and the evaluator against a plain walk over the points."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from spc.stats.rules import (
    WESTERN_ELECTRIC,
    Rule,
    evaluate,
    first_of_run,
    parse_rule,
    parse_rules,
)

EVERY_KIND = parse_rules(
    [
        "beyond-3s",
        "2of3-beyond-2s",
        "4of5-beyond-1s",
        "8-one-side",
        "3of7-beyond-1.5s",
        "1of4-beyond-2.5s",
        "5-trending",
        "6-alternating",
        "6-within-1s",
        "4-outside-1s",
    ]
)
# Values on the limits, on the centre and in ties are what a reading of a rule turns on.
ON_THE_LINES = st.one_of(
    st.sampled_from([-3.5, -3.0, -2.5, -2.0, -1.5, -1.0, -0.5, 0.0, 0.5, 1.0, 1.5, 2.0, 2.5, 3.0]),
    st.floats(-4.0, 4.0, allow_nan=False),
)


def plain_walk(z: list[float], rule: Rule) -> list[int]:
    """Side of the signal at each point (9 for a signal without side, 0 for none), by hand."""
    found = []
    for i in range(len(z)):
        window = z[max(0, i - rule.m + 1) : i + 1]
        full = len(window) == rule.m
        steps = np.sign(np.diff(window))
        mark = 0
        if rule.kind in ("beyond", "one-side"):
            for side in (1, -1):
                count = sum(side * value > rule.s for value in window)
                if side * z[i] > rule.s and count >= rule.k:
                    mark = side
        elif rule.kind == "trending" and full:
            mark = int(steps[0]) if abs(steps.sum()) == rule.m - 1 else 0
        elif rule.kind == "alternating" and full:
            mark = 9 * int(steps.all() and (steps[1:] == -steps[:-1]).all())
        elif rule.kind == "within" and full:
            mark = 9 * int(all(abs(value) < rule.s for value in window))
        elif rule.kind == "outside" and full:
            mark = 9 * int(all(abs(value) > rule.s for value in window))
        found.append(mark)
    return found


def marks(z: list[float], segment: list[int] | None = None) -> np.ndarray:
    found = evaluate(z, EVERY_KIND, segment)
    return np.where(found.hits & (found.side == 0), 9, found.side)


class TestGrammar:
    def test_contract_names(self) -> None:
        names = ["beyond-3s", "2of3-beyond-2s", "4of5-beyond-1s", "8-one-side"]
        assert parse_rules(names) == WESTERN_ELECTRIC

    @pytest.mark.parametrize("rule", EVERY_KIND, ids=lambda rule: rule.name)
    def test_name_gives_the_rule_back(self, rule: Rule) -> None:
        assert parse_rule(rule.name) == rule

    @pytest.mark.parametrize(
        "name", ["", "beyond", "beyond-0s", "4of3-beyond-1s", "0of3-beyond-1s", "1-one-side",
                 "2-trending", "8-one-side-2s", "beyond-3", "Beyond-3s", "500-one-side"],
    )  # fmt: skip
    def test_other_names_are_refused_by_name(self, name: str) -> None:
        with pytest.raises(ValueError, match="rule"):
            parse_rule(name)

    def test_unknown_form_lists_the_legal_ones(self) -> None:
        with pytest.raises(ValueError, match=r"\{k\}of\{m\}-beyond-\{s\}s"):
            parse_rule("three-sigma")

    def test_a_rule_given_twice_is_refused(self) -> None:
        with pytest.raises(ValueError, match="twice"):
            parse_rules(["beyond-3s", "beyond-3.0s"])

    def test_rule_checks_its_numbers(self) -> None:
        with pytest.raises(ValueError, match="no distance"):
            Rule("one-side", 8, s=1.0)
        with pytest.raises(ValueError, match="unknown kind"):
            Rule("wave", 8)  # type: ignore[arg-type]


class TestReading:
    """The readings stated in the module, point by point."""

    def test_limits_are_strict(self) -> None:
        assert not evaluate([3.0, -3.0, 2.0, 2.0], WESTERN_ELECTRIC).any.any()

    def test_centre_line_breaks_a_run(self) -> None:
        found = evaluate([0.1] * 7 + [0.0] + [0.1] * 8, WESTERN_ELECTRIC)
        assert np.flatnonzero(found.hits[3]).tolist() == [15]

    def test_last_point_must_be_in_the_zone(self) -> None:
        found = evaluate([2.5, 2.5, 0.0, 2.5], WESTERN_ELECTRIC)
        assert np.flatnonzero(found.hits[1]).tolist() == [1, 3]
        assert found.side[1].tolist() == [0, 1, 0, 1]

    def test_both_sides_do_not_add_up(self) -> None:
        assert not evaluate([2.5, -2.5, 0.0], WESTERN_ELECTRIC).hits[1].any()

    def test_members_are_the_points_in_the_zone(self) -> None:
        found = evaluate([0.0, 1.5, 1.2, -0.3, 1.1, 1.7, 0.2], WESTERN_ELECTRIC)
        assert found.names_at(5) == ("4of5-beyond-1s",)
        assert found.members(2, 5).tolist() == [1, 2, 4, 5]
        with pytest.raises(ValueError, match="does not signal"):
            found.members(2, 4)

    def test_members_stay_in_their_segment_and_skip_gaps(self) -> None:
        z = [[2.5, 2.5, np.nan, 2.2], [0.0, 0.0, 0.0, 0.0]]
        found = evaluate(z, WESTERN_ELECTRIC, [0, 1, 1, 1], missing="skip")
        assert np.argwhere(found.hits[1]).tolist() == [[0, 3]]
        assert found.members(1, (0, 3)).tolist() == [1, 3]

    def test_members_of_a_run_are_the_whole_run(self) -> None:
        found = evaluate(np.full(12, 0.5), WESTERN_ELECTRIC)
        assert found.members(3, 9).tolist() == list(range(2, 10))

    @pytest.mark.parametrize("bad", [np.inf, -np.inf, np.nan])
    def test_points_that_are_not_finite_are_refused(self, bad: float) -> None:
        with pytest.raises(ValueError, match="point 1 is"):
            evaluate([0.0, bad], WESTERN_ELECTRIC)

    def test_infinite_is_refused_even_where_gaps_are_skipped(self) -> None:
        with pytest.raises(ValueError, match=r"point \(0, 1\) is inf"):
            evaluate([[np.nan, np.inf]], WESTERN_ELECTRIC, missing="skip")

    def test_segment_of_another_shape_is_refused(self) -> None:
        with pytest.raises(ValueError, match="do not fit"):
            evaluate(np.zeros((2, 5)), WESTERN_ELECTRIC, np.zeros(4))

    def test_empty_input(self) -> None:
        assert evaluate(np.empty((3, 0)), WESTERN_ELECTRIC).hits.shape == (4, 3, 0)
        assert evaluate([], WESTERN_ELECTRIC).hits.shape == (4, 0)
        assert evaluate([np.nan], WESTERN_ELECTRIC, missing="skip").hits.sum() == 0
        assert evaluate([5.0], ()).hits.shape == (0, 1)

    def test_input_is_left_alone(self) -> None:
        z = np.linspace(-4, 4, 50)
        z.flags.writeable = False
        evaluate(z, EVERY_KIND, np.arange(50) // 20)


class TestAgainstOtherRoutes:
    @given(st.lists(ON_THE_LINES, max_size=40))
    @settings(max_examples=60, derandomize=True, deadline=None)
    def test_plain_walk(self, z: list[float]) -> None:
        expected = [plain_walk(z, rule) for rule in EVERY_KIND]
        assert marks(z).tolist() == expected

    @given(st.lists(st.tuples(ON_THE_LINES, st.integers(0, 2)), min_size=1, max_size=40))
    @settings(max_examples=60, derandomize=True, deadline=None)
    def test_segments_are_separate_charts(self, pairs: list[tuple[float, int]]) -> None:
        z = [value for value, _ in pairs]
        codes = [code for _, code in pairs]
        expected = [list[int]() for _ in EVERY_KIND]
        starts = [i for i in range(len(z)) if i == 0 or codes[i] != codes[i - 1]]
        for low, high in zip(starts, [*starts[1:], len(z)], strict=True):
            for row, rule in zip(expected, EVERY_KIND, strict=True):
                row.extend(plain_walk(z[low:high], rule))
        assert marks(z, codes).tolist() == expected

    @given(st.lists(ON_THE_LINES, max_size=40))
    @settings(max_examples=40, derandomize=True, deadline=None)
    def test_sign_flip_flips_the_sides(self, z: list[float]) -> None:
        up, down = evaluate(z, EVERY_KIND), evaluate([-value for value in z], EVERY_KIND)
        assert (up.hits == down.hits).all()
        assert (up.side == -down.side).all()

    @given(st.lists(ON_THE_LINES, min_size=1, max_size=60), st.integers(0, 60))
    @settings(max_examples=40, derandomize=True, deadline=None)
    def test_new_points_with_their_history_equal_everything(self, z: list[float], cut: int) -> None:
        cut = min(cut, len(z))
        history = max(0, cut - (max(rule.m for rule in EVERY_KIND) - 1))
        later = evaluate(z[history:], EVERY_KIND).hits[:, cut - history :]
        assert (later == evaluate(z, EVERY_KIND).hits[:, cut:]).all()

    @given(st.lists(st.one_of(ON_THE_LINES, st.just(np.nan)), max_size=40))
    @settings(max_examples=40, derandomize=True, deadline=None)
    def test_gaps_are_as_if_not_there(self, z: list[float]) -> None:
        points = np.array(z, dtype=float)
        there = ~np.isnan(points)
        found = evaluate(points, EVERY_KIND, missing="skip")
        assert (found.hits[:, there] == evaluate(points[there], EVERY_KIND).hits).all()
        assert not found.hits[:, ~there].any()

    def test_streams_of_many_lengths_equal_each_by_itself(self) -> None:
        rng = np.random.default_rng(7)
        z = rng.standard_normal((60, 90)) * 1.5
        for row, length in enumerate(rng.integers(0, 91, size=60)):
            z[row, length:] = np.nan
        codes = np.cumsum(rng.random((60, 90)) < 0.05, axis=1)
        together = evaluate(z, EVERY_KIND, codes, missing="skip")
        for row in range(60):
            alone = evaluate(z[row], EVERY_KIND, codes[row], missing="skip")
            assert (together.hits[:, row] == alone.hits).all()
            assert (together.side[:, row] == alone.side).all()

    def test_pandas_rolling(self) -> None:
        """The plain way of the trade, with pandas, finds the same points."""
        z = np.random.default_rng(3).standard_normal((4, 3000))
        found = evaluate(z, WESTERN_ELECTRIC)
        for row in range(4):
            for hits, rule in zip(found.hits[:, row], WESTERN_ELECTRIC, strict=True):
                expected = np.zeros(3000, dtype=bool)
                for side in (1, -1):
                    zone = pd.Series(side * z[row] > rule.s)
                    count = zone.rolling(rule.m, min_periods=1).sum()
                    expected |= ((count >= rule.k) & zone).to_numpy()
                assert (hits == expected).all()


class TestFirstOfRun:
    def test_later_points_are_the_same_event(self) -> None:
        assert first_of_run([1, 1, 0, 1, 1]).tolist() == [True, False, False, True, False]

    def test_segment_starts_a_new_event(self) -> None:
        assert first_of_run([1, 1, 1], [0, 0, 1]).tolist() == [True, False, True]

    def test_a_gap_is_no_point(self) -> None:
        hits, there = [1, 0, 1, 0, 1], [1, 0, 1, 1, 1]
        assert first_of_run(hits, None, there).tolist() == [True, False, False, False, True]
        assert first_of_run(hits, [0, 0, 1, 1, 1], there)[2]

    def test_events_of_rule_hits(self) -> None:
        z = np.full(12, 0.5)
        assert np.flatnonzero(evaluate(z, WESTERN_ELECTRIC).events[3]).tolist() == [7]
        z[9] = np.nan
        found = evaluate(z, WESTERN_ELECTRIC, missing="skip")
        assert np.flatnonzero(found.events[3]).tolist() == [7]

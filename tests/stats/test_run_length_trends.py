"""Run lengths with `trending` and `alternating` rules: exact counts of orders, and simulation."""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
import pytest

from spc.stats.designs import design_from_text
from spc.stats.run_length import run_length
from tests.stats.test_run_length import assert_simulation_agrees


class TestTrends:
    """Rules that compare points with the ones before."""

    @staticmethod
    def quiet_orders(points: int, trending: int, alternating: int) -> int:
        """Orders of some points without either pattern, counted by the rank of the last point."""
        counts = {(1, 0, 0, 0): 1}
        for size in range(1, points):
            after: dict[tuple[int, int, int, int], int] = {}
            for (rank, side, run, turns), ways in counts.items():
                for new in range(1, size + 2):
                    step = 1 if new > rank else -1
                    row = run + 1 if step == side else 1
                    turned = turns + 1 if step == -side else 0
                    if row < trending - 1 and turned < alternating - 2:
                        key = (new, step, row, turned)
                        after[key] = after.get(key, 0) + ways
            counts = after
        return sum(counts.values())

    @pytest.mark.parametrize(
        ("names", "trending", "alternating"),
        [("4-trending", 4, 99), ("5-alternating", 99, 5), ("5-trending,6-alternating", 5, 6)],
    )
    def test_orders_counted_in_whole_numbers(
        self, names: str, trending: int, alternating: int
    ) -> None:
        counts = [2, 4, 5, 6, 9, 12]
        chances = [
            1 - Fraction(self.quiet_orders(n, trending, alternating), math.factorial(n))
            for n in counts
        ]
        for shift in (0.0, 3.0):
            found = run_length(design_from_text(rules=names), shift, n=counts)
            np.testing.assert_allclose(
                np.asarray(found.prob_within), [float(c) for c in chances], rtol=1e-12, atol=1e-15
            )
            assert found.relative_error < 1e-9

    def test_long_trends(self) -> None:
        """Rare rows come as a Poisson stream: 1 / ARL is the rate of rows that begin.

        A row of m begins where m points rise and the one before them was higher:
        2 (1/m! - 1/(m+1)!).
        """
        for m in (10, 15):
            found = run_length(design_from_text(rules=f"{m}-trending"))
            rate = 2.0 * (1.0 / math.factorial(m) - 1.0 / math.factorial(m + 1))
            assert found.arl == pytest.approx(1.0 / rate, rel=2.0 * m**2 * rate + 1e-9)

    @pytest.mark.parametrize("shift", [0.0, 1.0])
    @pytest.mark.parametrize(
        "names",
        [
            "beyond-3s,2of3-beyond-2s,4of5-beyond-1s,8-one-side,6-trending",
            "5-trending,9-alternating,5-within-1s",
        ],
    )
    def test_beside_zone_rules(self, names: str, shift: float) -> None:
        design = design_from_text(rules=names)
        assert_simulation_agrees(design, shift, 8_000)
        assert run_length(design, shift).relative_error < 1e-11

    def test_a_trend_that_cannot_come_changes_nothing(self) -> None:
        alone = run_length(design_from_text(rules="beyond-2s"), 0.3, n=4)
        beside = run_length(design_from_text(rules="beyond-2s,60-trending"), 0.3, n=4)
        assert beside.arl == pytest.approx(alone.arl, rel=1e-10)
        assert beside.sdrl == pytest.approx(alone.sdrl, rel=1e-10)
        assert beside.prob_within == pytest.approx(alone.prob_within, rel=1e-12)

    def test_out_of_reach_is_simulated_and_says_so(self) -> None:
        exact = run_length(design_from_text(rules="6-trending"))
        steady = run_length(design_from_text(rules="6-trending"), steady_state=True)
        assert steady.method.startswith("simulation")
        assert 0.001 < steady.relative_error < 0.02
        assert abs(steady.arl - (exact.arl - 5)) < 5 * steady.relative_error * steady.arl
        wide = run_length(design_from_text(rules="beyond-2s,10of14-beyond-0.5s"), 1.0, n=3)
        assert wide.method.startswith("simulation")
        bound = run_length(design_from_text(rules="beyond-2s"), 1.0, n=3)
        assert wide.arl < bound.arl
        assert wide.prob_within == pytest.approx(bound.prob_within, abs=0.02)

    def test_too_rare_to_be_simulated(self) -> None:
        with pytest.raises(ValueError, match="too rarely"):
            run_length(design_from_text(rules="beyond-6s,12of14-beyond-4s"))

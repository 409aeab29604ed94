"""Exact run lengths against closed forms, other arithmetic and simulation by the evaluator."""

from __future__ import annotations

import math
import subprocess
import sys
from fractions import Fraction

import numpy as np
import pytest
from scipy.stats import geom, norm

from spc.stats.cusum import cusum
from spc.stats.designs import CusumDesign, Design, EwmaDesign, RuleDesign, design_from_text
from spc.stats.ewma import ewma_chart
from spc.stats.rules import WESTERN_ELECTRIC, evaluate, parse_rules
from spc.stats.run_length import compare_designs, run_length
from spc.stats.run_length_ewma import ewma_arl

ALL_FOUR = RuleDesign(WESTERN_ELECTRIC)
PLAIN = design_from_text(rules="beyond-3s")


def signals_of(design: Design, points: np.ndarray) -> np.ndarray:
    if isinstance(design, RuleDesign):
        return evaluate(points, design.rules).any
    if isinstance(design, EwmaDesign):
        return ewma_chart(points, design).signal
    return cusum(points, design).signal


def assert_simulation_agrees(
    design: Design, shift: float, charts: int, burn: int = 0, length: int = 200
) -> None:
    """Chances of a signal within some counts, within four standard errors of the simulation."""
    rng = np.random.default_rng(20)
    points = rng.standard_normal((charts, burn + length))
    points[:, burn:] += shift
    marks = signals_of(design, points)
    marks = marks[~marks[:, :burn].any(axis=1), burn:]
    first = np.where(marks.any(axis=1), marks.argmax(axis=1) + 1, length + 1)
    counts = [1, 3, 10, 40, length]
    found = run_length(design, shift, n=counts, steady_state=burn > 0)
    for count, chance in zip(counts, np.asarray(found.prob_within), strict=True):
        seen = np.mean(first <= count)
        error = math.sqrt(max(chance * (1.0 - chance), 1e-12) / first.size)
        assert abs(seen - chance) < 4.0 * error + 1e-9, (count, seen, chance)


class TestClosedForms:
    def test_one_point_rule_is_geometric(self) -> None:
        for shift in (0.0, 0.7, -2.0, 5.0):
            p = norm.sf(3.0 - shift) + norm.cdf(-3.0 - shift)
            found = run_length(PLAIN, shift, n=[1, 7, 500])
            assert found.arl == pytest.approx(1.0 / p, rel=1e-13)
            assert found.sdrl == pytest.approx(math.sqrt(1.0 - p) / p, rel=1e-9)
            assert found.median == geom.median(p)
            expected = np.asarray(geom.cdf([1, 7, 500], p))
            np.testing.assert_allclose(np.asarray(found.prob_within), expected, rtol=1e-12)

    def test_row_on_one_side(self) -> None:
        """Mean wait for m heads or m tails of a fair coin: 2^m - 1 (Feller 1968, XIII.7)."""
        for m in (2, 5, 8, 12):
            assert run_length(design_from_text(rules=f"{m}-one-side")).arl == pytest.approx(
                2**m - 1, rel=1e-12
            )

    def test_row_within(self) -> None:
        """Mean wait for m successes in a row: (1 - p^m) / (q p^m) (Feller 1968, XIII.7)."""
        p = norm.cdf(1.0) - norm.cdf(-1.0)
        found = run_length(design_from_text(rules="15-within-1s"))
        assert found.arl == pytest.approx((1.0 - p**15) / ((1.0 - p) * p**15), rel=1e-12)

    def test_two_of_three_in_exact_fractions(self) -> None:
        """2 of 3 on one side, other side too far to matter: a three-state chain by hand."""
        p = Fraction(1, 3)
        q = 1 - p
        # From nothing E0 = 1 + q E0 + p E1; one just now E1 = 1 + q E2; one before E2 = 1 + q E0.
        e0 = (1 + p * (1 + q)) / (1 - q - p * q * q)
        s = 1.0
        shift = s - float(norm.isf(1.0 / 3.0)) + 0.0
        far = norm.cdf(-s - shift)
        found = run_length(design_from_text(rules="2of3-beyond-1s"), shift)
        assert found.arl == pytest.approx(float(e0), rel=20 * far)

    def test_ewma_with_weight_one_is_the_plain_chart(self) -> None:
        for shift in (0.0, 1.5):
            plain, ours = run_length(PLAIN, shift, n=9), run_length(EwmaDesign(1.0, 3.0), shift, 9)
            assert ours.arl == pytest.approx(plain.arl, rel=1e-12)
            assert ours.sdrl == pytest.approx(plain.sdrl, rel=1e-12)
            assert ours.median == plain.median
            assert ours.prob_within == pytest.approx(plain.prob_within, rel=1e-11)

    def test_cusum_that_forgets_is_the_plain_chart(self) -> None:
        """With k far above h the sums return to zero each time: signal when |x| > h + k."""
        p = 2.0 * norm.sf(2.51)
        found = run_length(CusumDesign(2.5, 0.01))
        assert found.arl == pytest.approx(1.0 / p, rel=2e-3)


class TestOtherArithmetic:
    def test_cusum_on_a_fine_grid_of_both_sums(self) -> None:
        """Both sums at once on a lattice (Brook & Evans 1972), which knows nothing of renewal.

        A lattice of width w is off by O(w^2); two widths are extrapolated, k = 0.5, h = 2.0625.
        """

        def lattice(cells: int, per_sigma: int) -> tuple[float, float]:
            shift, width = 0.3, 1.0 / per_sigma
            # 2 k is a whole number of widths, h a whole number and a half: no rounding of either.
            steps = np.arange(-9 * per_sigma, 9 * per_sigma + 1)
            edges = (np.append(steps, steps[-1] + 1) - 0.5) * width + 0.5 - shift
            chance = np.diff(norm.cdf(edges))
            index = {}
            rows, targets, weights = [], [], []
            frontier = [(0, 0)]
            index[(0, 0)] = 0
            while frontier:
                up, down = frontier.pop()
                new_up = np.maximum(up + steps, 0)
                new_down = np.maximum(down - steps - per_sigma, 0)
                inside = (new_up <= cells) & (new_down <= cells)
                for a, b, p in zip(new_up[inside], new_down[inside], chance[inside], strict=True):
                    key = (int(a), int(b))
                    if key not in index:
                        index[key] = len(index)
                        frontier.append(key)
                    rows.append(index[(up, down)])
                    targets.append(index[key])
                    weights.append(p)
            size = len(index)
            step = np.zeros((size, size))
            np.add.at(step, (rows, targets), weights)
            mean = np.linalg.solve(np.eye(size) - step, np.ones(size))
            square = 2.0 * np.linalg.solve(np.eye(size) - step, mean) - mean
            return mean[0], math.sqrt(square[0] - mean[0] ** 2)

        coarse, fine = np.array(lattice(16, 8)), np.array(lattice(49, 24))
        found = run_length(CusumDesign(0.5, 2.0625), 0.3)
        np.testing.assert_allclose((9.0 * fine - coarse) / 8.0, [found.arl, found.sdrl], rtol=1e-4)

    def test_moments_agree_with_the_distribution(self) -> None:
        for design in (ALL_FOUR, EwmaDesign(0.2, 2.5, True), CusumDesign(0.5, 3.0, 1.5)):
            found = run_length(design, 1.0, n=np.arange(1, 2001))
            survival = np.concatenate(([1.0], 1.0 - np.asarray(found.prob_within)))
            n = np.arange(survival.size)
            second = ((2 * n + 1) * survival).sum()
            assert survival.sum() == pytest.approx(found.arl, rel=1e-10)
            sd = math.sqrt(second - found.arl**2)
            assert sd == pytest.approx(found.sdrl, rel=1e-9)
            assert found.median == np.flatnonzero(survival <= 0.5)[0]


class TestAgainstSimulation:
    """The chain, the equation and the evaluators are one reading of each chart."""

    @pytest.mark.parametrize("shift", [0.0, 0.8, -1.5])
    @pytest.mark.parametrize(
        "names",
        [
            "beyond-3s,2of3-beyond-2s,4of5-beyond-1s,8-one-side",
            "3of4-beyond-1.5s,6-within-1s,5-outside-1s",
        ],
    )
    def test_rules(self, names: str, shift: float) -> None:
        assert_simulation_agrees(design_from_text(rules=names), shift, 8_000)

    @pytest.mark.parametrize(
        "design",
        [
            EwmaDesign(0.2, 2.5),
            EwmaDesign(0.1, 2.4, time_varying=True),
            EwmaDesign(0.2, 2.6, fast_start=0.5),
            CusumDesign(0.5, 3.0),
            CusumDesign(0.25, 4.0, 2.25),
            CusumDesign(0.0, 6.0),
        ],
        ids=lambda design: design.text,
    )
    def test_ewma_and_cusum(self, design: Design) -> None:
        assert_simulation_agrees(design, 0.4, 8_000)

    @pytest.mark.parametrize(
        "design", [ALL_FOUR, EwmaDesign(0.2, 2.3), CusumDesign(0.5, 2.5)], ids=lambda d: d.text
    )
    @pytest.mark.parametrize("shift", [0.0, 0.7])
    def test_steady_state(self, design: Design, shift: float) -> None:
        assert_simulation_agrees(design, shift, 16_000, burn=40)


class TestNumericallySafe:
    def test_very_long_run_lengths(self) -> None:
        p = 2.0 * norm.sf(8.0)
        found = run_length(design_from_text(rules="beyond-8s"), n=1000)
        assert found.arl == pytest.approx(1.0 / p, rel=1e-12)
        assert found.prob_within == pytest.approx(1000 * p, rel=1e-9)
        assert found.median == pytest.approx(math.log(2.0) / p, rel=1e-9)
        # Two rules that hardly meet: the rates add up.
        two = run_length(design_from_text(rules="beyond-6s,2of3-beyond-5s"))
        rate = 2.0 * norm.sf(6.0) + 2.0 * 2.0 * norm.sf(5.0) ** 2
        assert two.arl == pytest.approx(1.0 / rate, rel=1e-4)

    def test_long_ewma_run_length_tends_to_its_rate(self) -> None:
        found = run_length(EwmaDesign(0.2, 7.0))
        assert found.relative_error < 1e-9
        assert found.sdrl == pytest.approx(found.arl, rel=1e-9)
        assert found.median == pytest.approx(found.arl * math.log(2.0), rel=1e-6)

    @pytest.mark.parametrize("design", [ALL_FOUR, EwmaDesign(0.2, 2.962), CusumDesign(0.5, 4.0)])
    def test_huge_shifts(self, design: Design) -> None:
        for shift in (30.0, -30.0):
            found = run_length(design, shift, n=1)
            assert found.arl == pytest.approx(1.0, abs=1e-12)
            assert found.median == 1.0
            assert 0.0 <= found.sdrl < 1e-6
            assert found.prob_within == pytest.approx(1.0)

    def test_sd_keeps_its_digits_near_one(self) -> None:
        q = norm.cdf(3.0 - 9.0)
        found = run_length(PLAIN, 9.0)
        assert found.sdrl == pytest.approx(math.sqrt(q), rel=1e-6)

    @pytest.mark.parametrize("design", [ALL_FOUR, EwmaDesign(0.1, 2.7), CusumDesign(0.5, 4.77, 2)])
    def test_tiny_shifts_and_both_signs(self, design: Design) -> None:
        zero = run_length(design)
        tiny = run_length(design, 1e-6)
        assert tiny.arl == pytest.approx(zero.arl, rel=1e-8)
        up, down = run_length(design, 0.4), run_length(design, -0.4)
        assert up.arl == pytest.approx(down.arl, rel=1e-11)
        assert up.sdrl == pytest.approx(down.sdrl, rel=1e-10)
        assert up.arl < zero.arl

    def test_mean_grows_with_the_limit(self) -> None:
        means = [ewma_arl(0.1, limit, 0.0) for limit in (2.0, 2.5, 3.0, 4.0, 5.0, 6.0)]
        assert (np.diff(means) > 0.0).all()


class TestDoor:
    def test_median_of_a_pure_half(self) -> None:
        """A chance of exactly one half at a point makes that point the median."""
        found = run_length(design_from_text(rules="beyond-3s"), 3.0)
        assert found.median == 1.0

    def test_count_comes_back_in_the_shape_asked(self) -> None:
        one, many = run_length(PLAIN, n=5), run_length(PLAIN, n=[5, 6])
        assert isinstance(one.prob_within, float)
        assert one.n == 5
        assert np.asarray(many.prob_within).shape == (2,)
        assert run_length(PLAIN).prob_within is None

    @pytest.mark.parametrize("n", [0, 2.5, [1, -1]])
    def test_counts_out_of_range(self, n: object) -> None:
        with pytest.raises(ValueError, match="whole"):
            run_length(PLAIN, n=n)  # type: ignore[arg-type]

    @pytest.mark.parametrize("shift", [math.inf, math.nan, 31.0])
    def test_shift_out_of_range(self, shift: float) -> None:
        with pytest.raises(ValueError, match="shift"):
            run_length(PLAIN, shift)

    def test_head_start_beyond_what_is_exact(self) -> None:
        with pytest.raises(ValueError, match="head start"):
            run_length(CusumDesign(0.5, 5.0, 3.5))

    def test_designs_out_of_reach_say_so(self) -> None:
        with pytest.raises(ValueError, match="nodes"):
            run_length(EwmaDesign(1e-5, 3.0))
        with pytest.raises(ValueError, match="nodes"):
            run_length(CusumDesign(0.5, 1000.0))

    def test_table(self) -> None:
        rows = compare_designs([PLAIN, EwmaDesign(0.2, 2.962)], [0.0, 1.0])
        assert [(row.design, row.shift) for row in rows] == [
            ("rules beyond-3s", 0.0),
            ("rules beyond-3s", 1.0),
            ("ewma 0.2,2.962", 0.0),
            ("ewma 0.2,2.962", 1.0),
        ]
        assert rows[3].arl == run_length(EwmaDesign(0.2, 2.962), 1.0).arl

    def test_import_is_light(self) -> None:
        """`yellowbay --help` reaches this module: nothing heavy may come with it."""
        code = (
            "import sys, spc.stats.run_length, spc.stats.false_signals as f;"
            "heavy = {'scipy', 'pandas', 'statsmodels'} & set(sys.modules);"
            "sys.exit(' '.join(heavy) or 0)"
        )
        done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True)
        assert done.returncode == 0, done.stderr


class TestDesignFromText:
    def test_forms(self) -> None:
        names = "beyond-3s, 8-one-side"
        assert design_from_text(rules=names) == RuleDesign(parse_rules(["beyond-3s", "8-one-side"]))
        assert design_from_text(ewma="0.2,2.962") == EwmaDesign(0.2, 2.962)
        assert design_from_text(cusum="0.5, 4.77") == CusumDesign(0.5, 4.77)
        assert design_from_text(cusum="0.5,5,2.5") == CusumDesign(0.5, 5.0, 2.5)

    @pytest.mark.parametrize(
        ("given", "words"),
        [
            ({}, "exactly one"),
            ({"rules": "beyond-3s", "ewma": "0.2,3"}, "--rules and --ewma"),
            ({"rules": " , "}, "names no rule"),
            ({"rules": "beyond-3"}, "not understood"),
            ({"rules": "beyond-3s,beyond-3s"}, "twice"),
            ({"ewma": "0.2"}, "1 numbers"),
            ({"ewma": "a,b"}, "not a list of numbers"),
            ({"ewma": "0,3"}, "lambda"),
            ({"ewma": "0.2,nan"}, "limit L"),
            ({"cusum": "0.5,-4"}, "interval H"),
            ({"cusum": "1,2,3,4"}, "4 numbers"),
        ],
    )
    def test_errors(self, given: dict[str, str], words: str) -> None:
        with pytest.raises(ValueError, match=words):
            design_from_text(**given)

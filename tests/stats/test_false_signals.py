"""Expected false signals against closed forms, other arithmetic and the evaluator itself."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.stats import multivariate_normal, norm
from scipy.stats import t as student

from spc.stats.ar1_chain import ar1_signals
from spc.stats.false_signals import (
    baseline_grid,
    expected_false_signals,
    least_delay_designs,
    signal_rates,
)
from spc.stats.rules import WESTERN_ELECTRIC, evaluate, first_of_run, parse_rules
from spc.stats.run_length import CusumDesign, EwmaDesign, RuleDesign, run_length

PLAIN = WESTERN_ELECTRIC[:1]


class TestKnownLimits:
    def test_closed_forms_of_each_rule(self) -> None:
        found = signal_rates(WESTERN_ELECTRIC)
        one, two = norm.sf(3.0), norm.sf(2.0)
        b = norm.sf(1.0)
        four_of_five = b * sum(math.comb(4, j) * b**j * (1 - b) ** (4 - j) for j in (3, 4))
        expected = (2 * one, 2 * two * (1 - (1 - two) ** 2), 2 * four_of_five, 2 / 2**8)
        np.testing.assert_allclose(found.signals_by_rule, expected, rtol=1e-12)
        # Two of one rule in a row: 2^-9 for the row on one side; the same side or not for rule 1.
        assert found.events_by_rule[3] == pytest.approx(2 / 2**8 - 2 / 2**9, rel=1e-12)
        assert found.events_by_rule[0] == pytest.approx(2 * one - (2 * one) ** 2, rel=1e-12)

    def test_set_against_the_evaluator(self) -> None:
        z = np.random.default_rng(11).standard_normal((1000, 1008))
        hits = evaluate(z, WESTERN_ELECTRIC)
        found = signal_rates(WESTERN_ELECTRIC)
        signals, events = hits.any[:, 8:], first_of_run(hits.any)[:, 8:]
        for seen, rate in ((signals, found.signals), (events, found.events)):
            error = seen.mean(axis=1).std() / math.sqrt(1000)
            assert abs(seen.mean() - rate) < 4 * error
        by_rule = hits.events[..., 8:].mean(axis=(1, 2))
        np.testing.assert_allclose(by_rule, found.events_by_rule, rtol=0.08)

    def test_bounds(self) -> None:
        found = signal_rates(WESTERN_ELECTRIC)
        assert max(found.signals_by_rule) < found.signals < sum(found.signals_by_rule)
        assert found.events < found.signals
        # A chart that starts afresh after each signal signals less often than one that goes on.
        assert found.events > 1.0 / run_length(RuleDesign(WESTERN_ELECTRIC)).arl

    def test_rules_that_compare_values_are_simulated(self) -> None:
        """m points in a row rising or falling: 2 / m! of the orders of m points."""
        found = signal_rates(parse_rules(["5-trending"]))
        assert found.method == "simulation"
        assert found.signals == pytest.approx(2 / math.factorial(5), rel=0.03)
        assert 0.0 < found.relative_error < 0.02


class TestBaseline:
    @pytest.mark.parametrize("m", [5, 30, 200])
    def test_one_point_rule_follows_student(self, m: int) -> None:
        """A new point over the mean and sd of m others is sqrt(1 + 1/m) t with m - 1 df."""
        found = signal_rates(PLAIN, baseline=m).signals
        assert found == pytest.approx(2 * student.sf(3 / math.sqrt(1 + 1 / m), m - 1), rel=1e-7)

    def test_thirty_points_more_than_double_the_rate(self) -> None:
        found = signal_rates(PLAIN, baseline=30).signals
        assert found == pytest.approx(0.0062, abs=5e-5)
        assert found > 2 * signal_rates(PLAIN).signals

    def test_all_rules_against_simulated_baselines(self) -> None:
        rng = np.random.default_rng(12)
        m = 15
        z = rng.standard_normal((20_000, m + 8 + 60))
        past, new = z[:, :m], z[:, m:]
        centre, sd = past.mean(axis=1, keepdims=True), past.std(axis=1, ddof=1, keepdims=True)
        hits = evaluate((new - centre) / sd, WESTERN_ELECTRIC)
        found = signal_rates(WESTERN_ELECTRIC, baseline=m)
        pairs = [(hits.any[:, 8:], found.signals), (first_of_run(hits.any)[:, 8:], found.events)]
        pairs += list(zip(hits.hits[..., 8:], found.signals_by_rule, strict=True))
        for seen, rate in pairs:
            error = seen.mean(axis=1).std() / math.sqrt(20_000)
            assert abs(seen.mean() - rate) < 4 * error

    def test_degrees_of_freedom_of_sigma(self) -> None:
        """A sigma known almost surely leaves the centre's error: N(0, 1 + 1/m)."""
        found = signal_rates(PLAIN, baseline=20, sigma_df=1e7).signals
        assert found == pytest.approx(2 * norm.sf(3 / math.sqrt(1 + 1 / 20)), rel=1e-5)

    def test_tends_to_known_limits(self) -> None:
        known = signal_rates(WESTERN_ELECTRIC)
        near = signal_rates(WESTERN_ELECTRIC, baseline=1_000_000)
        assert near.signals == pytest.approx(known.signals, rel=1e-4)
        assert near.events == pytest.approx(known.events, rel=1e-4)

    @pytest.mark.parametrize(("m", "df"), [(3, 2.0), (30, 29.0), (300, 700.5)])
    def test_grid_has_the_moments_of_the_errors(self, m: int, df: float) -> None:
        center, sigma, weight = baseline_grid(m, df)
        assert weight.sum() == pytest.approx(1.0)
        assert weight @ center**2 == pytest.approx(1 / m, rel=1e-9)
        assert weight @ sigma**2 == pytest.approx(1.0, rel=1e-6)
        assert weight @ sigma**4 == pytest.approx(1 + 2 / df, rel=1e-6)
        sixth = (1 + 2 / df) * (1 + 4 / df)
        assert weight @ sigma**6 == pytest.approx(sixth, rel=1e-6)


class TestAutocorrelation:
    def test_one_point_rule_does_not_care(self) -> None:
        """With known limits the points are N(0, 1) whatever their correlation."""
        for phi in (0.5, -0.4):
            found = signal_rates(PLAIN, phi=phi)
            assert found.signals == pytest.approx(signal_rates(PLAIN).signals, rel=0.08)

    @pytest.mark.parametrize("phi", [0.35, -0.3, 0.93])
    def test_two_of_three_by_normal_orthants(self, phi: float) -> None:
        """P(last and one of the two before beyond 2) from bi- and trivariate normal tails."""
        rule = WESTERN_ELECTRIC[1:2]
        correlation = phi ** np.abs(np.subtract.outer(np.arange(3), np.arange(3)))

        def tail(points: list[int]) -> float:
            cov = correlation[np.ix_(points, points)]
            return float(multivariate_normal.cdf([-2.0] * len(points), cov=cov))

        exact = 2.0 * (tail([1, 2]) + tail([0, 2]) - tail([0, 1, 2]))
        found = signal_rates(rule, phi=phi)
        assert abs(found.signals / exact - 1.0) < 4 * found.relative_error + 0.01

    @pytest.mark.parametrize("phi", [0.3, 0.6])
    def test_set_against_the_recursion_on_the_last_value(self, phi: float) -> None:
        """With known limits the rate of signals is also had exactly, from another room."""
        exact = ar1_signals(phi, [rule.name for rule in WESTERN_ELECTRIC]).rate
        found = signal_rates(WESTERN_ELECTRIC, phi=phi)
        assert abs(found.signals / exact - 1.0) < 4 * found.relative_error

    def test_interpolation_between_grid_points(self) -> None:
        low, middle, high = (
            signal_rates(WESTERN_ELECTRIC, 30, phi).signals for phi in (0.2, 0.25, 0.3)
        )
        assert low < middle < high
        rng = np.random.default_rng(13)
        noise = rng.standard_normal((6000, 30 + 20 + 150))
        for i in range(1, noise.shape[1]):
            noise[:, i] = 0.25 * noise[:, i - 1] + math.sqrt(1 - 0.25**2) * noise[:, i]
        past, new = noise[:, :30], noise[:, 50:]
        z = (new - past.mean(axis=1, keepdims=True)) / past.std(axis=1, ddof=1, keepdims=True)
        seen = evaluate(z, WESTERN_ELECTRIC).any[:, 8:].mean(axis=1)
        assert abs(seen.mean() / middle - 1.0) < 4 * seen.std() / math.sqrt(6000) / middle + 0.04

    def test_positive_correlation_cries_wolf(self) -> None:
        rates = [signal_rates(WESTERN_ELECTRIC, phi=phi).signals for phi in (-0.3, 0.0, 0.3, 0.6)]
        assert rates == sorted(rates)


class TestExpected:
    def test_adds_up(self) -> None:
        one = signal_rates(WESTERN_ELECTRIC, 30)
        night = expected_false_signals(WESTERN_ELECTRIC, 250.0, 30)
        assert night.signals == pytest.approx(250 * one.signals)
        assert night.events == pytest.approx(250 * one.events)
        assert [name for name, _, _ in night.by_rule] == [rule.name for rule in WESTERN_ELECTRIC]
        assert night.by_rule[3][1] == pytest.approx(250 * one.signals_by_rule[3])
        assert expected_false_signals(WESTERN_ELECTRIC, 0.0).signals == 0.0

    @pytest.mark.parametrize(
        ("given", "words"),
        [
            ({"n_points": -1.0}, "number of points"),
            ({"n_points": math.inf}, "number of points"),
            ({"n_points": 1.0, "baseline": 2}, "at least 3"),
            ({"n_points": 1.0, "phi": 1.0}, "autocorrelation"),
            ({"n_points": 1.0, "baseline": 30, "sigma_df": 0.5}, "degree of freedom"),
        ],
    )
    def test_out_of_range(self, given: dict[str, float], words: str) -> None:
        with pytest.raises(ValueError, match=words):
            expected_false_signals(WESTERN_ELECTRIC, **given)  # type: ignore[arg-type]

    def test_no_rule(self) -> None:
        with pytest.raises(ValueError, match="at least one rule"):
            signal_rates(())


class TestLeastDelay:
    @pytest.mark.parametrize(("rate", "shift"), [(1 / 370.4, 1.0), (0.02, 2.0), (1e-5, -0.5)])
    def test_every_design_keeps_the_rate(self, rate: float, shift: float) -> None:
        found = least_delay_designs(rate, shift)
        assert {choice.family for choice in found} == {"limits", "run rules", "EWMA", "CUSUM"}
        for choice in found:
            assert run_length(choice.design).arl == pytest.approx(choice.arl0, rel=1e-12)
            # The widths are rounded up to three digits: kept, and hardly more than kept.
            assert 1.0 / rate <= choice.arl0 < 1.03 / rate, choice
            assert run_length(choice.design, shift).arl == pytest.approx(choice.arl, rel=1e-12)
        arls = [choice.arl for choice in found]
        assert arls == sorted(arls)

    def test_finds_the_known_optima(self) -> None:
        """ARL 500 designs of Lucas & Saccucci (1990), from memory: lambda 0.1, L 2.814 etc."""
        found = {
            choice.design.lam: choice.design.limit
            for choice in least_delay_designs(1 / 500.0, 1.0)
            if isinstance(choice.design, EwmaDesign)
        }
        for lam, limit in ((0.05, 2.615), (0.1, 2.814), (0.25, 2.998), (0.4, 3.054)):
            assert found[lam] == pytest.approx(limit, abs=0.0015)

    def test_reference_value_of_half_the_shift_is_best(self) -> None:
        """CUSUM theory: k of half the shift sees it soonest (Moustakides 1986, worst case)."""
        found = least_delay_designs(1 / 500.0, 1.0)
        cusums = [c.design for c in found if isinstance(c.design, CusumDesign)]
        assert cusums[0].k == 0.5

    def test_large_shifts_need_no_memory(self) -> None:
        found = least_delay_designs(1 / 370.4, 5.0)
        plain = next(choice for choice in found if choice.family == "limits")
        assert plain.arl < 1.05
        assert plain.arl < min(c.arl for c in found if c.family == "EWMA" and c.design.lam < 0.5)  # type: ignore[union-attr]

    @pytest.mark.parametrize(("rate", "shift"), [(0.0, 1.0), (0.5, 1.0), (0.01, 0.0), (0.01, 99)])
    def test_out_of_range(self, rate: float, shift: float) -> None:
        with pytest.raises(ValueError, match="must be"):
            least_delay_designs(rate, shift)

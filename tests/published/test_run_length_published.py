"""Run lengths against the published tables and the pack of exact values.

Sources of the printed values: Champ & Woodall (1987), Technometrics 29:393-399; Lucas &
Saccucci (1990), Technometrics 32:1-12; Lucas (1976), Journal of Quality Technology 8:1-12;
Lucas & Crosier (1982), Technometrics 24:199-205.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from spc.stats.designs import CusumDesign, EwmaDesign, RuleDesign
from spc.stats.rule_states import rule_machine
from spc.stats.rules import WESTERN_ELECTRIC, Rule
from spc.stats.run_length import run_length

Load = Callable[[str], Any]


def western_electric(numbers: list[int], row: int = 8) -> RuleDesign:
    rules = [*WESTERN_ELECTRIC[:3], Rule("one-side", row)]
    return RuleDesign(tuple(rules[i - 1] for i in numbers))


# Champ & Woodall (1987), table of average run lengths, in control; from memory, and all of them
# agree with the chain here to the printed digits.
@pytest.mark.parametrize(
    ("numbers", "printed"),
    [
        ([1], 370.40),
        ([1, 2], 225.44),
        ([1, 3], 166.05),
        ([1, 4], 152.73),
        ([1, 2, 3], 132.89),
        ([1, 2, 4], 122.05),
        ([1, 3, 4], 105.78),
        ([1, 2, 3, 4], 91.75),
    ],
)
def test_champ_and_woodall_in_control(numbers: list[int], printed: float) -> None:
    assert run_length(western_electric(numbers)).arl == pytest.approx(printed, abs=0.0051)


# Lucas & Saccucci (1990) and Lucas (1976), Lucas & Crosier (1982); from memory.
@pytest.mark.parametrize(
    ("design", "shift", "printed", "within"),
    [
        (EwmaDesign(0.4, 3.054), 0.0, 500.0, 0.5),
        (EwmaDesign(0.4, 3.054), 1.0, 14.3, 0.05),
        (EwmaDesign(0.1, 2.814), 0.0, 500.0, 0.5),
        (EwmaDesign(0.1, 2.814), 1.0, 10.3, 0.05),
        (CusumDesign(0.5, 4.0), 0.0, 168.0, 0.5),
        (CusumDesign(0.5, 4.0), 1.0, 8.38, 0.005),
        (CusumDesign(0.5, 5.0), 0.0, 465.0, 0.5),
        (CusumDesign(0.5, 5.0), 0.5, 38.0, 0.05),
        (CusumDesign(0.5, 5.0, 2.5), 0.0, 430.0, 0.5),
        (CusumDesign(0.5, 4.0, 2.0), 1.0, 5.29, 0.005),
    ],
)
def test_printed_ewma_and_cusum(
    design: EwmaDesign | CusumDesign, shift: float, printed: float, within: float
) -> None:
    assert run_length(design, shift).arl == pytest.approx(printed, abs=within)


def test_rule_values_of_the_pack(shared_reference: Load) -> None:
    pack = shared_reference("runs_rules_arl.json")
    assert pack["visible"]
    for row in pack["visible"]:
        found = run_length(western_electric(row["rules"]), row["shift"])
        assert found.arl == pytest.approx(row["arl"], rel=1e-10), row
        assert found.sdrl == pytest.approx(row["sdrl"], rel=1e-10), row


def test_rule_quantiles_of_the_pack(shared_reference: Load) -> None:
    for row in shared_reference("runs_rules_arl.json")["visible"]:
        quantiles = row["run_length_quantiles"]
        counts = [quantiles["p05"], quantiles["p95"]]
        before = [max(count - 1, 1) for count in counts]
        found = run_length(western_electric(row["rules"]), row["shift"], n=counts + before)
        assert found.median == quantiles["p50"], row
        chances = np.asarray(found.prob_within)
        for level, count, reached, earlier in zip(
            (0.05, 0.95), counts, chances[:2], chances[2:], strict=True
        ):
            assert reached >= level, row
            assert count == 1 or earlier < level, row


def test_other_rows_on_one_side_of_the_pack(shared_reference: Load) -> None:
    for row in shared_reference("runs_rules_arl.json")["variants_other_run_lengths"]["visible"]:
        design = western_electric(row["rules"], row["run_length_for_rule_4"])
        found = run_length(design, row["shift"])
        assert found.arl == pytest.approx(row["arl"], rel=1e-10)
        assert found.sdrl == pytest.approx(row["sdrl"], rel=1e-10)


def test_chain_sizes_of_the_pack(shared_reference: Load) -> None:
    """Champ & Woodall's chains, counted independently: histories reached, and after joining."""
    for key, count in shared_reference("runs_rules_arl.json")["chain_states"].items():
        design = western_electric([int(number) for number in key.split("+")])
        machine = rule_machine(design.rules, True)
        assert machine.reachable == count["reachable"], key
        assert machine.following.shape[0] == count["minimal"], key


def test_ewma_values_of_the_pack(shared_reference: Load) -> None:
    pack = shared_reference("ewma_arl.json")
    for row in pack["visible"]:
        found = run_length(EwmaDesign(row["lam"], row["L"]), row["shift"])
        assert found.arl == pytest.approx(row["arl"], rel=1e-9), row
        assert found.relative_error < 1e-11
    for row in pack["time_varying_limits"]["visible"]:
        found = run_length(EwmaDesign(row["lam"], row["L"], time_varying=True), row["shift"])
        assert found.arl == pytest.approx(row["arl"], rel=1e-9), row


def test_cusum_values_of_the_pack(shared_reference: Load) -> None:
    for row in shared_reference("cusum_arl.json")["visible"]:
        found = run_length(CusumDesign(row["k"], row["h"], row["head_start"]), row["shift"])
        assert found.arl == pytest.approx(row["arl"], rel=1e-9), row
        assert found.relative_error < 1e-11

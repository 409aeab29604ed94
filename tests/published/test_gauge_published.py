"""Crossed gauge studies against exact arithmetic (gauge.json).

Method: Montgomery & Runger (1993), Quality Engineering 6:115-135 and 289-305; Burdick, Borror &
Montgomery (2005). The data and the exact fractions are in the file.
"""

from __future__ import annotations

from collections.abc import Callable
from fractions import Fraction
from typing import Any

import numpy as np
import pytest

from spc.stats.gauge import GaugeOptions, GaugeStudy, gauge_study

FIGURES = {
    "sd_repeatability": "sd_repeatability",
    "sd_reproducibility": "sd_reproducibility",
    "sd_gauge": "sd_measurement",
    "sd_part": "sd_part",
    "sd_total": "sd_total",
    "P_to_T": "precision_to_tolerance",
    "percent_of_study_sd": "percent_of_study_sd",
    "percent_contribution": "percent_contribution",
    "signal_to_noise": "signal_to_noise",
}


@pytest.fixture(scope="module")
def cases(shared_reference: Callable[[str], Any]) -> list[dict[str, Any]]:
    return list(shared_reference("gauge.json")["cases"])


def study(case: dict[str, Any], interaction: str) -> GaugeStudy:
    return gauge_study(
        case["data"],
        lower_spec=case["lsl"],
        upper_spec=case["usl"],
        options=GaugeOptions(interaction=interaction),
    )


def test_anova(cases: list[dict[str, Any]]) -> None:
    for case in cases:
        rows = {row.source: row for row in study(case, "keep").anova}
        scale = rows["total"].ss
        for want in case["anova"]:
            got = rows[want["source"]]
            assert got.df == want["df"]
            assert got.ss == pytest.approx(want["ss"], rel=1e-9, abs=1e-12 * scale)
            if "ms" in want:
                assert got.ms == pytest.approx(want["ms"], rel=1e-9, abs=1e-12 * scale)
            if want.get("F") is not None:
                assert got.f == pytest.approx(want["F"], rel=1e-9, abs=1e-9)
            if want.get("p") is not None:
                assert got.p == pytest.approx(want["p"], rel=1e-8)
        exact = {k: float(Fraction(v)) for k, v in case["exact"].items()}
        assert rows["part"].ss == pytest.approx(exact["ss_part"], rel=1e-11)
        assert rows["repeatability"].ss == pytest.approx(exact["ss_error"], rel=1e-9)


@pytest.mark.parametrize(
    ("interaction", "key"), [("keep", "with_interaction"), ("pool", "without_interaction")]
)
def test_components_and_figures(cases: list[dict[str, Any]], interaction: str, key: str) -> None:
    for case in cases:
        got, want = study(case, interaction), case[key]
        for name, text in want["variance_components_raw_exact"].items():
            exact = float(Fraction(text))
            assert got.components.raw[name] == pytest.approx(exact, rel=1e-9, abs=1e-12)
        assert list(got.components.negative) == want["negative_set_to_zero"]
        assert got.components.measurement == pytest.approx(want["gauge_total_var"], rel=1e-9)
        for theirs, mine in FIGURES.items():
            assert getattr(got, mine) == pytest.approx(want[theirs], rel=1e-9, abs=1e-9)
        assert got.distinct_categories == max(int(np.floor(want["signal_to_noise"])), 1)


def test_interaction_is_pooled_by_its_p_value(cases: list[dict[str, Any]]) -> None:
    for case in cases:
        p = next(row["p"] for row in case["anova"] if row["source"] == "part x gauge")
        assert study(case, "test").interaction_kept == (p <= 0.25)

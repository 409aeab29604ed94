"""EWMA and CUSUM charts of the NIST/SEMATECH e-Handbook, sections 6.3.2.3 and 6.3.2.4."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from spc.stats.cusum import cusum
from spc.stats.designs import CusumDesign, EwmaDesign
from spc.stats.ewma import ewma_chart

Load = Callable[[str], Any]


def example(shared_reference: Load, word: str) -> dict[str, Any]:
    entries = shared_reference("handbook_chart_examples.json")["entries"]
    (found,) = [entry for entry in entries if word in entry["name"]]
    return dict(found)


def test_ewma_example(shared_reference: Load) -> None:
    """Section 6.3.2.4: lambda 0.3, EWMA0 = 50, s = 2.0539, 3-sigma limits."""
    entry = example(shared_reference, "EWMA")
    chart = ewma_chart(entry["data"], EwmaDesign(entry["lam"], 3.0), entry["start"], entry["sd"])
    np.testing.assert_allclose(chart.value, entry["published"]["ewma"][1:], atol=0.0051)
    np.testing.assert_allclose(chart.value, entry["computed_here"]["ewma"][1:], rtol=1e-11)
    assert chart.upper[-1] == pytest.approx(entry["published"]["ucl"], abs=6e-4)
    assert chart.lower[0] == pytest.approx(entry["published"]["lcl"], abs=6e-4)
    assert chart.upper[0] == pytest.approx(entry["computed_here"]["ucl"], rel=1e-11)
    # "the process is in control": no point is outside the limits.
    assert not chart.signal.any()


def test_cusum_example(shared_reference: Load) -> None:
    """Section 6.3.2.3: target 325, k = 0.3175, h = 4.1959, in the unit of the data."""
    entry = example(shared_reference, "CUSUM")
    path = cusum(np.array(entry["data"]) - entry["target"], CusumDesign(entry["k"], entry["h"]))
    np.testing.assert_allclose(path.upper, entry["published"]["upper"], atol=0.0151)
    np.testing.assert_allclose(path.lower, entry["published"]["lower"], atol=0.0151)
    np.testing.assert_allclose(path.upper, entry["computed_here"]["upper"], atol=1e-9)
    np.testing.assert_allclose(path.lower, entry["computed_here"]["lower"], atol=1e-9)
    assert np.flatnonzero(path.signal)[0] + 1 == entry["computed_here"]["first_signal_at_point"]
    assert path.side[13] == 1
    # The sum leaves zero for good with point 13 of the table.
    assert path.onset(1)[13] == 12

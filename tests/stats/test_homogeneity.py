"""Bartlett's test, against scipy."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from spc.stats.homogeneity import bartlett_p


def test_it_is_scipys_test() -> None:
    """scipy.stats.bartlett on the samples themselves."""
    rng = np.random.default_rng(1)
    samples = [rng.normal(0.0, s, n) for s, n in ((1.0, 6), (1.4, 9), (0.8, 12), (2.0, 5))]
    sd = [np.std(one, ddof=1) for one in samples]
    df = [len(one) - 1 for one in samples]
    twice = bartlett_p(sd * 2, df * 2, np.repeat([0, 1], 4))
    assert twice == pytest.approx([stats.bartlett(*samples).pvalue] * 2, rel=1e-12)


def test_one_spread_says_nothing_and_zero_is_refused() -> None:
    assert np.isnan(bartlett_p([1.0], [3.0])).all()
    with pytest.raises(ValueError, match="positive"):
        bartlett_p([1.0, 0.0], [3.0, 3.0])

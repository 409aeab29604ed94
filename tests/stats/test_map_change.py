"""The share of a new mean map in a larger spread, against its closed form."""

from __future__ import annotations

import numpy as np
import pytest

from spc.stats.map_change import systematic_share

RADIUS = np.array([0.0, *[0.5] * 6, *[1.0] * 6])
BOWL = RADIUS**2 - np.mean(RADIUS**2)


@pytest.mark.parametrize(
    ("shape", "scatter"), [(4.0, 1.0), (0.0, 2.0), (2.0, 1.5), (4.0, 1.6), (-3.0, 1.1)]
)
def test_the_share_is_that_of_the_variances(shape: float, scatter: float) -> None:
    """Mean square of the maps after: shape^2 + scatter^2, before: 1; shares by their sizes."""
    rng = np.random.default_rng(5)
    before = rng.standard_normal((4000, 13))
    after = shape * BOWL + scatter * rng.standard_normal((4000, 13))
    part = np.mean((shape * BOWL) ** 2)
    expected = part / (part + scatter**2 - 1.0)
    assert systematic_share(before, after) == pytest.approx(expected, abs=0.02)


@pytest.mark.parametrize("wafers", [4, 12, 40])
def test_few_wafers_tell_a_bowl_from_scatter(wafers: int) -> None:
    rng = np.random.default_rng(11)
    bowl, scatter = [], []
    for _ in range(200):
        before = rng.standard_normal((60, 13))
        noise = rng.standard_normal((wafers, 13))
        bowl.append(systematic_share(before, noise + 3.0 * BOWL) >= 0.5)
        scatter.append(systematic_share(before, 1.7 * noise) >= 0.5)
    assert np.mean(bowl) > 0.97
    assert np.mean(scatter) < 0.03


def test_missing_sites_and_too_few_wafers() -> None:
    rng = np.random.default_rng(3)
    before, after = rng.standard_normal((50, 13)), 3.0 * BOWL + rng.standard_normal((50, 13))
    whole = systematic_share(before, after)
    after[::3, 4] = np.nan
    before[:, 7] = np.nan
    assert systematic_share(before, after) == pytest.approx(whole, abs=0.1)
    assert np.isnan(systematic_share(before[:1], after))
    assert np.isnan(systematic_share(before, before[:, :] * 0.2))

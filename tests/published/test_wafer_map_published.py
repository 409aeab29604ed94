"""Map terms against the published Zernike polynomials.

Source: Noll (1976), "Zernike polynomials and atmospheric turbulence", J. Opt. Soc. Am. 66:207-211,
table I (from memory). The discs' integrals are computed here by an independent quadrature.
"""

from __future__ import annotations

import numpy as np
import pytest

from spc.stats.map_terms import TERM_INDEX, zernike

# Noll's table I, in rho (r) and theta (t), normalised to unit mean square over the disc.
NOLL = {
    "mean": lambda r, t: np.ones_like(r),
    "tilt-x": lambda r, t: 2 * r * np.cos(t),
    "tilt-y": lambda r, t: 2 * r * np.sin(t),
    "bowl": lambda r, t: np.sqrt(3) * (2 * r**2 - 1),
    "astigmatism-45": lambda r, t: np.sqrt(6) * r**2 * np.sin(2 * t),
    "astigmatism-0": lambda r, t: np.sqrt(6) * r**2 * np.cos(2 * t),
    "coma-y": lambda r, t: np.sqrt(8) * (3 * r**3 - 2 * r) * np.sin(t),
    "coma-x": lambda r, t: np.sqrt(8) * (3 * r**3 - 2 * r) * np.cos(t),
    "trefoil-y": lambda r, t: np.sqrt(8) * r**3 * np.sin(3 * t),
    "trefoil-x": lambda r, t: np.sqrt(8) * r**3 * np.cos(3 * t),
    "spherical": lambda r, t: np.sqrt(5) * (6 * r**4 - 6 * r**2 + 1),
    "secondary-astigmatism-0": lambda r, t: np.sqrt(10) * (4 * r**4 - 3 * r**2) * np.cos(2 * t),
    "secondary-astigmatism-45": lambda r, t: np.sqrt(10) * (4 * r**4 - 3 * r**2) * np.sin(2 * t),
    "tetrafoil-0": lambda r, t: np.sqrt(10) * r**4 * np.cos(4 * t),
    "tetrafoil-22": lambda r, t: np.sqrt(10) * r**4 * np.sin(4 * t),
}


def disc() -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Gauss-Legendre in rho^2, even steps in theta: exact for these polynomials."""
    node, weight = np.polynomial.legendre.leggauss(20)
    angle = np.arange(64) * 2 * np.pi / 64
    rho, theta = np.meshgrid(np.sqrt((node + 1) / 2), angle, indexing="ij")
    return rho.ravel(), theta.ravel(), np.repeat(weight / 2 / 64, 64)


@pytest.mark.parametrize("name", list(TERM_INDEX))
def test_terms_are_nolls(name: str) -> None:
    rng = np.random.default_rng(0)
    rho, theta = np.sqrt(rng.random(200)), rng.uniform(-np.pi, np.pi, 200)
    np.testing.assert_allclose(
        zernike(name, rho, theta, "rms"), NOLL[name](rho, theta), rtol=1e-12, atol=1e-12
    )


def test_terms_are_orthonormal_over_the_disc() -> None:
    rho, theta, weight = disc()
    z = np.column_stack([zernike(name, rho, theta, "rms") for name in TERM_INDEX])
    np.testing.assert_allclose(z.T @ (weight[:, None] * z), np.eye(len(TERM_INDEX)), atol=1e-12)


def test_edge_scale_has_zero_mean_and_reads_at_the_edge() -> None:
    rho, theta, weight = disc()
    one, zero = np.ones(1), np.zeros(1)
    for name in TERM_INDEX:
        edge = zernike(name, rho, theta)
        if name != "mean":
            assert weight @ edge == pytest.approx(0.0, abs=1e-13)
            rim = zernike(name, np.ones(360), np.radians(np.arange(360.0)))
            if name != "bowl":
                assert np.abs(rim).max() == pytest.approx(1.0, abs=1e-3)
    change = zernike("bowl", one, zero) - zernike("bowl", zero, zero)
    assert change[0] == pytest.approx(1.0)
    assert zernike("tilt-x", one, zero)[0] == pytest.approx(1.0)

"""The palette against contrast and colour blindness.

Contrast ratio and its thresholds (4.5 for text, 3 for graphics): W3C, WCAG 2.2, success criteria
1.4.3 and 1.4.11, relative luminance as defined there. Simulation of colour blindness: Machado,
Oliveira & Fernandes, IEEE Transactions on Visualization and Computer Graphics 15(6), 2009,
matrices for severity 1.0 (from memory, three decimals). CIELAB: CIE 15, D65, 2 degrees.
"""

from __future__ import annotations

import itertools

import numpy as np
import pytest

from reports.style import DIVERGING, PALETTE, SEQUENTIAL, role_variables

MACHADO = {
    "protanopia": [[0.152, 1.053, -0.205], [0.115, 0.786, 0.099], [-0.004, -0.048, 1.052]],
    "deuteranopia": [[0.367, 0.861, -0.228], [0.280, 0.673, 0.047], [-0.012, 0.043, 0.969]],
    "tritanopia": [[1.256, -0.077, -0.179], [-0.078, 0.931, 0.148], [0.005, 0.691, 0.304]],
}
TEXT = ("ink", "soft", "edge", "data", "base", "alert", "began", "spec", "aim")
GROUND = ("paper", "sheet", "band", "calm")
MARKS = ("data", "alert", "began", "edge", "base")


def _linear(colour: str) -> np.ndarray:
    value = np.array([int(colour[i : i + 2], 16) for i in (1, 3, 5)]) / 255
    return np.where(value <= 0.04045, value / 12.92, ((value + 0.055) / 1.055) ** 2.4)


def _luminance(colour: str) -> float:
    return float(_linear(colour) @ np.array([0.2126, 0.7152, 0.0722]))


def _contrast(a: str, b: str) -> float:
    high, low = sorted((_luminance(a), _luminance(b)), reverse=True)
    return (high + 0.05) / (low + 0.05)


def _lab(linear: np.ndarray) -> np.ndarray:
    to_xyz = np.array(
        [[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]]
    )
    t = to_xyz @ np.clip(linear, 0, 1) / np.array([0.9505, 1.0, 1.089])
    f = np.where(t > 0.008856, np.cbrt(t), 7.787 * t + 16 / 116)
    return np.array([116 * f[1] - 16, 500 * (f[0] - f[1]), 200 * (f[1] - f[2])])


@pytest.mark.parametrize("theme", [0, 1], ids=["light", "dark"])
def test_text_can_be_read_on_paper_and_on_cards(theme: int) -> None:
    for role, ground in itertools.product(TEXT, ("paper", "sheet")):
        assert _contrast(PALETTE[role][theme], PALETTE[ground][theme]) >= 4.5, (role, ground)


@pytest.mark.parametrize("theme", [0, 1], ids=["light", "dark"])
def test_marks_stand_out_from_every_ground(theme: int) -> None:
    for role, ground in itertools.product(("data", "alert", "began", "ink"), GROUND):
        assert _contrast(PALETTE[role][theme], PALETTE[ground][theme]) >= 3, (role, ground)


@pytest.mark.parametrize("kind", list(MACHADO))
@pytest.mark.parametrize("theme", [0, 1], ids=["light", "dark"])
def test_marks_differ_for_colour_blind_eyes(kind: str, theme: int) -> None:
    seen = {role: _lab(np.array(MACHADO[kind]) @ _linear(PALETTE[role][theme])) for role in MARKS}
    for a, b in (("data", "alert"), ("data", "edge"), ("alert", "began"), ("data", "base")):
        # a difference of 2.3 is just noticeable (Mahy et al. 1994); ask for several times that
        assert np.linalg.norm(seen[a] - seen[b]) > 10, (a, b)


def test_map_scales_keep_their_order_in_grey() -> None:
    values = [_luminance(colour) for colour in SEQUENTIAL]
    assert values == sorted(values, reverse=True)
    wings = [_luminance(colour) for colour in DIVERGING]
    assert wings[:3] == sorted(wings[:3])
    assert wings[2:] == sorted(wings[2:], reverse=True)


def test_a_colour_names_its_role() -> None:
    light = [colours[0] for colours in PALETTE.values()]
    assert len(set(light)) == len(light)
    assert role_variables(f'fill="{PALETTE["data"][0]}"') == 'fill="var(--data)"'

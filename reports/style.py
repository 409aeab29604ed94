"""The one visual language: colours by role, type, and what figures inherit from them.

The picture of the house is a sheet of paper in an amber-lit room. Amber is where a process may
wander: the band between its limits. Deep blue is what was measured, rust what broke a rule, violet
when it began. Each role also has a shape, a line style or a word of its own, so that a page read
without colour loses nothing. The hues were chosen far apart in lightness as well (checked in
`tests/reports/test_style.py` for three kinds of colour blindness and for contrast in both themes).

Figures are drawn in the light colours; pages replace each by the variable of its role, so that one
picture serves the light, the dark and the printed page.
"""

from __future__ import annotations

from typing import Any

# role -> (light, dark). No colour stands for two roles: pages find the role by the colour.
PALETTE: dict[str, tuple[str, str]] = {
    "paper": ("#faf6ec", "#15181d"),
    "sheet": ("#fffdf8", "#1d2127"),
    "ink": ("#1c222b", "#ece6d8"),
    "soft": ("#59606b", "#aab0b8"),
    "line": ("#ddd5c3", "#3b414b"),
    "grid": ("#efe9db", "#2a2f37"),
    "band": ("#f7e3b0", "#4b3c16"),
    "edge": ("#8f6200", "#d9a83f"),
    "data": ("#16578a", "#86bfea"),
    "trace": ("#93a4b4", "#5d6c7c"),
    "base": ("#636c78", "#98a1ad"),
    "calm": ("#eef0ee", "#23282e"),
    "alert": ("#a8320a", "#ff9466"),
    "onset": ("#e3d9ef", "#463a5c"),
    "began": ("#5f3a96", "#c3a6f2"),
    "spec": ("#2d333d", "#d6d0c3"),
    "aim": ("#3f6a3a", "#93cf8b"),
}

TEXT_FONT = (
    'Seravek, "Gill Sans Nova", Ubuntu, Calibri, "Liberation Sans", "DejaVu Sans", sans-serif'
)
HEAD_FONT = 'Charter, "Bitstream Charter", "Sitka Text", Cambria, "Liberation Serif", serif'

# Differences on a wafer run from blue over paper to rust; sites also carry their number and sign.
DIVERGING = ("#0f4c81", "#7fa9cd", "#f4efe3", "#dd9a6c", "#9c3208")
# Values run from pale amber to deep blue, falling in lightness all the way.
SEQUENTIAL = ("#fbf0cc", "#d7c58a", "#8fa79a", "#4a7f9c", "#173f68")


def light(role: str) -> str:
    """Colour of a role on paper. Raises KeyError for an unknown role."""
    return PALETTE[role][0]


def role_variables(drawing: str) -> str:
    """A drawing with every palette colour replaced by the variable of its role."""
    for role, (colour, _) in PALETTE.items():
        drawing = drawing.replace(colour, f"var(--{role})")
    return drawing


def css_variables(theme: int) -> str:
    """Declarations of all roles: theme 0 is light, 1 dark."""
    return "".join(f"--{role}:{colours[theme]};" for role, colours in PALETTE.items())


def figure_config(font_size: int = 12) -> dict[str, Any]:
    """Vega-Lite configuration that all figures share."""
    axis = {
        "labelColor": light("soft"),
        "titleColor": light("soft"),
        "domainColor": light("line"),
        "tickColor": light("line"),
        "gridColor": light("grid"),
        "labelFont": TEXT_FONT,
        "titleFont": TEXT_FONT,
        "labelFontSize": font_size,
        "titleFontSize": font_size,
        "titleFontWeight": "normal",
        "labelPadding": 4,
        "tickSize": 4,
    }
    return {
        "background": None,
        "font": TEXT_FONT,
        "padding": {"left": 2, "right": 2, "top": 4, "bottom": 2},
        "view": {"stroke": None},
        "axis": axis,
        "axisY": {"titleAngle": 0, "titleAlign": "left", "titleAnchor": "end"},
        "text": {"font": TEXT_FONT, "fontSize": font_size, "color": light("soft")},
        "title": {
            "font": TEXT_FONT,
            "fontSize": font_size + 1,
            "fontWeight": "normal",
            "color": light("ink"),
            "anchor": "start",
            "offset": 6,
        },
        "legend": {
            "labelFont": TEXT_FONT,
            "titleFont": TEXT_FONT,
            "labelColor": light("soft"),
            "titleColor": light("soft"),
            "labelFontSize": font_size,
            "titleFontSize": font_size,
            "titleFontWeight": "normal",
        },
    }

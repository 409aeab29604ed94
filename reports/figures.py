"""Every figure of the house, declared once: a value in, a Vega-Lite spec out.

`reports.render` turns a spec into a PNG for mail and into an SVG or a live chart for pages. Each
figure is drawn from view models alone; none computes a statistic.
"""

from __future__ import annotations

from reports.chart_frame import MAIL, NARROW, STRIP, STRIP_NARROW, WIDE, Size
from reports.figures_bars import (
    component_bars,
    distribution,
    effect_by_level,
    month_by_month,
    run_length,
)
from reports.figures_time import chart_label, control_chart
from reports.figures_wafer import map_label, overlay_label, overlay_vectors, wafer_map

__all__ = [
    "MAIL",
    "NARROW",
    "STRIP",
    "STRIP_NARROW",
    "WIDE",
    "Size",
    "chart_label",
    "component_bars",
    "control_chart",
    "distribution",
    "effect_by_level",
    "map_label",
    "month_by_month",
    "overlay_label",
    "overlay_vectors",
    "run_length",
    "wafer_map",
]

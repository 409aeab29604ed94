"""Charts that zoom: the drawn spec with its time axis freed, for the page's own script to steer."""

from __future__ import annotations

import json
from collections.abc import Mapping
from typing import Any

from reports.style import role_variables
from reports.time_axis import TimeAxis

# Room around the plot for its axes and names; the page's script takes it off the width of the
# place, so that charts one below the other share their time axis.
MARGINS = {"left": 44, "right": 122, "top": 24, "bottom": 26}
_IN_VIEW = "datum.t >= from && datum.t <= to"


def live_spec(spec: Mapping[str, Any], axis: TimeAxis, label: str) -> dict[str, Any]:
    """The spec of a chart over time as a live one: signals `from` and `to` set its span.

    The page's script sets its width; colours become the variables of their roles.
    """
    freed: dict[str, Any] = json.loads(role_variables(json.dumps(spec)))
    freed.pop("$schema", None)
    freed["autosize"] = {"type": "none"}
    freed["padding"] = dict(MARGINS)
    freed["description"] = label
    freed["params"] = [{"name": "from", "value": axis.start}, {"name": "to", "value": axis.end}]
    ticks = {"title": None, "grid": False, "labelExpr": axis.live_label(), "labelOverlap": True}
    for layer in freed["layer"]:
        x = layer.get("encoding", {}).get("x", {})
        if "field" not in x:
            continue
        x["scale"] = {
            "type": "utc",
            "nice": False,
            "domainMin": {"expr": "from"},
            "domainMax": {"expr": "to"},
        }
        x["axis"] = ticks
        if layer["mark"].get("type") == "text" and x["field"] == "t":
            # words above the plot are not clipped: they fade with their place in time
            layer["encoding"]["opacity"] = {
                "condition": {"test": _IN_VIEW, "value": 1},
                "value": 0,
            }
    return freed

"""One drawing in the making: Altair, with its data kept aside.

Altair copies a chart at every step, data and all. Charts here name their data and the rows join
the finished spec, which makes a figure several times faster to build.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from reports.style import figure_config


class Drawing:
    """Everything of `altair` by its own name, charts over rows, and the finished spec."""

    def __init__(self) -> None:
        import altair

        self._altair = altair
        self._datasets: dict[str, list[dict[str, Any]]] = {}

    def __enter__(self) -> Drawing:
        # what altair would check at every step is checked when the spec is compiled
        self._unchecked = self._altair.utils.schemapi.debug_mode(False)
        self._unchecked.__enter__()
        return self

    def __exit__(self, *error: Any) -> None:
        self._unchecked.__exit__(*error)

    def __getattr__(self, name: str) -> Any:
        """A name of altair."""
        return getattr(self._altair, name)

    def rows(self, rows: Sequence[dict[str, Any]]) -> Any:
        """A chart over rows."""
        name = f"d{len(self._datasets)}"
        self._datasets[name] = list(rows)
        return self._altair.Chart(self._altair.NamedData(name=name))

    def finish_layers(
        self, layers: Sequence[Any], width: int, height: int, font: int = 12
    ) -> dict[str, Any]:
        """The spec of layers over one another.

        Altair's own layered chart copies every layer three times; the spec is the same without.
        """
        inner = {"top_level": False}
        made = [layer.to_dict(validate=False, context=dict(inner)) for layer in layers]
        return {
            "$schema": self._altair.SCHEMA_URL,
            "width": width,
            "height": height,
            "layer": made,
            "datasets": self._datasets,
            "config": figure_config(font),
        }

    def finish(self, chart: Any, font: int = 12) -> dict[str, Any]:
        """The Vega-Lite spec of a chart with its data and the looks of the house."""
        spec: dict[str, Any] = chart.to_dict(validate=False)
        spec["datasets"] = self._datasets
        spec["config"] = figure_config(font)
        return spec

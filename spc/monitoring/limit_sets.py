"""A set of limits of one stream: what its baseline found out, and which points it holds for.

The payload of a set (JSON in the database) has
    members      the points of the baseline, [lot, layer, wafer] ("" for a lot)
    wild         points kept out of the estimates: lot, layer, wafer, statistic, value, reason
    sites, signature, signature_count   the site signature: place, effect, readings behind it
    components   variances of lot, wafer and site of the readings (scalar characteristics)
    statistics   for each statistic its kind and numbers, see `StatisticLimits`
    map          the reference of the map distance, see `spc.monitoring.map_payload`
    notes        what was given up and why
"""

from __future__ import annotations

import json
from collections import Counter
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import Any, TypeVar

import numpy as np
from numpy.typing import NDArray

from spc.monitoring.sites import Places
from spc.monitoring.work import ENGINE

AUTOMATIC = "automatic"
PROPOSED = "proposed"
APPROVED = "approved"
WITHDRAWN = "withdrawn"

PlaceKey = tuple[str, int | None, int | None]  # site name, place in whole millimetres

# Digits kept of an estimate. Solvers that take many streams at once may differ in the last bits
# with the streams that happen to be beside; what is kept must not.
DIGITS = 10

SPREADS = ("within-wafer", "wafer-to-wafer", "residual")
DISTANCES = ("map-distance",)


def kind_of(statistic: str) -> str:
    """``mean``, ``spread`` or ``distance``: which law the limits of a statistic follow."""
    if statistic in SPREADS:
        return "spread"
    return "distance" if statistic in DISTANCES else "mean"


def rounded(value: float) -> float | None:
    """A number as it is kept: DIGITS significant digits, None for NaN or infinity."""
    return float(f"{value:.{DIGITS}g}") if np.isfinite(value) else None


@dataclass(frozen=True)
class LimitSet:
    """One row of `baselines` with its payload read."""

    id: int
    stream_id: int
    status: str
    from_us: int
    first_us: int
    last_us: int
    n_points: int
    payload: Mapping[str, Any]
    made_us: int
    made_by: str
    reason: str
    decided_us: int | None = None
    decided_by: str | None = None
    decided_reason: str | None = None

    @property
    def by_hand(self) -> bool:
        """Whether a person asked for it."""
        return self.made_by != ENGINE

    def statistic(self, name: str) -> Mapping[str, Any] | None:
        """What the baseline found for one statistic, or None where it has no limits."""
        found = self.payload["statistics"].get(name)
        return dict(found) if found is not None else None

    @cached_property
    def participants(self) -> frozenset[tuple[str, str, str]]:
        """Points that the signature, the components and the map reference stand on."""
        wild = {
            (one["lot"], one["layer"], one["wafer"])
            for one in self.payload["wild"]
            if one["excluded"] == "all"
        }
        return frozenset(tuple(m) for m in self.payload["members"] if tuple(m) not in wild)  # type: ignore[misc]

    @cached_property
    def signature(self) -> dict[PlaceKey, tuple[float, int]]:
        """Effect of each place (in the characteristic's unit) and the readings behind it."""
        p = self.payload
        rows = zip(p["sites"], p["signature"], p["signature_count"], strict=True)
        return {(name, x, y): (effect, count) for (name, x, y), effect, count in rows}


def payload_text(payload: Mapping[str, Any]) -> str:
    """JSON of a payload, the same for the same content."""
    return json.dumps(payload, sort_keys=True, ensure_ascii=False, allow_nan=False)


# Two readings of one site name nearer than about this, in mm, are at the same place. The grid is
# set off from the round numbers that layouts are made of, so that stage noise crosses no border.
_GRID_MM, _OFFSET_MM = 1.0, 0.2871


def place_keys(places: Places) -> list[PlaceKey]:
    """Key of each place that stays the same from night to night: site and whole millimetres."""
    grid = np.floor((places.coordinates[:, :2] + _OFFSET_MM) / _GRID_MM)
    return [
        (name, int(x), int(y)) if has else (name, None, None)
        for name, (x, y), has in zip(
            places.names, np.nan_to_num(grid), places.has_xy.tolist(), strict=True
        )
    ]


def signature_at(
    sets: Iterable[LimitSet], places: Places
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Signature effect and count of every set at every place, (n_sets, n_places), NaN unknown.

    A site named without coordinates takes the effect of the only place of its name, if there is
    one, and the other way round.
    """
    keys = place_keys(places)
    chosen = list(sets)
    effect = np.full((len(chosen), len(keys)), np.nan)
    count = np.full_like(effect, np.nan)
    for row, one in enumerate(chosen):
        known = matching(one.signature)
        for column, key in enumerate(keys):
            # `known` has bare names for places too; a placed site must not fall back on those.
            found = known.get(key) or one.signature.get((key[0], None, None))
            if found is not None:
                effect[row, column], count[row, column] = found
    return effect, count


T = TypeVar("T")


def matching(by_place: dict[PlaceKey, T]) -> dict[PlaceKey, T]:
    """The same with the bare name of every site that stands at one place alone."""
    names = Counter(key[0] for key in by_place)
    bare: dict[PlaceKey, T] = {
        (k[0], None, None): v for k, v in by_place.items() if names[k[0]] == 1
    }
    return {**bare, **by_place}

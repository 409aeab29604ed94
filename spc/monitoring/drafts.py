"""What the estimates of a baseline share: the points they stand on and the drafts they fill."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from config.control_plan import Characteristic
from spc.monitoring.grouping import PointGroups
from spc.monitoring.limit_sets import PlaceKey, rounded
from spc.monitoring.wafers import Wafers
from spc.records.columns import starts_of_groups
from spc.stats.components import Components
from spc.stats.robust_baseline import RobustBaseline

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

# A clean baseline of 30 loses a point once in fifty; a point 6 sigma off is found in more than nine
# cases of ten, as long as a few are (simulated; the fifth of the points is the most that can be).
WILD = {"alpha": 0.02, "max_share": 0.2}


@dataclass
class Draft:
    """Payloads in the making, one a stream code (see `spc.monitoring.limit_sets`)."""

    wild: list[list[dict[str, Any]]]
    statistics: list[dict[str, dict[str, Any]]]
    notes: list[list[str]]
    signature: list[dict[PlaceKey, tuple[float, int]]] = field(default_factory=list)
    components: list[dict[str, Any] | None] = field(default_factory=list)
    maps: list[Any] = field(default_factory=list)


@dataclass(frozen=True)
class Baseline:
    """Points and wafers that the estimates are made from; stream codes 0 ... n_streams - 1."""

    wafers: Wafers
    groups: PointGroups
    characteristic: Characteristic
    wafer_radius_mm: float

    @property
    def n_streams(self) -> int:
        """Number of streams."""
        return len(self.wafers.keys)

    @property
    def stream(self) -> IntArray:
        """Stream of each point."""
        return self.groups.table["stream"]

    @property
    def lot(self) -> IntArray:
        """Lot code of each wafer, unique over streams and layers."""
        t = self.wafers.table
        keys = [t[name] for name in ("stream", "lot", "layer")]
        return np.asarray(np.cumsum(starts_of_groups(keys)) - 1, np.int64)


@dataclass(frozen=True)
class Judged:
    """Which points of one statistic are wild.

    value : (n_points,) the statistic of every point. points : (n,) those that were judged.
    excluded : what the wild ones are kept out of: ``all``, or the name of the statistic.
    """

    statistic: str
    value: FloatArray
    points: IntArray
    verdict: RobustBaseline
    excluded: str

    @property
    def wild(self) -> IntArray:
        """The wild points."""
        return self.points[~self.verdict.keep]


def list_wild(base: Baseline, draft: Draft, judged: Judged) -> None:
    """Name the wild points of one statistic in the drafts of their streams."""
    table, stream = base.groups.table, base.stream
    reasons = [reason for reason in judged.verdict.reason if reason]
    for point, reason in zip(judged.wild.tolist(), reasons, strict=True):
        draft.wild[int(stream[point])].append(
            {
                "lot": str(table["lot"][point]),
                "layer": str(table["layer"][point]),
                "wafer": str(table["wafer"][point]),
                "at_us": int(table["at_us"][point]),
                "statistic": judged.statistic,
                "value": rounded(float(judged.value[point])),
                "reason": reason,
                "excluded": judged.excluded,
            }
        )


def kept_components(components: Components, s: int) -> dict[str, Any]:
    """One stream's components as a payload keeps them."""
    return {
        **{
            name: rounded(float(getattr(components, name)[s]))
            for name in ("mean", "mean_se", "site", "wafer", "lot", "site_df")
        },
        "covariance": [[rounded(float(v)) for v in row] for row in components.covariance[s]],
        **{name: int(getattr(components, name)[s]) for name in ("n_lots", "n_wafers", "n_sites")},
        "pooled": components.pooled[s],
    }

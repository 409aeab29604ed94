"""Single sites far off the rest of their wafer: what a spike of a spread often comes down to."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from sqlalchemy import Connection

from config.load import Bay
from spc.monitoring import baselines
from spc.monitoring.grouping import group_points
from spc.monitoring.point_limits import assign_sets
from spc.monitoring.points import assignment, wafer_statistics
from spc.monitoring.update import Update
from spc.monitoring.wafers import subset
from spc.records import evaluations, limits


@dataclass(frozen=True)
class Flyer:
    """One site reading, and how far it is off its wafer in standard deviations of a site."""

    lot: str
    layer: str
    wafer: str
    site: str
    value: float
    sigmas: float


def flyers_of(connection: Connection, bay: Bay, stream_id: int, lots: Sequence[str]) -> list[Flyer]:
    """Flyer sites of some lots of a stream, as of the last evaluation.

    None for an overlay characteristic, and for points that have no limits yet.
    """
    name, key = limits.stream_of(connection, stream_id)
    one, kept = bay.plan.named(name), evaluations.all_kept(connection).get(name)
    if one is None or kept is None or one.is_overlay:
        return []
    wafers, ids = Update(connection, bay, kept[1]).read(one, sorted(lots))
    wafers = subset(wafers, ids[wafers.table["stream"]] == stream_id)
    if key not in wafers.keys or not len(wafers.table):
        return []
    groups = group_points(wafers.table, one.point)
    sets = baselines.in_force(connection, [stream_id])
    of_stream = np.full(groups.n, stream_id, np.int64)
    assigned = assignment(groups, sets, assign_sets(of_stream, groups.table["at_us"], sets))
    found = wafer_statistics(wafers, groups, assigned, one, bay.settings.bay.wafer_radius_mm)
    assert found.flyer is not None  # scalar characteristics always have the marks
    assert found.sigmas is not None
    out = []
    for reading in np.flatnonzero(found.flyer):
        row = int(wafers.wafer[reading])
        out.append(
            Flyer(
                lot=str(wafers.table["lot"][row]),
                layer=str(wafers.table["layer"][row]),
                wafer=str(wafers.table["wafer"][row]),
                site=wafers.places.names[int(wafers.place[reading])],
                value=float(wafers.value[reading, 0]),
                sigmas=float(found.sigmas[reading]),
            )
        )
    return out

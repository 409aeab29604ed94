"""The site values of whole wafers, for their maps."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Any

from sqlalchemy import Connection, select

from spc.records.contexts import chunks
from spc.records.tables import layouts, measurements


def site_maps(
    connection: Connection, lots: Iterable[str], parameters: Sequence[str], until_us: int
) -> list[Any]:
    """Measurements of some lots that hold their site values, the latest of each wafer and layout.

    Rows: lot, layer, wafer, parameter, unit, site_values (packed), sites (JSON of the layout).
    A wafer measured again: the later reading takes the place of the earlier one.
    """
    m = measurements.c
    rows: list[Any] = []
    for part in chunks(sorted(lots)):
        query = (
            select(m.lot, m.layer, m.wafer, m.parameter, m.unit, m.site_values, layouts.c.sites)
            .join(layouts, layouts.c.id == m.layout_id)
            .where(
                m.lot.in_(part),
                m.parameter.in_(list(parameters)),
                m.measured_us <= until_us,
                m.site_values.is_not(None),
            )
            .order_by(m.measured_us, m.id)
        )
        rows += connection.execute(query).all()
    latest = {(r.lot, r.layer, r.wafer, r.parameter, r.sites): r for r in rows}
    return list(latest.values())

"""From packed measurements to the reading of each site that holds now.

A site measured again supersedes its earlier reading; other sites of the wafer keep theirs.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spc.records.columns import Columns, starts_of_groups
from spc.records.measurements import Layout

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


@dataclass(frozen=True)
class Places:
    """Distinct places of sites: name and coordinates (mm; NaN where not given), by code."""

    names: tuple[str, ...]
    coordinates: FloatArray  # (n_places, 4): x, y, field x, field y

    @property
    def has_xy(self) -> NDArray[np.bool_]:
        """Whether a place has coordinates on the wafer."""
        return np.asarray(np.isfinite(self.coordinates[:, :2]).all(axis=1))


@dataclass(frozen=True)
class SiteReadings:
    """Site readings that hold, in the order of their measurements and of the site names.

    Attributes
    ----------
    row : (n,) position of the measurement in the frame they were taken from
    place : (n,) codes into `places`
    value : (n,) in the unit of the measurement
    """

    row: IntArray
    place: IntArray
    value: FloatArray
    places: Places


def current_sites(frame: Columns, layouts: Mapping[int, Layout]) -> SiteReadings:
    """Latest reading of each site of each (parameter, lot, layer, wafer).

    Parameters
    ----------
    frame : measurements in the order of `spc.records.measurements.measurement_rows`.
    layouts : the layouts they name.

    Raises
    ------
    ValueError
        Where the packed values do not fit their layout (the database was damaged).
    """
    with_sites = np.flatnonzero(frame["site_values"] != None)  # noqa: E711
    packed = frame["site_values"][with_sites]
    layout_ids = frame["layout_id"][with_sites]
    unique_layouts, layout = np.unique(layout_ids, return_inverse=True)
    places, starts, codes = _places([layouts[int(i)] for i in unique_layouts])
    lengths = np.diff(np.append(starts, codes.size))[layout]
    value = np.frombuffer(b"".join(packed), dtype="<f8").astype(np.float64)
    if value.size != int(lengths.sum()):
        raise ValueError("packed site values do not fit their layouts: the database is damaged")
    turn = np.repeat(np.arange(with_sites.size), lengths)
    within = np.arange(value.size) - np.repeat(np.cumsum(lengths) - lengths, lengths)
    place = codes[starts[layout][turn] + within]
    row = with_sites[turn]
    site = _name_codes(places)[place]
    wafer = _wafer_codes(frame)[row]
    # Sites by name within a wafer, so that sums do not depend on the order of a file.
    order = np.lexsort((row, site, wafer))
    key = wafer[order] * (len(places.names) + 1) + site[order]
    last = np.append(key[1:] != key[:-1], True) if key.size else np.zeros(0, bool)
    kept = order[last]
    return SiteReadings(row[kept], place[kept], value[kept], places)


def _wafer_codes(frame: Columns) -> IntArray:
    """Code of (parameter, lot, layer, wafer) of each row; equal keys are neighbours."""
    new = starts_of_groups([frame[name] for name in ("lot", "layer", "wafer", "parameter")])
    return np.asarray(np.cumsum(new) - 1, dtype=np.int64)


def _places(layouts: list[Layout]) -> tuple[Places, IntArray, IntArray]:
    """Distinct places of some layouts; start of each layout in the joined codes of its sites."""
    rows = [
        site for one in layouts for site in zip(one.names, one.x, one.y, one.u, one.v, strict=True)
    ]
    lengths = np.array([len(one.names) for one in layouts], dtype=np.int64)
    starts = np.cumsum(lengths) - lengths
    # NaN is not equal to itself, so places are told apart by their text.
    texts = [repr(site) for site in rows]
    known = dict.fromkeys(sorted(texts))
    number = {text: code for code, text in enumerate(known)}
    first = dict(zip(texts, rows, strict=True))
    names = tuple(first[text][0] for text in number)
    coordinates = np.array([first[text][1:] for text in number], dtype=np.float64).reshape(-1, 4)
    codes = np.array([number[text] for text in texts], dtype=np.int64)
    return Places(names, coordinates), starts, codes


def _name_codes(places: Places) -> IntArray:
    """Code of the name of each place, in the order of the names."""
    if not places.names:
        return np.zeros(0, dtype=np.int64)
    return np.unique(np.array(places.names), return_inverse=True)[1].astype(np.int64)

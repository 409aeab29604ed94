"""The reference of a map distance, to and from what a set of limits keeps of it."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from spc.monitoring.limit_sets import rounded
from spc.stats.wafer_map import DroppedTerm, MapBasis, MapReference


def to_payload(reference: MapReference, sites: list[tuple[str, int | None, int | None]]) -> Any:
    """JSON of a reference; `sites` are the keys of its columns."""
    basis = reference.basis
    return {
        "sites": [list(site) for site in sites],
        "mean_map": [rounded(v) for v in reference.mean_map],
        "used": [bool(v) for v in reference.sites],
        "basis": {
            "names": list(basis.names),
            "design": _rows(basis.design),
            "dropped": [[d.name, list(d.same_as), d.reason] for d in basis.dropped],
            "variance_inflation": [rounded(v) for v in basis.variance_inflation],
        },
        "terms": list(reference.terms),
        "covariance": _rows(reference.covariance),
        "within": _rows(reference.within),
        "off_variance": rounded(reference.off_variance),
        "off_within": rounded(reference.off_within),
        "off_df": rounded(reference.off_df),
        "mean_inverse_n": rounded(reference.mean_inverse_n),
        "n_points": reference.n_points,
        "notes": list(reference.notes),
    }


def from_payload(kept: Mapping[str, Any]) -> MapReference:
    """The reference again."""
    basis = kept["basis"]
    used = np.array(kept["used"], bool)
    n, p = len(kept["terms"]), len(basis["names"])
    return MapReference(
        mean_map=np.array([np.nan if v is None else v for v in kept["mean_map"]], float),
        sites=used,
        basis=MapBasis(
            tuple(basis["names"]),
            np.array(basis["design"], float).reshape(int(used.sum()), p),
            tuple(DroppedTerm(name, tuple(same), why) for name, same, why in basis["dropped"]),
            np.array(basis["variance_inflation"], float),
        ),
        terms=tuple(kept["terms"]),
        covariance=np.array(kept["covariance"], float).reshape(n, n),
        within=np.array(kept["within"], float).reshape(n, n),
        off_variance=kept["off_variance"],
        off_within=kept["off_within"],
        off_df=kept["off_df"],
        mean_inverse_n=kept["mean_inverse_n"],
        n_points=kept["n_points"],
        notes=tuple(kept["notes"]),
    )


def _rows(matrix: np.ndarray) -> list[list[float | None]]:
    return [[rounded(v) for v in row] for row in matrix]

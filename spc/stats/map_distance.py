"""How far a wafer map is from its baseline maps, whatever the mean does.

The deviation of a map from the mean baseline map is split into the map terms (level out) and what
the terms leave. The terms give Hotelling's T2 (Hotelling 1947; its F law for a future point in
Tracy, Young & Mason 1992, J. Quality Technology 24:88-95). The rest gives a sum of squares Q, whose
law is a scaled chi-square with matched moments (Box 1954, Ann. Math. Statist. 25:290-302), so that
sites that vary together do not cry wolf; tr(Sigma^2) is taken without bias (Srivastava 2005,
J. Japan Statist. Soc. 35:251-272). Both are turned into chi-square scores that allow for a baseline
of finite length and are added: in control, `distance` is chi-square with `df` degrees of freedom
and `z` is standard normal. Only large values mean anything.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike
from scipy import stats

from spc.stats.map_reference import MapReference, fit_present, map_rows, point_codes
from spc.stats.map_terms import Array, MapBasis

_TINY = 1e-300  # smallest tail probability kept, so that every score is finite (z <= 37)


@dataclass(frozen=True)
class MapDistance:
    """Distances of points (wafers or lots); every field is (n_points,).

    t2, off : Hotelling's T2 on the terms (0 without terms) and the sum of squares off them
        (squared unit). p_terms, p_off : their in-control tail probabilities.
    distance, df : their joined chi-square score and its degrees of freedom.
    p, z : tail probability of the distance and its normal score.
    rms_deviation : root mean square over the sites of the point's deviation from the mean baseline
        map, level out, value unit; excess_rms : the part beyond what the baseline itself shows.
    n_wafers, n_sites : wafers and sites that made up the point.
    NaN where a point has too few sites.
    """

    t2: Array
    off: Array
    p_terms: Array
    p_off: Array
    distance: Array
    df: Array
    p: Array
    z: Array
    rms_deviation: Array
    excess_rms: Array
    n_wafers: Array
    n_sites: Array


def map_distance(
    reference: MapReference,
    maps: ArrayLike,
    *,
    groups: ArrayLike | None = None,
    baseline: bool = False,
) -> MapDistance:
    """Distance of each point from the baseline.

    Parameters
    ----------
    reference : from `map_reference` or `site_reference`.
    maps : (n_wafers, n_sites) values on the reference's layout, NaN where missing.
    groups : (n_wafers,) lot codes 0 ... n_points - 1 as in `map_reference`; None: wafer = point.
    baseline : True when the points are the ones the reference was made from (a point that helped
        make its own limits has a beta law, Tracy, Young & Mason 1992).

    Raises
    ------
    ValueError: wrong number of sites or bad groups.
    """
    data = map_rows(maps, reference.sites.size)
    deviation = (data - reference.mean_map)[:, reference.sites]
    points, counts = _points(deviation, reference.basis, groups)
    return _score(reference, points, counts, baseline)


def site_distance(
    reference: MapReference,
    maps: ArrayLike,
    *,
    groups: ArrayLike | None = None,
    baseline: bool = False,
) -> MapDistance:
    """`map_distance` for a reference of sites without coordinates (`site_reference`)."""
    if reference.terms:
        raise ValueError("this reference has map terms: use map_distance")
    return map_distance(reference, maps, groups=groups, baseline=baseline)


def _points(deviation: Array, basis: MapBasis, groups: ArrayLike | None) -> tuple[Array, Array]:
    """Mean deviation map of each point (level of each wafer out) and its number of wafers."""
    codes = point_codes(groups, len(deviation))
    coefficients, _, estimable = fit_present(deviation, basis.design)
    level = coefficients[:, basis.names.index("mean")]
    flat = np.where(estimable[:, None], deviation - level[:, None], np.nan)
    if groups is None:
        return flat, estimable.astype(float)
    n_points = int(codes.max()) + 1 if codes.size else 0
    present = np.isfinite(flat)
    total = np.zeros((n_points, flat.shape[1]))
    count = np.zeros_like(total)
    np.add.at(total, codes, np.where(present, flat, 0.0))
    np.add.at(count, codes, present.astype(float))
    mean = np.divide(total, count, out=np.full_like(total, np.nan), where=count > 0)
    return mean, np.bincount(codes, estimable, minlength=n_points).astype(float)


def _score(reference: MapReference, points: Array, counts: Array, baseline: bool) -> MapDistance:
    basis = reference.basis
    index = [j for j, name in enumerate(basis.names) if name != "mean"]
    present = np.isfinite(points)
    n_sites = present.sum(axis=1)
    coefficients, inverse, estimable = fit_present(points, basis.design)
    ok = estimable & (counts > 0)
    rest = np.where(present, points - coefficients @ basis.design.T, 0.0)
    off = (rest**2).sum(axis=1)
    extra = 1.0 / np.maximum(counts, 1.0) - reference.mean_inverse_n
    share = _share_off(reference, n_sites)
    variance = reference.off_variance + extra * reference.off_within
    t2, p_terms = np.zeros(len(points)), np.ones(len(points))
    if index:
        block = np.ix_(range(len(points)), index, index)
        whole = np.linalg.inv(basis.design.T @ basis.design)[np.ix_(index, index)]
        spare = basis.n_sites - len(basis.names)
        site = variance / spare if spare else np.zeros_like(variance)
        covariance = reference.covariance + extra[:, None, None] * reference.within
        # Fewer sites: the terms themselves are less sure.
        covariance = covariance + site[:, None, None] * np.where(
            ok[:, None, None], inverse[block] - whole, 0.0
        )
        terms = np.where(ok[:, None], coefficients[:, index], 0.0)
        t2 = np.einsum("wi,wi->w", terms, np.linalg.solve(covariance, terms[..., None])[..., 0])
        p_terms = _tail_t2(t2, len(index), reference.n_points, baseline)
    off_df = reference.off_df * share
    p_off = _tail_off(off, variance * share, off_df, reference.n_points, baseline)
    df = len(index) + off_df
    score = _chi2_score(p_terms, np.full(len(points), float(len(index))))
    score = score + _chi2_score(p_off, off_df)
    p = np.clip(stats.chi2.sf(score, np.maximum(df, 1e-9)), _TINY, 1.0)
    mean_square = _mean_square(points)
    expected = reference.expected_mean_square
    blank = ~ok | (df <= 0)
    excess = np.sqrt(np.maximum(mean_square - expected, 0.0))

    def shown(field: Array) -> Array:
        return np.where(blank, np.nan, field)

    return MapDistance(
        t2=shown(t2),
        off=shown(off),
        p_terms=shown(p_terms),
        p_off=shown(p_off),
        distance=shown(score),
        df=shown(df),
        p=shown(p),
        z=shown(stats.norm.isf(p)),
        rms_deviation=shown(np.sqrt(mean_square)),
        excess_rms=shown(excess),
        n_wafers=counts,
        n_sites=n_sites.astype(float),
    )


def _mean_square(points: Array) -> Array:
    present = np.isfinite(points)
    n = np.maximum(present.sum(axis=1), 1)
    level = np.where(present, points, 0.0).sum(axis=1) / n
    return np.asarray((np.where(present, points - level[:, None], 0.0) ** 2).sum(axis=1) / n)


def _share_off(reference: MapReference, n_sites: np.ndarray) -> Array:
    """Share of the off-term degrees of freedom that a point with missing sites still has."""
    p = len(reference.basis.names)
    spare = reference.basis.n_sites - p
    return np.clip((n_sites - p) / max(spare, 1), 0.0, 1.0)


def _tail_t2(t2: Array, p: int, n: int, baseline: bool) -> Array:
    if baseline:
        tail = stats.beta.sf(np.minimum(t2 * n / (n - 1) ** 2, 1.0), p / 2, (n - p - 1) / 2)
    else:
        tail = stats.f.sf(t2 * n * (n - p) / (p * (n + 1) * (n - 1)), p, n - p)
    return np.clip(tail, _TINY, 1.0)


def _tail_off(off: Array, variance: Array, df: Array, n: int, baseline: bool) -> Array:
    live = (df > 0) & (variance > 0)
    if not live.any():
        return np.ones_like(off)
    safe_df, safe_variance = np.where(live, df, 1.0), np.where(live, variance, 1.0)
    if baseline:
        ratio = np.minimum(off * n / (n - 1) / ((n - 1) * safe_variance), 1.0)
        tail = stats.beta.sf(ratio, safe_df / 2, (n - 2) * safe_df / 2)
    else:
        tail = stats.f.sf(off / (safe_variance * (1 + 1 / n)), safe_df, (n - 1) * safe_df)
    return np.clip(np.where(live, tail, 1.0), _TINY, 1.0)


def _chi2_score(p: Array, df: Array) -> Array:
    return np.where(df > 0, stats.chi2.isf(p, np.maximum(df, 1e-9)), 0.0)

"""Limits and normal scores of spreads and distances.

Standard deviations follow chi-square laws, distances chi-square or F laws; three-sigma limits on
them would miss their rate badly. Limits here are probability limits at the same rates as those of a
normal chart, and scores put every point on the normal scale by equal probability.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike
from scipy import special

from spc.stats.components import Components
from spc.stats.constants import c4
from spc.stats.grouping import FloatArray, IntArray, sum_by
from spc.stats.limit_options import DEFAULT, LimitOptions
from spc.stats.tails import SCORE_LIMIT, f_quantile, f_score


@dataclass(frozen=True)
class SpreadLimits:
    """Limits of standard deviations; arrays of the shape of the points.

    Attributes
    ----------
    center : median of the statistic, so that the sides of the centre line are equally likely and
        agree with the sign of the score.
    lower, upper : probability limits, in the unit of the readings.
    sigma : standard deviation of the statistic itself.
    expected : the process standard deviation that the statistic estimates.
    df, df_expected : degrees of freedom of the statistic and of `expected` (inf: known).
        Where `df` is 0 (one site, one wafer) all limits are NaN.
    """

    center: FloatArray
    lower: FloatArray
    upper: FloatArray
    sigma: FloatArray
    expected: FloatArray
    df: FloatArray
    df_expected: FloatArray

    def scores(self, values: ArrayLike) -> FloatArray:
        """Normal scores of the plotted spreads; see `spread_score`."""
        return spread_score(values, self.expected, self.df, df_sigma=self.df_expected)


def spread_limits(
    sigma: ArrayLike,
    df: ArrayLike,
    *,
    df_sigma: ArrayLike = np.inf,
    options: LimitOptions = DEFAULT,
) -> SpreadLimits:
    """Probability limits of a standard deviation with `df` degrees of freedom.

    Parameters
    ----------
    sigma : array_like of float
        Process standard deviation it estimates, in the unit of the readings.
    df : array_like of float
        Degrees of freedom of the plotted value; 0 gives NaN limits.
    df_sigma : array_like of float
        Degrees of freedom of `sigma`; finite values give F limits when `options.widen`.
    options : LimitOptions
        `rate` / 2 lies beyond each limit.

    Raises
    ------
    ValueError
        For negative sigma or df.

    Notes
    -----
    df s^2 / sigma^2 is chi-square; with sigma estimated by independent data s^2 / sigma^2 is F.
    """
    spread, nu, other = np.broadcast_arrays(
        *(np.asarray(v, dtype=np.float64) for v in (sigma, df, df_sigma))
    )
    if (spread < 0).any() or (nu < 0).any():
        raise ValueError("sigma and df of a spread cannot be negative")
    if not options.widen:
        other = np.full(spread.shape, np.inf)
    usable = (nu > 0) & (other > 0)
    d1, d2 = np.where(usable, nu, 1.0), np.where(usable, other, 1.0)
    blank = np.where(usable, spread, np.nan)
    tail = options.rate / 2.0
    factor = c4(d1 + 1.0)
    return SpreadLimits(
        center=blank * np.sqrt(f_quantile(0.5, d1, d2, upper=True)),
        lower=blank * np.sqrt(f_quantile(tail, d1, d2, upper=False)),
        upper=blank * np.sqrt(f_quantile(tail, d1, d2, upper=True)),
        sigma=blank * np.sqrt(np.maximum(1.0 - factor**2, 0.0)),
        expected=blank,
        df=nu,
        df_expected=other,
    )


def spread_score(
    value: ArrayLike, sigma: ArrayLike, df: ArrayLike, *, df_sigma: ArrayLike = np.inf
) -> FloatArray:
    """Normal score of a standard deviation: the normal value with the same tail probability.

    Parameters
    ----------
    value, sigma : array_like of float
        Plotted and expected standard deviation, same unit.
    df, df_sigma : array_like of float
        Their degrees of freedom; `df_sigma` inf for a known sigma.

    Returns
    -------
    array of float
        Within +- 40 (a spread of 0 scores -40). NaN where df is 0. Where sigma is 0, a spread of
        0 scores 0 and any other 40.

    Notes
    -----
    Accurate in both far tails: logarithms of the tail probabilities are inverted.
    """
    x, s, nu, other = np.broadcast_arrays(
        *(np.asarray(v, dtype=np.float64) for v in (value, sigma, df, df_sigma))
    )
    usable = (s >= 0) & (nu > 0) & (x >= 0) & (other > 0)
    still = s == 0
    ratio = np.where(usable, x, 1.0) / np.where(usable & ~still, s, 1.0)
    score = f_score(ratio**2, np.where(usable, nu, 1.0), np.where(usable, other, 1.0))
    score = np.where(still, np.where(x > 0, SCORE_LIMIT, 0.0), score)
    return np.where(usable, score, np.nan)


def within_limits(
    components: Components,
    n_wafers: ArrayLike,
    n_sites: ArrayLike,
    *,
    stream: ArrayLike = 0,
    signature_share: ArrayLike = 0.0,
    options: LimitOptions = DEFAULT,
) -> SpreadLimits:
    """Limits of the pooled within-wafer sd of a point (sites about their wafer mean).

    Parameters
    ----------
    components : Components
    n_wafers, n_sites : (n,) array_like of float
        Wafers of the point (1 for a wafer point) and sites a wafer.
    stream : (n,) array_like of int
    signature_share : array_like of float
        Part of the degrees of freedom that the signature took, for points that the signature was
        fitted to; 0 for later points.
    options : LimitOptions
        With `widen`, F limits on the degrees of freedom of the site component.
    """
    wafers, sites, share, place = np.broadcast_arrays(n_wafers, n_sites, signature_share, stream)
    df = wafers * (sites - 1.0) * (1.0 - share)
    known = components.site_df[place] > 0
    sigma = np.where(known, np.sqrt(components.site[place]), np.nan)
    return spread_limits(sigma, df, df_sigma=components.site_df[place], options=options)


def wafer_spread_limits(
    components: Components,
    n_wafers: ArrayLike,
    n_sites: ArrayLike,
    *,
    stream: ArrayLike = 0,
    options: LimitOptions = DEFAULT,
) -> SpreadLimits:
    """Limits of the sd of the wafer means of a lot.

    Its square estimates s2_wafer + s2_site / n_s with n_w - 1 degrees of freedom. With
    `options.widen`, F limits on Satterthwaite's degrees of freedom. NaN for lots of one wafer
    and for streams whose wafer component is pooled into the lot.
    """
    wafers, sites, place = np.broadcast_arrays(n_wafers, n_sites, stream)
    sites = sites.astype(np.float64)
    zero, one = np.zeros_like(sites), np.ones_like(sites)
    weights = np.stack([1.0 / sites, one, zero, zero], axis=-1)
    pooled = components.n_wafers[place] == components.n_lots[place]
    sigma = np.where(pooled, np.nan, np.sqrt(components.variance_of(weights, place)))
    freedom = components.df_of(weights, place)
    freedom = np.where(np.isnan(freedom), 0.0, freedom)
    return spread_limits(sigma, wafers - 1.0, df_sigma=freedom, options=options)


def spread_population(
    sd: ArrayLike, df: ArrayLike, stream: IntArray | None = None
) -> tuple[FloatArray, FloatArray]:
    """Typical sd and its prior degrees of freedom where spreads vary more than chi-square allows.

    Real within-wafer variances differ from lot to lot. If they follow a scaled inverse chi-square
    law with `df_sigma` degrees of freedom, s^2 / sigma^2 is F(df, df_sigma): pass both results to
    `spread_limits` (with `widen`) and `spread_score`.

    Parameters
    ----------
    sd, df : (n,) array_like of float
        Spreads of a baseline, free of wild points, and their degrees of freedom, above 0.
    stream : (n,) int array, optional
        Stream of each; default one stream.

    Returns
    -------
    sigma, df_sigma : (n_streams,) arrays
        `df_sigma` is inf where the spreads vary no more than chi-square. NaN below two points.

    Raises
    ------
    ValueError
        If a spread or df is not positive.

    Notes
    -----
    Moments of log variances: Smyth (2004), Statistical Applications in Genetics 3, section 6.2.
    """
    s, nu = np.broadcast_arrays(np.asarray(sd, np.float64), np.asarray(df, np.float64))
    if not ((s > 0).all() and (nu > 0).all()):
        raise ValueError("spreads and their degrees of freedom must be positive")
    place = np.zeros(s.size, dtype=np.int64) if stream is None else np.asarray(stream)
    size = int(place.max(initial=-1)) + 1
    level = 2.0 * np.log(s) - special.digamma(0.5 * nu) + np.log(0.5 * nu)
    count = sum_by(place, np.ones(s.size), size)
    some = np.maximum(count, 1.0)
    mean = sum_by(place, level, size) / some
    spread = sum_by(place, (level - mean[place]) ** 2, size) / np.maximum(count - 1.0, 1.0)
    excess = spread - sum_by(place, special.polygamma(1, 0.5 * nu), size) / some
    prior = 2.0 * _inverse_trigamma(np.where(excess > 0, excess, 1.0))
    prior = np.where(excess > 0, prior, np.inf)
    half = np.where(excess > 0, 0.5 * prior, 1.0)
    shift = np.where(excess > 0, special.digamma(half) - np.log(half), 0.0)
    sigma = np.exp(0.5 * (mean + shift))
    few = count < 2
    return np.where(few, np.nan, sigma), np.where(few, np.nan, prior)


def _inverse_trigamma(y: FloatArray) -> FloatArray:
    """Solve trigamma(x) = y by Newton steps on 1 / trigamma (Smyth 2004, appendix)."""
    x = 0.5 + 1.0 / y
    for _ in range(50):
        tri = special.polygamma(1, x)
        step = tri * (1.0 - tri / y) / special.polygamma(2, x)
        x = x + step
        if (np.abs(step) <= 1e-12 * x).all():
            break
    return np.asarray(x)


def distance_limit(
    p: ArrayLike,
    *,
    m: ArrayLike = np.inf,
    df: ArrayLike | None = None,
    options: LimitOptions = DEFAULT,
) -> FloatArray:
    """Upper limit of a squared distance T2 of `p` terms from their mean; there is no lower limit.

    Parameters
    ----------
    p : array_like of float
        Number of terms.
    m : array_like of float
        Points behind the mean; inf for known parameters.
    df : array_like of float, optional
        Degrees of freedom of the covariance matrix, at least p; default m - 1.
    options : LimitOptions
        `rate` / 2 lies above the limit, so that the limit is where `distance_score` is
        `options.sigmas`.

    Returns
    -------
    array of float
        Chi-square quantile, or (1 + 1/m) df p / (df - p + 1) times the F(p, df - p + 1) quantile.

    Raises
    ------
    ValueError
        For p below 1 or df below p.

    Notes
    -----
    New points against an estimated mean and covariance: Tracy, Young & Mason (1992), Journal of
    Quality Technology 24.
    """
    terms, factor, freedom = _distance_law(p, m, df)
    return factor * f_quantile(options.rate / 2.0, terms, freedom, upper=True)


def distance_score(
    value: ArrayLike, p: ArrayLike, *, m: ArrayLike = np.inf, df: ArrayLike | None = None
) -> FloatArray:
    """Normal score of a squared distance T2; parameters as in `distance_limit`."""
    terms, factor, freedom = _distance_law(p, m, df)
    return f_score(np.asarray(value, dtype=np.float64) / factor, terms, freedom)


def _distance_law(
    p: ArrayLike, m: ArrayLike, df: ArrayLike | None
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """T2 is `factor` times F(p, freedom)."""
    terms, points = np.broadcast_arrays(np.asarray(p, np.float64), np.asarray(m, np.float64))
    nu = points - 1.0 if df is None else np.broadcast_to(np.asarray(df, np.float64), terms.shape)
    if (terms < 1).any() or (nu < terms).any():
        raise ValueError("a distance needs at least one term and df of at least p")
    known = np.isinf(nu)
    finite = np.where(known, terms, nu)
    freedom = np.where(known, np.inf, finite - terms + 1.0)
    ratio = np.where(known, terms, finite * terms / (finite - terms + 1.0))
    return terms, (1.0 + 1.0 / points) * ratio, freedom

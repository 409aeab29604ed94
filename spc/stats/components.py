"""Variance components of lots, wafers and sites (and tools), by REML and by analysis of variance.

The sites of a wafer are not independent samples of the process: a lot mean of `n_w` wafers with
`n_s` sites has variance s2_lot + s2_wafer / n_w + s2_site / (n_w n_s). The components are
estimated for all streams at once from one row a wafer.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from spc.stats.grouping import FloatArray, IntArray, as_codes
from spc.stats.nested_problem import Layout, arrange
from spc.stats.reml import LOT, SITE, TOOL, WAFER, Fit, maximise
from spc.stats.signature import SiteSignature, SiteSignatures, site_signature, site_signatures
from spc.stats.wafer_summary import WaferSummary, summarise

__all__ = [
    "Components",
    "SiteSignature",
    "SiteSignatures",
    "WaferSummary",
    "nested_components",
    "site_signature",
    "site_signatures",
    "summarise",
]

CELLS_AT_ONCE = 20_000  # one block of streams stays in the processor's cache


@dataclass(frozen=True)
class Components:
    """Variance components; arrays of shape (n_streams,), variances in squared units.

    Attributes
    ----------
    mean, mean_se : weighted mean of the process and its standard error.
    site, wafer, lot, tool : the components. `tool` is 0 when no such level was asked for. A
        component that cannot be told from the level above is 0 here and part of that level (see
        `pooled`).
        NaN where the data hold nothing on it (the lot component of one lot).
    covariance : (n_streams, 4, 4) of the estimates in the order site, wafer, lot, tool: inverse of
        the expected information, 0 for components that were not estimated.
    loglik : restricted log-likelihood of the readings; NaN for streams without any variation.
    n_tools, n_lots, n_wafers, n_sites : what the estimates stand on (`n_sites` are readings;
        `n_tools` is 0 when no such level was asked for).
    site_df : degrees of freedom of the site component.
    pooled : for each stream what was pooled or could not be estimated, "" if nothing.
    converged : whether the solver met its tolerance; `iterations` at most used by any stream.
    """

    mean: FloatArray
    mean_se: FloatArray
    site: FloatArray
    wafer: FloatArray
    lot: FloatArray
    tool: FloatArray
    covariance: FloatArray
    loglik: FloatArray
    n_tools: IntArray
    n_lots: IntArray
    n_wafers: IntArray
    n_sites: IntArray
    site_df: FloatArray
    pooled: tuple[str, ...]
    converged: np.ndarray
    iterations: int

    @property
    def standard_errors(self) -> FloatArray:
        """Standard errors of site, wafer, lot, tool; shape (n_streams, 4). NaN: not estimated."""
        variance = np.einsum("sii->si", self.covariance)
        return np.where(variance > 0, np.sqrt(np.maximum(variance, 0.0)), np.nan)

    @property
    def variances(self) -> FloatArray:
        """Site, wafer, lot, tool; shape (n_streams, 4)."""
        return np.stack([self.site, self.wafer, self.lot, self.tool], axis=1)

    def variance_of(self, weights: ArrayLike, stream: ArrayLike = 0) -> FloatArray:
        """Variance of a plotted point, sum of weights times components.

        Parameters
        ----------
        weights : (..., 4) array_like
            Weights of site, wafer, lot, tool, as from `point_weights`.
        stream : (...) array_like of int
            The stream of each point.
        """
        weight = np.asarray(weights, dtype=np.float64)
        values = self.variances[np.asarray(stream)]
        return np.where(weight > 0, weight * values, 0.0).sum(axis=-1)

    def df_of(self, weights: ArrayLike, stream: ArrayLike = 0) -> FloatArray:
        """Effective degrees of freedom of `variance_of` (Satterthwaite 1946, Biometrics 2).

        2 V^2 / var(V), with var(V) from the covariance of the components. For a lot mean in a
        balanced layout like that of the baseline this is the number of lots less one. NaN where V
        is zero or unknown.
        """
        weight = np.asarray(weights, dtype=np.float64)
        spread = self.variance_of(weight, stream)
        covariance = self.covariance[np.asarray(stream)]
        error = np.einsum("...i,...ij,...j->...", weight, covariance, weight)
        good = (spread > 0) & (error > 0)
        return np.where(good, 2.0 * spread**2 / np.where(good, error, 1.0), np.nan)


def point_weights(n_wafers: ArrayLike, n_sites: ArrayLike, *, point: str = "lot") -> FloatArray:
    """Weights of site, wafer, lot and tool in the variance of a plotted mean, shape (..., 4).

    Parameters
    ----------
    n_wafers : array_like of float
        Wafers of the point (not used for `point="wafer"`).
    n_sites : array_like of float
        Sites a wafer; for unequal numbers their harmonic mean.
    point : {"lot", "wafer"}
        What one plotted point is the mean of.

    Raises
    ------
    ValueError
        For another `point`, or counts below 1.
    """
    if point not in ("lot", "wafer"):
        raise ValueError(f'point is "lot" or "wafer", not {point!r}')
    wafers, sites = np.broadcast_arrays(
        np.asarray(n_wafers, dtype=np.float64), np.asarray(n_sites, dtype=np.float64)
    )
    if point == "wafer":
        wafers = np.ones_like(wafers)
    if not ((wafers >= 1).all() and (sites >= 1).all()):
        raise ValueError("a plotted point has at least one wafer and one site")
    ones = np.ones_like(wafers)
    return np.stack([1.0 / (wafers * sites), 1.0 / wafers, ones, ones], axis=-1)


def nested_components(
    summary: WaferSummary,
    *,
    site_df_lost: ArrayLike | None = None,
    tool: ArrayLike | None = None,
) -> Components:
    """Estimate the nested components of every stream by REML.

    Parameters
    ----------
    summary : WaferSummary
        One row a wafer, signature removed.
    site_df_lost : (n_streams,) array_like of int, optional
        Degrees of freedom that the site signature took (`SiteSignatures.df`).
    tool : (n_wafers,) array_like of int, optional
        Codes of a level above the lot; a lot belongs to one tool.

    Returns
    -------
    Components
        Non-negative. Streams without rows have NaN estimates.

    Raises
    ------
    ValueError, TypeError
        On bad shapes or codes, or a lot under two tools.

    Notes
    -----
    Restricted maximum likelihood by Fisher scoring; see `spc.stats.reml`. On balanced data with
    positive components it equals the analysis of variance (Searle, Casella & McCulloch 1992,
    section 6.6).
    Where every lot has one wafer, every wafer one site, or every tool one lot, the two levels
    cannot be told apart: the lower is pooled into the upper, and `pooled` says so. The small error
    of an estimated signature in the wafer means of unbalanced layouts is left aside.
    """
    lost = np.zeros(summary.n_streams, dtype=np.int64)
    if site_df_lost is not None:
        lost = as_codes(site_df_lost, "site_df_lost", summary.n_streams)
    layout = arrange(summary, lost, tool)
    fits = [
        maximise(block, layout.start[a:b], layout.free[a:b])
        for a, b, block in layout.blocks(CELLS_AT_ONCE)
    ]
    return _collect(summary, layout, fits)


def _collect(summary: WaferSummary, layout: Layout, fits: list[Fit]) -> Components:
    """Join the blocks, undo scaling and give each variance its proper name."""
    size, fitted = summary.n_streams, layout.fitted
    variance = np.full((size, 4), np.nan)
    covariance = np.zeros((size, 4, 4))
    mean, mean_variance, loglik = np.full((3, size), np.nan)
    converged = np.ones(size, dtype=bool)
    if fits:
        variance[fitted] = np.concatenate([fit.variance for fit in fits])
        information = np.concatenate([fit.at.information for fit in fits])
        covariance[fitted] = _invert(information, layout.free)
        mean[fitted] = np.concatenate([fit.at.mean for fit in fits])
        mean_variance[fitted] = np.concatenate([fit.at.mean_variance for fit in fits])
        loglik[fitted] = np.concatenate([fit.at.loglik for fit in fits])
        converged[fitted] = np.concatenate([fit.converged for fit in fits])
    squared = layout.scale**2
    order = layout.names
    variance = np.take_along_axis(variance, order, axis=1) * squared[:, None]
    covariance = np.take_along_axis(covariance, order[:, :, None], axis=1)
    covariance = np.take_along_axis(covariance, order[:, None, :], axis=2)
    covariance *= (squared**2)[:, None, None]
    variance = np.where(layout.unknown, np.nan, variance)
    variance[layout.constant] = np.where(layout.unknown[layout.constant], np.nan, 0.0)
    mean_se = np.sqrt(mean_variance) * layout.scale
    mean_se = np.where(np.isnan(variance).any(axis=1), np.nan, mean_se)
    mean_se = np.where(layout.constant & ~layout.unknown[:, LOT], 0.0, mean_se)
    return Components(
        mean=np.where(layout.constant, layout.centre, layout.centre + layout.scale * mean),
        mean_se=mean_se,
        site=variance[:, SITE],
        wafer=variance[:, WAFER],
        lot=variance[:, LOT],
        tool=variance[:, TOOL],
        covariance=covariance,
        loglik=np.where(layout.degenerate, np.nan, loglik + layout.loglik_offset),
        n_tools=layout.n_tools,
        n_lots=layout.n_lots,
        n_wafers=layout.n_wafers,
        n_sites=layout.n_sites,
        site_df=layout.site_df,
        pooled=layout.pooled,
        converged=converged,
        iterations=max((fit.iterations for fit in fits), default=0),
    )


def _invert(information: FloatArray, free: np.ndarray) -> FloatArray:
    """Inverse of the information over the free variances, 0 elsewhere."""
    pair = free[:, :, None] & free[:, None, :]
    matrix = np.where(pair, information, np.eye(4))
    size = np.sqrt(np.maximum(np.einsum("sii->si", matrix), 1e-300))
    outer = size[:, :, None] * size[:, None, :]
    inverse = np.linalg.inv(matrix / outer + 1e-14 * np.eye(4)) / outer
    return np.where(pair, inverse, 0.0)

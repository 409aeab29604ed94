"""What autocorrelation does to the mean and the standard deviation of a baseline."""

from __future__ import annotations

from dataclasses import dataclass

from spc.stats.grouping import FloatArray


@dataclass(frozen=True)
class SerialEffect:
    """Effects on a baseline of m points, relative to m independent points; arrays by stream.

    Attributes
    ----------
    phi : lag-1 autocorrelation.
    variance_bias : expected s^2 over sigma^2 (1 when independent, less for positive phi).
    mean_factor : m var(mean) / sigma^2.
    df : effective degrees of freedom of s^2, 2 E^2 / var.
    df_factor : `df` over m - 1.
    """

    phi: FloatArray
    variance_bias: FloatArray
    mean_factor: FloatArray
    df: FloatArray
    df_factor: FloatArray

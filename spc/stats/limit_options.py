"""How control limits are set: the promised rate, widened or not, lot or wafer points."""

from __future__ import annotations

from dataclasses import dataclass

from scipy import special

from spc.stats.serial_effect import SerialEffect
from spc.stats.tails import two_sided_alpha


@dataclass(frozen=True)
class LimitOptions:
    """How limits are set.

    Attributes
    ----------
    n_sigma : float
        Half width in sigmas of a normal statistic; sets the promised rate 2 Phi(-n_sigma).
    alpha : float, optional
        The promised two-sided rate itself; overrides `n_sigma`.
    widen : bool
        Widen limits so that the promised rate holds, averaged over baselines, although centre and
        sigma are estimated.
    point : {"lot", "wafer"}
        What one plotted point is.
    serial : SerialEffect, optional
        By stream, what the autocorrelation of the baseline does to its mean and sd
        (`spc.stats.autocorrelation.ar1_baseline`); limits of means are corrected for it.

    Raises
    ------
    ValueError
        If `n_sigma` is not positive, `alpha` is not in (0, 1) or `point` is unknown.
    """

    n_sigma: float = 3.0
    alpha: float | None = None
    widen: bool = False
    point: str = "lot"
    serial: SerialEffect | None = None

    def __post_init__(self) -> None:
        if self.alpha is not None and not 0.0 < self.alpha < 1.0:
            raise ValueError(f"alpha must lie between 0 and 1, not {self.alpha}")
        if self.alpha is None and not self.n_sigma > 0.0:
            raise ValueError(f"n_sigma must be positive, not {self.n_sigma}")
        if self.point not in ("lot", "wafer"):
            raise ValueError(f'point is "lot" or "wafer", not {self.point!r}')

    @property
    def rate(self) -> float:
        """The promised two-sided false-alarm rate."""
        return float(two_sided_alpha(self.n_sigma)) if self.alpha is None else self.alpha

    @property
    def sigmas(self) -> float:
        """Normal half width that belongs to `rate`."""
        return self.n_sigma if self.alpha is None else float(-special.ndtri(self.alpha / 2.0))


DEFAULT = LimitOptions()

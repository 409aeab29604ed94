"""When a drift reaches a limit of the specification, with an interval."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import brentq
from scipy.special import ndtri

FloatArray = NDArray[np.float64]

DAY = 86400.0
HORIZON = 90 * DAY  # a crossing further off than this is not forecast


@dataclass(frozen=True)
class Line:
    """A drift: `level` at the time `reference` (s) and `slope` per second, with their covariance;
    `level` is the process mean itself, centre included."""

    reference: float
    level: float
    slope: float
    covariance: FloatArray

    def at(self, time: float) -> float:
        """Mean at a time."""
        return self.level + self.slope * (time - self.reference)

    def sd(self, time: float) -> float:
        """Standard error of the mean at a time."""
        x = np.array([1.0, time - self.reference])
        return float(np.sqrt(max(x @ self.covariance @ x, 0.0)))


@dataclass(frozen=True)
class Crossing:
    """Which limit is reached and when (s): best estimate and a 95 % interval.

    `latest` is None where the data do not exclude that the limit is never reached.
    """

    spec: Literal["lower", "upper"]
    expected: float
    earliest: float
    latest: float | None


def crossing(
    line: Line, lower: float | None, upper: float | None, now: float, confidence: float = 0.95
) -> Crossing | None:
    """When the mean reaches the limit it drifts to; None without one in reach.

    The interval holds the times at which the limit lies within the confidence band of the line
    (inversion of the band, as for a calibration line: Draper & Smith, Applied Regression
    Analysis, section 3.2). A limit passed before `now` gives None: that is no forecast.
    """
    rising = line.slope > 0
    limit = upper if rising else lower
    if limit is None or line.slope == 0:
        return None
    expected = line.reference + (limit - line.level) / line.slope
    if expected <= now or expected > now + HORIZON:
        return None
    width = float(ndtri(0.5 + confidence / 2))
    sign = 1.0 if rising else -1.0

    def short(time: float, side: float) -> float:
        """How far the edge of the band is short of the limit."""
        return sign * (limit - line.at(time)) - side * width * line.sd(time)

    earliest = now if short(now, 1.0) <= 0 else brentq(lambda t: short(t, 1.0), now, expected)
    end = now + 4 * HORIZON
    latest = None
    if short(end, -1.0) < 0:
        latest = float(brentq(lambda t: short(t, -1.0), expected, end))
    return Crossing("upper" if rising else "lower", expected, float(earliest), latest)

"""Likelihood of a change that starts at each point of a series, for several shapes of change.

The series is z_t = mean + change_t + e_t with sd sigma_t a point (unequal sample sizes) and lag-1
correlation phi of the standardised errors. Values and regressors are whitened together, so every
profile is a ratio of weighted sums, computed for all onsets at once. A baseline mean with a
standard error is a second regressor with a normal prior of that width (generalised least squares).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import optimize, special

Array = NDArray[np.float64]

LONGEST = 3000  # matrices of all pairs of onset and end stay within 100 MB


@dataclass(frozen=True)
class Noise:
    """What is known of the series before the change.

    sigma : sd of each point, value unit; scalar or (n,). With ``sigma_known`` False only the ratios
        between points count and the common factor is estimated.
    mean : baseline mean, value unit; None: estimated from the series itself.
    mean_se : its standard error (0: exact).
    phi : lag-1 correlation of the standardised points, within (-1, 1).
    """

    sigma: float | Array = 1.0
    mean: float | None = None
    mean_se: float = 0.0
    phi: float = 0.0
    sigma_known: bool = True

    def __post_init__(self) -> None:
        sigma = np.asarray(self.sigma, float)
        if not (np.isfinite(sigma).all() and (sigma > 0).all()):
            raise ValueError("sigma must be positive at every point")
        if not -1 < self.phi < 1:
            raise ValueError(f"phi {self.phi} must be between -1 and 1")
        if self.mean_se < 0:
            raise ValueError(f"mean_se {self.mean_se} cannot be negative")


@dataclass(frozen=True)
class Series:
    """A series made ready: missing points out, whitened.

    index : (m,) places of the points in the original series. z : (m,) value less the baseline mean.
    at : (m,) places on the axis of a drift. w, one : whitened z and unit column. prior : precision
    of the baseline mean (inf: exact, 0: unknown).
    """

    index: np.ndarray
    at: Array
    sigma: Array
    w: Array
    one: Array
    prior: float
    phi: float
    sigma_known: bool

    @property
    def n(self) -> int:
        return int(self.w.size)

    def whiten(self, columns: Array) -> Array:
        """Divide by sigma and take the lag-1 correlation out; along the last axis."""
        out = columns / self.sigma
        if self.phi:
            root = np.sqrt(1 - self.phi**2)
            out[..., 1:] = (out[..., 1:] - self.phi * out[..., :-1]) / root
        return out

    @property
    def log_constant(self) -> float:
        """Log of the normal density's factor before the exponential, sigma known."""
        return float(
            -0.5 * self.n * np.log(2 * np.pi)
            - np.log(self.sigma).sum()
            - 0.5 * (self.n - 1) * np.log(1 - self.phi**2)
        )

    @property
    def level(self) -> float:
        """Estimated baseline mean less the given one, nothing changed."""
        weight = self.one @ self.one + self.prior
        return 0.0 if np.isinf(self.prior) else float(self.one @ self.w / weight)

    @property
    def residual(self) -> Array:
        """(m,) whitened residuals, nothing changed."""
        return np.asarray(self.w - self.level * self.one)

    @property
    def rss(self) -> float:
        """Residual sum of squares, nothing changed (with the prior's share)."""
        level = self.level
        shrink = 0.0 if level == 0.0 else level**2 * self.prior
        return float(self.residual @ self.residual + shrink)

    @property
    def log_likelihood(self) -> float:
        """Maximum log likelihood without a change."""
        if self.sigma_known:
            return self.log_constant - 0.5 * self.rss
        return self.log_constant - 0.5 * self.n * (np.log(self.rss / self.n) + 1.0)


def prepare(values: ArrayLike, noise: Noise, at: ArrayLike | None = None) -> Series:
    """Whiten a series (n,); NaN points are left out. Raises ValueError for unusable input."""
    data = np.asarray(values, float)
    if data.ndim != 1:
        raise ValueError(f"values {data.shape} must be one series")
    sigma = np.broadcast_to(np.asarray(noise.sigma, float), data.shape)
    place = np.arange(data.size, dtype=float) if at is None else np.asarray(at, float)
    if place.shape != data.shape:
        raise ValueError(f"at {place.shape} must have the shape of values {data.shape}")
    index = np.flatnonzero(np.isfinite(data))
    least = 2 if noise.mean is not None else 3
    if index.size < least:
        raise ValueError(f"{index.size} points: a change needs at least {least}")
    if index.size > LONGEST:
        raise ValueError(f"{index.size} points: hand in the last {LONGEST} at most")
    place = place[index]
    if not (np.diff(place) >= 0).all():
        raise ValueError("points must be in the order of at")
    if noise.mean is None:
        centre, prior = float(data[index].mean()), 0.0
    else:
        centre = noise.mean
        prior = np.inf if noise.mean_se == 0 else 1.0 / noise.mean_se**2
    blank = np.empty(0)
    bare = Series(index, place, sigma[index], blank, blank, prior, noise.phi, noise.sigma_known)
    w, one = (bare.whiten(c) for c in (data[index] - centre, np.ones(index.size)))
    series = Series(index, place, sigma[index], w, one, prior, noise.phi, noise.sigma_known)
    largest = float(np.abs(data[index]).max())
    if not noise.sigma_known and series.rss <= 1e-24 * largest**2:
        raise ValueError("all points are equal: give sigma, it cannot be estimated from them")
    return series


@dataclass(frozen=True)
class Profile:
    """Candidates of one shape of change; arrays (k,) over candidates.

    start, end : first changed point and the point after the last changed one (places in the
        series without its missing points). gain : log likelihood over no change. size, se : change
        (reached at the last changed point) and its standard error, value unit. log_weight : log of
        the likelihood integrated over the size, flat in the size.
    """

    start: np.ndarray
    end: np.ndarray
    gain: Array
    size: Array
    se: Array
    log_weight: Array


def _profile(
    series: Series,
    ends: tuple[np.ndarray, np.ndarray],
    sums: tuple[Array, Array, Array],
    reach: Array,
) -> Profile:
    """Candidates from their sums h'h, h'one, h'w; ``reach`` is the change where h is 1."""
    hh, ho, hw = sums
    weight = series.one @ series.one + series.prior
    if np.isinf(series.prior):
        info, pull = hh, hw
    else:
        info, pull = hh - ho**2 / weight, hw - ho * (series.one @ series.w) / weight
    # A change of everything cannot be told from an unknown mean.
    good = info > 1e-9 * np.maximum(hh, 1e-300)
    info = np.where(good, info, 1.0)
    size = pull / info
    fall = np.where(good, pull**2 / info, 0.0)
    if series.sigma_known:
        gain = post = 0.5 * fall
        s2 = np.ones_like(fall)
    else:
        rss = np.maximum(series.rss - fall, 1e-12 * series.rss)
        spare = series.n - 1 - (series.prior == 0)
        ratio = np.log(rss / series.rss)
        gain, post = -0.5 * series.n * ratio, -0.5 * spare * ratio
        s2 = rss / max(spare, 1)
    log_weight = np.where(good, post - 0.5 * np.log(info / reach**2), -np.inf)
    return Profile(
        ends[0],
        ends[1],
        np.where(good, gain, -np.inf),
        size * reach,
        np.sqrt(s2 / info) * np.abs(reach),
        log_weight,
    )


def step_profile(series: Series) -> Profile:
    """A change of the mean from each point on, to the end."""
    n = series.n
    columns = step_columns(series)
    sums = ((columns**2).sum(axis=1), columns @ series.one, columns @ series.w)
    return _profile(series, (np.arange(n), np.full(n, n)), sums, np.ones(n))


def ramp_profile(series: Series) -> Profile:
    """A drift of the mean that starts after the point before each point, to the end."""
    n, at = series.n, series.at
    gap = np.diff(at)
    # The point before the first is one usual spacing earlier.
    usual = float(np.median(gap[gap > 0])) if (gap > 0).any() else 1.0
    kink = np.concatenate([[at[0] - usual], at[:-1]])
    raw = np.maximum(at[None, :] - kink[:, None], 0.0)
    raw *= np.arange(n)[None, :] >= np.arange(n)[:, None]
    reach = at[-1] - kink
    live = reach > 0
    columns = series.whiten(raw)
    sums = ((columns**2).sum(axis=1), columns @ series.one, columns @ series.w)
    found = _profile(series, (np.arange(n), np.full(n, n)), sums, np.where(live, reach, 1.0))
    return Profile(
        found.start,
        found.end,
        np.where(live, found.gain, -np.inf),
        found.size,
        found.se,
        np.where(live, found.log_weight, -np.inf),
    )


def step_columns(series: Series) -> Array:
    """(n, n) whitened unit steps, one row an onset."""
    n = series.n
    return series.whiten((np.arange(n)[None, :] >= np.arange(n)[:, None]).astype(float))


def episode_profile(series: Series, shortest: int, longest: int) -> Profile:
    """A change of the mean that lasts ``shortest`` to ``longest`` points and is over."""
    n = series.n
    columns = step_columns(series)
    gram = columns @ columns.T
    gram = np.pad(gram, (0, 1))
    ho, hw = np.append(columns @ series.one, 0.0), np.append(columns @ series.w, 0.0)
    length = np.arange(n + 1)[None, :] - np.arange(n)[:, None]
    start, end = np.nonzero((length >= shortest) & (length <= longest))
    sums = (
        gram[start, start] + gram[end, end] - 2 * gram[start, end],
        ho[start] - ho[end],
        hw[start] - hw[end],
    )
    return _profile(series, (start, end), sums, np.ones(start.size))


def spread_profile(series: Series, shortest: int = 3) -> Profile:
    """A larger sd from each point on; ``size`` is ln(sd ratio), ``se`` its standard error.

    The mean is held at its baseline. Onsets with fewer than ``shortest`` points after are left out,
    as are ratios below 1.
    """
    n = series.n
    square = series.residual**2
    after = np.cumsum(square[::-1])[::-1]
    count = np.arange(n, 0, -1, dtype=float)
    mean = np.maximum(after / count, 1e-300)
    if series.sigma_known:
        gain = -0.5 * count * (np.log(mean) + 1.0) + 0.5 * after
        ratio = mean
        good = (ratio > 1.0) & (count >= shortest)
    else:
        before = np.concatenate([[0.0], np.cumsum(square)[:-1]])
        early = n - count
        first = np.maximum(before / np.maximum(early, 1.0), 1e-300)
        whole = square.sum() / n
        gain = 0.5 * (n * np.log(whole) - early * np.log(first) - count * np.log(mean))
        ratio = mean / first
        good = (ratio > 1.0) & (count >= shortest) & (early >= shortest)
    se = np.sqrt(0.5 / count + (0 if series.sigma_known else 0.5 / np.maximum(n - count, 1.0)))
    return Profile(
        np.arange(n),
        np.full(n, n),
        np.where(good, gain, -np.inf),
        0.5 * np.log(np.where(good, ratio, 1.0)),
        se,
        np.where(good, gain - 0.5 * np.log(count), -np.inf),
    )


def mixture_interval(
    weight: Array, centre: Array, se: Array, confidence: float
) -> tuple[float, float]:
    """Central interval of a mixture of normals, weights (k,) summing to 1."""
    # The lightest parts, 1e-5 of the whole together, move no quantile that is asked for.
    order = np.argsort(-weight)
    order = order[: int(np.searchsorted(np.cumsum(weight[order]), 1 - 1e-5)) + 1]
    weight, centre, se = weight[order], centre[order], np.maximum(se[order], 1e-300)
    weight = weight / weight.sum()
    low, high = float((centre - 12 * se).min()), float((centre + 12 * se).max())
    close = 1e-9 * (high - low) + 1e-300

    def quantile(p: float) -> float:
        def miss(value: float) -> float:
            return float(weight @ special.ndtr((value - centre) / se)) - p

        return float(optimize.brentq(miss, low, high, xtol=close))

    return quantile((1 - confidence) / 2), quantile((1 + confidence) / 2)

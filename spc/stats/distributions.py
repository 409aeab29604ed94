"""The families a skew or bounded characteristic is described by, fitted by maximum likelihood.

Families: normal, lognormal, gamma, Weibull, half-normal and Rayleigh (the size of an error in one
and in two directions), folded normal (the size of an error with an offset), skew-normal, Johnson SU
(Johnson 1949, Biometrika 36:149-176). Each is held by a vector ``theta`` without bounds (logs of
positive parameters), so that numerical optimisation and the delta method need no special cases.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import optimize, special, stats

Array = NDArray[np.float64]

_HALF_LOG_2PI = 0.9189385332046727


@dataclass(frozen=True)
class Law:
    """A distribution with its parameters: scipy's functions without the cost of freezing it."""

    distribution: Any
    shape: tuple[float, ...]
    scale: float
    location: float = 0.0

    def _call(self, function: str, at: ArrayLike) -> Array:
        method = getattr(self.distribution, function)
        return np.asarray(method(at, *self.shape, loc=self.location, scale=self.scale))

    def pdf(self, x: ArrayLike) -> Array:
        return self._call("pdf", x)

    def logpdf(self, x: ArrayLike) -> Array:
        return self._call("logpdf", x)

    def cdf(self, x: ArrayLike) -> Array:
        return self._call("cdf", x)

    def sf(self, x: ArrayLike) -> Array:
        return self._call("sf", x)

    def ppf(self, p: ArrayLike) -> Array:
        return self._call("ppf", p)

    def isf(self, p: ArrayLike) -> Array:
        return self._call("isf", p)


@dataclass(frozen=True)
class Family:
    """log_density(x, theta) -> (n,); law(theta) -> Law; start(x) -> theta.

    positive : lives on positive values only. closed : ``start`` is the maximum already.
    slope(x, theta) : (k,) mean gradient of the log density, for the families that are searched.
    """

    name: str
    n_parameters: int
    log_density: Callable[[Array, Array], Array]
    law: Callable[[Array], Law]
    start: Callable[[Array], Array]
    positive: bool = False
    closed: bool = False
    slope: Callable[[Array, Array], Array] | None = None


def _normal(z: Array) -> Array:
    return np.asarray(-0.5 * z**2 - _HALF_LOG_2PI)


def _normal_log(x: Array, t: Array) -> Array:
    return _normal((x - t[0]) / np.exp(t[1])) - t[1]


def _lognormal_log(x: Array, t: Array) -> Array:
    logs = np.log(x)
    return _normal((logs - t[0]) / np.exp(t[1])) - t[1] - logs


def _gamma_log(x: Array, t: Array) -> Array:
    shape, scale = np.exp(t)
    return np.asarray(
        (shape - 1) * np.log(x) - x / scale - special.gammaln(shape) - shape * np.log(scale)
    )


def _weibull_log(x: Array, t: Array) -> Array:
    shape = np.exp(t[0])
    logs = np.log(x) - t[1]
    return np.asarray(t[0] - t[1] + (shape - 1) * logs - np.exp(shape * logs))


def _half_normal_log(x: Array, t: Array) -> Array:
    return _normal(x / np.exp(t[0])) - t[0] + np.log(2.0)


def _rayleigh_log(x: Array, t: Array) -> Array:
    return np.asarray(np.log(x) - 2 * t[0] - 0.5 * (x / np.exp(t[0])) ** 2)


def _folded_log(x: Array, t: Array) -> Array:
    scale = np.exp(t[1])
    return np.logaddexp(_normal((x - t[0]) / scale), _normal((x + t[0]) / scale)) - t[1]


def _skew_log(x: Array, t: Array) -> Array:
    z = (x - t[0]) / np.exp(t[1])
    return np.asarray(np.log(2.0) + _normal(z) - t[1] + special.log_ndtr(t[2] * z))


def _johnson_log(x: Array, t: Array) -> Array:
    z = (x - t[2]) / np.exp(t[3])
    return np.asarray(
        _normal(t[0] + np.exp(t[1]) * np.arcsinh(z)) + t[1] - t[3] - 0.5 * np.log1p(z**2)
    )


def _folded_slope(x: Array, t: Array) -> Array:
    s2 = np.exp(2 * t[1])
    pull = x * np.tanh(x * t[0] / s2)
    to_scale = -1 + (x**2 + t[0] ** 2 - 2 * t[0] * pull) / s2
    return np.array([((pull - t[0]) / s2).mean(), to_scale.mean()])


def _skew_slope(x: Array, t: Array) -> Array:
    scale = np.exp(t[1])
    z = (x - t[0]) / scale
    mills = np.exp(_normal(t[2] * z) - special.log_ndtr(t[2] * z))
    to_place = (z - t[2] * mills) / scale
    to_scale = z**2 - t[2] * z * mills - 1
    return np.array([to_place.mean(), to_scale.mean(), (z * mills).mean()])


def _johnson_slope(x: Array, t: Array) -> Array:
    b, scale = np.exp(t[1]), np.exp(t[3])
    z = (x - t[2]) / scale
    y = np.arcsinh(z)
    w = t[0] + b * y
    fall = w * b / np.sqrt(1 + z**2) + z / (1 + z**2)
    return np.array([-w.mean(), (1 - w * b * y).mean(), fall.mean() / scale, (z * fall).mean() - 1])


def _two(x: Array) -> Array:
    return np.array([x.mean(), np.log(x.std())])


def _gamma_start(x: Array) -> Array:
    """Newton on ln k - digamma(k) = ln mean - mean ln, in ln k; ends at the maximum."""
    gap = max(np.log(x.mean()) - np.log(x).mean(), 1e-12)
    k = (3 - gap + np.sqrt((gap - 3) ** 2 + 24 * gap)) / (12 * gap)
    for _ in range(50):
        step = (np.log(k) - special.digamma(k) - gap) / (1 - k * special.polygamma(1, k))
        k *= np.exp(-step)
        if abs(step) < 1e-14:
            break
    return np.array([np.log(k), np.log(x.mean() / k)])


def _weibull_start(x: Array) -> Array:
    """Root in the shape of the profile score; ends at the maximum."""
    logs = np.log(x) - np.log(x).max()
    mean = logs.mean()

    def score(k: float) -> float:
        w = np.exp(k * logs)
        return float((w * logs).sum() / w.sum() - 1 / k - mean)

    guess = np.pi / (np.sqrt(6.0) * max(logs.std(), 1e-9))
    low, high = guess / 2, guess * 2
    while score(low) > 0:
        low /= 2
    while score(high) < 0:
        high *= 2
    k = optimize.brentq(score, low, high, xtol=1e-14, rtol=1e-14)
    scale = np.log(np.mean(np.exp(k * logs))) / k + np.log(x).max()
    return np.array([np.log(k), scale])


def _folded_start(x: Array) -> Array:
    # Second and fourth moments of |N(m, s)|: m^2 + s^2 and m^4 + 6 m^2 s^2 + 3 s^4.
    second, fourth = np.mean(x**2), np.mean(x**4)
    m2 = np.sqrt(max((3 * second**2 - fourth) / 2, 0.01 * second**2))
    return np.array([np.sqrt(m2), 0.5 * np.log(max(second - m2, 0.05 * second))])


def _skew_start(x: Array) -> Array:
    skew = float(np.clip(stats.skew(x), -0.95, 0.95))
    part = np.abs(skew) ** (2 / 3)
    delta = np.sign(skew) * np.sqrt(np.pi / 2 * part / (part + ((4 - np.pi) / 2) ** (2 / 3)))
    delta = float(np.clip(delta, -0.98, 0.98))
    scale = x.std() / np.sqrt(1 - 2 * delta**2 / np.pi)
    loc = x.mean() - scale * delta * np.sqrt(2 / np.pi)
    return np.array([loc, np.log(scale), delta / np.sqrt(1 - delta**2)])


def _johnson_start(x: Array) -> Array:
    skew = float(np.clip(stats.skew(x), -2, 2))
    return np.array(
        [-0.5 * skew, np.log(1.8), x.mean() - 0.5 * skew * x.std(), np.log(1.5 * x.std())]
    )


FAMILIES: dict[str, Family] = {
    f.name: f
    for f in (
        Family(
            "normal",
            2,
            _normal_log,
            lambda t: Law(stats.norm, (), np.exp(t[1]), t[0]),
            _two,
            False,
            True,
        ),
        Family(
            "lognormal",
            2,
            _lognormal_log,
            lambda t: Law(stats.lognorm, (np.exp(t[1]),), np.exp(t[0])),
            lambda x: _two(np.log(x)),
            True,
            True,
        ),
        Family(
            "gamma",
            2,
            _gamma_log,
            lambda t: Law(stats.gamma, (np.exp(t[0]),), np.exp(t[1])),
            _gamma_start,
            True,
            True,
        ),
        Family(
            "weibull",
            2,
            _weibull_log,
            lambda t: Law(stats.weibull_min, (np.exp(t[0]),), np.exp(t[1])),
            _weibull_start,
            True,
            True,
        ),
        Family(
            "half-normal",
            1,
            _half_normal_log,
            lambda t: Law(stats.halfnorm, (), np.exp(t[0])),
            lambda x: np.array([0.5 * np.log(np.mean(x**2))]),
            True,
            True,
        ),
        Family(
            "rayleigh",
            1,
            _rayleigh_log,
            lambda t: Law(stats.rayleigh, (), np.exp(t[0])),
            lambda x: np.array([0.5 * np.log(np.mean(x**2) / 2)]),
            True,
            True,
        ),
        Family(
            "folded-normal",
            2,
            _folded_log,
            lambda t: Law(stats.foldnorm, (abs(t[0]) / np.exp(t[1]),), np.exp(t[1])),
            _folded_start,
            True,
            slope=_folded_slope,
        ),
        Family(
            "skew-normal",
            3,
            _skew_log,
            lambda t: Law(stats.skewnorm, (t[2],), np.exp(t[1]), t[0]),
            _skew_start,
            slope=_skew_slope,
        ),
        Family(
            "johnson-su",
            4,
            _johnson_log,
            lambda t: Law(stats.johnsonsu, (t[0], np.exp(t[1])), np.exp(t[3]), t[2]),
            _johnson_start,
            slope=_johnson_slope,
        ),
    )
}

_MOVED = {"skew-normal": (0, 1), "johnson-su": (2, 3)}  # places of location and log scale


def maximum_likelihood(family: Family, x: Array) -> tuple[Array, float]:
    """theta at the maximum and the log likelihood there; nan when the search fails."""
    if family.closed:
        theta = family.start(x)
        return theta, float(family.log_density(x, theta).sum())
    # Work on standardised values so that steps and tolerances mean the same for every unit.
    shift = x.mean() if family.name in _MOVED else 0.0
    unit = x.std()
    z = (x - shift) / unit

    def cost(theta: Array) -> tuple[float, Array]:
        with np.errstate(all="ignore"):
            value = -float(family.log_density(z, theta).mean())
            slope = np.zeros_like(theta) if family.slope is None else -family.slope(z, theta)
        if not (np.isfinite(value) and np.isfinite(slope).all()):
            return 1e6, np.zeros_like(theta)
        # A faint pull to 0 keeps the search from following a parameter that runs away.
        return value + 1e-9 * float(theta @ theta), slope + 2e-9 * theta

    found = optimize.minimize(
        cost, family.start(z), method="BFGS", jac=True, options={"gtol": 1e-7, "maxiter": 100}
    )
    theta = np.asarray(found.x, float)
    if not np.isfinite(theta).all() or np.abs(theta).max() > 50:
        return np.full(family.n_parameters, np.nan), float("nan")
    if family.name in _MOVED:
        place, size = _MOVED[family.name]
        theta[place] = shift + unit * theta[place]
        theta[size] += np.log(unit)
    else:
        theta = theta + np.array([0.0, np.log(unit)])
        theta[0] = abs(theta[0]) * unit
    return theta, float(family.log_density(x, theta).sum())


def covariance(family: Family, x: Array, theta: Array) -> Array:
    """Inverse of the observed information (numerical, central differences); NaN if not positive."""
    k = theta.size
    # Location-like entries move with the data's sd, logs and shapes by their own size.
    step = np.where(_location(family, k), x.std(), 1.0) * 1e-3
    steps = np.eye(k) * step

    def value(t: Array) -> float:
        with np.errstate(all="ignore"):
            return float(family.log_density(x, t).sum())

    here = value(theta)
    hessian = np.empty((k, k))
    for i in range(k):
        plus, minus = value(theta + steps[i]), value(theta - steps[i])
        hessian[i, i] = (plus - 2 * here + minus) / step[i] ** 2
        for j in range(i):
            mixed = (
                value(theta + steps[i] + steps[j])
                - value(theta + steps[i] - steps[j])
                - value(theta - steps[i] + steps[j])
                + value(theta - steps[i] - steps[j])
            )
            hessian[i, j] = hessian[j, i] = mixed / (4 * step[i] * step[j])
    unit = np.outer(step, step)
    scaled = -hessian * unit
    if not np.isfinite(scaled).all() or np.linalg.eigvalsh(scaled)[0] <= 0:
        return np.full((k, k), np.nan)
    return np.asarray(np.linalg.inv(scaled) * unit)


def _location(family: Family, k: int) -> np.ndarray:
    place = {"normal": 0, "folded-normal": 0, "skew-normal": 0, "johnson-su": 2}.get(family.name)
    return np.arange(k) == (-1 if place is None else place)

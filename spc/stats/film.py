"""Film and image physics of a litho bay: spin speed, swing, resolution, depth of focus.

Lengths are in nm unless a name says otherwise, speeds in revolutions a minute (rpm). All functions
work on arrays and broadcast. The trims are advice: a change of recipe is made by people, within the
limits of the tool and the site's procedures.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import stats

Array = NDArray[np.float64]

I_LINE_NM = 365.0  # common practice, no source
# Meyerhofer (1978): thickness ~ omega^-1/2 where evaporation goes with omega^1/2. Real resists lie
# within about 0.4 to 0.6 (common practice, no source): the spread below says so.
DEFAULT_EXPONENT = 0.5
DEFAULT_EXPONENT_SE = 0.05


def _above_zero(name: str, value: ArrayLike) -> Array:
    out = np.asarray(value, float)
    if not (out > 0).all():
        raise ValueError(f"{name} must be positive, got {out}")
    return out


@dataclass(frozen=True)
class SpinLaw:
    """thickness = c rpm^-exponent.

    exponent, exponent_se : with its standard error. fitted : False when it is the default, and
    ``reason`` says why. residual_sigma : sd of ln thickness about the law (relative), NaN for the
    default. n : films fitted.
    """

    exponent: float = DEFAULT_EXPONENT
    exponent_se: float = DEFAULT_EXPONENT_SE
    fitted: bool = False
    reason: str = "no films at several speeds were given"
    residual_sigma: float = float("nan")
    n: int = 0

    def __post_init__(self) -> None:
        if not self.exponent > 0 or not self.exponent_se >= 0:
            raise ValueError("exponent must be positive and its standard error not negative")


def fit_spin_law(
    rpm: ArrayLike, thickness_nm: ArrayLike, *, largest_se: float = DEFAULT_EXPONENT_SE
) -> SpinLaw:
    """Exponent from films spun at several speeds, by least squares of ln thickness on ln rpm.

    Parameters
    ----------
    rpm, thickness_nm : (n,) films; missing ones (NaN) are left out.
    largest_se : a fit that is less sure than this gives way to the default law.

    Returns
    -------
    SpinLaw; the default one, with the reason, when there are fewer than three films or two speeds,
    or the fit is unsure or not a falling law.

    Raises
    ------
    ValueError: shapes differ, a speed or thickness is not positive.
    """
    speed, film = np.asarray(rpm, float), np.asarray(thickness_nm, float)
    if speed.shape != film.shape or speed.ndim != 1:
        raise ValueError(f"rpm {speed.shape} and thickness {film.shape} must be one length")
    keep = np.isfinite(speed) & np.isfinite(film)
    speed, film = _above_zero("rpm", speed[keep]), _above_zero("thickness", film[keep])
    n = int(speed.size)
    if n < 3 or np.unique(speed).size < 2:
        return SpinLaw(reason=f"{n} films at {np.unique(speed).size} speeds are too few", n=n)
    x = np.log(speed) - np.log(speed).mean()
    y = np.log(film)
    slope = float(x @ y / (x @ x))
    left = y - y.mean() - slope * x
    sigma = float(np.sqrt(left @ left / (n - 2)))
    se = sigma / float(np.sqrt(x @ x))
    if slope >= 0:
        return SpinLaw(reason=f"thickness does not fall with speed (exponent {-slope:.3g})", n=n)
    if se > largest_se:
        reason = f"the fitted exponent {-slope:.3g} is unsure (standard error {se:.2g})"
        return SpinLaw(reason=reason, n=n)
    return SpinLaw(-slope, se, True, f"fitted to {n} films", sigma, n)


def spin_thickness(
    thickness_nm: ArrayLike, rpm_from: ArrayLike, rpm_to: ArrayLike, law: SpinLaw = SpinLaw()
) -> Array:
    """Thickness at another speed: t (rpm_from / rpm_to)^exponent (Meyerhofer 1978, J. Appl. Phys.
    49:3993-3997, for the exponent 1/2). Raises ValueError unless all are positive."""
    ratio = _above_zero("rpm", rpm_from) / _above_zero("rpm", rpm_to)
    return np.asarray(_above_zero("thickness", thickness_nm) * ratio**law.exponent)


def spin_slope(thickness_nm: ArrayLike, rpm: ArrayLike, law: SpinLaw = SpinLaw()) -> Array:
    """Change of thickness with speed, nm a rpm: -exponent t / rpm."""
    return np.asarray(
        -law.exponent * _above_zero("thickness", thickness_nm) / _above_zero("rpm", rpm)
    )


@dataclass(frozen=True)
class SpinTrim:
    """The spin speed that returns a film to target; arrays of one shape.

    rpm, rpm_low, rpm_high : speed and its interval. change_rpm : from the present speed.
    thickness_nm, thickness_low, thickness_high : film expected at the *advised* speed, with its
        interval. allowed : the speed was within the range; where not, ``rpm`` is the nearest end
        of the range and the film stays off target.
    """

    rpm: Array
    rpm_low: Array
    rpm_high: Array
    change_rpm: Array
    thickness_nm: Array
    thickness_low: Array
    thickness_high: Array
    allowed: np.ndarray


def spin_trim(
    thickness_nm: ArrayLike,
    thickness_se: ArrayLike,
    target_nm: ArrayLike,
    rpm: ArrayLike,
    *,
    law: SpinLaw = SpinLaw(),
    allowed_rpm: tuple[float, float] | None = None,
    confidence: float = 0.95,
) -> SpinTrim:
    """Speed that returns the film to target, with what is uncertain about it.

    Parameters
    ----------
    thickness_nm, thickness_se : present mean film and its standard error.
    target_nm : wanted film. rpm : present speed.
    allowed_rpm : lowest and highest speed of the recipe, None without limits.

    The two sources of doubt, the present mean and the exponent, are carried to first order in
    logarithms (delta method). Raises ValueError unless lengths and speeds are positive and the
    range is in order.
    """
    film, target = _above_zero("thickness", thickness_nm), _above_zero("target", target_nm)
    speed, a = _above_zero("rpm", rpm), law.exponent
    if allowed_rpm is not None and not 0 < allowed_rpm[0] < allowed_rpm[1]:
        raise ValueError(f"allowed_rpm {allowed_rpm} must be a low and a higher speed")
    off = np.log(film / target)
    relative = np.asarray(thickness_se, float) / film
    if (relative < 0).any():
        raise ValueError("thickness_se cannot be negative")
    z = float(stats.norm.ppf((1 + confidence) / 2))
    wanted = speed * np.exp(off / a)
    doubt = z * np.sqrt((relative / a) ** 2 + (off * law.exponent_se / a**2) ** 2)
    advised, allowed = wanted, np.ones(np.shape(wanted), bool)
    if allowed_rpm is not None:
        advised = np.clip(wanted, *allowed_rpm)
        allowed = np.asarray((wanted >= allowed_rpm[0]) & (wanted <= allowed_rpm[1]))
    move = np.log(advised / speed)
    after = film * np.exp(-a * move)
    spread = z * np.sqrt(relative**2 + (move * law.exponent_se) ** 2)
    return SpinTrim(
        rpm=np.asarray(advised),
        rpm_low=np.asarray(wanted * np.exp(-doubt)),
        rpm_high=np.asarray(wanted * np.exp(doubt)),
        change_rpm=np.asarray(advised - speed),
        thickness_nm=np.asarray(after),
        thickness_low=np.asarray(after * np.exp(-spread)),
        thickness_high=np.asarray(after * np.exp(spread)),
        allowed=allowed,
    )


def thinned_film(
    start_m: ArrayLike,
    time_s: ArrayLike,
    rpm: ArrayLike,
    *,
    density_kg_m3: float,
    viscosity_pa_s: float,
) -> Array:
    """Thickness in metres of a liquid film that is spun and does not dry.

    h = h0 / sqrt(1 + 4 rho omega^2 h0^2 t / (3 eta)) (Emslie, Bonner & Peck 1958, J. Appl. Phys.
    29:858-862). Raises ValueError unless all are positive (time may be 0).
    """
    h0 = _above_zero("start", start_m)
    return np.asarray(
        h0 / np.sqrt(1.0 + (h0 / _limit(time_s, rpm, density_kg_m3, viscosity_pa_s)) ** 2)
    )


def thinned_limit(
    time_s: ArrayLike, rpm: ArrayLike, *, density_kg_m3: float, viscosity_pa_s: float
) -> Array:
    """What `thinned_film` tends to, whatever it starts from: sqrt(3 eta / (4 rho omega^2 t)), m."""
    return _limit(_above_zero("time", time_s), rpm, density_kg_m3, viscosity_pa_s)


def _limit(time_s: ArrayLike, rpm: ArrayLike, density: float, viscosity: float) -> Array:
    omega = _above_zero("rpm", rpm) * 2 * np.pi / 60
    time = np.asarray(time_s, float)
    if (time < 0).any():
        raise ValueError("time cannot be negative")
    rate = (
        4 * _above_zero("density", density) * omega**2 / (3 * _above_zero("viscosity", viscosity))
    )
    with np.errstate(divide="ignore"):
        return np.asarray(1.0 / np.sqrt(rate * time))


def swing_period(wavelength_nm: ArrayLike, resist_index: ArrayLike) -> Array:
    """Thickness between two maxima of the swing curve: lambda / (2 n), nm.

    Normal incidence, low NA (Brunner 1991, Proc. SPIE 1466:297; Mack 2007, Fundamental Principles
    of Optical Lithography). From a maximum to the next minimum it is half of this.
    """
    return np.asarray(
        _above_zero("wavelength", wavelength_nm) / (2 * _above_zero("index", resist_index))
    )


def swing_ratio(
    top_reflectivity: ArrayLike,
    bottom_reflectivity: ArrayLike,
    absorbance_per_nm: ArrayLike,
    thickness_nm: ArrayLike,
    *,
    first_order: bool = False,
) -> Array:
    """Max-to-min of the absorbed energy over its mean.

    With rho = sqrt(R1 R2) exp(-alpha D): 4 rho to first order (Brunner 1991), 4 rho / (1 + rho^2)
    with all reflections summed. Raises ValueError for reflectivities outside 0 to 1.
    """
    r1, r2 = np.asarray(top_reflectivity, float), np.asarray(bottom_reflectivity, float)
    if not (((r1 >= 0) & (r1 <= 1)).all() and ((r2 >= 0) & (r2 <= 1)).all()):
        raise ValueError("reflectivities are between 0 and 1")
    loss = np.asarray(absorbance_per_nm, float) * np.asarray(thickness_nm, float)
    rho = np.sqrt(r1 * r2) * np.exp(-loss)
    return np.asarray(4 * rho if first_order else 4 * rho / (1 + rho**2))


@dataclass(frozen=True)
class Swing:
    """A swing curve of CD against resist thickness.

    period_nm : `swing_period`. amplitude_nm : half of max-to-min of the CD.
    maximum_nm : a thickness at which the CD is largest; None when the phase is not known.
    bulk_slope : nm of CD a nm of film beside the swing (absorption), 0 if neglected.
    """

    period_nm: float
    amplitude_nm: float
    maximum_nm: float | None = None
    bulk_slope: float = 0.0

    def __post_init__(self) -> None:
        _above_zero("period", self.period_nm)
        if self.amplitude_nm < 0:
            raise ValueError("amplitude cannot be negative")


def cd_change(swing: Swing, thickness_from_nm: ArrayLike, thickness_to_nm: ArrayLike) -> Array:
    """CD change (signed, nm) that a thickness change implies, the phase known.

    amplitude (cos(2 pi (t2 - tmax)/P) - cos(2 pi (t1 - tmax)/P)) + bulk slope (t2 - t1).
    Raises ValueError when the swing has no phase: use `worst_cd_change`.
    """
    if swing.maximum_nm is None:
        raise ValueError("the swing has no phase (maximum_nm): use worst_cd_change")
    a, b = (
        np.cos(2 * np.pi * (np.asarray(t, float) - swing.maximum_nm) / swing.period_nm)
        for t in (thickness_from_nm, thickness_to_nm)
    )
    step = np.asarray(thickness_to_nm, float) - np.asarray(thickness_from_nm, float)
    return np.asarray(swing.amplitude_nm * (b - a) + swing.bulk_slope * step)


def worst_cd_change(swing: Swing, thickness_change_nm: ArrayLike) -> Array:
    """Largest size of the CD change (nm) that a thickness change can make, anywhere on the swing.

    2 A |sin(pi d / P)| up to half a period, 2 A beyond, plus the bulk part.
    """
    step = np.abs(np.asarray(thickness_change_nm, float))
    angle = np.minimum(np.pi * step / swing.period_nm, np.pi / 2)
    return np.asarray(2 * swing.amplitude_nm * np.sin(angle) + abs(swing.bulk_slope) * step)


def worst_slope(swing: Swing) -> float:
    """Steepest CD change with thickness on the swing, nm a nm: 2 pi A / P, plus the bulk part."""
    return 2 * np.pi * swing.amplitude_nm / swing.period_nm + abs(swing.bulk_slope)


def resolution(wavelength_nm: ArrayLike, na: ArrayLike, k1: ArrayLike) -> Array:
    """Rayleigh resolution k1 lambda / NA, nm (Lin 1987; Mack 2007)."""
    return np.asarray(
        _above_zero("k1", k1) * _above_zero("wavelength", wavelength_nm) / _above_zero("NA", na)
    )


def depth_of_focus(wavelength_nm: ArrayLike, na: ArrayLike, k2: ArrayLike) -> Array:
    """Rayleigh depth of focus k2 lambda / NA^2, nm, whole range (Lin 1987; Mack 2007).

    The paraxial form: for NA above 1 a scaling rule, not a length to rely on.
    """
    return np.asarray(
        _above_zero("k2", k2)
        * _above_zero("wavelength", wavelength_nm)
        / _above_zero("NA", na) ** 2
    )

"""Designs of control charts as data: a set of run rules, an EWMA, a two-sided CUSUM."""

from __future__ import annotations

import math
from dataclasses import dataclass

from spc.stats.rules import LEGAL_FORMS, Rule, parse_rules


@dataclass(frozen=True)
class RuleDesign:
    """A Shewhart chart with run rules; a signal is a point that completes any of them.

    Attributes
    ----------
    rules : tuple of Rule
        At least one, none twice.
    """

    rules: tuple[Rule, ...]

    def __post_init__(self) -> None:
        object.__setattr__(self, "rules", tuple(self.rules))
        if not self.rules:
            raise ValueError("a design of run rules needs at least one rule")
        if len(set(self.rules)) != len(self.rules):
            raise ValueError("a design of run rules has a rule twice")

    @property
    def text(self) -> str:
        """The design in words, as in ``rules beyond-3s,8-one-side``."""
        return "rules " + ",".join(rule.name for rule in self.rules)


@dataclass(frozen=True)
class EwmaDesign:
    """An EWMA chart: ``Z_t = lam x_t + (1 - lam) Z_{t-1}``, signal when ``|Z_t| > limit sd(Z_t)``.

    Attributes
    ----------
    lam : float
        Weight of the new point, in (0, 1].
    limit : float
        Limits in standard deviations of the EWMA, above 0.
    time_varying : bool
        True: the exact sd of Z_t since the start; False: its limit for long times.
    fast_start : float, optional
        In (0, 0.95]: the limits start at this share of their width and open to all but 1 % by
        point 20 (Steiner 1999, Journal of Quality Technology 31:75-86, from memory); implies
        limits that vary with time.  None for none.
    """

    lam: float
    limit: float
    time_varying: bool = False
    fast_start: float | None = None

    def __post_init__(self) -> None:
        if not 0.0 < self.lam <= 1.0:
            raise ValueError(f"EWMA weight lambda must be above 0 and at most 1, not {self.lam:g}")
        if not (math.isfinite(self.limit) and self.limit > 0.0):
            raise ValueError(f"EWMA limit L must be above 0, not {self.limit:g}")
        if self.fast_start is not None:
            if not 0.0 < self.fast_start <= 0.95:
                raise ValueError(f"EWMA fast start must be in (0, 0.95], not {self.fast_start:g}")
            object.__setattr__(self, "time_varying", True)

    @property
    def text(self) -> str:
        """The design in words, as in ``ewma 0.2,2.962``."""
        extra = " time-varying limits" if self.time_varying else ""
        extra += "" if self.fast_start is None else f" fast start {self.fast_start:g}"
        return f"ewma {self.lam:g},{self.limit:g}{extra}"


@dataclass(frozen=True)
class CusumDesign:
    """A two-sided tabular CUSUM, in sigmas of the plotted point.

    ``upper_t = max(0, upper_{t-1} + x_t - k)``, ``lower_t = max(0, lower_{t-1} - x_t - k)``;
    signal when either is above h.

    Attributes
    ----------
    k : float
        Reference value (half the shift looked for), 0 or above.
    h : float
        Decision interval, above 0.
    head_start : float
        Where both sides start (fast initial response: h/2, Lucas & Crosier 1982), in [0, h].
    """

    k: float
    h: float
    head_start: float = 0.0

    def __post_init__(self) -> None:
        if not (math.isfinite(self.k) and self.k >= 0.0):
            raise ValueError(f"CUSUM reference value K must be 0 or above, not {self.k:g}")
        if not (math.isfinite(self.h) and self.h > 0.0):
            raise ValueError(f"CUSUM decision interval H must be above 0, not {self.h:g}")
        if not 0.0 <= self.head_start <= self.h:
            raise ValueError(f"CUSUM head start must be between 0 and H, not {self.head_start:g}")

    @property
    def text(self) -> str:
        """The design in words, as in ``cusum 0.5,4.77``."""
        extra = "" if self.head_start == 0.0 else f" head start {self.head_start:g}"
        return f"cusum {self.k:g},{self.h:g}{extra}"


Design = RuleDesign | EwmaDesign | CusumDesign


def design_from_text(
    rules: str | None = None, ewma: str | None = None, cusum: str | None = None
) -> Design:
    """Return the design that a command line asks for; exactly one of the three is given.

    Parameters
    ----------
    rules : str, optional
        Names joined by commas, as in ``beyond-3s,8-one-side``.
    ewma : str, optional
        ``LAMBDA,L``.
    cusum : str, optional
        ``K,H`` or ``K,H,HEAD_START``.

    Raises
    ------
    ValueError
        For none or several of the three, or for text that is not understood.
    """
    given = {"--rules": rules, "--ewma": ewma, "--cusum": cusum}
    named = [name for name, text in given.items() if text is not None]
    if len(named) != 1:
        found = "none" if not named else " and ".join(named)
        raise ValueError(f"give exactly one of --rules, --ewma, --cusum (given: {found})")
    if rules is not None:
        names = [name.strip() for name in rules.split(",") if name.strip()]
        if not names:
            raise ValueError(f"--rules names no rule; legal forms: {LEGAL_FORMS}")
        return RuleDesign(parse_rules(names))
    if ewma is not None:
        lam, limit = _numbers("--ewma LAMBDA,L", ewma, 2, 2)
        return EwmaDesign(lam, limit)
    assert cusum is not None
    return CusumDesign(*_numbers("--cusum K,H", cusum, 2, 3))


def _numbers(form: str, text: str, least: int, most: int) -> list[float]:
    parts = [part.strip() for part in text.split(",")]
    try:
        values = [float(part) for part in parts]
    except ValueError:
        raise ValueError(f"{form}: {text!r} is not a list of numbers") from None
    if not least <= len(values) <= most:
        raise ValueError(f"{form}: {text!r} has {len(values)} numbers")
    return values

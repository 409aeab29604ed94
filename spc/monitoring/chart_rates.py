"""False signals a point of one chart, from what they depend on.

How each kind of chart is reckoned (exact run-rule rates of `spc.stats.false_signals`):

* means and terms: centre and sigma estimated from the n points of the baseline;
* spreads: chi-square limits whose sigma is known as well as n points know it, which moves the
  centre of the normal score by 1/sqrt(n) and leaves its sigma alone;
* map distances: only large ones count, and their F limits already keep the promised rate;
* charts of surely positive autocorrelation: as independent points, for their rules of several
  points see one-step residuals (`spc.monitoring.signals`). With phi 0.3 to 0.7, estimated from the
  same baseline, simulated totals are 0.011 to 0.037 a point where 0.031 is said for n = 30, and
  0.014 to 0.032 where 0.023 is said for n = 60: low where phi is easily taken too large, high where
  it is large;
* other autocorrelated charts: all rules see the autocorrelated points.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

from spc.stats.false_signals import SignalRates, signal_rates
from spc.stats.rules import Rule

_SURE_SIGMA = 1e7  # degrees of freedom of a sigma that is not in doubt


@dataclass(frozen=True)
class Chart:
    """What the false signals of a chart depend on.

    Attributes
    ----------
    rules : tuple of Rule
    kind : ``mean``, ``spread`` or ``distance``.
    n : points behind the limits, None for known limits.
    phi : lag-1 autocorrelation that is reckoned with, in steps of 0.1.
    residuals : whether rules of several points see one-step residuals; phi is then of no account.
    """

    rules: tuple[Rule, ...]
    kind: str = "mean"
    n: int | None = None
    phi: float = 0.0
    residuals: bool = False


@dataclass(frozen=True)
class Rates:
    """False signals and events, a point or (after `times` and `plus`) a night; by rule alone too.

    `known` is `signals` with limits known and points independent, `independent` with limits as
    they are and points independent.
    """

    signals: float = 0.0
    events: float = 0.0
    known: float = 0.0
    independent: float = 0.0
    by_rule: tuple[tuple[str, float, float], ...] = ()  # name, signals, events

    def times(self, count: float) -> Rates:
        """The same for a number of points."""
        return Rates(
            count * self.signals,
            count * self.events,
            count * self.known,
            count * self.independent,
            tuple((name, count * s, count * e) for name, s, e in self.by_rule),
        )

    def plus(self, other: Rates) -> Rates:
        """Both together."""
        rules = {name: (s, e) for name, s, e in self.by_rule}
        for name, s, e in other.by_rule:
            old = rules.get(name, (0.0, 0.0))
            rules[name] = (old[0] + s, old[1] + e)
        return Rates(
            self.signals + other.signals,
            self.events + other.events,
            self.known + other.known,
            self.independent + other.independent,
            tuple((name, s, e) for name, (s, e) in rules.items()),
        )


@lru_cache(maxsize=8192)
def chart_rates(chart: Chart) -> Rates:
    """Rates a point of one chart; no rule gives no signal."""
    if not chart.rules:
        return Rates()
    found = _rates(chart)
    plain = Chart(chart.rules, chart.kind)
    still = Chart(chart.rules, chart.kind, chart.n)
    return Rates(
        found.signals,
        found.events,
        found.signals if chart == plain else _rates(plain).signals,
        found.signals if chart == still else _rates(still).signals,
        tuple(
            (rule.name, s, e)
            for rule, s, e in zip(
                chart.rules, found.signals_by_rule, found.events_by_rule, strict=True
            )
        ),
    )


def _rates(chart: Chart) -> SignalRates:
    n, df = chart.n, None
    if chart.kind == "distance":
        n = None
    elif chart.kind == "spread" and n is not None:
        df = _SURE_SIGMA
    phi = 0.0 if chart.residuals else chart.phi
    both = signal_rates(chart.rules, n, phi, df)
    return _upper_only(chart, both, n, df, phi) if chart.kind == "distance" else both


def _upper_only(
    chart: Chart, both: SignalRates, n: int | None, df: float | None, phi: float
) -> SignalRates:
    """Signals above the centre alone: half of those of rules that have a side."""
    half = tuple(0.5 if rule.sided else 1.0 for rule in chart.rules)
    sided = tuple(rule for rule in chart.rules if rule.sided)
    lower = 0.5 * signal_rates(sided, n, phi, df).signals if sided else 0.0
    lower_events = 0.5 * signal_rates(sided, n, phi, df).events if sided else 0.0
    return SignalRates(
        both.signals - lower,
        both.events - lower_events,
        tuple(h * s for h, s in zip(half, both.signals_by_rule, strict=True)),
        tuple(h * e for h, e in zip(half, both.events_by_rule, strict=True)),
        both.method,
        both.relative_error,
    )

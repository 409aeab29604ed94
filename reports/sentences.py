"""Each finding as one plain sentence: the same words on the page, in the mail and in commands."""

from __future__ import annotations

import re

from reports.model import (
    Context,
    Excursion,
    ExcursionStream,
    Level,
    LevelEffect,
    NightPage,
    Suspect,
)
from reports.numbers import (
    LocalClock,
    count,
    half_width,
    index,
    interval,
    number,
    p_value,
    quantity,
)
from reports.texts import has, join, plural, shown, text

_RULES = (
    (re.compile(r"beyond-(?P<s>[\d.]+)s"), "rule.beyond"),
    (re.compile(r"(?P<k>\d+)of(?P<n>\d+)-beyond-(?P<s>[\d.]+)s"), "rule.of"),
    (re.compile(r"(?P<n>\d+)-one-side"), "rule.one-side"),
    (re.compile(r"(?P<n>\d+)-trending"), "rule.trending"),
    (re.compile(r"(?P<n>\d+)-within-(?P<s>[\d.]+)s"), "rule.within"),
)


def rule_words(rule: str, *, short: bool = False) -> str:
    """A rule in words: `2of3-beyond-2s` is `2 of 3 beyond 2 sigma on one side`.

    `short` leaves out what goes without saying where there is little room.
    """
    for pattern, key in _RULES:
        if match := pattern.fullmatch(rule):
            brief = f"{key}-short"
            return text(brief if short and has(brief) else key, **match.groupdict())
    return text(f"rule.{rule}") if has(f"rule.{rule}") else rule.replace("-", " ")


def rules_words(rules: tuple[str, ...]) -> str:
    """Several rules in words."""
    return text("join.semicolon").join(rule_words(rule) for rule in rules)


def statistic_words(statistic: str) -> str:
    """Name of a statistic, empty for the mean: `resist thickness` is the mean of it."""
    return text(f"statistic.{statistic}") if has(f"statistic.{statistic}") else statistic


def statistic_title(statistic: str) -> str:
    """Name of a statistic, also of the mean."""
    return statistic_words(statistic) or text("statistic-title.mean")


def series_name(characteristic: str, statistic: str) -> str:
    """`M1 resist thickness` or `M1 resist thickness, within-wafer spread`."""
    words = statistic_words(statistic)
    if not words:
        return characteristic
    return text("series.name", characteristic=characteristic, statistic=words)


def factor_words(factor: str) -> str:
    """`resist_batch` is `resist batch`, `coat.module` is `coat module`."""
    return shown(re.sub(r"[._]+", " ", factor).replace("+", " + "))


def level_words(level: Level | Suspect | LevelEffect) -> str:
    """`resist batch R-12`, or `tool TRK2, module CUP1` for joined factors."""
    factors, levels = level.factor.split("+"), level.level.split("+")
    if len(factors) != len(levels):
        return f"{factor_words(level.factor)} {shown(level.level)}"
    pairs = zip(factors, levels, strict=True)
    return text("join.comma").join(f"{factor_words(f)} {shown(value)}" for f, value in pairs)


def context_words(context: Context) -> str:
    """The values of a context in the order given: `TRK2 CUP1`; words for the empty one."""
    return " ".join(map(shown, context.values())) if context else text("context.whole")


def where(excursion: Excursion) -> str:
    """Where it shows: one stream's context, what several have in common, or how many."""
    contexts: list[dict[str, str]] = []
    for stream in excursion.streams:
        if dict(stream.context) not in contexts:
            contexts.append(dict(stream.context))
    if len(contexts) <= 2:
        return join([context_words(context) for context in contexts])
    shared = {k: v for k, v in contexts[0].items() if all(c.get(k) == v for c in contexts)}
    n = plural("where.streams", len(contexts), count=count(len(contexts)))
    return text("where.shared", shared=context_words(shared), streams=n) if shared else n


def what(excursion: Excursion) -> str:
    """What moved: the characteristic and statistic of its first stream, and how many more."""
    first = _first(excursion)
    # a spread and a map say themselves which statistic they are
    own = excursion.pattern in ("spread", "map", "silence")
    name = shown(first.characteristic)
    name = name if own else series_name(name, first.statistic)
    others = len({stream.characteristic for stream in excursion.streams}) - 1
    return plural("what.more", others, name=name) if others > 0 else name


def _first(excursion: Excursion) -> ExcursionStream:
    return excursion.streams[0] if excursion.streams else ExcursionStream("", "mean", {})


def size(excursion: Excursion) -> str:
    """The magnitude alone, signed, at the digits its interval deserves; empty for silence."""
    found = excursion.magnitude
    if found is None:
        return ""
    half = half_width(found.low, found.high)
    return quantity(found.value, found.unit, half_width=half, sign=True)


def size_interval(excursion: Excursion) -> str:
    """The 95 % interval of the magnitude, or empty."""
    found = excursion.magnitude
    if found is None or found.low is None or found.high is None:
        return ""
    return interval(found.low, found.high, found.unit, sign=found.low < 0 < found.high)


def sureness(excursion: Excursion) -> str:
    """How sure: the chance that noise did it where known, else the size in sigmas."""
    found = excursion.magnitude
    if excursion.p_chance is not None:
        return text("sure.chance", p=p_value(excursion.p_chance))
    if found is not None and found.sigmas is not None:
        return text("sure.sigmas", sigmas=number(abs(found.sigmas), 1))
    return ""


def cause(excursion: Excursion) -> str:
    """The first suspect, with the levels that the data cannot tell from it."""
    if not excursion.suspects:
        return text("cause.none")
    first = excursion.suspects[0]
    p = "" if first.p_adjusted is None else text("cause.p", p=p_value(first.p_adjusted))
    if first.aliased_with:
        names = [level_words(first), *(level_words(level) for level in first.aliased_with)]
        return text("cause.aliased", names=text("join.or").join(names), p=p)
    return text("cause.one", name=level_words(first), p=p)


def lots(excursion: Excursion) -> str:
    """How many lots it may have touched, and how many of them were measured."""
    n, measured = len(excursion.lots_at_risk), excursion.n_lots_measured
    if n == 0:
        return text("lots.none")
    if excursion.pattern == "silence":
        return plural("lots.unmeasured", n, count=count(n))
    if measured == n:
        return plural("lots.all", n, count=count(n))
    return plural("lots.some", n, count=count(n), measured=count(measured))


def moved(excursion: Excursion, clock: LocalClock) -> str:
    """What, where, how much and since when, as the head of the sentence."""
    onset, pattern = excursion.onset, excursion.pattern
    key = f"moved.{pattern}.{'interval' if size_interval(excursion) else 'bare'}"
    if pattern == "silence":
        key = "moved.silence"
    return text(
        key,
        what=what(excursion),
        where=where(excursion),
        size=size(excursion),
        interval=size_interval(excursion),
        since=clock.moment(onset.estimate),
        span=clock.span(onset.earliest, onset.latest),
    )


def sentence(excursion: Excursion, clock: LocalClock) -> str:
    """The finding in one sentence: what, where, how much, since when, how sure, why, which lots."""
    parts = [
        moved(excursion, clock),
        ended(excursion, clock),
        sureness(excursion),
        cause(excursion),
        lots(excursion),
    ]
    return text("sentence.end", body=text("join.semicolon").join(part for part in parts if part))


def ended(excursion: Excursion, clock: LocalClock) -> str:
    """That it is over, and since when; empty while it lasts."""
    if excursion.end is None:
        return ""
    key = "ended.silence" if excursion.pattern == "silence" else "ended.moved"
    return text(key, end=clock.moment(excursion.end))


def headline(excursion: Excursion, clock: LocalClock) -> str:
    """The finding in a few words, for subjects and lists."""
    key = "headline.silence" if excursion.pattern == "silence" else "headline.moved"
    own = excursion.pattern in ("spread", "map")
    name = what(excursion)
    return text(
        key,
        where=where(excursion),
        what=text(f"headline.{excursion.pattern}", what=name) if own else name,
        size=size(excursion),
        since=clock.moment(excursion.onset.estimate),
    ).replace("  ", " ")


def forecast_sentence(excursion: Excursion, clock: LocalClock) -> str:
    """When a drift reaches a spec limit, and what Cpk is until then; empty without a forecast."""
    found = excursion.forecast
    if found is None:
        return ""
    span = ""
    if found.earliest and found.latest:
        ends = (clock.moment(found.earliest), clock.moment(found.latest))
        span = text("forecast.span", earliest=ends[0], latest=ends[1])
    said = text(
        "forecast.reaches",
        spec=text(f"forecast.{found.spec}"),
        expected=clock.moment(found.expected),
        span=span,
    )
    if found.cpk_now is not None and found.cpk_then is not None:
        cpk = (index(found.cpk_now), index(found.cpk_then))
        said += " " + text("forecast.cpk", now=cpk[0], then=cpk[1])
    return said


def tally(n_act: int, n_watch: int) -> str:
    """`2 to act on, 1 to watch`."""
    parts = []
    if n_act:
        parts.append(text("tally.act", count=n_act))
    if n_watch:
        parts.append(text("tally.watch", count=n_watch))
    return text("join.comma").join(parts)


def night_sentence(page: NightPage) -> str:
    """How the night was, in one sentence."""
    act = sum(card.excursion.tier == "act" for card in page.cards)
    watch = len(page.cards) - act
    streams = page.signals.streams
    looked = plural("night.streams", streams, count=count(streams))
    rest = plural("night.standing", len(page.standing)) if page.standing else ""
    if not page.cards:
        return text("night.quiet", streams=looked, standing=rest)
    fresh = sum(card.change == "opened" for card in page.cards)
    new = plural("night.new", fresh)
    return text("night.busy", tally=tally(act, watch), new=new, streams=looked, standing=rest)


def clock_of(page: NightPage) -> LocalClock:
    """The clock that a night's sentences are written by."""
    return LocalClock(page.edition.zone, page.edition.as_of)

"""The night page: how the night was, what moved, what came in late, and what stayed quiet."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from reports.model import ChartPoint, ChartSeries, ExcursionCard, FeedNotice, NightPage
from reports.numbers import LocalClock, count, decimals_for, number, unit_name
from reports.pages import (
    Figure,
    TimeLook,
    link,
    map_figure,
    newest,
    overlay_figure,
    page,
    time_figure,
)
from reports.sentences import (
    clock_of,
    forecast_sentence,
    headline,
    night_sentence,
    rules_words,
    sentence,
)
from reports.tables import Cell, Column, Row, Table, name_cell, number_cell, time_cell
from reports.texts import plural, shown, text

_POINTS_SHOWN = 8
_POINTS_A_PAGE = 2400  # a point weighs about a kilobyte in the page, drawn twice and listed


def ranked(cards: tuple[ExcursionCard, ...]) -> tuple[ExcursionCard, ...]:
    """The cards in the order of the page: to act on first, new before old, then by size."""

    def key(card: ExcursionCard) -> tuple[bool, int, float, int]:
        moved = card.excursion.magnitude
        sigmas = abs(moved.sigmas) if moved and moved.sigmas is not None else 0.0
        order = ("opened", "updated", "unchanged").index(card.change)
        return (card.excursion.tier != "act", order, -sigmas, card.excursion.id)

    return tuple(sorted(cards, key=key))


@dataclass(frozen=True)
class CardView:
    """A card with everything written out, for the template."""

    anchor: str
    number: int
    tier: str
    tier_word: str
    facts: tuple[str, ...]
    headline: str
    sentence: str
    figures: tuple[Figure, ...]
    first: bool
    forecast: str
    table: Table | None
    all_points: Table | None
    plan: str | None
    href: str | None
    owners: str


def night_page(view: NightPage) -> str:
    """The night page as HTML."""
    clock = clock_of(view)
    up = "../" * (view.href or "").count("/")
    cards = [
        _card(card, view, clock, up, first=i == 0) for i, card in enumerate(ranked(view.cards))
    ]
    said = night_sentence(view)
    values: dict[str, Any] = {
        "sentence": said,
        "cards": cards,
        "any_plan": any(card.plan for card in cards),
        "standing": [
            {
                "words": text(
                    "night.standing_item",
                    headline=headline(card.excursion, clock),
                    status=text(f"status.{card.excursion.status}"),
                    opened=clock.moment(card.excursion.opened_at),
                ),
                "href": _href(card.href, up),
            }
            for card in ranked(view.standing)
        ],
        "feeds": [feed_sentence(notice, clock) for notice in view.feeds],
        "files": files_sentence(view),
        "readings": readings_sentence(view),
        "signals": signals_sentence(view),
        "quiet": quiet_sentence(view),
    }
    title = text("night.title", bay=shown(view.edition.bay), day=clock.day(view.edition.as_of))
    return page("night.html", view.edition, title, values, links={"index": f"{up}index.html"})


def _href(href: str | None, up: str) -> str | None:
    safe = link(href)
    return safe if safe is None or "://" in safe else up + safe


def _card(
    card: ExcursionCard, view: NightPage, clock: LocalClock, up: str, *, first: bool
) -> CardView:
    found = card.excursion
    name = f"e{found.id}"
    pictures = []
    chart = None
    if card.chart and card.chart.points:
        share = max(_POINTS_A_PAGE // len(view.cards), 40)
        look = TimeLook(most_points=min(share, 200))
        chart = newest(card.chart, look.most_points)
        pictures.append(time_figure(f"{name}-chart", card.chart, view.edition, look)[0])
    if card.wafer_map and card.wafer_map.sites:
        pictures.append(map_figure(f"{name}-map", card.wafer_map))
    if card.overlay and card.overlay.panels:
        pictures.append(overlay_figure(f"{name}-overlay", card.overlay))
    shown_points, all_points = _tables(chart, name, clock) if chart else (None, None)
    return CardView(
        anchor=name,
        number=found.id,
        tier=found.tier,
        tier_word=text(f"tier.{found.tier}"),
        facts=card_facts(card, clock),
        headline=headline(found, clock),
        sentence=sentence(found, clock),
        figures=tuple(pictures),
        first=first,
        forecast=forecast_sentence(found, clock),
        table=shown_points,
        all_points=all_points,
        plan=card.action_plan,
        href=_href(card.href, up),
        owners=text("night.owners", owners=", ".join(card.owners)) if card.owners else "",
    )


def card_facts(card: ExcursionCard, clock: LocalClock) -> tuple[str, ...]:
    """Number, form, state and opening of an excursion, in a few words each."""
    found = card.excursion
    return (
        text("night.number", number=found.id),
        text(f"pattern.{found.pattern}"),
        text(f"change.{card.change}"),
        text(
            "night.opened", status=text(f"status.{found.status}"), at=clock.moment(found.opened_at)
        ),
    )


def points_table(
    series: ChartSeries, points: tuple[ChartPoint, ...], name: str, caption: str, clock: LocalClock
) -> Table:
    """Plotted points with their limits and the rules they broke, in words."""
    rows = []
    for point in points:
        decimals = decimals_for(point.sigma) if point.sigma else None
        low, high = number(point.lower_limit, decimals), number(point.upper_limit, decimals)
        lot = point.lot if not point.wafer else f"{point.lot} {point.wafer}"
        rows.append(
            Row(
                (
                    time_cell(point.at, clock),
                    name_cell(lot),
                    number_cell(point.value, number(point.value, decimals)),
                    Cell(text("number.interval", low=low, high=high)),
                    number_cell(point.n_sites, count(point.n_sites)),
                    Cell(rules_words(point.rules) or text(f"phase.{point.phase}")),
                ),
                marked=bool(point.rules),
            )
        )
    unit = unit_name(series.unit)
    heading = text("column.value", unit=unit) if unit else text("column.bare")
    columns = (
        Column(text("column.at"), "at", "time"),
        Column(text("column.lot"), "lot"),
        Column(heading, f"value_{unit}" if unit else "value", "number"),
        Column(text("column.limits"), "limits", extra=True),
        Column(text("column.readings"), "n_sites", "number", extra=True),
        Column(text("column.rules"), "rules"),
    )
    return Table(name, caption, columns, tuple(rows), file=name)


def recent_points(series: ChartSeries, name: str, clock: LocalClock, most: int) -> Table:
    """The points that matter, newest first: those since it began and those that broke a rule."""
    points = tuple(reversed(series.points))
    onset = series.onset
    own = [p for p in points if p.rules or (onset and p.at >= onset.earliest)] or list(points)
    few = tuple(own[:most])
    key = "night.points" if len(few) < len(own) else "night.points_all"
    caption = plural(key, len(few), count=len(few), all=len(own))
    return points_table(series, few, f"{name}-points", caption, clock)


def _tables(series: ChartSeries, name: str, clock: LocalClock) -> tuple[Table, Table]:
    """The points that matter, and all of them."""
    points = tuple(reversed(series.points))
    everything = plural("night.all_points", len(points), count=count(len(points)))
    return (
        recent_points(series, name, clock, _POINTS_SHOWN),
        points_table(series, points, f"{name}-all", everything, clock),
    )


# ---- sentences below the cards, shared with the mail --------------------------------------------


def feed_sentence(notice: FeedNotice, clock: LocalClock) -> str:
    """What is wrong with a feed or a file, with line, column and value where there is one."""
    rows = plural("n.rows", notice.rows or 0, count=count(notice.rows or 0))
    place = ""
    if notice.line is not None:
        place = text("feed.line", line=notice.line)
        if notice.column:
            value = shown(notice.value or "")
            place += text("feed.column", column=shown(notice.column), value=value)
    return text(
        f"feed.{notice.kind}",
        name=shown(notice.name),
        reason=shown(notice.reason),
        since=clock.moment(notice.last_seen) if notice.last_seen else text("feed.never"),
        every=notice.expected_every or "",
        rows=rows,
        place=place,
    )


def files_sentence(view: NightPage) -> str:
    """How many files came in, and what became of them."""
    ingest = view.ingest
    return text(
        "night.files",
        loaded=plural("n.files", ingest.files_loaded, count=count(ingest.files_loaded)),
        duplicate=count(ingest.files_duplicate),
        quarantined=count(ingest.files_quarantined),
        waiting=count(ingest.files_waiting),
    )


def readings_sentence(view: NightPage) -> str:
    """How many readings came in, and what became of them."""
    ingest = view.ingest
    return text(
        "night.readings",
        loaded=plural("n.sites", ingest.readings_loaded, count=count(ingest.readings_loaded)),
        duplicate=count(ingest.readings_duplicate),
        superseded=count(ingest.readings_superseded),
        rejected=count(ingest.readings_rejected),
    )


def signals_sentence(view: NightPage) -> str:
    """Signals seen against those that noise alone would give, and the alarm budget."""
    account = view.signals
    said = text(
        "night.signals",
        signals=plural("n.signals", account.signals, count=count(account.signals)),
        points=plural("n.points", account.points_evaluated, count=count(account.points_evaluated)),
        streams=plural("n.streams", account.streams, count=count(account.streams)),
    )
    if account.expected_false_signals is not None:
        said += " " + text("night.expected", expected=number(account.expected_false_signals, 1))
    if account.false_excursions_per_night is not None:
        budget = number(account.false_excursions_per_night)
        if account.expected_false_excursions is None:
            said += " " + text("night.budget", budget=budget)
        else:
            expected = number(account.expected_false_excursions, 2)
            said += " " + text("night.budget_kept", budget=budget, expected=expected)
    return said


def quiet_sentence(view: NightPage) -> str:
    """The quiet streams in one line."""
    quiet = view.quiet
    said = text(
        "night.quiet_line",
        streams=plural("n.streams", quiet.n_streams, count=count(quiet.n_streams)),
        points=plural("n.points", quiet.n_points, count=count(quiet.n_points)),
    )
    more = []
    if quiet.n_without_limits:
        more.append(
            plural("night.unlimited", quiet.n_without_limits, count=count(quiet.n_without_limits))
        )
    if quiet.n_without_points:
        more.append(
            plural("night.pointless", quiet.n_without_points, count=count(quiet.n_without_points))
        )
    return " ".join([said, *more])

"""The monthly capability review: what changed and needs a decision, then each characteristic."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from reports import figures
from reports.model_pages import (
    CapabilityRow,
    MonthExcursion,
    ReviewChange,
    ReviewDecision,
    ReviewPage,
    ToolGap,
)
from reports.numbers import (
    NOTHING,
    LocalClock,
    count,
    index,
    percent,
    ppm,
    quantity,
)
from reports.pages import Figure, drawn, link, page
from reports.sentences import context_words, headline
from reports.tables import Cell, Column, Row, Table, name_cell, number_cell
from reports.texts import plural, shown, text

INDICES = ("cp", "cpk", "pp", "ppk", "cpm")


@dataclass(frozen=True)
class FigureView:
    """A figure with its title."""

    title: str
    figure: Figure


@dataclass(frozen=True)
class PartView:
    """A characteristic with everything written out, for the template."""

    anchor: str
    name: str
    sentence: str
    facts: tuple[tuple[str, str], ...]
    figures: tuple[FigureView, ...]
    streams: Table | None


def review_page(view: ReviewPage, href: str = "reviews/x.html") -> str:
    """The review as HTML. `href` is its own place below the reports folder."""
    clock = LocalClock(view.edition.zone, view.edition.as_of)
    up = "../" * href.count("/")
    wholes = [row for row in view.rows if not row.context]
    month = month_name(view.month)
    values: dict[str, Any] = {
        "month": month,
        "sentence": review_sentence(view),
        "decisions": [decision_sentence(item) for item in view.decisions],
        "changes": [change_sentence(item) for item in view.changes],
        "gaps": [gap_sentence(gap) for gap in view.gaps],
        "notes": view.notes,
        "excursions": [_excursion(item, clock, up) for item in view.excursions],
        "overview": capability_table(tuple(wholes), "overview", text("caption.overview"), view),
        "parts": [_part(row, view, i) for i, row in enumerate(wholes)],
    }
    title = text("review.title", bay=shown(view.edition.bay), month=month)
    links = {"index": f"{up}index.html", "xlsx": view.xlsx_href}
    return page("review.html", view.edition, title, values, links=links)


def month_name(month: str) -> str:
    """`November 2026` for `2026-11`. Raises ValueError for anything else."""
    year, number = month.split("-")
    return text("month.named", month=text(f"month.long.{int(number)}"), year=int(year))


# ---- sentences ----------------------------------------------------------------------------------


def review_sentence(view: ReviewPage) -> str:
    """How the month was, in one sentence."""
    wholes = [row for row in view.rows if not row.context]
    unstable = sum(row.stable is False for row in wholes)
    goal = view.goal
    below = [r for r in wholes if goal is not None and r.ppk is not None and r.ppk < goal]
    said = text(
        "review.sentence",
        month=month_name(view.month),
        characteristics=plural("n.characteristics", len(wholes), count=count(len(wholes))),
        stable=count(len(wholes) - unstable),
    )
    if goal is not None:
        said += text("review.below", below=count(len(below)), goal=index(goal))
    decide = plural("review.decide", len(view.decisions), count=count(len(view.decisions)))
    return f"{said}; {decide}."


def _name(characteristic: str, context: Any) -> str:
    name = shown(characteristic)
    if not context:
        return name
    return text("review.stream", name=name, context=context_words(context))


def decision_sentence(item: ReviewDecision) -> str:
    """What must be decided, with its numbers."""
    span = ""
    if item.low is not None and item.high is not None:
        span = text("review.interval", low=index(item.low), high=index(item.high))
    return text(
        f"decision.{item.kind}",
        name=_name(item.characteristic, item.context),
        value=percent(item.value) if item.kind == "gauge" else index(item.value),
        interval=span,
        goal=index(item.goal),
        detail=shown(item.detail),
    )


def change_sentence(item: ReviewChange) -> str:
    """An index that moved from one month to the next."""
    return text(
        "review.change",
        name=_name(item.characteristic, item.context),
        index=text(f"index.{item.index}"),
        before=index(item.before),
        after=index(item.after),
        way=text("review.better" if item.after > item.before else "review.worse"),
    )


def gap_sentence(gap: ToolGap) -> str:
    """Best and worst level and the gap between them."""
    span = ""
    if gap.low is not None and gap.high is not None:
        span = text("review.interval", low=index(gap.low), high=index(gap.high))
    return text(
        "review.gap",
        name=shown(gap.characteristic),
        best=shown(gap.best),
        best_ppk=index(gap.best_ppk),
        worst=shown(gap.worst),
        worst_ppk=index(gap.worst_ppk),
        gap=index(gap.gap),
        interval=span,
    )


def _excursion(item: MonthExcursion, clock: LocalClock, up: str) -> dict[str, str | None]:
    words = text(
        "review.excursion",
        number=item.excursion.id,
        headline=headline(item.excursion, clock),
        cause=shown(item.cause) if item.cause else text("review.no_cause"),
    )
    safe = link(item.href)
    return {"words": words, "href": None if safe is None else up + safe}


# ---- tables -------------------------------------------------------------------------------------


def index_words(row: CapabilityRow, name: str, key: str = "review.index") -> str:
    """An index with its interval: never bare where an interval is known."""
    value = getattr(row, name)
    if value is None:
        return NOTHING
    if name not in row.intervals:
        return index(value)
    low, high = row.intervals[name]
    return text(key, value=index(value), low=index(low), high=index(high))


def stable_words(row: CapabilityRow) -> str:
    """The stability verdict in words."""
    if row.stable is None:
        return text("stable.unknown")
    return text("stable.yes" if row.stable else "stable.no")


def capability_table(
    rows: tuple[CapabilityRow, ...], table: str, caption: str, view: ReviewPage
) -> Table:
    """Capability of several rows: indices with intervals, verdict and ppm."""
    made = []
    for row in rows:
        indices = [
            number_cell(getattr(row, key), index_words(row, key, "review.index_cell"))
            for key in INDICES
        ]
        name = Cell(context_words(row.context)) if row.context else name_cell(row.characteristic)
        cells = [
            name,
            number_cell(row.n_lots, count(row.n_lots)),
            *indices,
            Cell(stable_words(row)),
            number_cell(row.ppm_expected, ppm(row.ppm_expected)),
            number_cell(row.ppm_observed, ppm(row.ppm_observed)),
        ]
        made.append(Row(tuple(cells)))
    first = "column.stream" if rows and rows[0].context else "column.characteristic"
    columns = (
        Column(text(first), "name"),
        Column(text("column.lots"), "n_lots", "number"),
        *(Column(text(f"index.{key}"), key, "number") for key in INDICES),
        Column(text("column.stable"), "stable"),
        Column(text("column.ppm_expected"), "ppm_expected", "number"),
        Column(text("column.ppm_observed"), "ppm_observed", "number"),
    )
    return Table(table, caption, columns, tuple(made), file=f"capability-{view.month}-{table}")


# ---- a characteristic ---------------------------------------------------------------------------


def _part(row: CapabilityRow, view: ReviewPage, i: int) -> PartView:
    streams = tuple(r for r in view.rows if r.context and r.characteristic == row.characteristic)
    table = None
    if streams:
        caption = plural("caption.capability", len(streams), count=count(len(streams)))
        table = capability_table(streams, f"streams-{i + 1}", caption, view)
    return PartView(
        anchor=f"part-{i + 1}",
        name=shown(row.characteristic),
        sentence=part_sentence(row),
        facts=_facts(row),
        figures=_figures(row, view, f"part-{i + 1}"),
        streams=table,
    )


def part_sentence(row: CapabilityRow) -> str:
    """Capability of one characteristic in words: never an index without its verdict."""
    said = text(
        "review.part",
        ppk=index_words(row, "ppk"),
        lots=plural("n.lots", row.n_lots, count=count(row.n_lots)),
        readings=plural("n.sites", row.n_readings, count=count(row.n_readings)),
        stable=stable_words(row),
        distribution=shown(row.distribution or text("review.no_distribution")),
    )
    if row.excursions:
        numbers = text("join.comma").join(str(number) for number in row.excursions)
        said += " " + text("review.part_excursions", numbers=numbers)
    return said


def _facts(row: CapabilityRow) -> tuple[tuple[str, str], ...]:
    half = row.sd_overall * 0.1 if row.sd_overall else None
    facts = [
        (text("fact.mean"), quantity(row.mean, row.unit, half_width=half)),
        (
            text("fact.sd_overall"),
            quantity(row.sd_overall, row.unit, half_width=half and half / 2),
        ),
        (text("fact.sd_within"), quantity(row.sd_within, row.unit, half_width=half and half / 2)),
        *((text(f"index.{key}"), index_words(row, key)) for key in INDICES),
        (text("fact.ppm_expected"), ppm(row.ppm_expected)),
        (text("fact.ppm_observed"), ppm(row.ppm_observed)),
    ]
    if row.gauge_share is not None:
        facts.append((text("fact.gauge"), percent(row.gauge_share)))
    return tuple(facts)


def _figures(row: CapabilityRow, view: ReviewPage, name: str) -> tuple[FigureView, ...]:
    made: list[FigureView] = []
    if row.histogram:
        label = text("distribution.label", name=shown(row.characteristic), n=count(row.n_readings))
        spec = figures.distribution(row, 300)
        made.append(FigureView(text("review.distribution"), drawn(f"{name}-dist", label, spec)))
    if any(month.ppk is not None for month in row.history):
        label = text("months.label", name=shown(row.characteristic), n=len(row.history))
        spec = figures.month_by_month(row.history, view.goal, 250)
        made.append(FigureView(text("review.months"), drawn(f"{name}-months", label, spec)))
    if sum(value or 0.0 for value in row.components.values()) > 0:
        label = text("component.label", name=shown(row.characteristic))
        spec = figures.component_bars(row.components, row.unit, 150, row.gauge_share)
        made.append(FigureView(text("review.components"), drawn(f"{name}-parts", label, spec)))
    return tuple(made)

"""The tables of an investigation: streams, suspects, what was ruled out, lots, readings."""

from __future__ import annotations

from typing import Any

from reports.model import Excursion, Level
from reports.model_pages import BehindPoint, InvestigationPage, RuledOut
from reports.numbers import (
    NOTHING,
    LocalClock,
    count,
    half_width,
    interval,
    number,
    percent,
    probability,
    quantity,
)
from reports.sentences import (
    context_words,
    factor_words,
    level_words,
    rules_words,
    statistic_title,
)
from reports.tables import Cell, Column, Row, Table, name_cell, number_cell, time_cell
from reports.texts import plural, shown, text


def tables(view: InvestigationPage, clock: LocalClock) -> dict[str, Any]:
    """All tables by the names the template knows; None where there is nothing to list."""
    return {
        "streams_table": streams_table(view, clock),
        "suspects_table": _suspects(view),
        "ruled_table": _ruled_out(view),
        "experiment_table": _experiment(view),
        "lots_table": lots_table(view.excursion, clock),
        "behind_table": _behind(view, clock),
    }


def lots_columns() -> tuple[Column, ...]:
    """Columns of the lots at risk, also for the hold list as a file."""
    return (
        Column(text("column.lot"), "lot"),
        Column(text("column.wafers"), "wafers", extra=True),
        Column(text("column.processed"), "processed_at", "time"),
        Column(text("column.measured"), "measured"),
        Column(text("column.predicted"), "predicted", "number", extra=True),
        Column(text("column.p_out"), "p_out_of_spec", "number"),
    )


def lots_rows(found: Excursion, clock: LocalClock) -> tuple[Row, ...]:
    """The lots at risk, the likeliest out of spec first."""
    ordered = sorted(
        found.lots_at_risk, key=lambda lot: (-(lot.p_out_of_spec or 0.0), lot.processed_at is None)
    )
    return tuple(
        Row(
            (
                name_cell(lot.lot),
                _wafers(lot.wafers),
                time_cell(lot.processed_at, clock),
                Cell(text("lots.measured_yes" if lot.measured else "lots.measured_no")),
                number_cell(lot.predicted, quantity(lot.predicted, lot.unit, half_width=0.5)),
                number_cell(lot.p_out_of_spec, percent(lot.p_out_of_spec)),
            )
        )
        for lot in ordered
    )


def lots_table(found: Excursion, clock: LocalClock) -> Table | None:
    """The hold list: lots to select, copy and download."""
    if not found.lots_at_risk:
        return None
    return Table(
        "lots-at-risk",
        text("caption.lots"),
        lots_columns(),
        lots_rows(found, clock),
        file=f"excursion-{found.id}-lots",
        pick=True,
        list_column=0,
    )


def _wafers(wafers: tuple[str, ...]) -> Cell:
    if not wafers:
        return Cell(NOTHING, "")
    names = [shown(w) for w in wafers]
    few = ", ".join(names) if len(names) <= 4 else f"{names[0]} \u2026 {names[-1]}"
    return Cell(text("lots.wafers", count=count(len(wafers)), names=few), " ".join(wafers))


def streams_table(view: InvestigationPage, clock: LocalClock) -> Table:
    """The streams the excursion shows on, with the first signal and the rules."""
    rows = tuple(
        Row(
            (
                name_cell(stream.characteristic),
                Cell(statistic_title(stream.statistic)),
                Cell(context_words(stream.context)),
                time_cell(stream.first_signal_at, clock),
                Cell(rules_words(stream.rules) or NOTHING),
            )
        )
        for stream in view.excursion.streams
    )
    columns = (
        Column(text("column.characteristic"), "characteristic"),
        Column(text("column.statistic"), "statistic"),
        Column(text("column.stream"), "stream"),
        Column(text("column.first"), "first_signal_at", "time"),
        Column(text("column.rules"), "rules"),
    )
    name = f"excursion-{view.excursion.id}-streams"
    return Table("streams-table", text("caption.streams"), columns, rows, file=name)


def _suspects(view: InvestigationPage) -> Table | None:
    found = view.excursion
    if not found.suspects:
        return None
    unit = found.magnitude.unit if found.magnitude else ""
    half = half_width(found.magnitude.low, found.magnitude.high) if found.magnitude else None
    rows = []
    for suspect in found.suspects:
        aliased = text("join.comma").join(level_words(level) for level in suspect.aliased_with)
        effect = quantity(suspect.effect, unit, half_width=half, sign=True)
        rows.append(
            Row(
                (
                    Cell(factor_words(suspect.factor), suspect.factor),
                    name_cell(suspect.level),
                    number_cell(suspect.effect, effect),
                    number_cell(suspect.p_adjusted, probability(suspect.p_adjusted)),
                    Cell(aliased or NOTHING),
                )
            )
        )
    columns = (
        Column(text("column.factor"), "factor"),
        Column(text("column.level"), "level"),
        Column(text("column.effect"), "effect", "number"),
        Column(text("column.p"), "p_adjusted", "number"),
        Column(text("column.aliased"), "aliased_with"),
    )
    name = f"excursion-{found.id}-suspects"
    return Table("suspects-table", text("caption.suspects"), columns, tuple(rows), file=name)


def _ruled_out(view: InvestigationPage) -> Table | None:
    if not view.ruled_out:
        return None
    rows = tuple(
        Row(
            (
                Cell(level_words(_level(item)), f"{item.factor}={item.level}"),
                number_cell(item.effect, _effect(item)),
                number_cell(item.n_lots, NOTHING if item.n_lots is None else count(item.n_lots)),
                Cell(_reason(item)),
            )
        )
        for item in view.ruled_out
    )
    columns = (
        Column(text("column.level"), "level"),
        Column(text("column.effect"), "effect", "number"),
        Column(text("column.lots"), "n_lots", "number"),
        Column(text("column.why"), "why"),
    )
    name = f"excursion-{view.excursion.id}-ruled-out"
    return Table("ruled-table", text("caption.ruled_out"), columns, rows, file=name)


def _level(item: RuledOut) -> Level:
    return Level(item.factor, item.level)


def _effect(item: RuledOut) -> str:
    if item.effect is None:
        return NOTHING
    half = half_width(item.low, item.high)
    size = quantity(item.effect, item.unit, half_width=half, sign=True)
    if half is None:
        return size
    return text("effect.interval", size=size, interval=interval(item.low, item.high, item.unit))


def _reason(item: RuledOut) -> str:
    by = level_words(item.explained_by) if item.explained_by else ""
    return text(f"ruled.{item.reason}", by=by)


def _experiment(view: InvestigationPage) -> Table | None:
    if view.experiment is None:
        return None
    rows = tuple(
        Row(
            (
                name_cell(arm.lot),
                number_cell(arm.wafers, count(arm.wafers)),
                Cell(
                    text("join.comma").join(
                        f"{factor_words(k)} {shown(v)}" for k, v in arm.route.items()
                    )
                ),
                Cell(level_words(arm.moves_if)),
            )
        )
        for arm in view.experiment.arms
    )
    columns = (
        Column(text("column.lot"), "lot"),
        Column(text("column.wafers"), "wafers", "number"),
        Column(text("column.route"), "route"),
        Column(text("column.moves_if"), "moves_if"),
    )
    name = f"excursion-{view.excursion.id}-experiment"
    return Table("experiment-table", text("caption.experiment"), columns, rows, file=name)


def _behind(view: InvestigationPage, clock: LocalClock) -> Table | None:
    if not view.behind:
        return None
    rows = tuple(_behind_row(item, clock) for item in view.behind)
    columns = (
        Column(text("column.at"), "at", "time"),
        Column(text("column.measured_at"), "measured_at", "time"),
        Column(text("column.lot"), "lot"),
        Column(text("column.wafer"), "wafer"),
        Column(text("column.stream"), "context"),
        Column(text("column.mean"), "mean", "number"),
        Column(text("column.readings"), "n_sites", "number"),
        Column(text("column.gauge"), "gauge"),
        Column(text("column.file"), "file"),
    )
    caption = plural("caption.behind", len(rows), count=count(len(rows)))
    name = f"excursion-{view.excursion.id}-readings"
    return Table("behind-table", caption, columns, rows, file=name)


def _behind_row(item: BehindPoint, clock: LocalClock) -> Row:
    place = text("behind.file", file=shown(item.file), first=item.first_line, last=item.last_line)
    if item.superseded:
        place = text("behind.superseded", file=place)
    return Row(
        (
            time_cell(item.at, clock),
            time_cell(item.measured_at, clock),
            name_cell(item.lot),
            name_cell(item.wafer),
            Cell(context_words(item.context)),
            number_cell(item.mean, quantity(item.mean, item.unit, half_width=0.5)),
            number_cell(item.n_sites, number(item.n_sites, 0)),
            name_cell(item.gauge),
            Cell(place),
        )
    )

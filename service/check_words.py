"""The alarm budget in words and aligned columns, at most 100 columns wide."""

from __future__ import annotations

import textwrap
from collections.abc import Sequence
from datetime import tzinfo
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from spc.monitoring.alarm_budget import AlarmBudget
    from spc.monitoring.chart_rates import Rates
    from spc.stats.false_signals import DesignChoice

WIDTH = 100
_NAME_WIDTH = 44


def budget_lines(found: AlarmBudget, zone: tzinfo) -> list[str]:
    """The budget: sentences first, then a table by characteristic, by rule and by design."""
    if found.total is None:
        return [*_without_history(found), "", *_by_the_plan(found)]
    return [
        *_sentences(found, zone),
        "",
        *_by_characteristic(found),
        "",
        *_by_rule(found),
        "",
        *_designs(found),
    ]


def _without_history(found: AlarmBudget) -> list[str]:
    return _wrapped(
        "There is no history yet, so points a night are not known and neither are false signals a "
        "night; per 100 points in control the plan gives the following. The alarm budget is "
        f"{found.budget:g} false excursions a night."
    )


def _by_the_plan(found: AlarmBudget) -> list[str]:
    rows = [
        [
            one.name,
            _number(one.per_100_points.signals),
            _number(one.per_100_points.events),
            _number(one.per_100_points.known),
        ]
        for one in found.characteristics
    ]
    return _table(
        ["per 100 points of", "false signals", "false excursions", "signals, known limits"], rows
    )


def _sentences(found: AlarmBudget, zone: tzinfo) -> list[str]:
    from spc.records.stamps import from_us

    total, pace = found.total, found.points_per_night
    assert total is not None
    assert pace is not None
    assert found.until_us is not None  # `total` is there: so is the history
    until = from_us(found.until_us, zone)
    nights = f"{found.nights:.0f} night{'s' if round(found.nights) != 1 else ''}"
    pieces = [
        f"If nothing ever went wrong, {_number(total.signals)} of the {_number(pace)} points a "
        f"night would still complete a rule: false signals. (Points: mean of the {nights} up to "
        f"{until:%Y-%m-%d %H:%M}, on {len(found.charts)} charts.)",
        f"Limits known exactly and independent points would give {_number(total.known)}; limits "
        f"estimated from baselines make it {_number(total.independent)}, and {_serial(total)}.",
        f"Signals that follow each other on one chart are one thing: {_number(total.events)} false "
        f"excursions a night if each were acted on. Run rules alone would break the alarm budget "
        f"of {found.budget:g} a night."
        if total.events > found.budget
        else f"Signals that follow each other on one chart are one thing: {_number(total.events)} "
        f"false excursions a night, within the alarm budget of {found.budget:g}.",
        "They are watched, not acted on: one look for causes may expect "
        f"{found.effects_allowed:g} false ones in all that it sees, within the budget of "
        f"{found.budget:g} a night; new ones a night are fewer, since looks share their data.",
    ]
    residuals = sum(one.chart.residuals for one in found.charts)
    if residuals:
        pieces.append(
            f"{residuals} of the charts are surely autocorrelated: their run rules see what the "
            "point before does not predict, and are reckoned as independent points."
        )
    if found.points_without_limits:
        pieces.append(
            f"Another {_number(found.points_without_limits)} points a night are of streams whose "
            "baseline is not complete; they signal nothing yet and are not in these figures."
        )
    return [line for piece in pieces for line in _wrapped(piece)]


def _serial(total: Rates) -> str:
    """What autocorrelation does to the false signals."""
    if abs(total.signals - total.independent) < 0.01 * total.independent:
        return "autocorrelation hardly changes it"
    return f"autocorrelation then makes it {_number(total.signals)}"


def _by_characteristic(found: AlarmBudget) -> list[str]:
    rows = [
        [
            one.name,
            str(one.n_streams),
            _number(one.points_per_night),
            _number(None if one.expected is None else one.expected.signals),
            _number(None if one.expected is None else one.expected.events),
        ]
        for one in found.characteristics
    ]
    assert found.total is not None
    streams = sum(one.n_streams for one in found.characteristics)
    rows.append(
        [
            "the whole bay",
            str(streams),
            _number(found.points_per_night),
            _number(found.total.signals),
            _number(found.total.events),
        ]
    )
    return _table(["a night", "streams", "points", "false signals", "false excursions"], rows)


def _by_rule(found: AlarmBudget) -> list[str]:
    assert found.total is not None
    rows = [[name, _number(s), _number(e)] for name, s, e in found.total.by_rule]
    head = _wrapped(
        "Each rule by itself; a point may complete several, so these add up to more than the total."
    )
    return [*head, *_table(["rule, a night", "false signals", "false excursions"], rows)]


def _designs(found: AlarmBudget) -> list[str]:
    if not found.designs or found.false_rate_per_point is None:
        return ["No point is charted yet, so no design can be compared."]
    rate = found.false_rate_per_point
    best: dict[str, DesignChoice] = {}
    for choice in found.designs:
        best.setdefault(choice.family, choice)
    first = found.designs[0]
    shift = f"{found.shift:g} sigma"
    head = [
        f"To keep {found.budget:g} false excursions a night, a chart may signal falsely "
        f"once in {_number(1.0 / rate)} points. Of the designs that do, {first.design.text} sees a "
        f"shift of {shift} soonest: after {_number(first.arl)} points on average. The best of "
        "each family (limits known, points independent; sigmas of the plotted point):"
    ]
    rows = [
        [_short(choice.design.text, 72), _number(choice.arl0), _number(choice.arl)]
        for choice in best.values()
    ]
    table = _table(["points to a signal", "in control", f"at {shift}"], rows, first=72)
    return [*(line for text in head for line in _wrapped(text)), *table]


def _number(value: float | None) -> str:
    """Three significant digits, whole numbers from 100 on."""
    from reports.numbers import number, plain

    if value is None or value == 0.0:
        return plain(number(value))
    decimals = 0
    while decimals < 9 and abs(value) * 10.0**decimals < 99.5:
        decimals += 1
    return plain(number(value, decimals))


def _short(text: str, width: int) -> str:
    return text if len(text) <= width else text[: width - 1] + "…"


def _table(
    head: Sequence[str], rows: Sequence[Sequence[str]], first: int = _NAME_WIDTH
) -> list[str]:
    """Columns two spaces apart, the first to the left, numbers to the right."""
    cells = [[_short(row[0], first), *row[1:]] for row in (head, *rows)]
    widths = [max(len(row[i]) for row in cells) for i in range(len(head))]
    return [
        "  ".join(
            cell.ljust(width) if i == 0 else cell.rjust(width)
            for i, (cell, width) in enumerate(zip(row, widths, strict=True))
        ).rstrip()
        for row in cells
    ]


def _wrapped(text: str) -> list[str]:
    return textwrap.wrap(text, WIDTH, break_on_hyphens=False)

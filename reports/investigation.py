"""One excursion in full: what moved and what did not, why most likely, which lots, what to do."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

from markupsafe import Markup

from reports import figures, investigation_tables, render
from reports.live import MARGINS, live_spec
from reports.model import ChartSeries, Excursion, Magnitude
from reports.model_pages import HandAction, InvestigationPage, TrimAdvice
from reports.numbers import (
    LocalClock,
    count,
    half_width,
    index,
    interval,
    iso,
    number,
    percent,
    probability,
    quantity,
    with_unit,
)
from reports.pages import (
    Figure,
    TimeLook,
    drawn,
    event_words,
    link,
    map_figure,
    overlay_figure,
    page,
    time_figure,
)
from reports.sentences import (
    cause,
    context_words,
    forecast_sentence,
    headline,
    level_words,
    lots,
    sentence,
    series_name,
    size,
    size_interval,
)
from reports.texts import join, plural, shown, text
from reports.time_axis import TimeAxis, axis_over

_CHARTS = 12  # more streams are in the table, not in pictures
_POINTS_LEADING = 300  # drawn in the first chart; a point weighs about a kilobyte in the page
_POINTS_A_PAGE = 900  # drawn in the other charts together
_DAY = 86_400_000


@dataclass(frozen=True)
class ChartView:
    """A chart with its title, and whether its stream moved."""

    title: str
    role: str
    figure: Figure


def investigation_page(view: InvestigationPage, href: str = "excursions/x.html") -> str:
    """The investigation as HTML. `href` is its own place below the reports folder."""
    clock = LocalClock(view.edition.zone, view.edition.as_of)
    found = view.excursion
    charts, live = _charts(view)
    values: dict[str, Any] = {
        "sentence": sentence(found, clock),
        "tier": found.tier if found.status != "closed" else "past",
        "tier_word": text(f"tier.{found.tier}"),
        "facts": (
            text("night.number", number=found.id),
            text(f"pattern.{found.pattern}"),
            text(f"status.{found.status}"),
            text("investigation.opened", at=clock.moment(found.opened_at)),
            text("investigation.updated", at=clock.moment(found.updated_at)),
        ),
        "merged": text("investigation.merged", number=view.merged_into) if view.merged_into else "",
        "figures_line": _facts(found, clock),
        "charts": charts,
        "live": live,
        "streams_sentence": _streams_sentence(view),
        "pictures": _pictures(view),
        "sites_gone": view.sites_gone,
        "lots_sentence": text("sentence.end", body=_capital(lots(found))),
        "action_plan": view.action_plan,
        "advices": _advices(view, clock),
        "owners": text("night.owners", owners=join(list(view.owners))) if view.owners else "",
        "actions": [_action(item, clock) for item in view.actions],
        "past": _past(view, clock),
        **_why(view, clock),
        **investigation_tables.tables(view, clock),
    }
    values["contents"] = _contents(values)
    up = "../" * href.count("/")
    title = text("investigation.title", number=found.id, headline=headline(found, clock))
    scripts = (render.live_script(), _live_code()) if live else ()
    links = {"index": f"{up}index.html"}
    return page("investigation.html", view.edition, title, values, links=links, scripts=scripts)


_ACTIONS = frozenset(
    ("contain", "close", "reopen", "comment", "merge", "split", "assign", "false-alarm")
)


def _action(item: HandAction, clock: LocalClock) -> dict[str, str]:
    known = item.action in _ACTIONS
    return {
        "iso": iso(item.at, clock.zone),
        "at": clock.moment(item.at),
        "who": shown(item.who),
        "action": text(f"action.{item.action}") if known else shown(item.action),
        "text": item.text,
    }


def _live_code() -> str:
    from reports.pages import TEMPLATES

    return (TEMPLATES / "live.js").read_text("utf-8")


def _capital(words: str) -> str:
    return words[:1].upper() + words[1:]


def _contents(values: dict[str, Any]) -> list[tuple[str, str]]:
    """Anchors and names of the sections that the page has."""
    maps = bool(values["pictures"] or values["sites_gone"])
    there = {"maps": maps, "behind": bool(values["behind_table"])}
    names = ("streams", "cause", "maps", "lots", "do", "history", "behind")
    return [(n, text(f"investigation.{n}")) for n in names if there.get(n, True)]


# ---- the figures that lead the page -------------------------------------------------------------


def _facts(found: Excursion, clock: LocalClock) -> list[tuple[str, str]]:
    """Size, onset, evidence, lots and forecast, each with its name."""
    facts: list[tuple[str, str]] = []
    if found.magnitude is not None:
        facts.append((text("fact.size"), size(found)))
        if size_interval(found):
            facts.append((text("fact.interval"), size_interval(found)))
        if found.magnitude.sigmas is not None:
            sigmas = number(found.magnitude.sigmas, 1, sign=True)
            facts.append((text("fact.sigmas"), sigmas))
    onset = found.onset
    facts.append((text("fact.onset"), clock.moment(onset.estimate)))
    facts.append((text("fact.span"), clock.span(onset.earliest, onset.latest)))
    if onset.lot:
        facts.append((text("fact.lot"), shown(onset.lot)))
    if found.end is not None:
        name = "fact.end_silence" if found.pattern == "silence" else "fact.end"
        facts.append((text(name), clock.moment(found.end)))
    if found.p_chance is not None:
        facts.append((text("fact.chance"), probability(found.p_chance)))
    risk = [lot.p_out_of_spec for lot in found.lots_at_risk if lot.p_out_of_spec is not None]
    facts.append((text("fact.lots"), count(len(found.lots_at_risk))))
    if risk:
        facts.append((text("fact.worst"), percent(max(risk))))
    if found.forecast is not None:
        facts.append((text("fact.forecast"), clock.moment(found.forecast.expected)))
    return facts


# ---- streams over time --------------------------------------------------------------------------


def _charts(view: InvestigationPage) -> tuple[list[ChartView], Markup | None]:
    """All charts on one time axis, affected first, and the live twins of their drawings."""
    shown_series = [s for s in view.charts if s.points]
    shown_series.sort(key=lambda s: not s.affected)
    shown_series = shown_series[:_CHARTS]
    if not shown_series:
        return [], None
    axis = _shared_axis(shown_series, view)
    share = max(_POINTS_A_PAGE // len(shown_series), 30)
    charts: list[ChartView] = []
    live: list[dict[str, Any]] = []
    for i, series in enumerate(shown_series):
        name = f"stream-{i + 1}"
        strip = TimeLook(figures.STRIP, figures.STRIP_NARROW, axis, share)
        look = strip if i else TimeLook(axis=axis, most_points=_POINTS_LEADING)
        picture, spec = time_figure(name, series, view.edition, look)
        if charts and picture.events == charts[0].figure.events:
            picture = replace(picture, events=())  # explained under the first chart
        title = series_name(shown(series.characteristic), series.statistic)
        role = text("investigation.affected" if series.affected else "investigation.unaffected")
        title = text("investigation.chart", name=title, context=context_words(series.context))
        charts.append(ChartView(title, role, picture))
        live.append({"id": name, "spec": live_spec(spec, axis, picture.label)})
    onset = view.excursion.onset
    around = [axis.place(onset.earliest) - 2 * _DAY, axis.place(onset.latest) + 2 * _DAY]
    steering = {
        "charts": live,
        "from": axis.start,
        "to": axis.end,
        "onset": around,
        "margins": MARGINS["left"] + MARGINS["right"],
        "words": text("zoom.shown"),
    }
    return charts, Markup(render.live_json(steering))  # nosec B704


def _shared_axis(charts: list[ChartSeries], view: InvestigationPage) -> TimeAxis:
    stamps = [s.points[k].at for s in charts for k in (0, -1)]
    onset = view.excursion.onset
    stamps += [max(onset.earliest, min(stamps)), onset.latest]
    return axis_over(stamps, view.edition.zone, view.edition.as_of)


def _streams_sentence(view: InvestigationPage) -> str:
    moved = len(view.excursion.streams)
    quiet = sum(not series.affected for series in view.charts) + view.n_quiet_not_shown
    hidden = max(len([s for s in view.charts if s.points]) - _CHARTS, 0) + view.n_quiet_not_shown
    said = text(
        "investigation.moved",
        moved=plural("n.streams", moved, count=count(moved)),
        quiet=plural("n.streams", quiet, count=count(quiet)),
    )
    if hidden:
        said += " " + plural("investigation.hidden", hidden, count=count(hidden))
    return said


def _pictures(view: InvestigationPage) -> list[Figure]:
    pictures = []
    if view.wafer_map and view.wafer_map.sites:
        pictures.append(map_figure("wafer", view.wafer_map))
    if view.overlay and view.overlay.panels:
        pictures.append(overlay_figure("overlay", view.overlay))
    return pictures


# ---- why ----------------------------------------------------------------------------------------


def _why(view: InvestigationPage, clock: LocalClock) -> dict[str, Any]:
    """The cause in words, the picture of effects, the experiment and the events near the onset."""
    effects = None
    if view.effects:
        first = view.effects[0]
        label = text(
            "effect.label",
            name=level_words(first),
            size=quantity(
                first.effect, first.unit, half_width=half_width(first.low, first.high), sign=True
            ),
            n=len(view.effects),
        )
        narrow = figures.effect_by_level(view.effects, 120, 11)
        effects = drawn("effects", label, figures.effect_by_level(view.effects, 460), narrow)
    experiment = ""
    if view.experiment:
        names = text("join.or").join(level_words(level) for level in view.experiment.between)
        wafers = sum(arm.wafers for arm in view.experiment.arms)
        experiment = text("experiment.words", names=names, wafers=wafers)
        if view.experiment.power is not None:
            experiment += " " + text("experiment.power", power=percent(view.experiment.power))
    return {
        "cause": text("sentence.end", body=_capital(cause(view.excursion))),
        "effects_figure": effects,
        "experiment": experiment,
        "events": [event_words(event, clock) for event in view.excursion.events],
    }


# ---- what to do ---------------------------------------------------------------------------------


def _advices(view: InvestigationPage, clock: LocalClock) -> list[str]:
    advices = [forecast_sentence(view.excursion, clock)]
    if view.trim is not None:
        advices.append(trim_sentence(view.trim))
    if view.cd_change is not None:
        advices.append(_cd_sentence(view.cd_change))
    return [advice for advice in advices if advice]


def trim_sentence(trim: TrimAdvice) -> str:
    """The setting that returns the film to target, its interval and the allowed range."""
    half = half_width(trim.low, trim.high)
    words = text(
        "trim.words",
        parameter=shown(trim.parameter),
        present=quantity(trim.present, trim.unit),
        proposed=quantity(trim.proposed, trim.unit, half_width=half),
        interval=interval(trim.low, trim.high, trim.unit),
        allowed=text(
            "number.interval",
            low=number(trim.allowed_low),
            high=with_unit(number(trim.allowed_high), trim.unit),
        ),
    )
    return f"{words} {text('trim.allowed' if trim.allowed else 'trim.not_allowed')}"


def _cd_sentence(change: Magnitude) -> str:
    half = half_width(change.low, change.high)
    return text(
        "trim.cd",
        size=quantity(change.value, change.unit, half_width=half, sign=True),
        interval=interval(change.low, change.high, change.unit),
    )


def _past(view: InvestigationPage, clock: LocalClock) -> list[dict[str, str | None]]:
    return [
        {
            "words": text(
                "past.words",
                number=item.excursion,
                closed=clock.day(item.closed_at),
                pattern=text(f"pattern.{item.pattern}"),
                cause=shown(item.cause),
                who=shown(item.who),
                alike=""
                if item.similarity is None
                else text("past.alike", alike=index(item.similarity)),
            ),
            "href": link(item.href),
        }
        for item in view.past_causes
    ]

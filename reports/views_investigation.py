"""What the page of one excursion needs to know, read from the records."""

from __future__ import annotations

import csv
import io
import json
from collections.abc import Mapping
from dataclasses import replace
from datetime import datetime
from typing import Any

from sqlalchemy import select

from config.control_plan import Characteristic
from reports import model, model_pages
from reports.views import Reader, excursion_of, investigation_href
from reports.views_maps import map_of, overlay_of, sites_gone
from spc.records import actions, findings
from spc.records.contexts import ContextStore, chunks
from spc.records.findings import Excursion
from spc.records.stamps import from_us, to_us
from spc.records.tables import files, measurements, streams

_MOST_CHARTS = 16
_MOST_QUIET_CHARTS = 6
_MOST_BEHIND = 400
_MOST_PAST = 8
_REASONS = {
    "members-quiet": "partly-moved",
    "others-moved": "explained",
    "onset-differs": "moved-before",
    "less-likely": "explained",
}


def investigation_view(reader: Reader, known: Excursion) -> model_pages.InvestigationPage:
    """Everything known on one excursion."""
    document = reader.document(known)
    view = excursion_of(document)
    plans = [reader.bay.plan.named(s.characteristic) for s in view.streams]
    plan = next((p for p in plans if p is not None), None)
    affected = [c for s in view.streams if (c := reader.chart(s, view)) is not None]
    lead = reader.lead(view)
    affected.sort(key=lambda c: lead is None or not _is(c, lead))
    quiet, hidden = _quiet(reader, view, plan)
    return model_pages.InvestigationPage(
        edition=reader.edition,
        excursion=view,
        charts=(*affected[:_MOST_CHARTS], *quiet),
        n_quiet_not_shown=hidden,
        wafer_map=map_of(reader, view),
        overlay=overlay_of(reader, view),
        sites_gone=sites_gone(reader, view),
        effects=_effects(document, view),
        ruled_out=_ruled_out(document, view),
        experiment=_experiment(document, view),
        behind=_behind(reader, view),
        actions=_actions(reader, known),
        past_causes=_past(reader, known, view),
        action_plan=None if plan is None else reader.bay.action_plan(plan),
        owners=() if plan is None else plan.owners,
        trim=_trim(document, view, plan),
        cd_change=_cd_change(view, plan),
        merged_into=known.merged_into,
    )


def _is(chart: model.ChartSeries, stream: model.ExcursionStream) -> bool:
    return (
        chart.characteristic == stream.characteristic
        and chart.statistic == stream.statistic
        and dict(chart.context) == dict(stream.context)
    )


def _quiet(
    reader: Reader, view: model.Excursion, plan: Characteristic | None
) -> tuple[list[model.ChartSeries], int]:
    """Streams of the same characteristic that did not move, for comparison."""
    if plan is None or not view.streams:
        return [], 0
    statistic = view.streams[0].statistic
    moved = {
        json.dumps(dict(s.context), sort_keys=True, ensure_ascii=False)
        for s in view.streams
        if s.characteristic == plan.name
    }
    query = select(streams.c.context).where(streams.c.characteristic == plan.name)
    texts = sorted(set(reader.connection.scalars(query)) - moved)
    shown = []
    for text in texts[:_MOST_QUIET_CHARTS]:
        stream = model.ExcursionStream(plan.name, statistic, json.loads(text))
        chart = reader.chart(stream, view, affected=False)
        if chart is not None:
            shown.append(replace(chart, onset=view.onset))
    return shown, max(len(texts) - _MOST_QUIET_CHARTS, 0)


def _unit(view: model.Excursion) -> str:
    return view.magnitude.unit if view.magnitude else ""


def _effects(document: Mapping[str, Any], view: model.Excursion) -> tuple[model.LevelEffect, ...]:
    """Size by level: the suspects with two standard errors either way."""
    out = []
    for i, one in enumerate(document["suspects"]):
        error = one.get("effect_se")
        if one["effect"] is None or error is None:
            continue
        verdict = "suspect" if i == 0 else "moved"
        out.append(
            model.LevelEffect(
                one["factor"],
                one["level"],
                one["effect"],
                one["effect"] - 1.96 * error,
                one["effect"] + 1.96 * error,
                _unit(view),
                one.get("n_lots") or 0,
                verdict,  # type: ignore[arg-type]
            )
        )
    return tuple(out)


def _ruled_out(
    document: Mapping[str, Any], view: model.Excursion
) -> tuple[model_pages.RuledOut, ...]:
    first = view.suspects[0] if view.suspects else None
    by = None if first is None else model.Level(first.factor, first.level)
    return tuple(
        model_pages.RuledOut(
            factor=one["factor"],
            level=one["level"],
            reason=_REASONS.get(one["reason"], "explained"),  # type: ignore[arg-type]
            unit=_unit(view),
            n_lots=one["members"],
            explained_by=by,
        )
        for one in document.get("ruled_out", ())
    )


def _experiment(
    document: Mapping[str, Any], view: model.Excursion
) -> model_pages.SeparatingExperiment | None:
    """The cheapest run for the first pair of levels that the data cannot tell apart."""
    separations = document.get("separations", ())
    if not separations:
        return None
    one = separations[0]
    keep, instead, other = (
        model.Level(one[key]["factor"], one[key]["level"])
        for key in ("keep", "instead_of", "with_level")
    )
    lot = next((lot.lot for lot in view.lots_at_risk if not lot.measured), "")
    return model_pages.SeparatingExperiment(
        between=(keep, instead),
        arms=(
            model_pages.ExperimentArm(lot, 3, _route(keep, other), keep),
            model_pages.ExperimentArm(lot, 3, _route(keep, instead), instead),
        ),
    )


def _route(*levels: model.Level) -> dict[str, str]:
    route: dict[str, str] = {}
    for level in levels:
        factors = level.factor.split("+")
        names = level.level.split("+") if len(factors) > 1 else [level.level]
        route |= dict(zip(factors, names, strict=False))
    return route


def _behind(reader: Reader, view: model.Excursion) -> tuple[model_pages.BehindPoint, ...]:
    """Measurements of the affected lots, newest first, with the file and lines of each."""
    plans = [reader.bay.plan.named(s.characteristic) for s in view.streams]
    parameters = sorted({p for plan in plans if plan for p in plan.parameters})
    lots = sorted({lot.lot for lot in view.lots_at_risk if lot.measured})
    m, zone = measurements.c, reader.bay.settings.bay.zone
    rows: list[Any] = []
    for part in chunks(lots[-_MOST_BEHIND:]):
        query = (
            select(measurements, files.c.path)
            .join(files, files.c.id == m.file_id)
            .where(
                m.lot.in_(part),
                m.parameter.in_(parameters),
                m.measured_us <= to_us(reader.as_of),
            )
        )
        rows += reader.connection.execute(query).all()
    rows.sort(key=lambda r: (-r.measured_us, r.lot, r.wafer, r.parameter, r.id))
    contexts = ContextStore(reader.connection)
    contexts.load({row.context_id for row in rows})
    seen: set[tuple[str, ...]] = set()
    out = []
    for row in rows[:_MOST_BEHIND]:
        columns = dict(contexts.columns(row.context_id))
        key = (row.parameter, row.layer, row.lot, row.wafer)
        gauge = columns.pop("gauge", None)
        at = row.measured_us if row.processed_us is None else row.processed_us
        out.append(
            model_pages.BehindPoint(
                at=from_us(at, zone),
                measured_at=from_us(row.measured_us, zone),
                lot=row.lot,
                wafer=row.wafer,
                context={k: columns[k] for k in ("tool", "module", "layer") if k in columns},
                mean=row.mean,
                unit=row.unit,
                n_sites=row.n,
                gauge=gauge,
                file=row.path,
                first_line=row.first_line,
                last_line=row.last_line,
                superseded=key in seen,
            )
        )
        seen.add(key)
    return tuple(out)


def _actions(reader: Reader, known: Excursion) -> tuple[model_pages.HandAction, ...]:
    zone = reader.bay.settings.bay.zone
    out = []
    for row in actions.of(reader.connection, findings.subject(known.id)):
        detail = json.loads(row.detail)
        said = [row.text, *(f"{k}: {v}" for k, v in sorted(detail.items()) if v)]
        text = "; ".join(part for part in said if part)
        out.append(model_pages.HandAction(from_us(row.at_us, zone), row.who, row.action, text))
    return tuple(out)


def _past(
    reader: Reader, known: Excursion, view: model.Excursion
) -> tuple[model_pages.PastCause, ...]:
    """Closed excursions with a cause, those most like this one first."""
    zone = reader.bay.settings.bay.zone
    found = []
    for one in findings.listed(reader.connection, statuses=("closed",), merged=True):
        if one.id == known.id:
            continue
        closings = [
            row
            for row in actions.of(reader.connection, findings.subject(one.id))
            if row.action == "close"
        ]
        cause = json.loads(closings[-1].detail).get("cause", "") if closings else ""
        if not cause:
            continue
        other = excursion_of(reader.document(one))
        alike = _alike(view, other)
        if alike > 0:
            found.append(
                model_pages.PastCause(
                    excursion=one.id,
                    closed_at=from_us(closings[-1].at_us, zone),
                    cause=cause,
                    who=closings[-1].who,
                    pattern=other.pattern,
                    similarity=alike,
                    href=investigation_href(one.id).rpartition("/")[2],
                )
            )
    found.sort(key=lambda p: (-(p.similarity or 0.0), -p.excursion))
    return tuple(found[:_MOST_PAST])


def _alike(one: model.Excursion, other: model.Excursion) -> float:
    """Share of what two excursions have in common: pattern, characteristics, best suspects."""

    def traits(view: model.Excursion) -> set[tuple[str, str]]:
        out: set[tuple[str, str]] = {("pattern", view.pattern)}
        out |= {("characteristic", s.characteristic) for s in view.streams}
        if view.suspects:
            first = view.suspects[0]
            out |= {("factor", first.factor), ("level", f"{first.factor}={first.level}")}
        return out

    mine, theirs = traits(one), traits(other)
    return len(mine & theirs) / len(mine | theirs)


def _trim(
    document: Mapping[str, Any], view: model.Excursion, plan: Characteristic | None
) -> model_pages.TrimAdvice | None:
    """The spin speed that would bring a moved film back to target."""
    if plan is None or plan.spin is None or plan.target is None or view.magnitude is None:
        return None
    lead = view.streams[0].statistic if view.streams else ""
    if view.pattern not in ("shift", "drift") or lead != "mean":
        return None
    from spc.stats.film import SpinLaw, spin_trim

    size, spin = view.magnitude, plan.spin
    error = 0.0 if size.low is None or size.high is None else (size.high - size.low) / 3.92
    film = plan.target + size.value
    found = spin_trim(
        film,
        error,
        plan.target,
        spin.speed_rpm,
        law=SpinLaw(spin.exponent, spin.exponent_sd),
        allowed_rpm=(spin.lowest_rpm, spin.highest_rpm),
    )
    return model_pages.TrimAdvice(
        parameter="spin speed",
        unit="rpm",
        present=spin.speed_rpm,
        proposed=float(found.rpm),
        low=float(found.rpm_low),
        high=float(found.rpm_high),
        allowed_low=spin.lowest_rpm,
        allowed_high=spin.highest_rpm,
    )


def _cd_change(view: model.Excursion, plan: Characteristic | None) -> model.Magnitude | None:
    """The largest CD change that the thickness change can make on the swing curve."""
    if plan is None or plan.film is None or view.magnitude is None or plan.is_overlay:
        return None
    if plan.film.swing_amplitude_nm is None or view.pattern not in ("shift", "drift", "spike"):
        return None
    from config.values import unit_factor
    from spc.stats.film import Swing, swing_period, worst_cd_change

    factor = unit_factor(view.magnitude.unit, "nm")
    if factor is None:
        return None
    period = float(swing_period(plan.film.wavelength_nm, plan.film.refractive_index))
    swing = Swing(period, plan.film.swing_amplitude_nm)
    size = view.magnitude
    value = float(worst_cd_change(swing, size.value * factor))
    ends = [
        float(worst_cd_change(swing, end * factor))
        for end in (size.low, size.high)
        if end is not None
    ]
    return model.Magnitude(value, min(ends, default=None), max(ends, default=None), "nm", None)


def hold_list(view: model.Excursion) -> str:
    """The lots at risk as CSV, safe to open in a spreadsheet."""
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\n")
    names = ["lot", "wafers", "measured", "processed_at", "predicted", "unit", "p_out_of_spec"]
    writer.writerow(names)
    for lot in view.lots_at_risk:
        writer.writerow(
            [
                _safe(lot.lot),
                _safe(" ".join(lot.wafers)),
                "yes" if lot.measured else "no",
                _iso(lot.processed_at),
                "" if lot.predicted is None else f"{lot.predicted:.6g}",
                lot.unit,
                "" if lot.p_out_of_spec is None else f"{lot.p_out_of_spec:.3g}",
            ]
        )
    return text.getvalue()


def _iso(stamp: datetime | None) -> str:
    return "" if stamp is None else stamp.isoformat()


def _safe(cell: str) -> str:
    """Text that a spreadsheet would run as a formula gets an apostrophe in front."""
    return "'" + cell if cell[:1] in ("=", "+", "-", "@", "\t", "\r") else cell

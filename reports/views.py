"""From the records to what a page needs to know: excursions and their charts."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from datetime import datetime
from typing import Any

from sqlalchemy import Connection, select

from config.control_plan import Characteristic
from config.load import Bay
from reports import model
from spc.records import findings, limits, plotted
from spc.records.findings import Excursion
from spc.records.stamps import from_us, iso, to_us
from spc.records.tables import files, measurements, streams

_DAYS_BEFORE_ONSET = 21
_DAY_US = 86_400_000_000


def excursion_of(document: Mapping[str, Any]) -> model.Excursion:
    """The view of an excursion from its JSON (as `excursions --json` prints it)."""
    onset, size, forecast = document["onset"], document["magnitude"], document["forecast"]
    unit = size["unit"] or ""
    return model.Excursion(
        id=document["id"],
        status=document["status"],
        tier=document["tier"],
        opened_at=_stamp(document["opened_at"]),
        updated_at=_stamp(document["updated_at"]),
        pattern=document["pattern"],
        streams=tuple(_stream(one) for one in document["streams"]),
        onset=model.Onset(
            _stamp(onset["estimate"]),
            _stamp(onset["earliest"]),
            _stamp(onset["latest"]),
            onset["lot"],
        ),
        magnitude=None
        if size["value"] is None
        else model.Magnitude(size["value"], size["low"], size["high"], unit, size["sigmas"]),
        suspects=tuple(_suspect(one) for one in document["suspects"]),
        lots_at_risk=tuple(_lot(one) for one in document["lots_at_risk"]),
        events=tuple(_event(one) for one in document["events"]),
        forecast=None if forecast is None else _forecast(forecast),
        p_chance=document.get("p_chance"),
        end=_maybe(document.get("end")),
    )


def _stamp(text: str) -> datetime:
    return datetime.fromisoformat(text)


def _maybe(text: str | None) -> datetime | None:
    return None if text is None else datetime.fromisoformat(text)


def _stream(one: Mapping[str, Any]) -> model.ExcursionStream:
    return model.ExcursionStream(
        one["characteristic"],
        one["statistic"],
        one["context"],
        _maybe(one["first_signal_at"]),
        tuple(one["rules"]),
    )


def _suspect(one: Mapping[str, Any]) -> model.Suspect:
    aliases = tuple(model.Level(a["factor"], a["level"]) for a in one["aliased_with"])
    return model.Suspect(one["factor"], one["level"], one["effect"], one["p_adjusted"], aliases)


def _lot(one: Mapping[str, Any]) -> model.LotAtRisk:
    return model.LotAtRisk(
        one["lot"],
        tuple(one["wafers"]),
        one["measured"],
        _maybe(one["processed_at"]),
        one["p_out_of_spec"],
        one.get("predicted"),
        one.get("unit") or "",
    )


def _event(one: Mapping[str, Any]) -> model.BayEvent:
    return model.BayEvent(_stamp(one["at"]), one["kind"], one["tool"], one["module"], one["text"])


def _forecast(one: Mapping[str, Any]) -> model.Forecast:
    return model.Forecast(
        one["spec"],
        _stamp(one["expected"]),
        _maybe(one["earliest"]),
        _maybe(one["latest"]),
        one.get("cpk_now"),
        one.get("cpk_then"),
    )


@dataclass(frozen=True)
class Reader:
    """Reads views of one bay as of a clock, over one connection."""

    connection: Connection
    bay: Bay
    as_of: datetime
    _ids: dict[tuple[str, str], int] = field(default_factory=dict)

    @property
    def edition(self) -> model.Edition:
        """Which bay and which pass the pages speak of."""
        settings = self.bay.settings.bay
        return model.Edition(settings.name, settings.zone, self.as_of)

    def document(self, excursion: Excursion) -> dict[str, Any]:
        """JSON of an excursion in the bay's zone."""
        return findings.as_contract(excursion, self.bay.settings.bay.zone)

    def card(self, excursion: Excursion, change: str) -> model.ExcursionCard:
        """An excursion, with its pictures if it opened or moved on tonight."""
        view = excursion_of(self.document(excursion))
        plans = [self.bay.plan.named(s.characteristic) for s in view.streams]
        known = [plan for plan in plans if plan is not None]
        owners = dict.fromkeys(owner for plan in known for owner in plan.owners)
        # What is only watched is listed briefly: no picture, no plan. What has not changed is one
        # line of the page, so that a quiet night is not slowed down by what it draws from.
        act = view.tier == "act"
        draw = act and change != "unchanged"
        lead = self.lead(view) if draw else None
        return model.ExcursionCard(
            excursion=view,
            chart=None if lead is None else self.chart(lead, view),
            wafer_map=self._map(view) if draw else None,
            action_plan=self.bay.action_plan(known[0]) if act and known else None,
            owners=tuple(owners),
            href=investigation_href(excursion.id) if excursion.tier == "act" else None,
            change=change,  # type: ignore[arg-type]
        )

    def _map(self, view: model.Excursion) -> model.WaferMapPicture | None:
        if view.pattern not in ("map", "spread"):
            return None
        from reports.views_maps import map_of

        return map_of(self, view)

    def lead(self, view: model.Excursion) -> model.ExcursionStream | None:
        """The stream that shows an excursion best: with the most rules, a mean before others."""
        if not view.streams:
            return None

        def weight(stream: model.ExcursionStream) -> tuple[bool, int, bool]:
            wanted = {"spread": "within-wafer", "map": "map-distance"}.get(view.pattern, "mean")
            return (stream.statistic == wanted, len(stream.rules), stream.statistic == "mean")

        return max(view.streams, key=weight)

    def stream_id(self, characteristic: str, context: Mapping[str, str]) -> int | None:
        """Id of a stream."""
        key = (characteristic, json.dumps(dict(context), sort_keys=True, ensure_ascii=False))
        if key not in self._ids:
            query = select(streams.c.id).where(
                streams.c.characteristic == key[0], streams.c.context == key[1]
            )
            number = self.connection.scalar(query)
            if number is None:
                return None
            self._ids[key] = number
        return self._ids[key]

    def chart(
        self, stream: model.ExcursionStream, view: model.Excursion, *, affected: bool = True
    ) -> model.ChartSeries | None:
        """The points of a stream about the onset of an excursion."""
        plan = self.bay.plan.named(stream.characteristic)
        number = self.stream_id(stream.characteristic, stream.context)
        if plan is None or number is None:
            return None
        since = to_us(view.onset.earliest) - _DAYS_BEFORE_ONSET * _DAY_US
        rows = plotted.rows(
            self.connection,
            plotted.Wanted(plan.name, stream.statistic, number, since, to_us(self.as_of)),
        )
        if not rows:
            return None
        spec = plan if stream.statistic == "mean" else None
        return model.ChartSeries(
            characteristic=plan.name,
            statistic=stream.statistic,
            context=stream.context,
            unit=plan.unit_of(stream.statistic),
            points=self._points(rows, plan),
            target=spec.target if spec else None,
            lower_spec=spec.lower_spec if spec else None,
            upper_spec=spec.upper_spec if spec else None,
            onset=view.onset if affected else None,
            events=view.events,
            limit_sets=self._limit_sets(number),
            forecast=view.forecast if affected else None,
            affected=affected,
        )

    def _points(self, rows: Sequence[Any], plan: Characteristic) -> tuple[model.ChartPoint, ...]:
        zone = self.bay.settings.bay.zone
        where = self._files(sorted({row.lot for row in rows}), plan)
        return tuple(
            model.ChartPoint(
                at=from_us(row.at_us, zone),
                lot=row.lot,
                value=row.value,
                n_wafers=row.n_wafers,
                n_sites=row.n_sites,
                wafer=row.wafer or None,
                center=row.center,
                lower_limit=row.lower_limit,
                upper_limit=row.upper_limit,
                sigma=row.sigma,
                phase=row.phase,
                rules=tuple(row.rules.split(",")) if row.rules else (),
                **where.get(row.lot, {}),
            )
            for row in rows
        )

    def _files(self, lots: list[str], plan: Characteristic) -> dict[str, dict[str, Any]]:
        """The newest file behind each lot, with its lines."""
        from spc.records.contexts import chunks

        m = measurements.c
        found: dict[str, dict[str, Any]] = {}
        for part in chunks(lots):
            query = (
                select(m.lot, files.c.path, m.first_line, m.last_line)
                .join(files, files.c.id == m.file_id)
                .where(m.lot.in_(part), m.parameter.in_(plan.parameters))
                .order_by(m.measured_us, m.id)
            )
            for lot, path, first, last in self.connection.execute(query):
                found[lot] = {"file": path, "first_line": first, "last_line": last}
        return found

    def _limit_sets(self, stream_id: int) -> tuple[model.LimitSet, ...]:
        rows = limits.of_streams(self.connection, [stream_id], ("automatic", "approved"))
        zone = self.bay.settings.bay.zone
        return tuple(
            model.LimitSet(
                from_us(row.from_us, zone), row.status, row.decided_by or row.made_by, row.reason
            )
            for row in rows
        )


def investigation_href(number: int) -> str:
    """Where the page of an excursion stands below the reports folder."""
    return f"excursions/excursion-{number}.html"


def night_href(as_of: datetime, bay: Bay) -> str:
    """Where the page of a pass stands below the reports folder.

    In the hour that happens twice, the second one is marked: it does not write over the first.
    """
    local = as_of.astimezone(bay.settings.bay.zone)
    return f"nights/night-{local:%Y-%m-%d-%H%M}{'-again' if local.fold else ''}.html"


def stamp_text(stamp_us: int | None, bay: Bay) -> str | None:
    """ISO stamp in the bay's zone."""
    return iso(stamp_us, bay.settings.bay.zone)

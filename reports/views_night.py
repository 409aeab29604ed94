"""What the night page and the mail need to know, read from the records of a pass."""

from __future__ import annotations

from collections.abc import Mapping
from datetime import timedelta
from typing import Any

from sqlalchemy import func, select

from reports import model
from reports.views import Reader, night_href
from spc.records import findings
from spc.records.stamps import to_us
from spc.records.tables import files, points, rejects

_MOST_NOTICES = 40


def night_view(
    reader: Reader, document: Mapping[str, Any], late: tuple[model.FeedNotice, ...] = ()
) -> model.NightPage:
    """The night of a pass.

    Parameters
    ----------
    document : what the pass found, as `nightly --json` prints it.
    late : feeds that should have brought something by now.
    """
    changed = findings.changed_at(reader.connection, reader.as_of)
    cards: list[model.ExcursionCard] = []
    standing: list[model.ExcursionCard] = []
    for one in findings.listed(
        reader.connection, statuses=("open", "contained"), until=reader.as_of
    ):
        change = _change(one.id, changed)
        card = reader.card(one, change)
        (standing if change == "unchanged" else cards).append(card)
    mail = reader.bay.settings.mail
    return model.NightPage(
        edition=reader.edition,
        cards=tuple(cards),
        standing=tuple(standing),
        signals=_signals(reader, document),
        ingest=_account(reader, document),
        quiet=_quiet(reader, document, [c.excursion for c in (*cards, *standing)]),
        feeds=(*late, *_refused(reader)),
        href=night_href(reader.as_of, reader.bay),
        page_url=mail.page_url,
    )


def _change(number: int, changed: Mapping[str, list[int]]) -> str:
    if number in changed["opened"]:
        return "opened"
    return "updated" if number in changed["updated"] else "unchanged"


def _signals(reader: Reader, document: Mapping[str, Any]) -> model.SignalAccount:
    return model.SignalAccount(
        streams=document["streams"],
        points_evaluated=document["points_evaluated"],
        signals=document["signals"],
        expected_false_signals=document["expected_false_signals"],
        false_excursions_per_night=reader.bay.settings.nightly.false_excursions_per_night,
        expected_false_excursions=document.get("expected_false_excursions"),
    )


def _account(reader: Reader, document: Mapping[str, Any]) -> model.IngestAccount:
    drops, readings = document["drops"], document["readings"]
    return model.IngestAccount(
        files_loaded=drops["loaded"],
        files_duplicate=drops["duplicate"],
        files_quarantined=drops["quarantined"],
        files_waiting=drops["waiting"],
        readings_loaded=readings["loaded"],
        readings_duplicate=readings["duplicate"],
        readings_superseded=readings["superseded"],
        readings_rejected=readings["rejected"],
    )


def _quiet(
    reader: Reader, document: Mapping[str, Any], excursions: list[model.Excursion]
) -> model.QuietStreams:
    moved = {
        (stream.characteristic, tuple(sorted(stream.context.items())))
        for excursion in excursions
        for stream in excursion.streams
    }
    connection, now = reader.connection, to_us(reader.as_of)
    without = connection.scalar(
        select(func.count(func.distinct(points.c.stream_id))).where(points.c.baseline_id.is_(None))
    )
    day = now - timedelta(days=1) // timedelta(microseconds=1)
    recent, n_points = connection.execute(
        select(func.count(func.distinct(points.c.stream_id)), func.count()).where(
            points.c.measured_us > day, points.c.measured_us <= now
        )
    ).one()
    total = document["streams"]
    return model.QuietStreams(
        n_streams=max(total - len(moved), 0),
        n_points=int(n_points),
        n_without_limits=int(without or 0),
        n_without_points=max(total - int(recent), 0),
    )


def _refused(reader: Reader) -> tuple[model.FeedNotice, ...]:
    """Files of this pass that were refused whole, or lost rows on their way in."""
    connection, now = reader.connection, to_us(reader.as_of)
    notices = []
    rows = connection.execute(
        select(files)
        .where(files.c.loaded_us == now)
        .where((files.c.outcome == "quarantined") | (files.c.rejected > 0))
        .order_by(files.c.path)
        .limit(_MOST_NOTICES)
    ).all()
    for row in rows:
        first = connection.execute(
            select(rejects)
            .where(rejects.c.file_id == row.id, rejects.c.severity == "rejected")
            .order_by(rejects.c.line, rejects.c.id)
            .limit(1)
        ).one_or_none()
        whole = row.outcome == "quarantined"
        notices.append(
            model.FeedNotice(
                name=row.path,
                kind="quarantined" if whole else "rejected",
                reason=(row.reason if whole or first is None else first.reason) or "",
                rows=row.rows if whole else row.rejected,
                line=None if first is None else first.line,
                column=None if first is None else first.column,
                value=None if first is None else first.value,
            )
        )
    return tuple(notices)

"""Writing pages: the night with its mails, an investigation, the index, a run-length figure."""

from __future__ import annotations

import os
from contextlib import suppress
from dataclasses import dataclass
from datetime import timedelta
from pathlib import Path
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from datetime import datetime

    from sqlalchemy import Connection

    from reports.model import FeedNotice
    from reports.outbox import Outgoing
    from reports.views import Reader
    from service.context import Progress, Session
    from spc.stats.run_length import DesignRow


@dataclass(frozen=True)
class NightReport:
    """The written page of a night, its mails, and the night in one sentence."""

    file: Path
    text: str
    messages: list[Outgoing]


def write_night(
    connection: Connection, session: Session, as_of: datetime, document: dict[str, Any]
) -> NightReport:
    """Write the page of a pass and those of what is to act on; make the mails."""
    from email.policy import SMTP

    from reports.message import MailOptions, messages
    from reports.night import night_page
    from reports.outbox import Outgoing
    from reports.sentences import night_sentence
    from reports.views import Reader
    from reports.views_night import night_view

    reader = Reader(connection, session.bay, as_of)
    view = night_view(reader, document, _late_feeds(connection, session, as_of))
    folder = session.bay.path(session.bay.settings.nightly.reports)
    assert view.href is not None  # a night has a page
    file = folder / view.href
    document["sentence"] = night_sentence(view)
    write_whole(file, night_page(view))
    _write_investigations(reader, folder, [c.excursion.id for c in view.cards if c.href])
    mail = session.bay.settings.mail
    made = messages(view, MailOptions(sender=mail.sender, shift_list=mail.to))
    outgoing = [
        Outgoing(m["Message-ID"], str(m["To"]), str(m["Subject"]), m.as_bytes(policy=SMTP))
        for m in made
    ]
    return NightReport(file.absolute(), f"{night_sentence(view)}\nPage: {file}", outgoing)


def _write_investigations(reader: Reader, folder: Path, numbers: list[int]) -> None:
    """Write the pages of what is to act on tonight; a quiet night does not load what draws them."""
    if not numbers:
        return
    from reports.investigation import investigation_page
    from reports.views import investigation_href
    from reports.views_investigation import investigation_view
    from spc.records import findings

    for number in numbers:
        view = investigation_view(reader, findings.one(reader.connection, number))
        write_whole(folder / investigation_href(number), investigation_page(view))


def _late_feeds(
    connection: Connection, session: Session, as_of: datetime
) -> tuple[FeedNotice, ...]:
    from ingest.load import late_feeds
    from reports.model import FeedNotice
    from spc.records.stamps import from_us, to_us

    zone = session.bay.settings.bay.zone
    return tuple(
        FeedNotice(
            name=feed.name,
            kind="late",
            last_seen=None if feed.last_us is None else from_us(feed.last_us, zone),
            expected_every=_hours(feed.expected_every_seconds),
        )
        for feed in late_feeds(connection, session.bay, to_us(as_of))
    )


def _hours(seconds: float) -> str:
    hours = timedelta(seconds=seconds) / timedelta(hours=1)
    return f"{hours:g} h"


def write_investigation(
    session: Session, number: int, lots_csv: Path | None, progress: Progress
) -> dict[str, Any]:
    """Write the page of an excursion; returns its JSON with `page` and `sentence`.

    Raises spc.records.findings.UnknownExcursionError.
    """
    from reports.investigation import investigation_page
    from reports.numbers import LocalClock
    from reports.sentences import sentence
    from reports.views import Reader, investigation_href
    from reports.views_investigation import hold_list, investigation_view
    from spc.records import findings
    from spc.records import passes as pass_records
    from spc.records.sessions import reading
    from spc.records.stamps import from_us

    bay = session.bay
    zone = bay.settings.bay.zone
    with reading(session.engine) as connection:
        known = findings.one(connection, number)
        last_us = pass_records.newest(connection) or known.updated_us
        reader = Reader(connection, bay, from_us(max(last_us, known.updated_us), zone))
        progress("reading", 0, 2)
        view = investigation_view(reader, known)
        document = reader.document(known)
        document["actions"] = findings.actions_on(connection, number, zone)
    progress("drawing", 1, 2)
    file = bay.path(bay.settings.nightly.reports) / investigation_href(number)
    write_whole(file, investigation_page(view))
    if lots_csv is not None:
        write_whole(lots_csv, hold_list(view.excursion))
    clock = LocalClock(zone, reader.as_of)
    return {
        **document,
        "sentence": sentence(view.excursion, clock),
        "page": str(file.absolute()),
    }


def write_index(session: Session, as_of: datetime) -> Path:
    """Write the front page of the reports folder."""
    from reports.index import index_page
    from reports.views import Reader
    from reports.views_index import index_view
    from spc.records.sessions import reading

    folder = session.bay.path(session.bay.settings.nightly.reports)
    with reading(session.engine) as connection:
        view = index_view(Reader(connection, session.bay, as_of), folder)
    file = folder / "index.html"
    write_whole(file, index_page(view))
    return file


def draw_run_lengths(rows: tuple[DesignRow, ...], file: Path) -> None:
    """Draw average run lengths over shifts, design by design (.png or .svg).

    Raises CommandError for another kind of file.
    """
    from reports.figures import run_length
    from reports.model import RunLength
    from reports.render import png, svg
    from service.context import WRONG_USAGE, CommandError

    views = tuple(RunLength(r.design, r.shift, r.arl, r.sdrl, r.median) for r in rows)
    spec = run_length(views)
    if file.suffix == ".png":
        file.write_bytes(png(spec))
    elif file.suffix == ".svg":
        file.write_text(svg(spec, "run-lengths", "average run length against shift"), "utf-8")
    else:
        raise CommandError(f"--figure {file}: name a .png or .svg file", WRONG_USAGE)


def write_whole(file: Path, text: str) -> None:
    """Write a file so that a reader finds the old one or the new one, never a part.

    Raises OSError, with the file named.
    """
    part = file.with_name(f".{file.name}.part")
    try:
        file.parent.mkdir(parents=True, exist_ok=True)
        with part.open("w", encoding="utf-8", newline="\n") as stream:
            stream.write(text)
            stream.flush()
            os.fsync(stream.fileno())
        part.replace(file)
    except OSError as error:
        with suppress(OSError):
            part.unlink()  # on a full disk half a page is in the way
        if error.filename is not None:
            raise
        raise OSError(error.errno, error.strerror, str(file)) from error

"""Whether the service is well, for a person and for a monitor."""

from __future__ import annotations

import os
import shutil
from dataclasses import dataclass
from datetime import timedelta
from pathlib import Path
from typing import TYPE_CHECKING, Any

from service import clock

if TYPE_CHECKING:
    from service.context import Session

_LITTLE_SPACE = 512 * 1024 * 1024


@dataclass(frozen=True)
class Finding:
    """One thing that was looked at."""

    what: str
    well: bool
    text: str
    detail: dict[str, Any]


@dataclass(frozen=True)
class Health:
    """All that was looked at; well when everything is."""

    findings: tuple[Finding, ...]

    @property
    def well(self) -> bool:
        """Whether nothing needs a hand."""
        return all(f.well for f in self.findings)

    def as_json(self) -> dict[str, Any]:
        """`{well, checks: [{what, well, text, …}]}`."""
        checks = [
            {"what": f.what, "well": f.well, "text": f.text, **f.detail} for f in self.findings
        ]
        return {"well": self.well, "checks": checks}

    def lines(self) -> list[str]:
        """One line a check; the word says what a colour could not."""
        head = "The service is well." if self.well else "The service needs a hand."
        width = max(len(f.what) for f in self.findings)
        return [head] + [
            f"{'well' if f.well else 'LOOK'}  {f.what:{width}}  {f.text}" for f in self.findings
        ]


def examine(session: Session) -> Health:
    """Look at everything. Reading only; a pass that runs is not disturbed."""
    return Health(
        (
            _schema(session),
            _last_night(session),
            _lock(session),
            _mail(session),
            _feeds(session),
            *_disk(session),
            _retention(session),
        )
    )


def _schema(session: Session) -> Finding:
    from spc.records.schema import current_revision, latest_revision

    here, wanted = current_revision(session.engine), latest_revision()
    return Finding("schema", here == wanted, f"version {here}", {"version": here})


def _last_night(session: Session) -> Finding:
    from service.night import last_pass

    last, now = last_pass(session), clock.now()
    if last is None:
        return Finding("last night", False, "no pass has run yet", {"as_of": None})
    local = last.astimezone(session.bay.settings.bay.zone)
    late = now - last > timedelta(hours=25)
    text = f"{local:%Y-%m-%d %H:%M %Z}" + (", more than a day ago" if late else "")
    return Finding("last night", not late, text, {"as_of": local.isoformat()})


def _lock(session: Session) -> Finding:
    from service.lock import BusyError, pass_lock
    from spc.records import passes
    from spc.records.sessions import reading
    from spc.records.stamps import from_us

    try:
        with pass_lock(session.engine, 0), reading(session.engine) as connection:
            left = passes.left_over(connection)
    except BusyError:
        return Finding("lock", True, "a pass is running", {"held": True, "unfinished": []})
    zone = session.bay.settings.bay.zone
    stamps = [from_us(one.as_of_us, zone) for one in left]
    text = "free"
    if stamps:
        text += f"; the pass of {stamps[0]:%Y-%m-%d %H:%M} was not finished, the next completes it"
    unfinished = [stamp.isoformat() for stamp in stamps]
    return Finding("lock", not left, text, {"held": False, "unfinished": unfinished})


def _mail(session: Session) -> Finding:
    from reports.outbox import states, trouble
    from spc.records.sessions import reading

    with reading(session.engine) as connection:
        counts, error = states(connection), trouble(connection)
    waiting = counts.get("queued", 0) + counts.get("sending", 0)
    failed = counts.get("failed", 0)
    text = f"{counts.get('sent', 0)} sent, {waiting} waiting, {failed} given up"
    if error:
        text += f"; last trouble: {error}"
    well = not failed and not error
    return Finding("mail", well, text, {"waiting": waiting, "failed": failed, "error": error})


def _feeds(session: Session) -> Finding:
    from ingest.load import late_feeds
    from spc.records.sessions import reading
    from spc.records.stamps import to_us

    with reading(session.engine) as connection:
        late = late_feeds(connection, session.bay, to_us(clock.now()))
    names = [feed.name for feed in late]
    text = f"late: {', '.join(names)}" if names else "none is late"
    return Finding("feeds", not names, text, {"late": names})


def _retention(session: Session) -> Finding:
    """What is kept. Not well when nights fall behind, or have no right to move drops."""
    from service.retention import sentences, state

    found = state(session)
    text, well = "; ".join(sentences(found)), True
    if found["drops"]["overdue"] or found["sites"]["overdue"]:
        text, well = text + "; the nights fall behind: `yellowbay retention --run`", False
    folder = session.bay.path(session.bay.settings.drops.folder)
    moves = found["drops"]["after_days"] is not None
    if moves and folder.is_dir() and not os.access(folder, os.W_OK):
        text, well = text + f"; {folder} cannot be written, so drops cannot be moved", False
    return Finding("retention", well, text, found)


def _disk(session: Session) -> list[Finding]:
    bay = session.bay
    settings = bay.settings
    folders = {
        "drops": bay.path(settings.drops.folder),
        "reports": bay.path(settings.nightly.reports),
    }
    if bay.database_url.startswith("sqlite:///"):
        folders["database"] = Path(bay.database_url.removeprefix("sqlite:///")).parent
    if settings.retention.archive_drops_after_days is not None:
        folders["archive"] = bay.path(settings.retention.archive)
    if settings.mail.host is None:
        folders["mail"] = bay.path(settings.mail.folder)
    return [_folder(name, folder) for name, folder in folders.items()]


def _folder(name: str, folder: Path) -> Finding:
    there = folder
    while not there.exists() and there != there.parent:
        there = there.parent
    free = shutil.disk_usage(there).free
    detail = {"folder": str(folder), "free_bytes": free}
    if name == "drops" and not folder.is_dir():
        return Finding(name, False, f"{folder} is not there", detail)
    if name != "drops" and not os.access(there, os.W_OK):
        return Finding(name, False, f"{folder} cannot be written", detail)
    text = f"{free / 1e9:.1f} GB free"
    return Finding(name, free >= _LITTLE_SPACE, text, detail)

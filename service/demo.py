"""`yellowbay demo`: an invented bay, and the whole job on it."""

from __future__ import annotations

import json
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any

from service.context import CommandError, Progress, Session

if TYPE_CHECKING:
    from fixtures.demo import Demo

_MARK = ".yellowbay-demo"


@dataclass(frozen=True)
class DemoResult:
    """What the demo did: its last night, what was found, and where to look."""

    text: str
    document: dict[str, Any]

    def as_json(self) -> dict[str, Any]:
        """`{folder, config, nights, found, report, last_night}`."""
        return self.document


def run_demo(folder: Path, progress: Progress) -> DemoResult:
    """Write the demo bay to a folder and run its last nights, one pass each.

    Raises
    ------
    CommandError
        When the folder holds something that no demo wrote.
    """
    from config.load import load_bay
    from fixtures.demo import write_demo
    from service.night import run_night

    _make_room(folder)
    progress("writing the bay", 0, 1)
    demo = write_demo(folder)
    session = Session(load_bay(demo.config))
    night = None
    # The last night alone, on all weeks at once: every fault is still to be seen from there.
    passes = [demo.nights[-1]]
    for number, as_of in enumerate(passes):
        progress(f"night {as_of:%d %b}", number, len(passes))
        night = run_night(session, as_of)
    assert night is not None  # a demo has nights
    return _result(session, demo, passes, night.as_json())


def _make_room(folder: Path) -> None:
    """Take an earlier demo away; refuse to touch anything else."""
    import shutil

    mark = folder / _MARK
    if folder.exists() and any(folder.iterdir()) and not mark.exists():
        raise CommandError(f"{folder} is not empty and no demo wrote it; name a new folder")
    if mark.exists():
        shutil.rmtree(folder)
    folder.mkdir(parents=True, exist_ok=True)
    mark.write_text("written by `yellowbay demo`; the next demo may delete this folder\n", "utf-8")


def _result(
    session: Session, demo: Demo, passes: list[datetime], last_night: dict[str, Any]
) -> DemoResult:
    from reports.numbers import LocalClock
    from reports.views_index import excursion_line
    from spc.records import findings
    from spc.records.sessions import reading

    zone = session.bay.settings.bay.zone
    with reading(session.engine) as connection:
        found = findings.listed(connection, statuses=("open", "contained"))
    documents = [findings.as_contract(e, zone) for e in found]
    documents.sort(key=lambda d: (d["tier"] != "act", d["id"]))
    clock = LocalClock(zone, demo.nights[-1])
    act = [d for d in documents if d["tier"] == "act"]
    lines = [
        f"An invented bay was written to {demo.config.parent} and its last night was run on "
        f"{demo.readings:,} site readings of six weeks.".replace(",", "\u2009"),
        f"Found: {len(act)} to act on, {len(documents) - len(act)} to watch.",
        "",
        *(f"  {excursion_line(d, clock)}" for d in act),
        "",
        f"The morning page: {last_night['report']}",
        f"The mail:         {session.bay.path(session.bay.settings.mail.folder)}",
        f"Look closer:      yellowbay investigate {act[0]['id'] if act else 1} "
        f"--config {demo.config}",
    ]
    document = {
        "folder": str(demo.config.parent),
        "config": str(demo.config),
        "nights": [_iso(n, session) for n in passes],
        "found": documents,
        "report": last_night["report"],
        "last_night": last_night,
    }
    return DemoResult("\n".join(lines), json.loads(json.dumps(document)))


def _iso(stamp: datetime, session: Session) -> str:
    return stamp.astimezone(session.bay.settings.bay.zone).isoformat()

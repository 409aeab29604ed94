"""Killing a pass at a chosen moment, and counting how many moments it has.

A moment is a statement sent to the database, a commit, a file opened for writing, moved into place
or removed, or a command of the mail dialogue: between any two of them a kill finds the same state
on disk. Choosing moments by number hits the short ones (a commit, a rename) as often as the long
ones, which a timer hardly ever would. The timer is used as well (`test_crash`, slow).
"""

from __future__ import annotations

import importlib
import multiprocessing
import os
import signal
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

from service.context import Session
from tests.robustness.smallbay import SmallBay, fork_and_kill, night

HEAVY = (
    "pandas",
    "scipy.stats",
    "altair",
    "vl_convert",
    "css_inline",
    "alembic.script",
    "service.night",
    "service.pages",
    "spc.monitoring.update",
    "spc.monitoring.causes",
    "reports.investigation",
    "reports.message",
    "reports.night",
    "reports.smtp",
    "reports.views_investigation",
    "reports.views_maps",
    "reports.views_night",
    "ingest.in_hand",
    "ingest.load",
)


def load_all(folder: Path) -> None:
    """Import what a pass needs, in the parent, so that no child has to.

    The script for pages that zoom takes a second to bundle, and its engine does not survive a fork:
    it is made once in a child, and its text handed to all others.
    """
    for name in HEAVY:
        importlib.import_module(name)
    from reports import render

    file = folder / "script.js"
    original = render.live_script
    assert not fork_and_kill(lambda: file.write_text(original(), "utf-8"), None)
    bundled = file.read_text("utf-8")
    render.live_script = lambda: bundled  # type: ignore[assignment]


def one_pass(bay: SmallBay, number: int) -> None:
    """The pass of a night, as `yellowbay nightly` runs it."""
    from config.load import load_bay
    from service.night import run_night

    outcome = run_night(Session(load_bay(bay.config)), night(number))
    assert outcome.mail_errors == ()


def at_each_moment(call: Callable[[], None]) -> None:
    """Call a function at each moment of this process from now on."""
    from sqlalchemy import Engine, event

    for name in ("before_cursor_execute", "after_cursor_execute", "commit"):
        event.listen(Engine, name, lambda *_args, **_named: call())

    def watch(name: str, args: tuple[Any, ...]) -> None:
        # smtplib.send: connection and text; open: path, mode, flags.
        writes = name == "open" and isinstance(args[1], str) and "w" in args[1]
        if writes or name in ("os.rename", "os.remove", "smtplib.connect", "smtplib.send"):
            call()

    sys.addaudithook(watch)


Work = Callable[[SmallBay, int], None]


def killed_at(bay: SmallBay, number: int, moment: int, run: Work = one_pass) -> bool:
    """Run a pass that kills itself at a moment; whether it got so far."""

    def work() -> None:
        count = 0

        def strike() -> None:
            nonlocal count
            count += 1
            if count == moment:
                os.kill(os.getpid(), signal.SIGKILL)

        at_each_moment(strike)
        run(bay, number)

    return fork_and_kill(work, None)


def moments_of(bay: SmallBay, number: int, run: Work = one_pass) -> int:
    """Run a pass to its end in a child; how many moments it had."""
    counter = multiprocessing.get_context("fork").Value("i", 0)

    def work() -> None:
        def note() -> None:
            counter.value += 1

        at_each_moment(note)
        run(bay, number)

    assert not fork_and_kill(work, None)
    return int(counter.value)


def in_child(bay: SmallBay, number: int, after: float | None = None) -> bool:
    """Run a pass in a child, to its end or killed after some seconds."""
    return fork_and_kill(lambda: one_pass(bay, number), after)


def mail_files(folder: Path) -> list[bytes]:
    """What a mail server of the tests has accepted, in the order of acceptance."""
    return [p.read_bytes() for p in sorted(folder.glob("*.msg"))]

"""What every command needs: the configuration, the database, a way to say things."""

from __future__ import annotations

import json
import os
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import UTC, datetime
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer
from typer.core import TyperGroup

if TYPE_CHECKING:
    from sqlalchemy import Engine

    from config.load import Bay

COULD_NOT_FINISH = 1
WRONG_USAGE = 2

ConfigOption = Annotated[
    Path | None,
    typer.Option(
        "--config",
        help="The configuration of the bay; without it $YELLOWBAY_CONFIG, then config/bay.toml.",
        show_default=False,
    ),
]
JsonOption = Annotated[bool, typer.Option("--json", help="One JSON document on standard output.")]
WhoOption = Annotated[
    str | None,
    typer.Option("--who", help="Your name, kept with what you do; without it your login name."),
]
AsOfOption = Annotated[
    str | None,
    typer.Option(
        "--as-of",
        help="Clock of the whole pass, ISO 8601; nothing measured later is looked at.",
        show_default=False,
    ),
]


class WholeLines(TyperGroup):
    """A group of commands whose help says the line of each one whole."""

    def format_commands(self, ctx: Any, formatter: Any) -> None:
        """List the commands without cutting what they say."""
        with formatter.section("Commands"):
            formatter.write_dl([(n, c.get_short_help_str(200)) for n, c in self.commands.items()])


class CommandError(Exception):
    """Something a person has to know; ends the command with the status given."""

    def __init__(self, message: str, status: int = COULD_NOT_FINISH) -> None:
        self.status = status
        super().__init__(message)


@dataclass(frozen=True)
class Session:
    """An open configuration with its database."""

    bay: Bay

    @cached_property
    def engine(self) -> Engine:
        """The database, opened and migrated on first use."""
        from spc.records.sessions import open_database

        database = self.bay.settings.database
        return open_database(
            self.bay.database_url,
            pool_size=database.pool_size,
            statement_timeout_seconds=database.statement_timeout_seconds,
        )

    def stamp(self, text: str | None, option: str = "--as-of") -> datetime:
        """A stamp given by hand, without offset in the bay's zone; now without one.

        Raises CommandError for text that is no stamp.
        """
        from service import clock

        if text is None:
            return clock.now()
        try:
            moment = datetime.fromisoformat(text.strip())
        except ValueError:
            raise CommandError(
                f"{option} {text!r} is no stamp; write for example 2026-11-30T05:30", WRONG_USAGE
            ) from None
        zone = self.bay.settings.bay.zone
        return (moment if moment.tzinfo else moment.replace(tzinfo=zone)).astimezone(UTC)


def open_session(config: Path | None) -> Session:
    """Read the configuration.

    Raises ConfigurationError (the front door says each mistake and exits with 2).
    """
    from config.load import load_bay

    return Session(load_bay(config_file(config)))


def config_file(config: Path | None) -> Path:
    """The file that --config, the environment or the default names."""
    return config or Path(os.environ.get("YELLOWBAY_CONFIG") or "config/bay.toml")


def person(who: str | None) -> str:
    """Name kept with a hand action.

    Raises CommandError when there is none to be had.
    """
    import getpass

    try:
        name = (who or getpass.getuser()).strip()
    except (KeyError, OSError, ImportError):
        name = ""
    if not name:
        raise CommandError("who are you? Give your name with --who", WRONG_USAGE)
    return name


def print_json(document: Any) -> None:
    """One JSON document on standard output, numbers finite or null."""
    sys.stdout.write(json.dumps(document, ensure_ascii=False, indent=1, allow_nan=False) + "\n")


def say(text: str) -> None:
    """A line for people, on standard output."""
    sys.stdout.write(text + "\n")


def tell(text: str) -> None:
    """A line for people, on standard error."""
    sys.stderr.write(text + "\n")


Progress = Callable[[str, int, int], None]


@contextmanager
def progress_bar(title: str) -> Iterator[Progress]:
    """A progress line on standard error, only on a terminal.

    Yields a function taking (what is being done, done, total).
    """
    if not sys.stderr.isatty():
        yield lambda _what, _done, _total: None
        return
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn

    columns = (
        TextColumn("{task.description}"),
        BarColumn(bar_width=24),
        TextColumn("{task.completed}/{task.total}"),
        TimeElapsedColumn(),
    )
    with Progress(*columns, console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task(title, total=None)

        def show(what: str, done: int, total: int) -> None:
            bar.update(task, description=what, completed=done, total=total or None)

        yield show

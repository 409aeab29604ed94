"""The command line: parse, call one function below, print.

Each command lives in a module of its own kind, read when the command is called. What
`yellowbay --help` says of them stands in a table here, so that it answers at once; a test holds
the table against the commands themselves.
"""

from __future__ import annotations

import sys
from collections.abc import Iterator, MutableMapping
from functools import cache
from importlib import import_module
from typing import Annotated, Any

import typer
from typer.core import TyperGroup

# Without rich: its import takes longer than all the rest of `yellowbay --help`.
_PLAIN: dict[str, Any] = {
    "add_completion": False,
    "pretty_exceptions_enable": False,
    "rich_markup_mode": None,
}

# Command -> (module with a function `register`, what the help says of it).
COMMANDS = {
    "demo": (
        "service.cli_pass",
        "Write an invented bay to DIR and run the whole job on it.",
    ),
    "check": (
        "service.cli_pass",
        "Read the configuration, say every mistake, and reckon the false signals of a night.",
    ),
    "ingest": (
        "service.cli_pass",
        "Take in what has landed in the drop folder.",
    ),
    "nightly": (
        "service.cli_pass",
        "Run one pass: ingest, evaluate, open or update excursions, write the report, mail it.",
    ),
    "serve": (
        "service.cli_pass",
        "Stay up and run the pass every night at the bay's local time.",
    ),
    "excursions": (
        "service.cli_excursions",
        "List excursions; contain, close, reopen, comment on, merge or split one.",
    ),
    "investigate": (
        "service.cli_reports",
        "Write everything known on one excursion, as an HTML page and as JSON.",
    ),
    "points": (
        "service.cli_reports",
        "List the plotted points with their limits and rule hits, as of the last pass.",
    ),
    "baseline": (
        "service.cli_baseline",
        "Control limits: list, show, propose, approve and withdraw sets; every set is kept.",
    ),
    "capability": (
        "service.cli_reports",
        "Write the monthly capability review, as an HTML page, a workbook and as JSON.",
    ),
    "runlength": (
        "service.cli_reports",
        "Say how many points a chart design takes to signal.",
    ),
    "reevaluate": (
        "service.cli_reevaluate",
        "Evaluate all history anew, on all cores or on the machines of [compute] scheduler.",
    ),
    "health": (
        "service.cli_upkeep",
        "Say whether the service is well: last night, mail, lock, schema, disk, feeds.",
    ),
    "backup": (
        "service.cli_upkeep",
        "Copy the whole database, SQLite or PostgreSQL, into one SQLite file.",
    ),
    "restore": (
        "service.cli_upkeep",
        "Fill the empty database of the configuration from a backup.",
    ),
    "move": (
        "service.cli_upkeep",
        "Copy the database to another one, say from SQLite to PostgreSQL, and compare both.",
    ),
    "audit": (
        "service.cli_upkeep",
        "Verify that the record of hand actions is whole and unchanged.",
    ),
    "retention": (
        "service.cli_retention",
        "Say what is archived, summed up and due; do it now; find an archived drop.",
    ),
}


class Commands(MutableMapping[str, Any]):
    """The commands by name; a command is built when it is first asked for."""

    def __init__(self) -> None:
        self._built: dict[str, Any] = {}

    def __getitem__(self, name: str) -> Any:
        if name not in self._built:
            module, _ = COMMANDS[name]
            self._built |= built(module)
        return self._built[name]

    def __setitem__(self, name: str, command: Any) -> None:
        self._built[name] = command

    def __delitem__(self, name: str) -> None:
        del self._built[name]

    def __iter__(self) -> Iterator[str]:
        return iter(COMMANDS)

    def __len__(self) -> int:
        return len(COMMANDS)


def built(module: str) -> dict[str, Any]:
    """The commands of one module by name, ready to be called."""
    app = typer.Typer(**_PLAIN)
    app.callback()(_root)
    import_module(module).register(app)
    commands: dict[str, Any] = typer.main.get_command(app).commands  # type: ignore[attr-defined]
    return commands


class FrontDoor(TyperGroup):
    """The root command, whose commands are read when they are called."""

    def __init__(self, **attributes: Any) -> None:
        super().__init__(**attributes)
        self.commands = Commands()

    def format_commands(self, ctx: Any, formatter: Any) -> None:
        """List the commands from the table, without reading them."""
        with formatter.section("Commands"):
            formatter.write_dl([(name, text) for name, (_, text) in COMMANDS.items()])


app = typer.Typer(
    cls=FrontDoor,
    no_args_is_help=True,
    help="Statistical process control for a litho bay: what moved, since when, why, which lots.",
    **_PLAIN,
)


@app.callback()
def _root(
    verbose: Annotated[
        bool, typer.Option("--verbose", "-v", help="Log what is being done to standard error.")
    ] = False,
) -> None:
    import logging

    from service.log import start_logging

    start_logging(logging.INFO if verbose else logging.WARNING)


@cache
def command_line() -> typer.Typer:
    """The whole command line."""
    return app


def main() -> None:
    """Run the command line; every foreseen failure is one clear line and a status."""
    try:
        command_line()(standalone_mode=True)
    except Exception as error:
        sys.stdout.flush()
        sys.exit(_explain(error))


def _explain(error: Exception) -> int:
    """Say what failed; returns the exit status."""
    from service.context import CommandError, tell

    if isinstance(error, CommandError):
        tell(f"yellowbay: {error}")
        return error.status
    from service.failures import explain

    text, status = explain(error)
    tell(text)
    return status

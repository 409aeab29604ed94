"""The command line: parse, call one function below, print."""

from __future__ import annotations

import logging
import sys
from functools import cache
from pathlib import Path
from typing import Annotated

import typer

from service.context import (
    COULD_NOT_FINISH,
    WRONG_USAGE,
    AsOfOption,
    CommandError,
    ConfigOption,
    JsonOption,
    open_session,
    print_json,
    progress_bar,
    say,
    tell,
)

app = typer.Typer(
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    help="Statistical process control for a litho bay: what moved, since when, why, which lots.",
)


@app.callback()
def _root(
    verbose: Annotated[
        bool, typer.Option("--verbose", "-v", help="Log what is being done to standard error.")
    ] = False,
) -> None:
    from service.log import start_logging

    start_logging(logging.INFO if verbose else logging.WARNING)


@app.command()
def demo(
    folder: Annotated[Path, typer.Argument(help="Folder to write to.")] = Path("demo"),
    config: ConfigOption = None,
    as_json: JsonOption = False,
) -> None:
    """Write an invented bay to DIR and run the whole job on it."""
    from service.demo import run_demo

    if config is not None:
        tell("demo writes a configuration of its own; --config is not used")
    with progress_bar("demo") as show:
        result = run_demo(folder, show)
    if as_json:
        print_json(result.as_json())
    else:
        say(result.text)


@app.command()
def check(config: ConfigOption = None, as_json: JsonOption = False) -> None:
    """Read the configuration, say every mistake, and reckon the false signals of a night."""
    from service.check import check_bay

    outcome = check_bay(config)
    if as_json:
        print_json(outcome.as_json())
    else:
        for line in outcome.lines:
            say(line)
    if outcome.mistakes:
        raise typer.Exit(WRONG_USAGE)


@app.command()
def ingest(
    config: ConfigOption = None, as_of: AsOfOption = None, as_json: JsonOption = False
) -> None:
    """Take in what has landed in the drop folder."""
    from service.night import take_in_drops

    session = open_session(config)
    with progress_bar("taking in") as show:
        report = take_in_drops(session, session.stamp(as_of), show)
    if as_json:
        print_json(report.as_json())
    else:
        from service.words import ingest_lines

        for line in ingest_lines(report):
            say(line)


@app.command()
def nightly(
    config: ConfigOption = None,
    as_of: AsOfOption = None,
    wait: Annotated[
        float, typer.Option("--wait", min=0, help="Seconds to wait for a pass that is running.")
    ] = 600.0,
    as_json: JsonOption = False,
) -> None:
    """Run one pass: ingest, evaluate, open or update excursions, write the report, mail it."""
    from service.night import run_night

    session = open_session(config)
    with progress_bar("night") as show:
        night = run_night(session, session.stamp(as_of), wait_seconds=wait, progress=show)
    if as_json:
        print_json(night.as_json())
    else:
        say(night.text)
    for error in night.mail_errors:
        tell(f"yellowbay: mail: {error}")
    if night.mail_errors:
        raise typer.Exit(COULD_NOT_FINISH)


@app.command()
def serve(config: ConfigOption = None) -> None:
    """Stay up and run the pass every night at the bay's local time."""
    from service.log import start_logging
    from service.schedule import serve_forever

    start_logging(logging.INFO)
    serve_forever(open_session(config))


@cache
def command_line() -> typer.Typer:
    """The whole command line, with the commands that live in modules of their own."""
    from service import cli_baseline, cli_excursions, cli_reports, cli_upkeep

    app.add_typer(cli_baseline.app, name="baseline")
    app.add_typer(cli_excursions.app, name="excursions")
    cli_reports.register(app)
    cli_upkeep.register(app)
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
    if isinstance(error, CommandError):
        tell(f"yellowbay: {error}")
        return error.status
    from service.failures import explain

    text, status = explain(error)
    tell(text)
    return status

"""Commands of the pass: demo, check, ingest, nightly, serve."""

from __future__ import annotations

import logging
from pathlib import Path
from typing import Annotated

import typer

from service.context import (
    COULD_NOT_FINISH,
    WRONG_USAGE,
    AsOfOption,
    ConfigOption,
    JsonOption,
    open_session,
    print_json,
    progress_bar,
    say,
    tell,
)


def register(app: typer.Typer) -> None:
    """Add the commands to the front door."""
    app.command()(demo)
    app.command()(check)
    app.command()(ingest)
    app.command()(nightly)
    app.command()(serve)


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
    for error in night.retention_errors:
        tell(f"yellowbay: retention: {error}")
    if night.mail_errors or night.retention_errors:
        raise typer.Exit(COULD_NOT_FINISH)


def serve(config: ConfigOption = None) -> None:
    """Stay up and run the pass every night at the bay's local time."""
    from service.log import start_logging
    from service.schedule import serve_forever

    start_logging(logging.INFO)
    serve_forever(open_session(config))

"""Commands that look after the service: health, backup, restore, move, audit."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Any

import typer

from service.context import (
    COULD_NOT_FINISH,
    WRONG_USAGE,
    CommandError,
    ConfigOption,
    JsonOption,
    open_session,
    print_json,
    progress_bar,
    say,
)


def register(app: typer.Typer) -> None:
    """Add the commands to the front door."""
    app.command()(health)
    app.command()(backup)
    app.command()(restore)
    app.command()(move)
    app.command()(audit)


def health(
    config: ConfigOption = None,
    strict: Annotated[
        bool, typer.Option("--strict", help="End with status 1 when something needs a hand.")
    ] = False,
    as_json: JsonOption = False,
) -> None:
    """Say whether the service is well: last night, mail, lock, schema, disk, feeds."""
    from service.health import examine

    report = examine(open_session(config))
    if as_json:
        print_json(report.as_json())
    else:
        for line in report.lines():
            say(line)
    if strict and not report.well:
        raise typer.Exit(COULD_NOT_FINISH)


def backup(
    file: Annotated[Path, typer.Argument(help="New file to write the backup to.")],
    config: ConfigOption = None,
    as_json: JsonOption = False,
) -> None:
    """Copy the whole database, SQLite or PostgreSQL, into one SQLite file."""
    from spc.records.transfer import TransferError
    from spc.records.transfer import backup as write_backup

    session = open_session(config)
    try:
        with progress_bar("backup") as show:
            rows = write_backup(session.engine, file, show)
    except TransferError as error:
        raise CommandError(str(error)) from error
    _answer(as_json, {"file": str(file), "rows": rows}, f"{rows} rows are in {file}.")


def restore(
    file: Annotated[Path, typer.Argument(help="A file written by `yellowbay backup`.")],
    config: ConfigOption = None,
    as_json: JsonOption = False,
) -> None:
    """Fill the empty database of the configuration from a backup."""
    if not file.is_file():
        raise CommandError(f"there is no file {file}", WRONG_USAGE)
    session = open_session(config)
    _copy(f"sqlite:///{file.absolute()}", session.bay.database_url, as_json)


def move(
    to: Annotated[str, typer.Option("--to", help="URL of the empty database to move to.")],
    config: ConfigOption = None,
    as_json: JsonOption = False,
) -> None:
    """Copy the database to another one, say from SQLite to PostgreSQL, and compare both."""
    from config.values import has_password
    from service.lock import pass_lock

    if has_password(to):
        raise CommandError(
            "a password stands in --to, where every user of the machine can see it: take it out "
            "and set YELLOWBAY_DATABASE_PASSWORD",
            WRONG_USAGE,
        )
    session = open_session(config)
    with pass_lock(session.engine, 600.0):  # what a pass wrote meanwhile would be left behind
        _copy(session.bay.database_url, to, as_json)
    if not as_json:
        say(f"Set database.url = {to!r} in {session.bay.file.name} to work with it from now on.")


def audit(config: ConfigOption = None, as_json: JsonOption = False) -> None:
    """Verify that the record of hand actions is whole and unchanged."""
    from spc.records import actions
    from spc.records.sessions import reading

    session = open_session(config)
    with reading(session.engine) as connection:
        verdict = actions.verify(connection)
    whole = verdict.broken_at is None
    document = {
        "whole": whole,
        "actions": verdict.rows,
        "newest_hash": verdict.newest_hash,
        "broken_at": verdict.broken_at,
        "reason": verdict.reason,
    }
    if whole:
        line = f"{verdict.rows} actions, whole and unchanged; newest {verdict.newest_hash[:12]}."
    else:
        line = f"Action {verdict.broken_at} {verdict.reason}; {verdict.rows} before it are whole."
    _answer(as_json, document, line)
    if not whole:
        raise typer.Exit(COULD_NOT_FINISH)


def _copy(source_url: str, target_url: str, as_json: bool) -> None:
    from sqlalchemy.exc import ArgumentError

    from spc.records.sessions import open_database
    from spc.records.transfer import TransferError, copy_database

    try:
        source, target = open_database(source_url), open_database(target_url)
        with progress_bar("copying") as show:
            copies = copy_database(source, target, show)
    except (TransferError, ArgumentError) as error:
        raise CommandError(str(error)) from error
    rows = sum(copy.rows for copy in copies)
    tables = [{"table": c.table, "rows": c.rows, "checksum": c.checksum} for c in copies]
    text = f"{rows} rows in {len(copies)} tables copied; counts and checksums agree."
    _answer(as_json, {"rows": rows, "tables": tables}, text)


def _answer(as_json: bool, document: dict[str, Any], text: str) -> None:
    if as_json:
        print_json(document)
    else:
        say(text)

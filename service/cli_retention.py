"""The command that archives old drops and sums up old site readings, and finds archived drops."""

from __future__ import annotations

from typing import TYPE_CHECKING, Annotated

import typer

from service.context import (
    COULD_NOT_FINISH,
    AsOfOption,
    ConfigOption,
    JsonOption,
    open_session,
    print_json,
    progress_bar,
    say,
    tell,
)

if TYPE_CHECKING:
    from service.context import Session


def register(app: typer.Typer) -> None:
    """Add the command to the front door."""
    app.command()(retention)


def retention(
    config: ConfigOption = None,
    run: Annotated[
        bool, typer.Option("--run", help="Do all that is due now, without the night's limit.")
    ] = False,
    find: Annotated[
        str | None,
        typer.Option("--find", help="Say where drops lie: part of a path, or of a content hash."),
    ] = None,
    as_of: AsOfOption = None,
    as_json: JsonOption = False,
) -> None:
    """Say what is archived, summed up and due; do it now; find an archived drop."""
    from service.night import run_retention_alone
    from service.retention import sentences, state

    session = open_session(config)
    if find is not None:
        _find(session, find, as_json)
        return
    done = None
    if run:
        with progress_bar("retention") as show:
            done = run_retention_alone(session, session.stamp(as_of), show)
    found = state(session)
    if as_json:
        print_json(found | {"done": None if done is None else done.as_json()})
    else:
        for line in sentences(found):
            say(line)
    for reason in () if done is None else done.failed:
        tell(f"yellowbay: retention: {reason}")
    if done is not None and done.failed:
        raise typer.Exit(COULD_NOT_FINISH)


def _find(session: Session, text: str, as_json: bool) -> None:
    from spc.records import archived
    from spc.records.sessions import reading
    from spc.records.stamps import iso

    zone = session.bay.settings.bay.zone
    folder = session.bay.path(session.bay.settings.retention.archive)
    with reading(session.engine) as connection:
        found = archived.find(connection, text)
    rows = [
        {
            "path": one.path,
            "content_hash": one.content_hash,
            "file": str(folder / one.archive_path),
            "bytes": one.bytes,
            "archived_at": iso(one.archived_us, zone),
        }
        for one in found
    ]
    if as_json:
        print_json(rows)
        return
    for row in rows:
        say(f"{row['path']}: {row['file']}")
    if not rows:
        say("no such drop is in the archive")

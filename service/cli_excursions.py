"""`yellowbay excursions`: list them, and act on one by hand."""

from __future__ import annotations

from enum import StrEnum
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from service.context import (
    WRONG_USAGE,
    CommandError,
    ConfigOption,
    JsonOption,
    Session,
    WholeLines,
    WhoOption,
    open_session,
    person,
    print_json,
    say,
)

if TYPE_CHECKING:
    from spc.monitoring.life import Hand

app = typer.Typer(
    cls=WholeLines,
    no_args_is_help=False,
    invoke_without_command=True,
    help="List excursions; contain, close, reopen, comment on, merge or split one.",
)


class Status(StrEnum):
    """Where an excursion is in its life."""

    open = "open"
    contained = "contained"
    closed = "closed"


class Outcome(StrEnum):
    """How an excursion was closed."""

    cause_found = "cause-found"
    false_alarm = "false-alarm"
    no_cause_found = "no-cause-found"


NumberArgument = Annotated[int, typer.Argument(help="Number of the excursion.")]
TextOption = Annotated[str, typer.Option("--comment", "-m", help="Words kept with the act.")]


def register(door: typer.Typer) -> None:
    """Add the command and what stands under it to the front door."""
    door.add_typer(app, name="excursions")


@app.callback()
def listing(
    context: typer.Context,
    config: ConfigOption = None,
    status: Annotated[
        list[Status] | None, typer.Option("--status", help="Only these; may be repeated.")
    ] = None,
    as_json: JsonOption = False,
) -> None:
    """List the excursions as of the last pass, newest first."""
    context.obj = config
    if context.invoked_subcommand is not None:
        return
    from spc.records import findings
    from spc.records.sessions import reading

    session = open_session(config)
    zone = session.bay.settings.bay.zone
    with reading(session.engine) as connection:
        found = findings.listed(connection, statuses=[s.value for s in status] if status else None)
        merged = [e for e in findings.listed(connection, merged=True) if e.merged_into is not None]
    documents = [findings.as_contract(e, zone) for e in found]
    for document in documents:
        document["merged"] = [e.id for e in merged if e.merged_into == document["id"]]
    if as_json:
        print_json(documents)
        return
    from reports.numbers import LocalClock
    from reports.views_index import excursion_line
    from service import clock

    if not documents:
        say("No excursions." if not status else "No excursions of that status.")
    for document in documents:
        say(excursion_line(document, LocalClock(zone, clock.now())))


@app.command()
def contain(
    context: typer.Context,
    number: NumberArgument,
    text: TextOption = "",
    who: WhoOption = None,
    config: ConfigOption = None,
    as_json: JsonOption = False,
) -> None:
    """The harm is stopped (lots held, tool down), the cause is not yet mended."""
    from spc.monitoring import life

    session, hand = _acting(context, config, who)
    with session.engine.begin() as connection:
        life.contain(connection, number, hand, text)
    _answer(session, number, as_json, "contained")


@app.command()
def close(
    context: typer.Context,
    number: NumberArgument,
    outcome: Annotated[
        Outcome | None, typer.Option("--outcome", help="How it ended.", show_default=False)
    ] = None,
    cause: Annotated[str, typer.Option("--cause", help="The cause that was found.")] = "",
    text: TextOption = "",
    who: WhoOption = None,
    config: ConfigOption = None,
    as_json: JsonOption = False,
) -> None:
    """Close one: with the cause found, as a false alarm, or without a cause.

    Without --outcome: cause-found when --cause is given, else no-cause-found.
    """
    from spc.monitoring import life

    session, hand = _acting(context, config, who)
    chosen = outcome or (Outcome.cause_found if cause.strip() else Outcome.no_cause_found)
    with session.engine.begin() as connection:
        life.close(connection, number, hand, chosen.value, cause, text)
    _answer(session, number, as_json, "closed")


@app.command()
def reopen(
    context: typer.Context,
    number: NumberArgument,
    text: TextOption = "",
    who: WhoOption = None,
    config: ConfigOption = None,
    as_json: JsonOption = False,
) -> None:
    """Open a closed or contained one again."""
    from spc.monitoring import life

    session, hand = _acting(context, config, who)
    with session.engine.begin() as connection:
        life.reopen(connection, number, hand, text)
    _answer(session, number, as_json, "open again")


@app.command()
def comment(
    context: typer.Context,
    number: NumberArgument,
    text: Annotated[str, typer.Argument(help="What you have to say.")],
    who: WhoOption = None,
    config: ConfigOption = None,
    as_json: JsonOption = False,
) -> None:
    """Say something about one; shown on its page in order."""
    from spc.monitoring import life

    session, hand = _acting(context, config, who)
    with session.engine.begin() as connection:
        life.comment(connection, number, hand, text)
    _answer(session, number, as_json, "commented on")


@app.command()
def merge(
    context: typer.Context,
    number: NumberArgument,
    into: Annotated[int, typer.Option("--into", help="The one that it is part of.")],
    text: TextOption = "",
    who: WhoOption = None,
    config: ConfigOption = None,
    as_json: JsonOption = False,
) -> None:
    """Two are one thing: show NUMBER as part of another."""
    from spc.monitoring import life

    session, hand = _acting(context, config, who)
    with session.engine.begin() as connection:
        life.merge(connection, number, into, hand, text)
    _answer(session, into, as_json, f"merged with {number}")


@app.command()
def split(
    context: typer.Context,
    number: NumberArgument,
    streams: Annotated[
        str, typer.Option("--streams", help="Numbers in its list of streams, for example 1,3.")
    ] = "",
    text: TextOption = "",
    who: WhoOption = None,
    config: ConfigOption = None,
    as_json: JsonOption = False,
) -> None:
    """One is two things: take streams out into an excursion of their own."""
    from spc.monitoring import life

    session, hand = _acting(context, config, who)
    try:
        chosen = [int(part) for part in streams.split(",") if part.strip()]
    except ValueError:
        raise CommandError(f"--streams {streams!r}: write numbers like 1,3", WRONG_USAGE) from None
    with session.engine.begin() as connection:
        new = life.split(connection, number, hand, chosen, text)
    _answer(session, new, as_json, f"split from {number}")


def _acting(context: typer.Context, config: Path | None, who: str | None) -> tuple[Session, Hand]:
    from service import clock
    from spc.monitoring.life import Hand

    return open_session(config or context.obj), Hand(person(who), clock.now())


def _answer(session: Session, number: int, as_json: bool, done: str) -> None:
    from spc.records import findings
    from spc.records.sessions import reading

    if not as_json:
        say(f"Excursion {number} is {done}.")
        return
    zone = session.bay.settings.bay.zone
    with reading(session.engine) as connection:
        document = findings.as_contract(findings.one(connection, number), zone)
        document["actions"] = findings.actions_on(connection, number, zone)
    print_json(document)

"""`yellowbay baseline`: propose, show, approve and withdraw control limits."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

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
    help="Control limits: list, show, propose, approve and withdraw sets; every set is kept.",
)

NumberArgument = Annotated[int, typer.Argument(help="Number of the set of limits.")]
WhyOption = Annotated[str, typer.Option("--why", help="The reason, kept with the set.")]
CharacteristicOption = Annotated[
    str | None, typer.Option("--characteristic", help="Name as in the control plan.")
]


def register(door: typer.Typer) -> None:
    """Add the command and what stands under it to the front door."""
    door.add_typer(app, name="baseline")


@app.callback()
def listing(
    context: typer.Context,
    config: ConfigOption = None,
    characteristic: CharacteristicOption = None,
    status: Annotated[
        list[str] | None,
        typer.Option("--status", help="automatic, proposed, approved or withdrawn; repeatable."),
    ] = None,
    as_json: JsonOption = False,
) -> None:
    """List the sets of limits."""
    context.obj = config
    if context.invoked_subcommand is not None:
        return
    from spc.monitoring.limits_by_hand import listed
    from spc.records.sessions import reading

    session = open_session(config)
    with reading(session.engine) as connection:
        documents = listed(connection, session.bay, characteristic, status)
    if as_json:
        print_json(documents)
        return
    if not documents:
        say("No limits yet: they are set by the first points of each stream.")
    for one in documents:
        say(_line(one))


@app.command()
def show(
    context: typer.Context,
    number: NumberArgument,
    config: ConfigOption = None,
    as_json: JsonOption = False,
) -> None:
    """Show one set in full, with the wild points of its baseline and what was done to it."""
    from spc.monitoring.limits_by_hand import shown
    from spc.records.sessions import reading

    session = open_session(config or context.obj)
    with reading(session.engine) as connection:
        document = shown(connection, session.bay, number)
    if as_json:
        print_json(document)
        return
    for line in _full(document):
        say(line)


@app.command()
def propose(
    context: typer.Context,
    characteristic: Annotated[
        str, typer.Option("--characteristic", help="Name as in the control plan.")
    ],
    why: WhyOption,
    stream: Annotated[
        list[str] | None,
        typer.Option("--stream", help="column=value, for example tool=TRK2; repeatable."),
    ] = None,
    first: Annotated[
        str | None, typer.Option("--from", help="First stamp of the points; default the newest.")
    ] = None,
    last: Annotated[str | None, typer.Option("--to", help="Last stamp of the points.")] = None,
    holds_from: Annotated[
        str | None, typer.Option("--holds-from", help="Stamp from which the limits hold.")
    ] = None,
    who: WhoOption = None,
    config: ConfigOption = None,
    as_json: JsonOption = False,
) -> None:
    """Estimate limits from a window of points; they hold only once approved."""
    from spc.monitoring import limits_by_hand

    session, hand = _acting(context, config, who)
    window = limits_by_hand.Window(
        _context(stream or []),
        None if first is None else session.stamp(first, "--from"),
        None if last is None else session.stamp(last, "--to"),
        None if holds_from is None else session.stamp(holds_from, "--holds-from"),
    )
    with session.engine.begin() as connection:
        numbers = limits_by_hand.propose(connection, session.bay, characteristic, window, hand, why)
    _answer(session, numbers, as_json, "proposed")


@app.command()
def approve(
    context: typer.Context,
    number: NumberArgument,
    why: WhyOption,
    holds_from: Annotated[
        str | None, typer.Option("--holds-from", help="Stamp from which the limits hold.")
    ] = None,
    who: WhoOption = None,
    config: ConfigOption = None,
    as_json: JsonOption = False,
) -> None:
    """Put a proposed set in force; points are judged by it from the next pass on."""
    from spc.monitoring import limits_by_hand

    session, hand = _acting(context, config, who)
    since = None if holds_from is None else session.stamp(holds_from, "--holds-from")
    with session.engine.begin() as connection:
        limits_by_hand.approve(connection, number, hand, why, since)
    _answer(session, [number], as_json, "approved")


@app.command()
def withdraw(
    context: typer.Context,
    number: NumberArgument,
    why: WhyOption,
    who: WhoOption = None,
    config: ConfigOption = None,
    as_json: JsonOption = False,
) -> None:
    """Take a set out of force; what held before it holds again from the next pass on."""
    from spc.monitoring import limits_by_hand

    session, hand = _acting(context, config, who)
    with session.engine.begin() as connection:
        limits_by_hand.withdraw(connection, number, hand, why)
    _answer(session, [number], as_json, "withdrawn")


def _acting(context: typer.Context, config: Path | None, who: str | None) -> tuple[Session, Hand]:
    from service import clock
    from spc.monitoring.life import Hand

    return open_session(config or context.obj), Hand(person(who), clock.now())


def _context(parts: list[str]) -> dict[str, str]:
    out = {}
    for part in parts:
        name, equals, value = part.partition("=")
        if not equals or not name.strip():
            raise CommandError(f"--stream {part!r}: write column=value", WRONG_USAGE)
        out[name.strip()] = value.strip()
    return out


def _answer(session: Session, numbers: list[int], as_json: bool, done: str) -> None:
    from spc.monitoring.limits_by_hand import shown
    from spc.records.sessions import reading

    if not as_json:
        say(f"Limits {', '.join(map(str, numbers))}: {done}.")
        return
    with reading(session.engine) as connection:
        documents = [shown(connection, session.bay, number) for number in numbers]
    for document in documents:
        document.pop("payload")
    print_json(documents)


def _line(one: dict[str, Any]) -> str:
    context = " ".join(one["context"].values()) or "all"
    return (
        f"{one['id']:>5}  {one['status']:9}  {one['characteristic']}, {context}: "
        f"{one['n_points']} points, {one['first'][:16]} to {one['last'][:16]}"
        + (f", {len(one['wild'])} wild" if one["wild"] else "")
    )


def _full(document: dict[str, Any]) -> list[str]:
    lines = [_line(document), ""]
    for limit in document["limits"]:
        low, high = (_number(limit[key]) for key in ("lower_limit", "upper_limit"))
        center = _number(limit["center"])
        lines.append(f"  {limit['statistic']:18} {low:>12}  {center:>12}  {high:>12}")
    for wild in document["wild"]:
        value = _number(wild["value"])
        lines.append(f"  wild: lot {wild['lot']}, {wild['statistic']} {value}: {wild['reason']}")
    for action in document["actions"]:
        lines.append(f"  {action['at']}  {action['who']}  {action['action']}: {action['text']}")
    return lines


def _number(value: float | None) -> str:
    return "-" if value is None else f"{value:.6g}"

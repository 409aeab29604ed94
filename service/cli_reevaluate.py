"""The command that evaluates history anew: reevaluate."""

from __future__ import annotations

from datetime import UTC
from typing import TYPE_CHECKING, Annotated, Any

import typer

from service.context import (
    COULD_NOT_FINISH,
    WRONG_USAGE,
    CommandError,
    ConfigOption,
    JsonOption,
    Session,
    open_session,
    print_json,
    progress_bar,
    say,
)

if TYPE_CHECKING:
    from spc.monitoring.reevaluation import Report, Wanted


def register(app: typer.Typer) -> None:
    """Add the command to the front door."""
    app.command()(reevaluate)


def reevaluate(
    config: ConfigOption = None,
    characteristic: Annotated[
        list[str] | None,
        typer.Option("--characteristic", help="Only this one; may be given several times."),
    ] = None,
    since: Annotated[
        str | None,
        typer.Option(
            "--since",
            help="Only streams measured since this stamp, each with all its points.",
            show_default=False,
        ),
    ] = None,
    wait: Annotated[
        float, typer.Option("--wait", min=0, help="Seconds to wait for a pass that is running.")
    ] = 600.0,
    as_json: JsonOption = False,
) -> None:
    """Evaluate all history anew, on all cores or on the machines of [compute] scheduler.

    Points, limits and rule hits are made again from the stored readings up to the clock of the
    last pass; excursions follow at the next pass. A run that was stopped goes on where it was.
    """
    session = open_session(config)
    wanted = _wanted(session, characteristic or [], since)
    with progress_bar("re-evaluating") as show:
        report = _run(session, wanted, wait, show)
    if as_json:
        print_json(_document(session, report))
    else:
        for line in _lines(report):
            say(line)


def _wanted(session: Session, names: list[str], since: str | None) -> Wanted:
    from spc.monitoring.reevaluation import Wanted
    from spc.records.stamps import to_us

    for name in names:
        if session.bay.plan.named(name) is None:
            known = ", ".join(c.name for c in session.bay.plan.characteristic)
            raise CommandError(f"no characteristic {name!r}; one of: {known}", WRONG_USAGE)
    since_us = None if since is None else to_us(session.stamp(since, "--since"))
    return Wanted(tuple(names), since_us, to_us(session.stamp(None)))


def _run(session: Session, wanted: Wanted, wait: float, show: Any) -> Report:
    from service.lock import pass_lock
    from spc.monitoring.reevaluation import OvertakenError, reevaluate
    from spc.monitoring.reevaluation_engines import EngineError, runner_for
    from spc.monitoring.reevaluation_tasks import VersionsDifferError

    try:
        with (
            pass_lock(session.engine, wait),
            runner_for(session.bay) as runner,
        ):
            return reevaluate(session.engine, session.bay, wanted, runner, show)
    except (EngineError, OvertakenError, VersionsDifferError) as error:
        raise told(error) from error


def told(error: Exception) -> CommandError:
    """What a person is told of a run that did not come to its end."""
    from spc.monitoring.reevaluation_engines import NotConfiguredError

    wrong = isinstance(error, NotConfiguredError)
    return CommandError(str(error), WRONG_USAGE if wrong else COULD_NOT_FINISH)


def _document(session: Session, report: Report) -> dict[str, Any]:
    from spc.records.stamps import iso

    return {
        "as_of": iso(report.as_of_us, session.bay.settings.bay.zone),
        "engine": report.engine,
        "workers": report.workers,
        "characteristics": report.characteristics,
        "partitions": {"total": report.partitions, "done_before": report.done_before},
        "streams": report.streams,
        "points": report.points,
        "signals": report.signals,
        "signals_before": report.signals_before,
        "new_baselines": report.new_baselines,
        "left_to_nightly": list(report.left_to_nightly),
        "notes": list(report.notes),
        "digest": report.digest,
    }


def _lines(report: Report) -> list[str]:
    from spc.records.stamps import from_us

    lines = [
        f"{report.points} points of {report.streams} streams evaluated anew, as of "
        f"{from_us(report.as_of_us, UTC):%Y-%m-%d %H:%M} UTC, in {report.partitions} partitions "
        f"({report.engine}, {report.workers} workers).",
        f"Rule hits: {report.signals_before} before, {report.signals} now. "
        f"New sets of limits: {report.new_baselines}.",
    ]
    if report.done_before:
        lines.append(f"{report.done_before} partitions were done by a run that was stopped.")
    if report.left_to_nightly:
        names = ", ".join(report.left_to_nightly)
        lines.append(f"Streams silent since then are left as they were, in: {names}.")
    lines += report.notes
    return [*lines, "Excursions follow at the next pass."]

"""Commands that answer a question: points, investigate, capability, runlength."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from service.context import (
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

if TYPE_CHECKING:
    from spc.stats.run_length import Design, DesignRow


def register(app: typer.Typer) -> None:
    """Add the commands to the front door."""
    app.command()(points)
    app.command()(investigate)
    app.command()(capability)
    app.command()(runlength)


def points(
    characteristic: Annotated[
        str, typer.Option("--characteristic", help="Name as in the control plan.")
    ],
    config: ConfigOption = None,
    statistic: Annotated[
        str | None, typer.Option("--statistic", help="Only this statistic.")
    ] = None,
    as_csv: Annotated[bool, typer.Option("--csv", help="A table instead of JSON.")] = False,
    as_json: JsonOption = False,
) -> None:
    """List the plotted points with their limits and rule hits, as of the last pass."""
    from spc.monitoring.series import points_csv, points_json
    from spc.records.sessions import reading

    if as_csv and as_json:
        raise CommandError("give --json or --csv, not both", WRONG_USAGE)
    session = open_session(config)
    if session.bay.plan.named(characteristic) is None:
        names = ", ".join(c.name for c in session.bay.plan.characteristic)
        raise CommandError(f"no characteristic {characteristic!r}; one of: {names}", WRONG_USAGE)
    with reading(session.engine) as connection:
        rows = points_json(connection, session.bay, characteristic)
    if statistic is not None:
        rows = [row for row in rows if row["statistic"] == statistic]
    if as_csv:
        sys.stdout.write(points_csv(rows))
    else:
        print_json(rows)


def investigate(
    number: Annotated[int, typer.Argument(help="Number of the excursion.")],
    config: ConfigOption = None,
    lots_csv: Annotated[
        Path | None, typer.Option("--lots-csv", help="Also write the lots at risk as a hold list.")
    ] = None,
    as_json: JsonOption = False,
) -> None:
    """Write everything known on one excursion, as an HTML page and as JSON."""
    from service.pages import write_investigation

    session = open_session(config)
    with progress_bar("investigating") as show:
        document = write_investigation(session, number, lots_csv, show)
    if as_json:
        print_json(document)
    else:
        say(document["sentence"])
        say(f"Page: {document['page']}")


def capability(
    month: Annotated[str, typer.Option("--month", help="The month, YYYY-MM.")],
    config: ConfigOption = None,
    as_of: AsOfOption = None,
    gauge_out: Annotated[
        bool, typer.Option("--gauge-share-removed", help="Take the gauge's share out of sigma.")
    ] = False,
    as_json: JsonOption = False,
) -> None:
    """Write the monthly capability review, as an HTML page, a workbook and as JSON."""
    from service.review import write_review

    session = open_session(config)
    with progress_bar("reviewing") as show:
        review = write_review(session, month, session.stamp(as_of), gauge_out, show)
    if as_json:
        print_json(review.rows)
    else:
        for line in review.lines:
            say(line)
    tell(f"Page: {review.page}")


def runlength(
    rules: Annotated[
        list[str] | None, typer.Option("--rules", help="Names of rules, joined by commas.")
    ] = None,
    ewma: Annotated[list[str] | None, typer.Option("--ewma", help="LAMBDA,L")] = None,
    cusum: Annotated[list[str] | None, typer.Option("--cusum", help="K,H")] = None,
    shift: Annotated[
        list[float] | None,
        typer.Option("--shift", help="Shift in sigmas of the plotted point; may be repeated."),
    ] = None,
    steady: Annotated[
        bool, typer.Option("--steady-state", help="The chart has long run when the shift comes.")
    ] = False,
    figure: Annotated[
        Path | None, typer.Option("--figure", help="Also draw the comparison (.png or .svg).")
    ] = None,
    config: ConfigOption = None,
    as_json: JsonOption = False,
) -> None:
    """Say how many points a chart design takes to signal.

    Every option may be repeated: several designs over several shifts are compared side by side.
    """
    from spc.stats.run_length import compare_designs

    _ = config  # the answer is the same in every bay
    try:
        designs = _designs(rules or [], ewma or [], cusum or [])
        rows = compare_designs(designs, shift or [0.0], steady_state=steady)
    except ValueError as error:
        raise CommandError(str(error), WRONG_USAGE) from error
    if figure is not None:
        from service.pages import draw_run_lengths

        draw_run_lengths(rows, figure)
    if as_json:
        documents = [
            {"design": r.design, "shift": r.shift, "arl": r.arl, "sdrl": r.sdrl, "median": r.median}
            for r in rows
        ]
        print_json(documents[0] if len(documents) == 1 else documents)
    else:
        _print_table(rows)


def _designs(rules: list[str], ewma: list[str], cusum: list[str]) -> list[Design]:
    from spc.stats.run_length import design_from_text

    designs = [design_from_text(rules=text) for text in rules]
    designs += [design_from_text(ewma=text) for text in ewma]
    designs += [design_from_text(cusum=text) for text in cusum]
    return designs or [design_from_text()]


def _print_table(rows: tuple[DesignRow, ...]) -> None:
    width = max(len("design"), *(len(row.design) for row in rows))
    say(f"{'design':{width}}  {'shift':>6}  {'ARL':>10}  {'sd':>10}  {'median':>8}")
    for row in rows:
        numbers = f"{row.shift:6.2f}  {row.arl:10.2f}  {row.sdrl:10.2f}  {row.median:8.0f}"
        say(f"{row.design:{width}}  {numbers}")

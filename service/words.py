"""What a command says to people about what it took in."""

from __future__ import annotations

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from ingest.report import FileReport, IngestReport

_MOST_REASONS = 5


def ingest_lines(report: IngestReport) -> list[str]:
    """The night's intake: one sentence, then each file that was refused or lost rows."""
    drops, readings = report.drops, report.readings
    lines = [
        f"{drops['loaded']} files loaded, {drops['duplicate']} duplicate, "
        f"{drops['quarantined']} quarantined, {drops['waiting']} waiting; "
        f"{readings['loaded']} readings loaded, {readings['duplicate']} duplicate, "
        f"{readings['superseded']} superseded, {readings['rejected']} rejected."
    ]
    for file in report.files:
        if file.outcome in ("quarantined", "waiting") or file.reasons or file.warnings:
            lines += _file(file)
    lines += [f"late: feed {feed.name}" for feed in report.late]
    return lines


def _file(file: FileReport) -> list[str]:
    counts = file.counts
    head = f"{file.path}: {file.outcome}"
    if file.outcome == "loaded":
        head += f", {counts.rejected} of {counts.rows} rows rejected, {len(file.warnings)} warned"
    said = [f"  {reason}" for reason in (*file.reasons, *file.warnings)]
    more = len(said) - _MOST_REASONS
    tail = [f"  and {more} more"] if more > 0 else []
    return [head, *said[:_MOST_REASONS], *tail]

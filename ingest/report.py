"""What a pass took in: counts and reasons, for people and as the contract's JSON."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any, Literal

Kind = Literal["readings", "process-log", "events"]
Outcome = Literal["loaded", "duplicate", "quarantined", "waiting"]

OUTCOMES: tuple[Outcome, ...] = ("loaded", "duplicate", "quarantined", "waiting")


@dataclass(frozen=True)
class Reason:
    """Why a row or a file was not taken, or (for a warning) why it looks suspicious.

    `line` counts physical lines of the file from 1; it is None where the reason concerns no line.
    `text` is the row as it stood, shortened.
    """

    line: int | None
    column: str | None
    value: str | None
    reason: str
    text: str | None = None

    def as_json(self) -> dict[str, Any]:
        """`{line, column, value, reason}` of the contract."""
        return {
            "line": self.line,
            "column": self.column,
            "value": self.value,
            "reason": self.reason,
        }

    def __str__(self) -> str:
        """Say it in one line."""
        place = [f"line {self.line}"] if self.line is not None else []
        place += [f"column {self.column!r}"] if self.column else []
        shown = f" ({self.value!r})" if self.value is not None else ""
        return f"{', '.join(place)}{': ' if place else ''}{self.reason}{shown}"


class Refused(Exception):
    """The file is no drop: it goes to quarantine whole, for this reason."""

    def __init__(
        self, reason: str, *, line: int | None = None, column: str | None = None, value: str = ""
    ) -> None:
        self.reason = Reason(line, column, value or None, reason)
        super().__init__(str(self.reason))


@dataclass(frozen=True)
class Counts:
    """Rows of one file. loaded + duplicate + rejected = rows; superseded are earlier readings."""

    rows: int = 0
    loaded: int = 0
    duplicate: int = 0
    superseded: int = 0
    rejected: int = 0


@dataclass(frozen=True)
class FileReport:
    """One file of the pass."""

    path: str
    outcome: Outcome
    kind: Kind | None = None
    feed: str | None = None
    counts: Counts = Counts()
    reasons: tuple[Reason, ...] = ()
    warnings: tuple[Reason, ...] = ()

    def as_json(self) -> dict[str, Any]:
        """One entry of `files`; rows that were loaded with a warning stand in `warnings`."""
        return {
            "path": self.path,
            "kind": self.kind,
            "outcome": self.outcome,
            "rows": self.counts.rows,
            "loaded": self.counts.loaded,
            "duplicate": self.counts.duplicate,
            "superseded": self.counts.superseded,
            "rejected": self.counts.rejected,
            "reasons": [one.as_json() for one in self.reasons],
            "warnings": [one.as_json() for one in self.warnings],
        }


def waiting(path: str, why: str) -> FileReport:
    """The report of a file, or a folder, left for the next pass."""
    return FileReport(path, "waiting", reasons=(Reason(None, None, None, why),))


@dataclass(frozen=True)
class LateFeed:
    """A feed that should have brought something by now. `last_us` is None when it never did."""

    name: str
    last_us: int | None
    expected_every_seconds: float


@dataclass(frozen=True)
class IngestReport:
    """What one pass took in. Files that were known and unchanged are not in it."""

    files: tuple[FileReport, ...] = ()
    late: tuple[LateFeed, ...] = ()
    stopped: bool = False
    unchanged: int = 0
    refused: tuple[FileReport, ...] = field(init=False, default=())

    def __post_init__(self) -> None:
        """Pick out the files that the report must show: refused whole, or in part."""
        shown = tuple(f for f in self.files if f.outcome == "quarantined" or f.counts.rejected)
        object.__setattr__(self, "refused", shown)

    @property
    def drops(self) -> dict[str, int]:
        """Number of files by outcome."""
        return {one: sum(f.outcome == one for f in self.files) for one in OUTCOMES}

    @property
    def readings(self) -> dict[str, int]:
        """Readings of the loaded files (rows of a process log or of events are not readings)."""
        counts = [f.counts for f in self.files if f.outcome == "loaded" and f.kind == "readings"]
        return {
            "loaded": sum(c.loaded for c in counts),
            "duplicate": sum(c.duplicate for c in counts),
            "superseded": sum(c.superseded for c in counts),
            "rejected": sum(c.rejected for c in counts),
        }

    def as_json(self) -> dict[str, Any]:
        """The document of `ingest --json`."""
        return {
            "drops": self.drops,
            "readings": self.readings,
            "files": [f.as_json() for f in self.files],
        }

"""From the bytes of a drop to rows ready to be stored, and to the reasons of those that are not.

Nothing here touches files or the database: the same bytes under the same settings give the same
result.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from config.settings import Settings
from ingest import arrow, parse
from ingest.columns import Rows, rows_of
from ingest.drops import Content
from ingest.feeds import Feed, Mapping, map_header
from ingest.log_rows import EventBatch, LogBatch, read_events, read_log
from ingest.readings import Batch, Rules, read_batch
from ingest.report import Kind, Reason, Refused
from ingest.sheet import Faults, Sheet
from ingest.units import KnownUnits

_SHOWN = 500


@dataclass
class Rulebook:
    """What the configuration and earlier passes say about files.

    `stored_units` grows while files are stored: the unit of a parameter that no characteristic
    uses is fixed by its first reading.
    """

    settings: Settings
    planned_units: dict[str, str]
    stored_units: dict[str, str]


@dataclass(frozen=True)
class Prepared:
    """A file ready to be stored; one with `refused` goes to quarantine and has nothing else."""

    kind: Kind | None
    feed: str | None
    max_rejects: int
    refused: Reason | None = None
    batch: Batch | LogBatch | EventBatch | None = None
    faults: Faults = field(default_factory=lambda: Faults(0))
    warnings: Faults = field(default_factory=lambda: Faults(0))
    lines: NDArray[np.int64] = field(default_factory=lambda: np.zeros(0, np.int64))
    parse_reasons: tuple[Reason, ...] = ()
    parse_rejected: int = 0
    data: bytes = b""

    @property
    def rows(self) -> int:
        """Rows given in the file, readable or not."""
        return len(self.lines) + self.parse_rejected

    @property
    def rejected(self) -> int:
        """Rows that are not taken."""
        return len(self.faults) + self.parse_rejected

    @property
    def units(self) -> dict[str, str]:
        """House unit of each parameter that has good rows."""
        return self.batch.units if isinstance(self.batch, Batch) else {}

    @property
    def newest_us(self) -> int | None:
        """Newest stamp of the good rows."""
        if isinstance(self.batch, Batch):
            stamps = self.batch.runs.measured_us
        elif isinstance(self.batch, LogBatch):
            stamps = self.batch.processed_us
        else:
            stamps = np.array([e[0] for e in self.batch.events] if self.batch else [], np.int64)
        return int(stamps.max()) if len(stamps) else None

    def contradicts(self, stored_units: dict[str, str]) -> bool:
        """Whether another file has fixed a unit meanwhile that this one was not read with."""
        return any(stored_units.get(p, u) != u for p, u in self.units.items())

    def reasons(self) -> list[Reason]:
        """Why rows were rejected, in the order of the lines, as many as are kept."""
        found = [*self.parse_reasons, *self.faults.reasons(self.lines, self.max_rejects)]
        found.sort(key=lambda one: one.line or 0)
        return with_text(found[: self.max_rejects], self.data)

    def warned(self) -> list[Reason]:
        """Rows that look suspicious though they were taken."""
        self.warnings.code[self.faults.code != 0] = 0
        return with_text(self.warnings.reasons(self.lines, self.max_rejects), self.data)


def prepare(content: Content, feed: Feed, rulebook: Rulebook) -> Prepared:
    """Read the bytes of one drop."""
    limit = rulebook.settings.drops.max_rejects_kept
    mapping: Mapping | None = None
    try:
        if content.refused is not None:
            raise content.refused
        form = parse.TextFormat(
            separator=feed.settings.separator,
            encoding=feed.settings.encoding,
            skip_lines=feed.settings.skip_lines,
            max_field_characters=rulebook.settings.drops.max_field_characters,
            max_rejects=limit,
        )
        text = parse.decode(content.data, form.encoding)
        header = parse.read_header(text, form)
        mapping = map_header(header.names, header.line, feed)
        sheet = parse.parse(text, header, form, mapping.numeric)
    except Refused as refused:
        kind = mapping.kind if mapping else feed.settings.kind
        return Prepared(kind, feed.name, limit, refused.reason)
    return _checked(sheet, mapping, feed, rulebook, text.data)


def _checked(
    sheet: Sheet, mapping: Mapping, feed: Feed, rulebook: Rulebook, data: bytes
) -> Prepared:
    rows = rows_of(sheet, mapping, feed.settings.units)
    faults, warnings = Faults(rows.n), Faults(rows.n)
    return Prepared(
        kind=mapping.kind,
        feed=feed.name,
        max_rejects=rulebook.settings.drops.max_rejects_kept,
        batch=_batch(rows, mapping.kind, feed, rulebook, (faults, warnings)) if rows.n else None,
        faults=faults,
        warnings=warnings,
        lines=rows.lines,
        parse_reasons=sheet.reasons,
        parse_rejected=sheet.n_rejected,
        data=data,
    )


def _batch(
    rows: Rows, kind: Kind, feed: Feed, rulebook: Rulebook, into: tuple[Faults, Faults]
) -> Batch | LogBatch | EventBatch:
    settings = feed.settings
    if kind == "process-log":
        return read_log(rows, feed.zone, settings.stamp_format, into[0])
    if kind == "events":
        return read_events(rows, feed.zone, settings.stamp_format, into[0])
    rules = Rules(
        zone=feed.zone,
        known_units=KnownUnits(rulebook.planned_units, rulebook.stored_units),
        plausible=rulebook.settings.plausibility,
        stamp_format=settings.stamp_format,
        decimal=settings.decimal,
        thousands=settings.thousands,
    )
    return read_batch(rows, rules, *into)


def with_text(reasons: list[Reason], data: bytes) -> list[Reason]:
    """Add the line as it stood, shortened, to each reason. Lines end at LF, CR LF or CR."""
    if not reasons:
        return []
    breaks = arrow.places(data, ord("\n"))
    returns = arrow.places(data, ord("\r"))
    if len(returns):
        alone = returns[~np.isin(returns + 1, breaks)]
        breaks = np.sort(np.concatenate([breaks, alone]))
    breaks = np.append(breaks, len(data))
    starts = np.append(0, breaks[:-1] + 1)
    result = []
    for one in reasons:
        text = None
        if one.line is not None and one.line <= len(starts):
            start, end = int(starts[one.line - 1]), int(breaks[one.line - 1])
            raw = data[start : min(end, start + 4 * _SHOWN)].decode("utf-8", "replace")
            text = _printable(raw.rstrip("\r")[:_SHOWN])
        value = None if one.value is None else _printable(one.value[:_SHOWN])
        result.append(Reason(one.line, one.column, value, one.reason, text))
    return result


def _printable(text: str) -> str:
    """Text that any database keeps: PostgreSQL knows no NUL."""
    return text.replace("\0", "\u2400")

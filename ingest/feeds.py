"""Foreign columns to house columns: which feed a file belongs to, and what its header gives."""

from __future__ import annotations

import hashlib
import re
from collections.abc import Sequence
from dataclasses import dataclass, field
from functools import cached_property, lru_cache
from zoneinfo import ZoneInfo

from config.settings import BaySettings, FeedSettings, Settings
from ingest.report import Kind, Refused

REQUIRED: dict[Kind, tuple[str, ...]] = {
    "readings": ("measured_at", "parameter", "value", "unit", "lot", "wafer"),
    "process-log": ("processed_at", "lot", "wafer", "tool"),
    "events": ("at", "kind"),
}
# Columns that are not context.
OWN: dict[Kind, tuple[str, ...]] = {
    "readings": (
        *REQUIRED["readings"],
        *("processed_at", "site", "x_mm", "y_mm", "field_x_mm", "field_y_mm"),
    ),
    "process-log": ("processed_at", "lot", "wafer"),
    "events": ("at", "kind", "tool", "module", "text"),
}
PAIRS = (("x_mm", "y_mm"), ("field_x_mm", "field_y_mm"))


@dataclass(frozen=True)
class Source:
    """Where a house column comes from: a column of the file, or the same text in every row."""

    column: str | None = None
    constant: str | None = None


@dataclass(frozen=True)
class WideGroup:
    """Columns of the file that hold one site each: (column, site), and what is known of them."""

    columns: tuple[tuple[str, str], ...]
    parameter: str | None
    unit: str | None
    places: dict[str, tuple[float, ...]]


@dataclass(frozen=True)
class Mapping:
    """How the columns of one file become house columns and context."""

    kind: Kind
    house: dict[str, Source]
    context: dict[str, Source]
    wide: tuple[WideGroup, ...] = ()

    @property
    def numeric(self) -> frozenset[str]:
        """Columns of the file that hold values, mostly distinct."""
        names = {column for group in self.wide for column, _ in group.columns}
        value = self.house.get("value")
        return frozenset(names | ({value.column} if value and value.column else set()))


@dataclass(frozen=True)
class Feed:
    """A `[[feed]]` with its zone. The house format is the feed without a name."""

    settings: FeedSettings
    zone: ZoneInfo
    name: str | None = None

    @cached_property
    def _pattern(self) -> re.Pattern[str]:
        return path_pattern(self.settings.files)

    def covers(self, path: str) -> bool:
        """Whether files at this path belong to the feed; a `.gz` at its end does not matter."""
        bare = path[:-3] if path.lower().endswith(".gz") else path
        target = path if "/" in self.settings.files else path.rpartition("/")[2]
        bare = bare if "/" in self.settings.files else bare.rpartition("/")[2]
        return bool(self._pattern.fullmatch(target) or self._pattern.fullmatch(bare))


@lru_cache(maxsize=256)
def path_pattern(pattern: str) -> re.Pattern[str]:
    """Pattern of a path: `*` and `?` stay within a folder, `**` crosses folders.

    A pattern without `/` is matched against the name of the file alone.
    """
    parts = []
    for token in re.split(r"(\*\*/|\*\*|\*|\?)", pattern):
        parts.append(
            {"**/": "(?:.*/)?", "**": ".*", "*": "[^/]*", "?": "[^/]"}.get(token)
            or re.escape(token)
        )
    return re.compile("".join(parts), re.DOTALL)


@dataclass(frozen=True)
class Feeds:
    """All feeds of a bay; the first that covers a path has it, else the house format."""

    feeds: tuple[Feed, ...]
    house: Feed
    digest: str = field(default="")

    def of(self, path: str) -> Feed:
        """The feed of a path."""
        return next((feed for feed in self.feeds if feed.covers(path)), self.house)


def feeds_of(settings: Settings) -> Feeds:
    """The feeds of a configuration, with a digest of all that decides whether a file is refused."""
    feeds = tuple(
        Feed(one, ZoneInfo(one.time_zone) if one.time_zone else settings.bay.zone, one.name)
        for one in settings.feed
    )
    house = Feed(FeedSettings(name="house", files="**"), _zone(settings.bay))
    said = [one.model_dump_json() for one in settings.feed]
    said += [settings.drops.model_dump_json(exclude={"folder", "settle_seconds"})]
    return Feeds(feeds, house, hashlib.sha256("\n".join(said).encode()).hexdigest())


def _zone(bay: BaySettings) -> ZoneInfo:
    return bay.zone


def map_header(names: Sequence[str], line: int, feed: Feed) -> Mapping:
    """Tell the kind of a file by its header and say where each column comes from.

    Raises
    ------
    Refused
        When the header is of no kind, lacks a column, or gives a column twice.
    """
    house = _sources(names, line, feed.settings)
    wide = tuple(_wide(names, line, feed.settings, house))
    if wide:
        if "value" in house:
            raise Refused(
                "the file has a column 'value' beside the wide columns; map one of them only",
                line=line,
                column=house["value"].column,
            )
        house.pop("site", None)
        for name in ("x_mm", "y_mm", "field_x_mm", "field_y_mm"):
            if any(group.places for group in wide):
                house.pop(name, None)
    given = set(house) | _given_by(wide)
    kind = feed.settings.kind or _kind(given)
    if kind is None or not set(REQUIRED[kind]) <= given:
        raise _no_kind(names, line, feed, given, kind)
    if kind == "readings":
        for first, second in PAIRS:
            if (first in house) != (second in house):
                there, lacks = (first, second) if first in house else (second, first)
                raise Refused(
                    f"{there} is given without {lacks}; add it, or take both out",
                    line=line,
                    column=house[there].column,
                )
    own = {name: source for name, source in house.items() if name in OWN[kind]}
    context = {name: source for name, source in house.items() if name not in OWN[kind]}
    return Mapping(kind, own, context, wide if kind == "readings" else ())


def _sources(names: Sequence[str], line: int, settings: FeedSettings) -> dict[str, Source]:
    """House or context column -> source; wide columns are in it too, and taken out later."""
    renamed = {foreign: house for house, foreign in settings.columns.items()}
    found: dict[str, Source] = {}
    for name in names:
        if not name:
            continue
        target = renamed.get(name, name)
        if target in found:
            raise Refused(
                f"columns {found[target].column!r} and {name!r} both give {target!r}; "
                "mend `columns` of the feed",
                line=line,
                column=name,
            )
        found[target] = Source(column=name)
    for house, text in settings.constants.items():
        found.setdefault(house, Source(constant=text))
    return found


def _wide(
    names: Sequence[str], line: int, settings: FeedSettings, house: dict[str, Source]
) -> list[WideGroup]:
    groups = []
    for one in settings.wide:
        front, _, back = one.columns.partition("*")
        pattern = re.compile(re.escape(front) + "(.+)" + re.escape(back), re.DOTALL)
        columns = []
        for name in names:
            match = pattern.fullmatch(name)
            if match and name in house and house[name].column == name:
                columns.append((name, match[1].strip()))
                del house[name]
        if not columns:
            raise Refused(
                f"no column fits {one.columns!r}; mend [[feed.wide]] of {settings.name!r}",
                line=line,
            )
        groups.append(WideGroup(tuple(columns), one.parameter, one.unit, dict(one.places)))
    return groups


def _given_by(wide: Sequence[WideGroup]) -> set[str]:
    """Required columns that wide columns stand for."""
    if not wide:
        return set()
    given = {"value"}
    given |= {"parameter"} if all(group.parameter for group in wide) else set()
    return given | ({"unit"} if all(group.unit for group in wide) else set())


def _kind(names: set[str]) -> Kind | None:
    """The kind whose required columns are all there; readings carry those of a log too."""
    return next((kind for kind, needed in REQUIRED.items() if set(needed) <= names), None)


def _no_kind(
    names: Sequence[str], line: int, feed: Feed, given: set[str], kind: Kind | None
) -> Refused:
    best: Kind = "readings"
    for one in REQUIRED:
        if len(set(REQUIRED[one]) & given) > len(set(REQUIRED[best]) & given):
            best = one
    best = kind or best
    missing = [name for name in REQUIRED[best] if name not in given]
    near = {name.lower().replace(" ", "_"): name for name in names}
    shown = ",".join(names)[:200]
    if len(missing) == len(REQUIRED[best]):
        reason = "the header is that of no drop: " + "; ".join(
            f"{one} need {', '.join(columns)}" for one, columns in REQUIRED.items()
        )
        return Refused(reason, line=line, value=shown)
    likely = [f"{near[name]!r} for {name}" for name in missing if name in near]
    hint = f"; rename {', '.join(likely)}" if likely else "; add it, or map it by a [[feed]]"
    if feed.name is not None:
        hint = f"; mend `columns` or `constants` of feed {feed.name!r}"
    foreign = feed.settings.columns
    said = [f"{n} ({foreign[n]!r} in the file)" if n in foreign else n for n in missing]
    reason = f"taken for {best}, the header lacks {', '.join(said)}{hint}"
    return Refused(reason, line=line, column=missing[0], value=shown)

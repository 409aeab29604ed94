"""The settings of a bay: `bay.toml` as pydantic models.

The models say what a value may be; `config.load` reads the files and turns what pydantic finds
into mistakes with a mend. Secrets are not settings: passwords come from the environment
(`YELLOWBAY_DATABASE_PASSWORD`, `YELLOWBAY_SMTP_PASSWORD`, or the same with `_FILE` appended,
naming a file that holds it).
"""

from __future__ import annotations

import os
import re
from pathlib import Path
from typing import Annotated, Literal
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

from pydantic import BaseModel, ConfigDict, Field, field_validator, model_validator

from config.values import EMAIL, Duration, has_password, looks_like_url

MIB = 1024 * 1024


class Strict(BaseModel):
    """Base of all settings: unknown keys are errors, values do not change."""

    model_config = ConfigDict(extra="forbid", frozen=True)


class BaySettings(Strict):
    """The bay itself."""

    name: str = Field(min_length=1, description="Name shown on every page and mail.")
    time_zone: str = Field(
        description="IANA name of the zone of the bay; a stamp without an offset is in this zone."
    )
    control_plan: Path = Field(description="The control plan, a TOML file.")
    wafer_radius_mm: float = Field(
        default=150.0, gt=0, description="Radius of a wafer; the unit disc of the map terms."
    )

    @field_validator("time_zone")
    @classmethod
    def _known_zone(cls, value: str) -> str:
        try:
            ZoneInfo(value)
        except (ZoneInfoNotFoundError, ValueError, OSError) as error:
            raise ValueError(
                "no such time zone; write an IANA name such as Europe/Dublin"
            ) from error
        return value

    @property
    def zone(self) -> ZoneInfo:
        """The zone as an object."""
        return ZoneInfo(self.time_zone)


class DatabaseSettings(Strict):
    """Where the records are kept."""

    url: str = Field(
        default="sqlite:///bay.db",
        description="sqlite:///file (relative to bay.toml) or postgresql+psycopg://user@host/name.",
    )
    pool_size: int = Field(default=4, ge=1, le=64, description="PostgreSQL connections kept open.")
    statement_timeout_seconds: float = Field(
        default=600.0, gt=0, description="PostgreSQL: longest time of one statement."
    )

    @field_validator("url")
    @classmethod
    def _url(cls, value: str) -> str:
        if not looks_like_url(value):
            raise ValueError(
                "no database URL; write sqlite:///bay.db or postgresql+psycopg://user@host/name"
            )
        if has_password(value):
            raise ValueError(
                "a password stands in the file; take it out and set YELLOWBAY_DATABASE_PASSWORD"
            )
        return value


class DropSettings(Strict):
    """Where the files land, and how large they may be."""

    folder: Path = Field(default=Path("drops"), description="Folder of the drops, with folders.")
    settle_seconds: float = Field(
        default=5.0,
        ge=0,
        description="A file changed more recently than this waits for the next pass.",
    )
    max_file_bytes: int = Field(
        default=256 * MIB,
        ge=1,
        description="Larger files, unpacked, are quarantined. Taking a file in needs about 6 bytes "
        "of memory a byte of it, up to 30 where every row has a lot and a context of its own.",
    )
    max_field_characters: int = Field(
        default=4096, ge=16, description="A row with a longer field is rejected."
    )
    max_rejects_kept: int = Field(
        default=10_000, ge=1, description="Rejected rows kept with their text, per file."
    )


class NightlySettings(Strict):
    """When the pass runs, where its pages go and how many false alarms it may raise."""

    at: str = Field(default="05:30", description="Time of the pass, HH:MM in bay.time_zone.")
    reports: Path = Field(default=Path("reports"), description="Folder of the HTML pages.")
    false_excursions_per_night: float = Field(
        default=0.5, gt=0, le=100, description="The alarm budget for the whole bay."
    )
    keep_history_days: float = Field(
        default=60.0, ge=1, description="Days of points that triage looks back on."
    )

    @field_validator("at")
    @classmethod
    def _time(cls, value: str) -> str:
        if not re.fullmatch(r"([01]\d|2[0-3]):[0-5]\d", value):
            raise ValueError("not a time of day; write HH:MM, for example 05:30")
        return value

    @property
    def hour_minute(self) -> tuple[int, int]:
        """Hour and minute of the pass."""
        hour, minute = self.at.split(":")
        return int(hour), int(minute)


class MailSettings(Strict):
    """Where the mail goes. Without `host` messages are kept as .eml files in `folder`."""

    model_config = ConfigDict(extra="forbid", frozen=True, populate_by_name=True)

    folder: Path = Field(default=Path("mail"), description="Folder of kept messages.")
    sender: str = Field(
        default="yellowbay@localhost", alias="from", description="Address the mail comes from."
    )
    to: tuple[str, ...] = Field(default=(), description="Everybody who gets the digest.")
    host: str | None = Field(default=None, description="SMTP server.")
    port: int | None = Field(
        default=None, ge=1, le=65535, description="Default 587 (starttls), 465 (tls), 25 (none)."
    )
    security: Literal["starttls", "tls", "none"] = Field(
        default="starttls", description="How the connection is protected."
    )
    user: str | None = Field(
        default=None, description="SMTP user; the password is YELLOWBAY_SMTP_PASSWORD."
    )
    ca_file: Path | None = Field(
        default=None, description="Certificates to trust instead of the machine's own."
    )
    timeout_seconds: float = Field(default=30.0, gt=0, description="Patience with the server.")
    page_url: str | None = Field(
        default=None, description="Address under which the reports folder is reached, for links."
    )

    @field_validator("sender", "to")
    @classmethod
    def _address(cls, value: str | tuple[str, ...]) -> str | tuple[str, ...]:
        for one in (value,) if isinstance(value, str) else value:
            if not EMAIL.fullmatch(one):
                raise ValueError(f"{one!r} is no mail address; write name@example.com")
        return value


class WideColumns(Strict):
    """A group of columns, one a site. `*` in `columns` stands for the name of the site."""

    columns: str = Field(description="Pattern of the column names, for example 'T_*'.")
    parameter: str | None = Field(default=None, description="Parameter of these columns.")
    unit: str | None = Field(default=None, description="Unit of these columns.")
    places: dict[str, tuple[float, ...]] = Field(
        default_factory=dict,
        description="Site -> [x_mm, y_mm] or [x_mm, y_mm, field_x_mm, field_y_mm].",
    )

    @field_validator("columns")
    @classmethod
    def _one_star(cls, value: str) -> str:
        if value.count("*") != 1:
            raise ValueError("needs exactly one *, which stands for the name of the site")
        return value

    @field_validator("places")
    @classmethod
    def _two_or_four(cls, value: dict[str, tuple[float, ...]]) -> dict[str, tuple[float, ...]]:
        for site, place in value.items():
            if len(place) not in (2, 4):
                raise ValueError(f"site {site!r} needs two or four numbers in mm")
        return value


class FeedSettings(Strict):
    """How files of a foreign layout become house columns."""

    name: str = Field(min_length=1, description="Name of the feed in reports.")
    files: str = Field(description="Pattern of the path below the drop folder: 'gauge3/*.csv'.")
    kind: Literal["readings", "process-log", "events"] | None = Field(
        default=None, description="What the files hold; without it the mapped header tells."
    )
    separator: str = Field(default=",", description="Column separator: one character.")
    decimal: Literal[".", ","] = Field(default=".", description="Decimal mark.")
    thousands: Literal[".", ",", " ", "'"] | None = Field(
        default=None, description="Mark between thousands, if any."
    )
    encoding: str = Field(default="utf-8", description="Encoding of the files.")
    stamp_format: str | None = Field(
        default=None, description="strptime form of the stamps; without it ISO 8601."
    )
    time_zone: str | None = Field(default=None, description="Zone of stamps without offset.")
    skip_lines: int = Field(default=0, ge=0, description="Lines in front of the header.")
    columns: dict[str, str] = Field(
        default_factory=dict, description="House column -> name in the file."
    )
    constants: dict[str, str] = Field(
        default_factory=dict, description="House column -> text for columns the file lacks."
    )
    units: dict[str, str] = Field(
        default_factory=dict, description="Unit text of the file -> unit understood here."
    )
    wide: tuple[WideColumns, ...] = Field(default=(), description="Columns that hold one site.")
    expected_every: Duration | None = Field(
        default=None, description="A feed silent for longer is reported late."
    )

    @field_validator("separator")
    @classmethod
    def _one_character(cls, value: str) -> str:
        if len(value) != 1 or value in "\r\n\"'":
            raise ValueError("must be one character, for example ';' or a tab '\\t'")
        return value

    @field_validator("encoding")
    @classmethod
    def _known_encoding(cls, value: str) -> str:
        try:
            "".encode(value)
        except LookupError as error:
            raise ValueError("unknown encoding; write for example utf-8 or cp1252") from error
        return value

    @field_validator("time_zone")
    @classmethod
    def _zone(cls, value: str | None) -> str | None:
        return None if value is None else BaySettings._known_zone(value)

    @model_validator(mode="after")
    def _decimal_is_not_separator(self) -> FeedSettings:
        if self.decimal == self.separator:
            raise ValueError("decimal and separator are the same character; set separator = ';'")
        return self


class PlausibleSettings(Strict):
    """A window outside which a value is suspicious: a wrong unit, a wrong column."""

    low: float = Field(description="Lowest plausible value.")
    high: float = Field(description="Highest plausible value.")
    unit: str = Field(description="Unit of both.")
    action: Literal["warn", "reject"] = Field(
        default="warn", description="Load and warn, or reject the row."
    )

    @model_validator(mode="after")
    def _ordered(self) -> PlausibleSettings:
        if not self.low < self.high:
            raise ValueError("low must be below high")
        return self


class ComputeSettings(Strict):
    """Where `yellowbay reevaluate` runs; see docs/distributed.md. The nightly pass needs none."""

    scheduler: str | None = Field(
        default=None,
        description="tcp://host:port or tls://host:port of a Dask scheduler; without it this "
        "machine. Needs PostgreSQL and `pip install 'yellowbay[fab]'`.",
    )
    workers: Annotated[int, Field(ge=0)] = Field(
        default=0, description="Processes on this machine; 0 for one a core."
    )
    partition_measurements: int = Field(
        default=20_000,
        ge=1,
        description="Wafer measurements a partition, about. A worker then needs some 0.2 GB with a "
        "few sites a wafer, 0.5 GB with fifty.",
    )
    ca_file: Path | None = Field(default=None, description="tls:// only: whom to trust.")
    cert_file: Path | None = Field(default=None, description="tls:// only: our certificate.")
    key_file: Path | None = Field(default=None, description="tls:// only: its key.")

    @field_validator("scheduler")
    @classmethod
    def _address(cls, value: str | None) -> str | None:
        if value is not None and not re.fullmatch(r"(tcp|tls)://[^\s/@]+:\d{1,5}", value):
            raise ValueError("no address of a scheduler; write tcp://host:8786 or tls://host:8786")
        return value

    @model_validator(mode="after")
    def _files_go_with_tls(self) -> ComputeSettings:
        given = [one is not None for one in (self.ca_file, self.cert_file, self.key_file)]
        tls = (self.scheduler or "").startswith("tls://")
        if tls and not all(given):
            raise ValueError("tls:// needs three files; set ca_file, cert_file and key_file")
        if not tls and any(given):
            raise ValueError("files for TLS without tls://; write scheduler = 'tls://host:8786'")
        return self


class RetentionSettings(Strict):
    """What is kept and for how long. Without these settings everything is kept where it is."""

    archive_drops_after_days: float | None = Field(
        default=None,
        gt=0,
        description="Drops taken in longer ago are packed into archive/YYYY-MM. The service then "
        "needs the right to write in the drop folder.",
    )
    archive: Path = Field(default=Path("archive"), description="Folder of the packed drops.")
    aggregate_sites_after_days: float | None = Field(
        default=None,
        gt=0,
        description="A month that ended longer ago keeps the sums and statistics of its wafers, "
        "and the capability they gave, but not the value of each site. There is no way back.",
    )
    minutes_a_night: float = Field(
        default=10.0, gt=0, le=600, description="Longest time that a pass spends on both."
    )


# Common practice, no source: an angstrom/nanometre mix-up or a wrong recipe column falls outside.
PLAUSIBLE_DEFAULTS = {
    "resist_thickness": PlausibleSettings(low=0.5, high=2.5, unit="um"),
    "spin_speed": PlausibleSettings(low=1200, high=4800, unit="rpm"),
    "spin_time": PlausibleSettings(low=30, high=60, unit="s"),
}


class Settings(Strict):
    """The whole of `bay.toml`."""

    bay: BaySettings
    database: DatabaseSettings = DatabaseSettings()
    drops: DropSettings = DropSettings()
    nightly: NightlySettings = NightlySettings()
    mail: MailSettings = MailSettings()
    feed: tuple[FeedSettings, ...] = ()
    plausible: dict[str, PlausibleSettings] = Field(default_factory=dict)
    compute: ComputeSettings = ComputeSettings()
    retention: RetentionSettings = RetentionSettings()

    @field_validator("feed")
    @classmethod
    def _feeds_by_name(cls, value: tuple[FeedSettings, ...]) -> tuple[FeedSettings, ...]:
        names = [feed.name for feed in value]
        twice = sorted({n for n in names if names.count(n) > 1})
        if twice:
            raise ValueError(f"two feeds are named {twice[0]!r}; give each its own name")
        return value

    @model_validator(mode="after")
    def _retention_fits(self) -> Settings:
        drops, archive = (
            os.path.normpath(one) for one in (self.drops.folder, self.retention.archive)
        )
        if os.path.commonpath([os.path.abspath(drops), os.path.abspath(archive)]) == (
            os.path.abspath(drops)
        ):
            raise ValueError(
                "retention.archive lies in drops.folder, and would be taken in again; "
                "name a folder beside it"
            )
        days = self.retention.aggregate_sites_after_days
        if days is not None and days < self.nightly.keep_history_days:
            raise ValueError(
                "retention.aggregate_sites_after_days is shorter than nightly.keep_history_days, "
                "and would take away what triage looks back on; raise it to at least "
                f"{self.nightly.keep_history_days:g}"
            )
        return self

    @property
    def plausibility(self) -> dict[str, PlausibleSettings]:
        """Windows by parameter: the shipped ones, replaced by the configured ones."""
        return {**PLAUSIBLE_DEFAULTS, **self.plausible}

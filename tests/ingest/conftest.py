"""Fixtures of the ingest tests."""

from __future__ import annotations

import shutil
from collections.abc import Iterator
from pathlib import Path

import pytest
from hypothesis import settings

from spc.records.sessions import open_database
from tests.ingest.intake import Intake

# The machine may be busy; a slow example is no fault.
settings.register_profile("ingest", deadline=None)
settings.load_profile("ingest")


@pytest.fixture
def intake(_sqlite_template: Path, tmp_path: Path) -> Iterator[Intake]:
    """A bay on SQLite."""
    file = tmp_path / "bay.db"
    shutil.copy(_sqlite_template, file)
    engine = open_database(f"sqlite:///{file}")
    yield Intake.make(engine, tmp_path)
    assert engine.pool.checkedout() == 0  # type: ignore[attr-defined]
    engine.dispose()

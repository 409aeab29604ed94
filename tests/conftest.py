"""Fixtures shared by all tests."""

from __future__ import annotations

import json
import os
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

SHARED = Path(__file__).resolve().parents[2] / "shared" / "reference"


def skip_or_fail(reason: str) -> None:
    """Skip, or fail where `.ci/run` asked that nothing be skipped for want of a tool."""
    if os.environ.get("YELLOWBAY_NO_SKIP"):
        pytest.fail(f"{reason} (YELLOWBAY_NO_SKIP is set)")
    pytest.skip(reason)


@pytest.fixture(scope="session")
def shared_reference() -> Callable[[str], Any]:
    """Load a file of published reference values (parsed JSON, or the path of a CSV)."""

    def load(name: str) -> Any:
        path = SHARED / name
        if not path.is_file():
            skip_or_fail(f"reference values {path} are not on this machine")
        return json.loads(path.read_text("utf-8")) if name.endswith(".json") else path

    return load

"""The tests that fork run in a process of their own.

A child that is forked from a process in which other tests have drawn figures inherits the locks of
the drawing library's threads, without the threads, and waits for ever.
"""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]


@pytest.mark.parametrize("name", ["test_crash.py", "test_mail.py", "test_retention.py"])
def test_forking_tests_pass(name: str) -> None:
    file = str(ROOT / "tests" / "robustness" / name)
    command = [sys.executable, "-m", "pytest", "-n", "0", "-m", "forks and not slow", file]
    done = subprocess.run(
        command, cwd=ROOT, capture_output=True, text=True, timeout=900, check=False
    )
    assert done.returncode == 0, done.stdout[-4000:] + done.stderr[-1000:]

"""The dependency audit of `.ci/run`: a finding fails, silence is told from a clean bill."""

from __future__ import annotations

import importlib.util
import subprocess
from pathlib import Path
from types import ModuleType
from typing import Any

import pytest

ROOT = Path(__file__).resolve().parents[1]


@pytest.fixture(scope="module")
def audit() -> ModuleType:
    spec = importlib.util.spec_from_file_location("audit", ROOT / ".ci" / "audit.py")
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


# Reports as pip-audit 2.10.1 writes them (`--format json`).
CLEAN = {"dependencies": [{"name": "numpy", "version": "2.4.6", "vulns": []}], "fixes": []}
FAULTY = {
    "dependencies": [
        {
            "name": "jinja2",
            "version": "2.4.1",
            "vulns": [{"id": "PYSEC-2019-217", "fix_versions": ["2.10.1"], "description": "…"}],
        },
        {"name": "numpy", "skip_reason": "Dependency not found"},
    ]
}
SKIPPED = {"dependencies": [{"name": "numpy", "skip_reason": "Dependency not found on PyPI"}]}


def test_reports(audit: ModuleType) -> None:
    assert audit.findings(CLEAN) == []
    assert audit.findings(FAULTY) == ["jinja2 2.4.1: PYSEC-2019-217, mended in 2.10.1"]
    with pytest.raises(audit.NotAskedError, match="1 of 1 packages: Dependency not found"):
        audit.findings(SKIPPED)


@pytest.mark.parametrize("checked", [0, 1])
@pytest.mark.parametrize(
    ("outcome", "status", "said"),
    [
        ([], 0, "no known faults in"),
        (["x 1: PYSEC-1, mended in 2"], 1, "known fault: x 1: PYSEC-1"),
        ("no answer within 120 s", 0, "advisories could not be asked: no answer within 120 s"),
    ],
)
def test_status(
    audit: ModuleType,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
    outcome: Any,
    status: int,
    said: str,
    checked: int,
) -> None:
    def answer() -> list[str]:
        if isinstance(outcome, str):
            raise audit.NotAskedError(outcome)
        return list(outcome)

    done = subprocess.CompletedProcess([], checked)
    monkeypatch.setattr(audit.subprocess, "run", lambda *_a, **_k: done)
    monkeypatch.setattr(audit, "audit", answer)
    assert audit.main() == max(status, checked)
    assert said in capsys.readouterr().out


def test_a_tool_that_says_nothing_is_no_clean_bill(
    audit: ModuleType, monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    done = subprocess.CompletedProcess([], 1, stdout="", stderr="trace\nConnectionError: no\n")
    monkeypatch.setattr(audit, "run", lambda _command: done)
    with pytest.raises(audit.NotAskedError, match="ConnectionError: no"):
        audit.ask(["numpy==1"], tmp_path / "tool", tmp_path)


def test_without_answers_nothing_is_installed(
    audit: ModuleType, monkeypatch: pytest.MonkeyPatch
) -> None:
    def refuse(url: str, timeout: float) -> None:
        raise OSError(f"no such host, asked within {timeout} s")

    monkeypatch.setattr(audit.urllib.request, "urlopen", refuse)
    monkeypatch.setattr(audit, "run", lambda _command: pytest.fail("nothing is to be run"))
    with pytest.raises(audit.NotAskedError, match=r"https://pypi\.org/pypi/\S+: no such host"):
        audit.audit()


def test_every_pin_is_asked(audit: ModuleType) -> None:
    requirements = audit.pinned(audit.CONSTRAINTS)
    assert len(requirements) > 50
    assert all("==" in one for one in requirements)

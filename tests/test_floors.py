"""Imports only go down: an `ast` walk over every module, imports inside functions included."""

from __future__ import annotations

import ast
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]
OURS = ("config", "spc", "ingest", "reports", "service", "fixtures")

# floor -> what it may import of ours
MAY = {
    "config": ("config",),
    "spc.stats": ("spc.stats",),
    "spc.records": ("spc.records", "config"),
    "spc.monitoring": ("spc.monitoring", "spc.stats", "spc.records", "config"),
    "ingest": ("ingest", "spc.records", "config"),
    "reports": ("reports", "spc", "config"),
    "service": ("service", "reports", "ingest", "spc", "config", "fixtures"),
}
STATS_MAY = ("numpy", "scipy", "statsmodels")
STANDARD_BANNED = {"sqlite3", "socket", "datetime", "time", "os", "pathlib"}


def modules(floor: str) -> list[Path]:
    return sorted((ROOT / floor.replace(".", "/")).rglob("*.py"))


def imported(file: Path) -> list[tuple[int, str]]:
    found = []
    for node in ast.walk(ast.parse(file.read_text("utf-8"))):
        if isinstance(node, ast.Import):
            found += [(node.lineno, alias.name) for alias in node.names]
        elif isinstance(node, ast.ImportFrom) and node.module and not node.level:
            found.append((node.lineno, node.module))
            found += [(node.lineno, f"{node.module}.{alias.name}") for alias in node.names]
    return found


def within(name: str, allowed: tuple[str, ...]) -> bool:
    return any(
        name == one or name.startswith(one + ".") or one.startswith(name + ".") for one in allowed
    )


@pytest.mark.parametrize("floor", sorted(MAY))
def test_imports_only_go_down(floor: str) -> None:
    climbing = [
        f"{file.relative_to(ROOT)}:{line}: {name}"
        for file in modules(floor)
        for line, name in imported(file)
        if name.split(".")[0] in OURS and not within(name, MAY[floor])
    ]
    assert climbing == []


def test_statistics_are_pure() -> None:
    """No files, no database, no clock, and of other people's code only the numeric libraries."""
    import sys

    wrong = []
    for file in modules("spc.stats"):
        for line, name in imported(file):
            top = name.split(".")[0]
            if top in STANDARD_BANNED or (
                top not in sys.stdlib_module_names and top not in (*STATS_MAY, "spc")
            ):
                wrong.append(f"{file.relative_to(ROOT)}:{line}: {name}")
    assert wrong == []


def test_only_the_service_reads_the_clock() -> None:
    wrong = []
    for floor in ("config", "spc", "ingest", "reports"):
        for file in modules(floor):
            for node in ast.walk(ast.parse(file.read_text("utf-8"))):
                if isinstance(node, ast.Attribute) and node.attr in ("now", "utcnow", "today"):
                    owner = node.value
                    name = owner.id if isinstance(owner, ast.Name) else ""
                    name = owner.attr if isinstance(owner, ast.Attribute) else name
                    if name in ("datetime", "date", "Timestamp"):
                        wrong.append(f"{file.relative_to(ROOT)}:{node.lineno}")
    assert wrong == []


# Named exceptions to the length of a file, each with its reason.
LONG: dict[str, str] = {}


def test_files_stay_readable() -> None:
    long = {
        str(file.relative_to(ROOT)): lines
        for floor in OURS
        for file in (ROOT / floor).rglob("*.py")
        if (lines := len(file.read_text("utf-8").splitlines())) > 400
        and "migrations" not in file.parts
    }
    assert {name: n for name, n in long.items() if name not in LONG} == {}

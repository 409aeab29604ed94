"""What our own code must not do, read from its syntax: run text, unpickle, start a shell, let HTML
through unescaped, or build SQL from values."""

from __future__ import annotations

import ast
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]
PACKAGES = ("config", "spc", "ingest", "reports", "service", "fixtures")

MODULES = {"pickle", "cPickle", "marshal", "shelve", "dill", "cloudpickle", "joblib", "pty"}
BUILTINS = {"eval", "exec", "compile", "__import__", "breakpoint", "input"}
CALLS = {
    ("os", "system"), ("os", "popen"), ("os", "execv"), ("os", "execvp"), ("os", "spawnv"),
    ("yaml", "load"), ("pd", "read_pickle"), ("pandas", "read_pickle"), ("pd", "eval"),
    ("tempfile", "mktemp"), ("ssl", "_create_unverified_context"),
}  # fmt: skip
METHODS = {"to_pickle", "read_pickle"}
KEYWORDS = {("shell", True), ("allow_pickle", True), ("autoescape", False), ("verify", False)}


def faults(tree: ast.AST) -> Iterator[tuple[int, str]]:
    """What a file must not hold: line and reason."""
    sql = {
        alias.asname or alias.name
        for node in ast.walk(tree)
        if isinstance(node, ast.ImportFrom) and (node.module or "").startswith("sqlalchemy")
        for alias in node.names
        if alias.name == "text"
    }
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            names = [alias.name.split(".")[0] for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            names = [(node.module or "").split(".")[0]]
        else:
            names = []
        for name in names:
            if name in MODULES:
                yield node.lineno, f"imports {name}"
            if name == "subprocess":
                yield node.lineno, "starts processes"
        if isinstance(node, ast.Call):
            yield from _of_call(node, sql)
        if isinstance(node, ast.Name) and node.id == "Markup":
            yield node.lineno, "marks text as HTML"


def _of_call(node: ast.Call, sql: set[str]) -> Iterator[tuple[int, str]]:
    function = node.func
    if isinstance(function, ast.Name):
        if function.id in BUILTINS:
            yield node.lineno, f"calls {function.id}"
        if function.id in sql and node.args and isinstance(node.args[0], ast.JoinedStr):
            yield node.lineno, "builds SQL from values"
    if isinstance(function, ast.Attribute):
        if isinstance(function.value, ast.Name) and (function.value.id, function.attr) in CALLS:
            yield node.lineno, f"calls {function.value.id}.{function.attr}"
        if function.attr in METHODS:
            yield node.lineno, f"calls {function.attr}"
        if function.attr in ("execute", "exec_driver_sql", "executescript") and (
            node.args and isinstance(node.args[0], (ast.JoinedStr, ast.BinOp))
        ):
            yield node.lineno, "builds SQL from values"
    for keyword in node.keywords:
        value = keyword.value
        if isinstance(value, ast.Constant) and (keyword.arg, value.value) in KEYWORDS:
            yield node.lineno, f"passes {keyword.arg}={value.value}"


# What is allowed where, with the reason it does no harm.
ALLOWED = {
    "service/lock.py": {"builds SQL from values"},  # a suffix of two constants
    "spc/records/schema.py": {"builds SQL from values"},  # the key of a lock, a constant
    "spc/records/migrations/": {"builds SQL from values"},  # names of our own tables
    "reports/pages.py": {"marks text as HTML"},  # figures and style that we drew ourselves
    "reports/investigation.py": {"marks text as HTML"},  # JSON whose < > & are escaped
    # The style of the mail, a file of ours; the text part of a mail is no HTML.
    "reports/message.py": {"marks text as HTML", "passes autoescape=False"},
}


@pytest.mark.parametrize("package", PACKAGES)
def test_nothing_dangerous(package: str) -> None:
    found, used = set(), set()
    for file in sorted((ROOT / package).rglob("*.py")):
        name = file.relative_to(ROOT).as_posix()
        place = next((key for key in ALLOWED if name.startswith(key)), "")
        for line, why in faults(ast.parse(file.read_text("utf-8"))):
            if why in ALLOWED.get(place, ()):
                used.add((place, why))
            else:
                found.add((name, line, why))
    assert found == set()
    mine = {
        (key, why) for key, all_of in ALLOWED.items() for why in all_of if key.startswith(package)
    }
    assert mine == used, "an exception that nobody needs any more is taken out"


@pytest.mark.parametrize(
    ("code", "why"),
    [
        ("import pickle", "imports pickle"),
        ("from joblib import load", "imports joblib"),
        ("eval('1')", "calls eval"),
        ("__import__('os')", "calls __import__"),
        ("import os; os.system('ls')", "calls os.system"),
        ("import subprocess", "starts processes"),
        ("run(['ls'], shell=True)", "passes shell=True"),
        ("np.load(f, allow_pickle=True)", "passes allow_pickle=True"),
        ("Environment(autoescape=False)", "passes autoescape=False"),
        ("Markup(name)", "marks text as HTML"),
        ("connection.execute(f'DROP {name}')", "builds SQL from values"),
        ("from sqlalchemy import text; text(f'DROP {name}')", "builds SQL from values"),
    ],
)
def test_the_reading_sees_what_it_must(code: str, why: str) -> None:
    assert why in {one for _, one in faults(ast.parse(code))}


def test_no_template_lets_text_through() -> None:
    for file in (ROOT / "reports" / "templates").iterdir():
        words = file.read_text("utf-8")
        assert "autoescape false" not in words
        assert "| safe" not in words.replace("|safe", "| safe"), file.name

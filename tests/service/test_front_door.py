"""The front door: every command has help, is named in the README, and fails as promised."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import pytest
import typer
from typer.testing import CliRunner

from service import cli

ROOT = Path(__file__).resolve().parents[2]


def run(*words: str, cwd: Path = ROOT) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, "-c", "from service.cli import main; main()", *words]
    return subprocess.run(command, cwd=cwd, capture_output=True, text=True, check=False)


@pytest.fixture(scope="module")
def commands() -> dict[str, str]:
    root = typer.main.get_command(cli.command_line())
    return {name: command.help or "" for name, command in root.commands.items()}  # type: ignore[attr-defined]


def test_every_command_of_the_contract_is_there_with_help(commands: dict[str, str]) -> None:
    contract = (
        "demo check ingest nightly serve baseline excursions investigate capability points "
        "runlength"
    )
    assert set(contract.split()) <= set(commands)
    assert all(len(text.split()) >= 4 for text in commands.values())


def test_the_table_of_the_help_says_what_the_commands_say() -> None:
    modules = {f"service.{file.stem}" for file in (ROOT / "service").glob("cli_*.py")}
    found = {
        name: (module, command.get_short_help_str(200))
        for module in sorted(modules)
        for name, command in cli.built(module).items()
    }
    assert found == cli.COMMANDS


def test_the_help_reads_nothing_heavy() -> None:
    heavy = {"numpy", "pandas", "scipy", "pyarrow", "sqlalchemy", "pydantic", "rich", "altair"}
    script = (
        "import sys; from service.cli import command_line\n"
        "try: command_line()(['--help'])\n"
        f"except SystemExit: print(sorted({heavy!r} & set(sys.modules)))"
    )
    command = [sys.executable, "-S", "-c", f"import sys; sys.path[:] = {sys.path!r}\n{script}"]
    done = subprocess.run(command, cwd=ROOT, capture_output=True, text=True, check=True)
    assert "Commands:" in done.stdout
    assert done.stdout.splitlines()[-1] == "[]"


def test_every_command_has_a_help_of_its_own(commands: dict[str, str]) -> None:
    assert "--holds-from" in run("baseline", "approve", "--help").stdout
    runner = CliRunner()
    for name in commands:
        done = runner.invoke(cli.command_line(), [name, "--help"])
        assert done.exit_code == 0
        assert f" {name} [OPTIONS]" in done.stdout


def test_every_command_is_named_in_the_readme(commands: dict[str, str]) -> None:
    readme = (ROOT / "README.md").read_text("utf-8")
    missing = [
        name
        for name in commands
        if f"`yellowbay {name}" not in readme and f"`{name}`" not in readme
    ]
    assert missing == []


def test_status_2_for_wrong_usage_and_wrong_configuration(tmp_path: Path) -> None:
    assert run("runlength", "--ewma", "2").returncode == 2
    assert run("nightly", "--no-such-option").returncode == 2
    nowhere = run("nightly", "--config", str(tmp_path / "none.toml"))
    assert nowhere.returncode == 2
    assert "there is no such file" in nowhere.stderr
    assert nowhere.stdout == ""


@pytest.mark.parametrize(
    ("options", "arl"),
    [
        # Champ & Woodall (1987), Technometrics 29, table 1: in-control, zero state.
        (("--rules", "beyond-3s"), 370.40),
        (("--rules", "beyond-3s,2of3-beyond-2s"), 225.44),
        (("--rules", "beyond-3s,4of5-beyond-1s"), 166.05),
        (("--rules", "beyond-3s,8-one-side"), 152.73),
        (("--rules", "beyond-3s,2of3-beyond-2s,4of5-beyond-1s,8-one-side"), 91.75),
        # Lucas (1976), J. Quality Technology 8: two-sided CUSUM k = 0.5, h = 4 (from memory).
        (("--cusum", "0.5,4"), 168.0),
    ],
)
def test_run_lengths_from_the_command_line(options: tuple[str, ...], arl: float) -> None:
    answer = json.loads(run("runlength", *options, "--json").stdout)
    assert set(answer) == {"design", "shift", "arl", "sdrl", "median"}
    assert answer["arl"] == pytest.approx(arl, abs=0.006 if arl != 168.0 else 0.5)


def test_several_designs_are_compared(tmp_path: Path) -> None:
    figure = tmp_path / "compare.svg"
    done = run(
        "runlength", "--rules", "beyond-3s", "--ewma", "0.2,2.962", "--shift", "0", "--shift", "1",
        "--figure", str(figure), "--json",
    )  # fmt: skip
    rows = json.loads(done.stdout)
    assert [(r["design"].split()[0], r["shift"]) for r in rows] == [
        ("rules", 0.0), ("rules", 1.0), ("ewma", 0.0), ("ewma", 1.0),
    ]  # fmt: skip
    assert figure.read_text("utf-8").startswith("<svg")


def test_the_example_configuration_is_sound() -> None:
    done = run("check", "--config", "config/bay.toml", "--json")
    document = json.loads(done.stdout)
    assert done.returncode == 0
    assert document["mistakes"] == []
    assert not (ROOT / "config" / "bay.db").exists(), "check leaves no database behind"

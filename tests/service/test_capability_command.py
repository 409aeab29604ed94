"""`yellowbay capability` from drops to page, spreadsheet and JSON."""

from __future__ import annotations

import csv
import io
import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import typer
from typer.testing import CliRunner

from config.load import load_bay
from ingest.load import take_in
from service import cli_reports
from service.context import CommandError, Session
from spc.monitoring.evaluation import evaluate

BAY = """
[bay]
name = "North bay"
time_zone = "Europe/Dublin"
control_plan = "control_plan.toml"
[database]
url = "sqlite:///bay.db"
[drops]
folder = "drops"
settle_seconds = 0
[mail]
folder = "mail"
from = "spc@example.com"
to = ["shift@example.com"]
"""
PLAN = """
[[characteristic]]
name = "oxide"
parameter = "oxide_thickness"
unit = "angstrom"
stream_by = ["tool"]
target = 560.0
lower_spec = 460.0
upper_spec = 660.0
[[characteristic]]
name = "CD without a specification"
parameter = "cd"
unit = "nm"
stream_by = ["tool"]
"""
AS_OF = "2026-06-01T05:30:00+01:00"


@pytest.fixture
def bay(tmp_path: Path, shared_reference: Callable[[str], Any]) -> Path:
    """The furnace study of the e-Handbook (3.5.1), a reading a lot, as a drop of May 2026."""
    with shared_reference("furnace_oxide.csv").open() as file:
        values = [row["thickness_angstrom"] for row in csv.DictReader(file)]
    (tmp_path / "drops").mkdir()
    (tmp_path / "bay.toml").write_text(BAY, "utf-8")
    (tmp_path / "control_plan.toml").write_text(PLAN, "utf-8")
    rng = np.random.default_rng(1)
    text = io.StringIO()
    out = csv.writer(text)
    out.writerow(["measured_at", "parameter", "value", "unit", "lot", "wafer", "site", "tool"])
    for i, value in enumerate(values):
        at = f"2026-05-{1 + i // 8:02d}T{2 * (i % 8) + 1:02d}:00:00Z"
        out.writerow([at, "oxide_thickness", value, "angstrom", f"{i:06d}", "1", "1", "F1"])
        for site in range(3):
            cd = 350 + rng.standard_normal()
            out.writerow([at, "cd", f"{cd:.3f}", "nm", f"{i:06d}", "1", str(site), "<b>E1"])
    (tmp_path / "drops" / "night.csv").write_text(text.getvalue(), "utf-8")
    session = Session(load_bay(tmp_path / "bay.toml"))
    clock = session.stamp(AS_OF)
    assert take_in(session.engine, session.bay, clock).readings["rejected"] == 0  # type: ignore[index]
    evaluate(session.engine, session.bay, clock)
    return tmp_path


def run(*arguments: str) -> Any:
    """The command alone, as the front door registers it."""
    app = typer.Typer()
    cli_reports.register(app)
    return CliRunner().invoke(app, ["capability", *arguments])


def test_the_furnace_case_from_a_drop(bay: Path, shared_reference: Callable[[str], Any]) -> None:
    given = ("--config", str(bay / "bay.toml"), "--month", "2026-05", "--as-of", AS_OF)
    result = run(*given, "--json")
    assert result.exit_code == 0, result.output
    rows = json.loads(result.stdout)
    assert [(row["characteristic"], row["context"]) for row in rows] == [
        ("oxide", {}),
        ("oxide", {"tool": "F1"}),
        ("CD without a specification", {}),
        ("CD without a specification", {"tool": "<b>E1"}),
    ]
    published = {
        one["quantity"]: one["published"]
        for one in shared_reference("furnace_reference.json")["published"]
    }
    oxide = rows[0]
    assert oxide["n_readings"] == 168
    assert oxide["pp"] == pytest.approx(published["Cp"], abs=6e-6)
    assert oxide["ppk"] == pytest.approx(published["Cpk"], abs=6e-6)
    assert oxide["cpm"] == pytest.approx(published["Cpm"], abs=6e-6)
    bare = rows[2]
    assert (bare["n_lots"], bare["n_wafers"], bare["n_readings"]) == (168, 168, 504)
    assert bare["cpk"] is None
    assert bare["ppm_observed"] is None
    assert bare["sd_within"] == pytest.approx(1.0, abs=0.1)
    page = bay / "reports" / "reviews" / "review-2026-05.html"
    html = page.read_text("utf-8")
    assert "<b>E1" not in html
    assert "&lt;b&gt;E1" in html
    first = (html, (page.with_suffix(".xlsx")).read_bytes())
    again = run(*given)
    assert str(page) in again.output
    assert "May 2026" in again.output
    assert (page.read_text("utf-8"), page.with_suffix(".xlsx").read_bytes()) == first


def test_the_spreadsheet_holds_the_numbers(bay: Path) -> None:
    openpyxl = pytest.importorskip("openpyxl")
    given = ("--config", str(bay / "bay.toml"), "--month", "2026-05", "--as-of", AS_OF)
    rows = json.loads(run(*given, "--json").stdout)
    book = openpyxl.load_workbook(bay / "reports" / "reviews" / "review-2026-05.xlsx")
    sheet = book.worksheets[1]
    numbers = {cell.value for line in sheet.iter_rows(min_row=2) for cell in line}
    for key in ("pp", "ppk", "ppk_low", "mean", "sd_overall"):
        assert any(
            isinstance(n, float) and n == pytest.approx(rows[0][key], rel=1e-12) for n in numbers
        )


def test_another_month_is_empty_and_no_month_is_wrong_usage(bay: Path) -> None:
    given = ("--config", str(bay / "bay.toml"), "--as-of", AS_OF)
    rows = json.loads(run(*given, "--month", "2026-04", "--json").stdout)
    assert len(rows) == 4
    assert {row["n_readings"] for row in rows} == {0}
    assert {row["ppk"] for row in rows} == {None}
    wrong = run(*given, "--month", "May", "--json")
    assert isinstance(wrong.exception, CommandError)
    assert wrong.exception.status == 2
    assert "YYYY-MM" in str(wrong.exception)
    assert wrong.stdout == ""


def test_a_gauge_that_the_plan_does_not_know_is_told_beside_the_json(bay: Path) -> None:
    given = ("--config", str(bay / "bay.toml"), "--month", "2026-05", "--as-of", AS_OF)
    result = run(*given, "--gauge-share-removed", "--json")
    assert {row["gauge_removed"] for row in json.loads(result.stdout)} == {False}
    assert "oxide: the plan has no gauge_sd" in result.stderr

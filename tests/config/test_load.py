"""Both configuration files: what is read, and every mistake of both at once."""

from __future__ import annotations

from datetime import timedelta
from pathlib import Path

import pytest

from config.control_plan import WESTERN_ELECTRIC
from config.errors import ConfigurationError, Mistake
from config.load import load_bay
from config.values import house_unit, parse_duration, unit_factor

BAY = """
[bay]
name = "North bay"
time_zone = "Europe/Dublin"
control_plan = "control_plan.toml"
"""

PLAN = """
[[characteristic]]
name = "M1 resist thickness"
parameter = "resist_thickness"
unit = "nm"
where = { layer = "M1" }
stream_by = ["tool", "module"]
target = 1200.0
lower_spec = 1176.0
upper_spec = 1224.0
expected_every = "36h"
"""


def write(folder: Path, bay: str = BAY, plan: str = PLAN) -> Path:
    (folder / "control_plan.toml").write_text(plan, "utf-8")
    (folder / "bay.toml").write_text(bay, "utf-8")
    return folder / "bay.toml"


def mistakes(folder: Path, bay: str = BAY, plan: str = PLAN) -> list[Mistake]:
    with pytest.raises(ConfigurationError) as caught:
        load_bay(write(folder, bay, plan))
    return caught.value.mistakes


def test_the_defaults_are_those_of_the_contract(tmp_path: Path) -> None:
    bay = load_bay(write(tmp_path))
    settings, [characteristic] = bay.settings, bay.plan.characteristic
    assert bay.database_url == f"sqlite:///{tmp_path}/bay.db"
    assert bay.path(settings.drops.folder) == tmp_path / "drops"
    assert settings.drops.settle_seconds == 5
    assert settings.nightly.hour_minute == (5, 30)
    assert settings.nightly.false_excursions_per_night == 0.5
    assert characteristic.rules == WESTERN_ELECTRIC
    assert characteristic.baseline_points == 30
    assert characteristic.point == "lot"
    assert characteristic.expected_every == timedelta(hours=36)


def test_every_mistake_of_both_files_at_once(tmp_path: Path) -> None:
    bay = BAY.replace("Europe/Dublin", "Europe/Atlantis") + (
        '[nightly]\nat = "25:00"\nreprots = "x"\n[drops]\nsettle_seconds = "soon"\n'
        '[database]\nurl = "postgresql+psycopg://bay:hunter2@db/bay"\n'
    )
    plan = PLAN.replace('unit = "nm"\n', "").replace("1176.0", "1300.0") + (
        'rules = ["beyond-3s", "sometimes"]\nowners = ["nobody"]\naction_plan = "none.md"\n'
    )
    found = {(m.file, m.key): m for m in mistakes(tmp_path, bay, plan)}
    assert set(found) == {
        ("bay.toml", "bay.time_zone"),
        ("bay.toml", "nightly.at"),
        ("bay.toml", "nightly.reprots"),
        ("bay.toml", "drops.settle_seconds"),
        ("bay.toml", "database.url"),
        ("control_plan.toml", "characteristic[0].unit"),
        ("control_plan.toml", "characteristic[0].rules"),
        ("control_plan.toml", "characteristic[0].owners"),
    }
    assert "reports" in found["bay.toml", "nightly.reprots"].mend
    assert all(m.mend.endswith((".", "?")) for m in found.values())
    assert "hunter2" not in str(found["bay.toml", "database.url"])


def test_mistakes_that_only_show_when_the_values_are_sound(tmp_path: Path) -> None:
    plan = PLAN.replace("1176.0", "1300.0")
    [mistake] = mistakes(tmp_path, plan=plan)
    assert mistake.reason == "lower_spec must be below upper_spec"
    [mistake] = mistakes(tmp_path, plan=PLAN + 'action_plan = "none.md"\n')
    assert mistake.key == "characteristic[0].action_plan"
    second = PLAN + PLAN.replace("M1 resist thickness", "again").replace('"nm"', '"V"')
    [mistake] = mistakes(tmp_path, plan=second)
    assert (mistake.key, mistake.value) == ("characteristic[1].unit", "V")


def test_missing_and_broken_files(tmp_path: Path) -> None:
    with pytest.raises(ConfigurationError, match="there is no such file"):
        load_bay(tmp_path / "nowhere.toml")
    write(tmp_path, plan="[[characteristic]\n")
    with pytest.raises(ConfigurationError, match="is no TOML"):
        load_bay(tmp_path / "bay.toml")
    (tmp_path / "control_plan.toml").write_bytes(b"\xff\xfe")
    with pytest.raises(ConfigurationError, match="not UTF-8"):
        load_bay(tmp_path / "bay.toml")


@pytest.mark.parametrize(
    ("given", "wanted", "factor"),
    [
        # SI prefixes; the angstrom is 0.1 nm (SI brochure, 8th edition, table 8).
        ("um", "nm", 1000.0),
        ("\u00b5m", "nm", 1000.0),
        ("\u03bcm", "nm", 1000.0),
        ("\u212b", "nm", 0.1),
        ("\u00c5", "nm", 0.1),
        ("angstrom", "um", 1e-4),
        ("mm", "um", 1000.0),
        ("nm", "V", None),
        ("rpm", "rpm", 1.0),
    ],
)
def test_units(given: str, wanted: str, factor: float | None) -> None:
    found = unit_factor(given, wanted)
    assert found is None if factor is None else found == pytest.approx(factor, rel=1e-15)


def test_house_unit_keeps_what_it_does_not_know() -> None:
    assert house_unit(" rpm ") == ("rpm", 1.0)


@pytest.mark.parametrize("text", ["", "36", "soon", "-2h", "0h", "1y"])
def test_durations_that_are_none(text: str) -> None:
    with pytest.raises(ValueError, match="not a duration"):
        parse_duration(text)

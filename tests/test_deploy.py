"""What is shipped to run the service: the container file and the systemd unit, read as text.

No engine for containers runs where the tests run, so the image is not built here; what can be
judged without building it is.
"""

from __future__ import annotations

import json
import re
import shutil
import subprocess
from configparser import ConfigParser
from pathlib import Path

import pytest

from service.cli import COMMANDS
from tests.conftest import skip_or_fail

ROOT = Path(__file__).resolve().parents[1]
CONTAINER = (ROOT / "deploy" / "Containerfile").read_text("utf-8")
SECRET = re.compile(r"passw|secret|token|credential|_key\b|api.?key", re.IGNORECASE)


def stages(text: str) -> list[list[tuple[str, str]]]:
    """Instructions of each stage: (name, arguments), lines joined, comments out."""
    lines = [line for line in text.splitlines() if line.strip() and not line.startswith("#")]
    joined = re.sub(r"\\\n\s*", "", "\n".join(lines))
    found: list[list[tuple[str, str]]] = []
    for line in joined.splitlines():
        name, _, rest = line.strip().partition(" ")
        if name == "FROM":
            found.append([])
        found[-1].append((name, rest.strip()))
    return found


def values(stage: list[tuple[str, str]], name: str) -> list[str]:
    return [rest for one, rest in stage if one == name]


def test_the_container_runs_as_an_ordinary_user() -> None:
    last = stages(CONTAINER)[-1]
    [user] = values(last, "USER")
    assert int(user) >= 10_000, "a number: an engine can see that it is not root"
    assert f"--uid {user}" in values(last, "RUN")[0]
    names = [name for name, _ in last]
    assert names.index("USER") > max(i for i, n in enumerate(names) if n in ("RUN", "COPY"))


def test_the_container_holds_no_secret() -> None:
    for stage in stages(CONTAINER):
        assert values(stage, "ARG") == []
        for text in values(stage, "ENV"):
            assert not SECRET.search(text), text
    copied = [part for text in values(stages(CONTAINER)[0], "COPY") for part in text.split()[:-1]]
    assert "." not in copied, "the whole folder may hold a database or a secret"
    for part in copied:
        assert (ROOT / part).exists(), part


def test_the_container_has_what_the_package_has() -> None:
    import tomllib

    packages = tomllib.loads((ROOT / "pyproject.toml").read_text("utf-8"))
    wanted = {
        name.rstrip("*") for name in packages["tool"]["setuptools"]["packages"]["find"]["include"]
    }
    copied = {part for text in values(stages(CONTAINER)[0], "COPY") for part in text.split()}
    assert wanted <= copied


def test_the_container_installs_the_pinned_versions_alone() -> None:
    runs = [text for stage in stages(CONTAINER) for text in values(stage, "RUN")]
    installs = [text for text in runs if "pip install" in text]
    assert installs
    assert all("-c constraints.txt" in text for text in installs)
    assert not any(word in text for text in runs for word in ("curl", "wget", "apt-get"))
    assert [stage for stage in stages(CONTAINER) if values(stage, "ADD")] == []
    for line in (ROOT / "constraints.txt").read_text("utf-8").splitlines():
        if line.strip() and not line.startswith("#"):
            assert re.fullmatch(r"[A-Za-z0-9._-]+==[^ ]+( *[;#].*)?", line), line


def test_the_container_starts_stops_and_says_how_it_is() -> None:
    last = stages(CONTAINER)[-1]
    [entry], [command] = values(last, "ENTRYPOINT"), values(last, "CMD")
    assert json.loads(entry) == ["yellowbay"], "no shell in between, so that signals arrive"
    assert json.loads(command) == ["serve"]
    [health] = values(last, "HEALTHCHECK")
    words = json.loads(health[health.index("CMD ") + 4 :])
    assert words[0] == "yellowbay"
    assert words[1] in COMMANDS
    assert json.loads(values(last, "VOLUME")[0]) == values(last, "WORKDIR") == ["/bay"]
    usage = "\n".join(line for line in CONTAINER.splitlines() if line.startswith("#"))
    for option in ("--read-only", "--cap-drop=all", "no-new-privileges", "--tmpfs /tmp", ":ro"):
        assert option in usage


@pytest.fixture(scope="module")
def unit() -> dict[str, str]:
    parser = ConfigParser(interpolation=None, strict=False)
    parser.optionxform = str  # type: ignore[assignment,method-assign]
    parser.read(ROOT / "deploy" / "yellowbay.service", "utf-8")
    return dict(parser["Service"])


def test_the_unit_has_no_privileges(unit: dict[str, str]) -> None:
    assert unit["User"] not in ("", "root")
    assert (unit["CapabilityBoundingSet"], unit["AmbientCapabilities"]) == ("", "")
    assert unit["ProtectSystem"] == "strict"
    for name in ("NoNewPrivileges", "PrivateTmp", "PrivateDevices", "ProtectHome"):
        assert unit[name] == "yes"
    assert unit["ExecStart"].split()[1] in COMMANDS
    assert not [value for name, value in unit.items() if name == "Environment"]


def analyze(*words: str) -> subprocess.CompletedProcess[str]:
    if shutil.which("systemd-analyze") is None:
        skip_or_fail("systemd-analyze is not on this machine (Debian: apt-get install systemd)")
    command = ["systemd-analyze", *words]
    return subprocess.run(command, capture_output=True, text=True, check=False)


def test_systemd_reads_the_unit_and_rates_it_well(tmp_path: Path) -> None:
    """Nothing to complain of, and an exposure below 2.0 of 10 (its own word for it: OK)."""
    words = (ROOT / "deploy" / "yellowbay.service").read_text("utf-8")
    file = tmp_path / "yellowbay.service"
    file.write_text(words.replace("/opt/yellowbay/.venv/bin/yellowbay", "/bin/true"), "utf-8")
    checked = analyze("verify", str(file))
    assert (checked.returncode, checked.stderr) == (0, "")
    rated = analyze("security", "--offline=true", str(file))
    [figure] = re.findall(r"exposure level for yellowbay.service: ([\d.]+)", rated.stdout)
    assert float(figure) < 2.0

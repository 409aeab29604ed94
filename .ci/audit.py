"""Whether the pinned packages fit together and have known faults: `python .ci/audit.py`.

`pip check` must pass. Advisories are asked with pip-audit, installed aside for the moment; where
they cannot be asked (no network, a registry that does not serve them) that is said plainly and is
no failure. A finding is one.
"""

from __future__ import annotations

import json
import subprocess
import sys
import tempfile
import urllib.request
from pathlib import Path
from typing import Any

TOOL = "pip-audit==2.10.1"
PATIENCE_SECONDS = 120
ADVISORIES = "https://pypi.org/pypi/{name}/{version}/json"  # where pip-audit finds them
CONSTRAINTS = Path(__file__).resolve().parents[1] / "constraints.txt"


class NotAskedError(Exception):
    """The advisories cannot be had."""


def pinned(file: Path) -> list[str]:
    """The requirements of a constraints file."""
    lines = (line.partition("#")[0].strip() for line in file.read_text("utf-8").splitlines())
    return [line for line in lines if line]


def findings(report: dict[str, Any]) -> list[str]:
    """Known faults in a report of pip-audit, a line each.

    Raises NotAskedError when a package was not looked up: silence would look like a clean bill.
    """
    found, skipped = [], []
    for one in report["dependencies"]:
        if "skip_reason" in one:
            skipped.append(one)
        for fault in one.get("vulns", ()):
            mend = ", ".join(fault.get("fix_versions", ())) or "no version yet"
            found.append(f"{one['name']} {one['version']}: {fault['id']}, mended in {mend}")
    if skipped and not found:
        count = len(report["dependencies"])
        raise NotAskedError(f"{len(skipped)} of {count} packages: {skipped[0]['skip_reason']}")
    return found


def run(command: list[str], seconds: float = PATIENCE_SECONDS) -> subprocess.CompletedProcess[str]:
    """Run a command; raises NotAskedError when it takes too long."""
    try:
        return subprocess.run(command, capture_output=True, text=True, timeout=seconds, check=False)
    except subprocess.TimeoutExpired:
        raise NotAskedError(f"no answer within {seconds:g} s") from None


def last_line(text: str) -> str:
    """The last line that says something."""
    lines = [line.strip() for line in text.splitlines() if line.strip()]
    return lines[-1] if lines else "no reason given"


def ask(requirements: list[str], tool: Path, folder: Path) -> list[str]:
    """Known faults of some requirements. Raises NotAskedError."""
    file = folder / "requirements.txt"
    file.write_text("\n".join(requirements) + "\n", "utf-8")
    options = ["--no-deps", "--disable-pip", "--format", "json", "--progress-spinner", "off"]
    done = run([str(tool), "--requirement", str(file), *options])
    try:
        report = json.loads(done.stdout)
    except json.JSONDecodeError:
        raise NotAskedError(last_line(done.stderr)) from None
    return findings(report)


def probe(requirement: str) -> None:
    """Ask one question as pip-audit would, before it is installed. Raises NotAskedError."""
    name, _, version = requirement.partition("==")
    url = ADVISORIES.format(name=name, version=version.partition(";")[0].strip())
    try:
        with urllib.request.urlopen(url, timeout=10):
            return
    except OSError as error:
        raise NotAskedError(f"{url}: {error}") from None


def audit() -> list[str]:
    """Known faults of the pinned packages. Raises NotAskedError."""
    requirements = pinned(CONSTRAINTS)
    probe(requirements[0])
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        run([sys.executable, "-m", "venv", str(folder / "venv")])
        pip = str(folder / "venv" / "bin" / "pip")
        done = run([pip, "install", "--quiet", TOOL])
        if done.returncode:
            raise NotAskedError(f"{TOOL} cannot be installed: {last_line(done.stderr)}")
        return ask(requirements, folder / "venv" / "bin" / "pip-audit", folder)


def say(line: str) -> None:
    """A line on standard output."""
    sys.stdout.write(line + "\n")


def main() -> int:
    """Check and ask; the exit status."""
    check = subprocess.run([sys.executable, "-m", "pip", "check"], check=False)
    try:
        found = audit()
    except NotAskedError as reason:
        say(f"advisories could not be asked: {reason}")
        return check.returncode
    for line in found:
        say(f"known fault: {line}")
    if not found:
        say(f"no known faults in {len(pinned(CONSTRAINTS))} pinned packages")
    return 1 if found else check.returncode


if __name__ == "__main__":
    sys.exit(main())

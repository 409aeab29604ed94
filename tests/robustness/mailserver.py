"""A real mail server (aiosmtpd) in a process of its own, which keeps what it accepts as files.

Being another process it outlives the senders that are killed, and forking those is safe. How it
behaves is read from a file before each message: `refuse STEP CODE`, or `die after DATA` (the
message is accepted, the connection is cut before the sender hears of it).
"""

from __future__ import annotations

import socket
import subprocess
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any


@dataclass(frozen=True)
class MailServer:
    """Where the server listens, and the folder in which it keeps messages."""

    port: int
    folder: Path

    def behave(self, how: str) -> None:
        """Set the behaviour from the next message on; empty for a good server."""
        (self.folder / "behave").write_text(how, "utf-8")

    def messages(self) -> list[bytes]:
        """What was accepted, in order."""
        return [p.read_bytes() for p in sorted(self.folder.glob("*.msg"))]


@contextmanager
def mail_server(folder: Path) -> Iterator[MailServer]:
    """Start a server; it ends with the block."""
    folder.mkdir(parents=True, exist_ok=True)
    with socket.create_server(("127.0.0.1", 0)) as probe:
        port = int(probe.getsockname()[1])
    command = [sys.executable, "-m", "tests.robustness.mailserver", str(port), str(folder)]
    root = Path(__file__).resolve().parents[2]
    process = subprocess.Popen(command, cwd=root)
    try:
        _wait_for(port)
        yield MailServer(port, folder)
    finally:
        process.kill()
        process.wait()


def _wait_for(port: int) -> None:
    deadline = time.monotonic() + 30
    while True:
        try:
            socket.create_connection(("127.0.0.1", port), 1).close()
        except OSError:
            if time.monotonic() > deadline:
                raise
            time.sleep(0.05)
        else:
            return


class Keeper:
    """The handler: keeps, refuses, or dies as it is told."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.count = 0

    def _told(self, step: str) -> str | None:
        file = self.folder / "behave"
        words = file.read_text("utf-8").split(None, 2) if file.exists() else []
        return words[2] if words[:2] == ["refuse", step] else None

    async def handle_EHLO(
        self, server: Any, session: Any, envelope: Any, hostname: str, responses: list[str]
    ) -> list[str]:
        session.host_name = hostname
        told = self._told("EHLO")
        return [told] if told else responses

    async def handle_HELO(self, server: Any, session: Any, envelope: Any, hostname: str) -> str:
        session.host_name = hostname
        return self._told("EHLO") or "250 here"

    async def handle_MAIL(
        self, server: Any, session: Any, envelope: Any, address: str, options: list[str]
    ) -> str:
        told = self._told("MAIL")
        if told is None:
            envelope.mail_from = address
        return told or "250 OK"

    async def handle_RCPT(
        self, server: Any, session: Any, envelope: Any, address: str, options: list[str]
    ) -> str:
        told = self._told("RCPT")
        if told is None:
            envelope.rcpt_tos.append(address)
        return told or "250 OK"

    async def handle_DATA(self, server: Any, session: Any, envelope: Any) -> str:
        told = self._told("DATA")
        if told is not None:
            return told
        self.count += 1
        part = self.folder / f"{self.count:04d}.part"
        part.write_bytes(envelope.original_content)
        part.rename(part.with_suffix(".msg"))
        file = self.folder / "behave"
        if file.exists() and file.read_text("utf-8").startswith("die"):
            server.transport.abort()
        return "250 OK"


def main() -> None:
    """Serve until killed."""
    from aiosmtpd.controller import Controller

    port, folder = int(sys.argv[1]), Path(sys.argv[2])
    Controller(Keeper(folder), hostname="127.0.0.1", port=port).start()
    while True:
        time.sleep(60)


if __name__ == "__main__":
    main()

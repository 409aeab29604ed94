"""The outbox against a real SMTP server (aiosmtpd) that can refuse at each step of the dialogue."""

from __future__ import annotations

import socket
import ssl
from collections.abc import Iterator
from datetime import UTC, datetime, timedelta
from email import message_from_bytes
from email.message import EmailMessage
from email.policy import SMTP
from pathlib import Path
from typing import Any

import pytest
import trustme
from aiosmtpd.controller import Controller
from aiosmtpd.smtp import AuthResult
from sqlalchemy import Engine, select

from config.settings import MailSettings
from reports.outbox import LONGEST_WAIT, MOST_ATTEMPTS, Outgoing, queue, send_due, wait_after
from reports.smtp import Carrier
from spc.records.sessions import open_database
from spc.records.tables import outbox

NIGHT = datetime(2026, 11, 30, 5, 30, tzinfo=UTC)


class Box:
    """An SMTP handler that keeps what it accepts and refuses at the step it is told to."""

    def __init__(self) -> None:
        self.kept: list[tuple[list[str], bytes]] = []
        self.refuse: dict[str, str] = {}

    async def handle_EHLO(
        self, server: Any, session: Any, envelope: Any, hostname: str, responses: list[str]
    ) -> list[str]:
        session.host_name = hostname
        return [self.refuse["EHLO"]] if "EHLO" in self.refuse else responses

    async def handle_HELO(self, server: Any, session: Any, envelope: Any, hostname: str) -> str:
        session.host_name = hostname
        return self.refuse.get("EHLO", "250 here")

    async def handle_MAIL(
        self, server: Any, session: Any, envelope: Any, address: str, options: list[str]
    ) -> str:
        if "MAIL" in self.refuse:
            return self.refuse["MAIL"]
        envelope.mail_from = address
        return "250 OK"

    async def handle_RCPT(
        self, server: Any, session: Any, envelope: Any, address: str, options: list[str]
    ) -> str:
        if "RCPT" in self.refuse:
            return self.refuse["RCPT"]
        envelope.rcpt_tos.append(address)
        return "250 OK"

    async def handle_DATA(self, server: Any, session: Any, envelope: Any) -> str:
        if "DATA" in self.refuse:
            return self.refuse["DATA"]
        self.kept.append((list(envelope.rcpt_tos), envelope.original_content))
        return "250 OK"


def free_port() -> int:
    with socket.create_server(("127.0.0.1", 0)) as probe:
        return int(probe.getsockname()[1])


@pytest.fixture
def box() -> Box:
    return Box()


@pytest.fixture
def server(box: Box) -> Iterator[Controller]:
    controller = Controller(box, hostname="127.0.0.1", port=free_port())
    controller.start()
    yield controller
    controller.stop()


@pytest.fixture
def database(tmp_path: Path) -> Engine:
    return open_database(f"sqlite:///{tmp_path}/bay.db")


def port_of(controller: Controller) -> int:
    return int(controller.port)


def plain(controller: Controller, tmp_path: Path) -> Carrier:
    settings = MailSettings(host="127.0.0.1", port=port_of(controller), security="none")
    return Carrier(settings, tmp_path / "mail")


def outgoing(recipient: str = "shift@example.com", night: str = "20261130") -> Outgoing:
    message = EmailMessage()
    message["Message-ID"] = f"<night-{night}.{recipient.split('@')[0]}@bay.example>"
    message["Subject"] = "1 to act on: track 2 cup 1 −5.9 nm"
    message["To"] = recipient
    message.set_content("Track 2 cup 1 drifts.\n")
    return Outgoing(
        message["Message-ID"], recipient, message["Subject"], message.as_bytes(policy=SMTP)
    )


def put(database: Engine, *messages: Outgoing) -> int:
    with database.begin() as connection:
        return queue(connection, messages, NIGHT)


def states(database: Engine) -> list[tuple[str, int]]:
    with database.connect() as connection:
        rows = connection.execute(select(outbox.c.state, outbox.c.attempts).order_by(outbox.c.id))
        return [(row.state, row.attempts) for row in rows]


def test_a_night_is_queued_and_sent_once(
    database: Engine, server: Controller, box: Box, tmp_path: Path
) -> None:
    assert put(database, outgoing()) == 1
    assert put(database, outgoing()) == 0, "the same Message-ID is the same message"
    carrier = plain(server, tmp_path)
    assert send_due(database, carrier, lambda: NIGHT).sent == 1
    assert send_due(database, carrier, lambda: NIGHT + timedelta(days=9)).sent == 0
    assert put(database, outgoing()) == 0, "not even after it was sent"
    [(recipients, content)] = box.kept
    assert recipients == ["shift@example.com"]
    parsed = message_from_bytes(content, policy=SMTP)
    assert parsed["Subject"] == "1 to act on: track 2 cup 1 −5.9 nm"
    assert parsed.get_content().strip() == "Track 2 cup 1 drifts."


@pytest.mark.parametrize("step", ["EHLO", "MAIL", "RCPT", "DATA"])
def test_a_deferral_at_any_step_is_tried_again_later(
    database: Engine, server: Controller, box: Box, tmp_path: Path, step: str
) -> None:
    """RFC 5321, 4.2.1: a 4yz answer is transient, the same message may go through later."""
    box.refuse = {step: "451 come back later"}
    put(database, outgoing())
    carrier = plain(server, tmp_path)
    delivery = send_due(database, carrier, lambda: NIGHT)
    assert (delivery.sent, delivery.failed) == (0, 1)
    assert states(database) == [("queued", 1)]
    box.refuse = {}
    assert send_due(database, carrier, lambda: NIGHT).sent == 0, "not before its time"
    assert send_due(database, carrier, lambda: NIGHT + wait_after(1)).sent == 1
    assert len(box.kept) == 1


@pytest.mark.parametrize("step", ["MAIL", "RCPT", "DATA"])
def test_a_refusal_for_good_is_not_repeated(
    database: Engine, server: Controller, box: Box, tmp_path: Path, step: str
) -> None:
    box.refuse = {step: "550 no such box"}
    put(database, outgoing())
    delivery = send_due(database, plain(server, tmp_path), lambda: NIGHT)
    what = "recipient shift@example.com" if step == "RCPT" else "message"
    assert delivery.errors == (f"the mail server refused the {what}: 550 no such box",)
    assert states(database) == [("failed", 1)]


def test_no_server_at_all(database: Engine, tmp_path: Path) -> None:
    settings = MailSettings(host="127.0.0.1", port=free_port(), security="none")
    put(database, outgoing())
    [error] = send_due(database, Carrier(settings, tmp_path), lambda: NIGHT).errors
    assert "not to be reached" in error
    assert states(database) == [("queued", 1)]


def test_a_kill_between_yes_and_our_note_sends_again_rather_than_never(
    database: Engine, server: Controller, box: Box, tmp_path: Path
) -> None:
    put(database, outgoing())
    with database.begin() as connection:
        connection.execute(outbox.update().values(state="sending"))
    assert send_due(database, plain(server, tmp_path), lambda: NIGHT).sent == 1
    assert states(database) == [("sent", 0)]


def test_waits_double_up_to_the_longest() -> None:
    waits = [wait_after(n) for n in range(1, MOST_ATTEMPTS + 1)]
    assert waits[:3] == [timedelta(minutes=1), timedelta(minutes=2), timedelta(minutes=4)]
    assert waits[-1] == LONGEST_WAIT
    assert timedelta(days=2) < sum(waits, timedelta()) < timedelta(days=4)


def test_without_a_server_messages_are_kept_as_files(database: Engine, tmp_path: Path) -> None:
    carrier = Carrier(MailSettings(), tmp_path / "mail")
    put(database, outgoing(), outgoing("owner@example.com"))
    assert send_due(database, carrier, lambda: NIGHT).sent == 2
    kept = sorted(p.name for p in (tmp_path / "mail").iterdir())
    assert kept == ["night-20261130.owner.eml", "night-20261130.shift.eml"]
    parsed = message_from_bytes((tmp_path / "mail" / kept[1]).read_bytes(), policy=SMTP)
    assert parsed["To"] == "shift@example.com"


def test_starttls_with_login(
    database: Engine, box: Box, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    authority = trustme.CA()
    context = ssl.create_default_context(ssl.Purpose.CLIENT_AUTH)
    authority.issue_cert("127.0.0.1").configure_cert(context)
    ca_file = tmp_path / "ca.pem"
    authority.cert_pem.write_to_path(str(ca_file))

    def check(
        _server: Any, _session: Any, _envelope: Any, _mechanism: str, data: Any
    ) -> AuthResult:
        return AuthResult(success=(data.login, data.password) == (b"bay", b"secret"), handled=False)

    controller = Controller(
        box,
        hostname="127.0.0.1",
        port=free_port(),
        tls_context=context,
        authenticator=check,
        auth_required=True,
        require_starttls=True,
    )
    controller.start()
    try:
        settings = MailSettings(
            host="127.0.0.1", port=port_of(controller), user="bay", ca_file=ca_file
        )
        put(database, outgoing())
        wrong = send_due(database, Carrier(settings, tmp_path, "guess"), lambda: NIGHT)
        assert "refused the login of 'bay'" in wrong.errors[0]
        assert "guess" not in wrong.errors[0]
        untrusted = MailSettings(host="127.0.0.1", port=port_of(controller), user="bay")
        refused = send_due(
            database, Carrier(untrusted, tmp_path, "secret"), lambda: NIGHT, every=True
        )
        assert "not trusted" in refused.errors[0]
        right = Carrier(settings, tmp_path, "secret")
        assert "secret" not in repr(right)
        assert send_due(database, right, lambda: NIGHT, every=True).sent == 1
    finally:
        controller.stop()

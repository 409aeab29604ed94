"""Mail through a real server: refused at each step, cut off, the sender killed at any moment."""

from __future__ import annotations

import json
import random
from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass
from email import message_from_bytes
from pathlib import Path

import pytest
from sqlalchemy import select

from spc.records.sessions import open_database
from spc.records.tables import outbox
from tests.robustness import moments
from tests.robustness.mailserver import MailServer, mail_server
from tests.robustness.smallbay import SmallBay, make, night

RECIPIENTS = ["b@example.com", "c@example.com", "d@example.com"]


# Forks a process that has drawn nothing yet: see test_in_its_own_process.py.
pytestmark = pytest.mark.forks


@pytest.fixture(scope="module")
def server(tmp_path_factory: pytest.TempPathFactory) -> Iterator[MailServer]:
    with mail_server(tmp_path_factory.mktemp("server")) as running:
        yield running


@pytest.fixture
def good(server: MailServer) -> MailServer:
    server.behave("")
    for file in server.folder.glob("*.msg"):
        file.unlink()
    return server


@pytest.fixture
def bay(good: MailServer, tmp_path: Path) -> SmallBay:
    mail = (
        f'[mail]\nfrom = "a@example.com"\nto = {json.dumps(RECIPIENTS)}\nhost = "127.0.0.1"\n'
        f'port = {good.port}\nsecurity = "none"\n'
    )
    return make(tmp_path / "bay", extra=mail, nights=1)


def ids(server: MailServer) -> Counter[str]:
    return Counter(str(message_from_bytes(m)["Message-ID"]) for m in server.messages())


def outbox_of(bay: SmallBay) -> dict[str, str]:
    engine = open_database(bay.url)
    with engine.connect() as connection:
        rows = connection.execute(select(outbox.c.message_id, outbox.c.state)).all()
    engine.dispose()
    return {row.message_id: row.state for row in rows}


def nightly(bay: SmallBay) -> tuple[int, str, str]:
    return bay.here("nightly", "--as-of", night(0).isoformat(), "--json")


@pytest.mark.parametrize("step", ["EHLO", "MAIL", "RCPT", "DATA"])
def test_put_off_at_a_step_the_night_says_so_and_the_next_pass_sends(
    bay: SmallBay, good: MailServer, step: str
) -> None:
    """RFC 5321, 4.2.1: a 4yz answer is transient."""
    good.behave(f"refuse {step} 451 busy")
    status, out, told = nightly(bay)
    assert status == 1
    assert json.loads(out)["mail"] == {"queued": 3, "sent": 0, "failed": 3}
    assert all(line.startswith("yellowbay: mail: ") for line in told.splitlines())
    assert "451" in told
    good.behave("")
    assert bay.json("nightly", "--as-of", night(0).isoformat())["mail"]["sent"] == 3
    assert set(ids(good).values()) == {1}
    assert len(ids(good)) == 3


def test_a_server_that_is_down(bay: SmallBay, good: MailServer) -> None:
    text = bay.config.read_text("utf-8")
    bay.config.write_text(text.replace(f"port = {good.port}", "port = 1"), "utf-8")
    status, _out, told = nightly(bay)
    assert status == 1
    [line] = told.splitlines()
    assert "is not to be reached" in line
    bay.config.write_text(text, "utf-8")
    assert bay.json("nightly", "--as-of", night(0).isoformat())["mail"]["sent"] == 3
    assert len(ids(good)) == 3


def test_a_server_that_dies_after_taking_the_message(bay: SmallBay, good: MailServer) -> None:
    """The one window in which a mail can come twice: taken, but nobody told us."""
    good.behave("die after DATA")
    assert nightly(bay)[0] == 1
    assert set(outbox_of(bay).values()) == {"queued"}
    good.behave("")
    assert nightly(bay)[0] == 0
    assert set(ids(good).values()) == {2}, "twice, under the same Message-ID"
    assert set(outbox_of(bay).values()) == {"sent"}
    assert nightly(bay)[0] == 0
    assert sum(ids(good).values()) == 6, "and not a third time"


@dataclass(frozen=True)
class Moments:
    """Moments of a pass in which only mails are left: before the first, and a mail."""

    before: int
    each: int


def only_mails_left(bay: SmallBay, good: MailServer, probe: Path) -> Moments:
    """Bring the bay to where only the mails are left, and count the moments of such a pass."""
    good.behave("refuse MAIL 451 busy")
    assert nightly(bay)[0] == 1
    good.behave("")
    sent = bay.copy(probe)
    full, before = moments.moments_of(sent, 0), moments.moments_of(sent, 0)
    for file in good.folder.glob("*.msg"):
        file.unlink()
    return Moments(before, (full - before) // len(RECIPIENTS))


def kill_while_sending(
    bay: SmallBay, server: MailServer, known: Moments, rng: random.Random, kills: int
) -> tuple[int, int]:
    """Kill the pass while it sends; (kills that struck, messages that came twice)."""
    struck = in_doubt = 0
    for _ in range(kills):
        waiting = sum(state != "sent" for state in outbox_of(bay).values())
        last = known.before + max(known.each * waiting, 1)
        struck += moments.killed_at(bay, 0, rng.randint(known.before + 1, last))
        in_doubt += "sending" in outbox_of(bay).values()
    moments.in_child(bay, 0)
    found = ids(server)
    assert found.keys() == outbox_of(bay).keys(), "no mail is lost"
    assert set(outbox_of(bay).values()) == {"sent"}
    doubled = sum(found.values()) - len(found)
    assert doubled <= in_doubt, "only what was killed in the window can come twice"
    return struck, doubled


def test_a_sender_killed_at_any_moment(bay: SmallBay, good: MailServer, tmp_path: Path) -> None:
    known = only_mails_left(bay, good, tmp_path / "probe")
    struck, _doubled = kill_while_sending(bay, good, known, random.Random(7), 4)
    assert struck >= 2


@pytest.mark.slow
@pytest.mark.parametrize("seed", range(20))
def test_a_sender_killed_many_times(
    bay: SmallBay, good: MailServer, tmp_path: Path, seed: int
) -> None:
    """200 tries to kill it: the figures are in docs/promises.md."""
    known = only_mails_left(bay, good, tmp_path / "probe")
    struck, doubled = kill_while_sending(bay, good, known, random.Random(seed), 10)
    print(f"seed {seed}: {struck} kills, {doubled} doubled")
    assert struck >= 2

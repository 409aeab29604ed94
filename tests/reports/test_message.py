"""The morning mail: who gets it, what it says, how large it is, and that nothing slips in."""

from __future__ import annotations

import re
import socket
from dataclasses import replace
from email import message_from_bytes
from email.message import EmailMessage
from email.policy import default
from smtplib import SMTP
from typing import Any

import html5lib
import pytest

from reports import message
from reports.message import MailOptions, message_id, messages, subject
from reports.model import NightPage
from tests.reports import samples

SHIFT = "litho-shift@example.com"
OPTIONS = MailOptions("litho-spc@example.com", (SHIFT,))


def _parsed(made: EmailMessage) -> Any:
    return message_from_bytes(made.as_bytes(), policy=default)


def _parts(made: EmailMessage) -> tuple[str, str, dict[str, bytes]]:
    parsed = _parsed(made)
    text = parsed.get_body(("plain",)).get_content()
    page = parsed.get_body(("html",)).get_content()
    images = {
        part["Content-ID"].strip("<>"): part.get_content()
        for part in parsed.walk()
        if part.get_content_type() == "image/png"
    }
    return text, page, images


@pytest.fixture(scope="module")
def night() -> NightPage:
    return samples.night()


@pytest.fixture(scope="module")
def mails(night: NightPage) -> list[EmailMessage]:
    return messages(night, OPTIONS)


def test_the_subject_says_the_night(night: NightPage) -> None:
    assert subject(night) == (
        "2 to act on, 2 to watch: TRK2 CUP1 M1 resist thickness −5.9 nm since Tue 22:40"
    )
    assert subject(samples.quiet_night()) == "Quiet night: nothing moved"
    standing = replace(samples.quiet_night(), standing=night.standing)
    assert subject(standing) == "Quiet night: nothing new, 1 still open"


def test_one_mail_a_person_and_owners_get_what_is_theirs(mails: list[EmailMessage]) -> None:
    assert [m["To"] for m in mails] == [
        SHIFT,
        "thickness-owner@example.com",
        "cd-owner@example.com",
    ]
    whole, _, _ = _parts(mails[0])
    theirs, _, _ = _parts(mails[2])
    assert "M1 resist thickness on TRK2" in whole
    assert "What came in" in whole
    assert "M1 CD" in theirs
    assert "resist thickness" not in theirs
    assert "You own what moved here" in theirs


def test_an_owner_on_the_shift_list_gets_the_digest_alone() -> None:
    view = replace(samples.night(), cards=samples.night().cards[3:])
    options = replace(OPTIONS, shift_list=("CD-owner@Example.com", "cd-owner@example.com", SHIFT))
    assert [m["To"] for m in messages(view, options)] == ["CD-owner@Example.com", SHIFT]


def test_a_quiet_night_is_one_line() -> None:
    (made,) = messages(samples.quiet_night(), OPTIONS)
    text, _, images = _parts(made)
    lines = [line for line in text.splitlines() if line.strip()]
    assert lines[0] == "A quiet night: nothing moved on the 212 streams looked at."
    assert lines[1].startswith("The whole night as a page")
    assert len(lines) == 4, "sentence, page, signature mark, signature"
    assert images == {}
    assert len(made.as_bytes()) < 5000


def test_pictures_are_inline_and_the_mail_reads_without(mails: list[EmailMessage]) -> None:
    text, page, images = _parts(mails[0])
    wanted = re.findall(r'src="cid:([^"]+)"', page)
    assert sorted(wanted) == sorted(images)
    assert len(images) == 3
    assert all(picture.startswith(b"\x89PNG") for picture in images.values())
    assert page.count("alt=") == len(images)
    for said in ("−5.9 nm", "Hold the lots", "beyond 3 sigma", "19 signals"):
        assert said in text
    assert text.splitlines()[0].startswith("2 to act on, 2 to watch")
    assert "http://" not in page.replace("http://www.w3.org", "")
    assert "https://" not in page, "nothing is fetched from anywhere"


def test_the_html_is_valid(mails: list[EmailMessage]) -> None:
    _, page, _ = _parts(mails[0])
    html5lib.HTMLParser(strict=True).parse(page)


def test_the_same_night_gives_the_same_bytes(night: NightPage, mails: list[EmailMessage]) -> None:
    again = messages(night, OPTIONS)
    assert [m.as_bytes() for m in again] == [m.as_bytes() for m in mails]


def test_the_message_id_is_of_bay_night_and_recipient(mails: list[EmailMessage]) -> None:
    ids = [m["Message-ID"] for m in mails]
    assert len(set(ids)) == len(ids)
    sender = OPTIONS.sender
    assert message_id(samples.EDITION, SHIFT, sender) == ids[0]
    assert message_id(samples.EDITION, SHIFT.upper(), sender) == ids[0]
    other_bay = replace(samples.EDITION, bay="South bay")
    next_night = replace(samples.EDITION, as_of=samples.at(-1))
    assert message_id(other_bay, SHIFT, sender) != ids[0]
    assert message_id(next_night, SHIFT, sender) != ids[0]
    assert re.fullmatch(r"<[\w.]+@example\.com>", ids[0])


def test_headers_cannot_be_injected() -> None:
    evil = "North\r\nBcc: thief@example.com"
    view = samples.night(("lot\r\nBcc: x@example.com",), edition=replace(samples.EDITION, bay=evil))
    view = replace(view, cards=view.cards[3:])
    stream = replace(view.cards[0].excursion.streams[0], context={"tool": "A\r\nBcc: y@z.example"})
    moved = replace(view.cards[0].excursion, streams=(stream,))
    view = replace(view, cards=(replace(view.cards[0], excursion=moved),))
    for made in messages(view, OPTIONS):
        parsed = _parsed(made)
        assert parsed["Bcc"] is None
        assert len(parsed.get_all("To")) == 1
        assert "\n" not in str(parsed["Subject"])
    for address in ("a@b\r\nBcc: c@d", "a@b, c@d", "<a@b>", "nobody"):
        with pytest.raises(ValueError, match="no mail address"):
            messages(view, replace(OPTIONS, shift_list=(address,)))


def test_hostile_names_stay_text() -> None:
    made = messages(samples.night(samples.HOSTILE), OPTIONS)[0]
    _, page, _ = _parts(made)
    tree = html5lib.parse(page, namespaceHTMLElements=False)
    assert tree.findall(".//script") == []
    assert all(image.get("src", "").startswith("cid:") for image in tree.findall(".//img"))
    assert "\u202e" not in page


@pytest.fixture
def drawn(monkeypatch: pytest.MonkeyPatch, mails: list[EmailMessage]) -> list[int]:
    """Counts pictures, and gives one drawn before instead of drawing many."""
    made: list[int] = []
    picture = next(iter(_parts(mails[0])[2].values()))

    def counted(spec: Any) -> bytes:
        made.append(1)
        return picture

    monkeypatch.setattr(message.render, "png", counted)
    return made


def test_many_excursions_are_ranked_and_the_rest_listed(drawn: list[int]) -> None:
    view = samples.crowded_night(11)
    view = replace(view, page_url="https://bay.example/reports/")
    options = replace(OPTIONS, most_cards=2)
    (digest, *others) = messages(view, options)
    text, page, images = _parts(digest)
    assert len(images) == 2
    assert "And 9 more:" in text
    assert 'href="https://bay.example/reports/x/3.html"' in page
    assert len(others) == 11
    assert len(drawn) == 11, "each picture is drawn once, however many mails show it"


@pytest.mark.usefixtures("drawn")
def test_a_mail_keeps_within_its_size(night: NightPage) -> None:
    whole = len(messages(night, OPTIONS)[0].as_bytes())
    small = messages(night, replace(OPTIONS, most_bytes=whole - 1))[0]
    assert len(small.as_bytes()) < whole
    assert len(_parts(small)[2]) == 2, "the last picture goes first"
    tiny = messages(night, replace(OPTIONS, most_bytes=40_000))[0]
    assert len(tiny.as_bytes()) <= 40_000
    assert "−5.9 nm" in _parts(tiny)[0]
    with pytest.raises(ValueError, match="no mail within"):
        messages(night, replace(OPTIONS, most_bytes=500))


def test_it_passes_a_real_server_unharmed(mails: list[EmailMessage]) -> None:
    from aiosmtpd.controller import Controller
    from aiosmtpd.handlers import Message

    got: list[Any] = []

    class Keep(Message):
        def handle_message(self, message: Any) -> None:
            got.append(message_from_bytes(message.as_bytes(), policy=default))

    with socket.create_server(("127.0.0.1", 0)) as free:
        port = free.getsockname()[1]
    server = Controller(Keep(), hostname="127.0.0.1", port=port)
    server.start()
    try:
        with SMTP("127.0.0.1", port) as client:
            client.send_message(mails[0])
    finally:
        server.stop()
    (there,) = got
    sent = _parsed(mails[0])
    assert there["Subject"] == sent["Subject"]
    assert there["Message-ID"] == sent["Message-ID"]
    for kind in ("plain", "html"):
        ours = sent.get_body((kind,)).get_content().replace("\r\n", "\n")
        assert there.get_body((kind,)).get_content().replace("\r\n", "\n") == ours

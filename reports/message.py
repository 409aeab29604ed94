"""The morning mail: a night in, finished messages out. Nothing is sent and nothing is stored here.

Everybody on the shift list gets the whole night; an owner gets what moved of theirs, unless they
are on the list already: one mail a night and person. A mail has a text part, an HTML part that
reads without its pictures, and the pictures inline. Same night, same bytes: the Message-ID, the
boundaries and the date come from the bay, the night and the recipient alone.
"""

from __future__ import annotations

import hashlib
import re
from concurrent.futures import Future
from dataclasses import dataclass, replace
from email.headerregistry import Address
from email.message import EmailMessage
from email.policy import SMTP
from email.utils import format_datetime
from functools import cache
from typing import Any

from config.values import EMAIL
from reports import figures, render
from reports.model import Edition, ExcursionCard, NightPage
from reports.night import (
    card_facts,
    feed_sentence,
    files_sentence,
    quiet_sentence,
    ranked,
    readings_sentence,
    recent_points,
    signals_sentence,
)
from reports.numbers import LocalClock, plain
from reports.pages import TEMPLATES, environment, link, series_events
from reports.sentences import (
    clock_of,
    forecast_sentence,
    headline,
    night_sentence,
    sentence,
    tally,
)
from reports.texts import shown, text

_POINTS_IN_MAIL = 4
_PLAN_CHARACTERS = 1200
_SUBJECT_CHARACTERS = 180


@dataclass(frozen=True)
class MailOptions:
    """Who sends, who gets the whole night, and how large a mail may be."""

    sender: str
    shift_list: tuple[str, ...] = ()
    most_bytes: int = 2_000_000
    most_cards: int = 8


def messages(view: NightPage, options: MailOptions) -> list[EmailMessage]:
    """All mails of a night, the shift list first, in the order of the addresses given.

    Raises ValueError for an address that is none.
    """
    seen: set[str] = set()
    made: list[EmailMessage] = []
    pictures = _Pictures(view.edition)
    for recipient in options.shift_list:
        if _new(recipient, seen):
            made.append(_message(view, recipient, options, pictures, digest=True))
    owners = [owner for card in ranked(view.cards) for owner in card.owners]
    for owner in owners:
        if _new(owner, seen):
            own = _owned(view, owner)
            made.append(_message(own, owner, options, pictures, digest=False))
    return made


def _new(address: str, seen: set[str]) -> bool:
    if not EMAIL.fullmatch(address) or not address.isprintable():
        raise ValueError(f"{address!r} is no mail address; write name@example.com")
    fresh = address.lower() not in seen
    seen.add(address.lower())
    return fresh


def _owned(view: NightPage, owner: str) -> NightPage:
    def theirs(cards: tuple[ExcursionCard, ...]) -> tuple[ExcursionCard, ...]:
        return tuple(c for c in cards if owner.lower() in {o.lower() for o in c.owners})

    return replace(view, cards=theirs(view.cards), standing=theirs(view.standing))


def message_id(edition: Edition, recipient: str, sender: str) -> str:
    """The Message-ID of a night's mail to a recipient: the same however often it is made."""
    return f"<night.{_digest(edition, recipient)}@{sender.rpartition('@')[2]}>"


def _digest(edition: Edition, recipient: str) -> str:
    night = edition.as_of.astimezone(edition.zone).date().isoformat()
    key = "\0".join((edition.bay, night, recipient.lower()))
    return hashlib.sha256(key.encode("utf-8")).hexdigest()[:40]


def subject(view: NightPage) -> str:
    """`2 to act on, 1 to watch: TRK2 CUP1 thickness −5.9 nm since Tue 22:40`, in one line."""
    cards = ranked(view.cards)
    if not cards:
        key = "mail.subject.standing" if view.standing else "mail.subject.quiet"
        return text(key, bay=shown(view.edition.bay), count=len(view.standing))
    act = sum(card.excursion.tier == "act" for card in cards)
    first = headline(cards[0].excursion, clock_of(view))
    said = text("mail.subject.busy", tally=tally(act, len(cards) - act), headline=first)
    return _one_line(said)


def _one_line(words: str) -> str:
    line = re.sub(r"\s+", " ", plain(words)).strip()
    if len(line) <= _SUBJECT_CHARACTERS:
        return line
    return line[: _SUBJECT_CHARACTERS - 1].rstrip() + "\u2026"


class _Pictures:
    """PNGs of cards, each drawn once for all mails of the night, and beside their making."""

    def __init__(self, edition: Edition) -> None:
        self._edition = edition
        self._drawn: dict[int, Future[bytes]] = {}

    def begin(self, card: ExcursionCard) -> None:
        """Begin to draw the picture of a card, where there is something to draw."""
        number = card.excursion.id
        if number in self._drawn:
            return
        if card.chart and card.chart.points:
            spec = figures.control_chart(card.chart, self._edition, figures.MAIL)
        elif card.wafer_map and card.wafer_map.sites:
            spec = figures.wafer_map(card.wafer_map, 170)
        else:
            return
        self._drawn[number] = render.drawer().submit(render.png, spec)

    def of(self, card: ExcursionCard) -> bytes | None:
        """The picture of a card, or None where there is nothing to draw."""
        self.begin(card)
        drawn = self._drawn.get(card.excursion.id)
        return None if drawn is None else drawn.result()


def _message(
    view: NightPage, recipient: str, options: MailOptions, pictures: _Pictures, *, digest: bool
) -> EmailMessage:
    """The largest mail that keeps within the limit: pictures go first, then cards."""
    n = min(len(view.cards), options.most_cards)
    plans = [(n, k) for k in range(n, -1, -1)] + [(k, 0) for k in range(n - 1, -1, -1)]
    for n_cards, n_pictures in plans:
        built = _build(view, recipient, options, pictures, (n_cards, n_pictures, digest))
        if len(built.as_bytes()) <= options.most_bytes:
            return built
    raise ValueError(f"no mail within {options.most_bytes} bytes can tell this night")


def _build(
    view: NightPage,
    recipient: str,
    options: MailOptions,
    pictures: _Pictures,
    extent: tuple[int, int, bool],
) -> EmailMessage:
    n_cards, n_pictures, digest = extent
    key = _digest(view.edition, recipient)
    domain = options.sender.rpartition("@")[2]
    cards = ranked(view.cards)
    images: dict[str, bytes] = {}
    written = []
    clock = clock_of(view)
    for card in cards[:n_pictures]:
        pictures.begin(card)
    for i, card in enumerate(cards[:n_cards]):
        found = _card(card, view, clock)
        picture = pictures.of(card) if i < n_pictures else None
        if picture is not None:
            cid = f"e{card.excursion.id}.{key[:12]}@{domain}"
            images[cid] = picture
            found.update(cid=cid, width=render.png_size(picture)[0] // 2)
        written.append(found)
    values = _values(view, written, cards[n_cards:], digest=digest)
    return _assembled(view, recipient, options.sender, values, images)


def _assembled(
    view: NightPage,
    recipient: str,
    sender: str,
    values: dict[str, Any],
    images: dict[str, bytes],
) -> EmailMessage:
    key = _digest(view.edition, recipient)
    made = EmailMessage(policy=SMTP)
    made["Subject"] = values["subject"]
    made["From"] = Address(_one_line(shown(view.edition.bay)), addr_spec=sender)
    made["To"] = Address(addr_spec=recipient)
    made["Date"] = format_datetime(view.edition.as_of)
    made["Message-ID"] = message_id(view.edition, recipient, sender)
    made["Auto-Submitted"] = "auto-generated"
    words = text_environment().get_template("mail.txt").render(values)
    made.set_content(plain(words), cte="quoted-printable")
    page = environment().get_template("mail.html").render({**values, "css": _safe_css()})
    made.add_alternative(_inlined(page), subtype="html", cte="quoted-printable")
    html = made.get_payload()[1]  # type: ignore[index]
    for cid, picture in images.items():
        name = f"{cid.split('.')[0]}.png"
        html.add_related(  # type: ignore[union-attr]
            picture, "image", "png", cid=f"<{cid}>", filename=name, disposition="inline"
        )
    made.set_boundary(f"=_{key}_a")
    if images:
        html.set_boundary(f"=_{key}_r")  # type: ignore[union-attr]
    return made


def _card(card: ExcursionCard, view: NightPage, clock: LocalClock) -> dict[str, Any]:
    """A card with everything written out, for the templates."""
    found = card.excursion
    chart = card.chart if card.chart and card.chart.points else None
    label = ""
    if chart:
        label = figures.chart_label(chart)
    elif card.wafer_map and card.wafer_map.sites:
        label = figures.map_label(card.wafer_map)
    plan = card.action_plan or ""
    if len(plan) > _PLAN_CHARACTERS:
        plan = text("mail.plan_cut", plan=plan[:_PLAN_CHARACTERS].rsplit(None, 1)[0])
    return {
        "number": found.id,
        "tier": found.tier,
        "tier_word": text(f"tier.{found.tier}"),
        "facts": card_facts(card, clock),
        "headline": headline(found, clock),
        "sentence": sentence(found, clock),
        "cid": None,
        "label": label,
        "events": series_events(chart, clock) if chart else (),
        "forecast": forecast_sentence(found, clock),
        "table": recent_points(chart, f"e{found.id}", clock, _POINTS_IN_MAIL) if chart else None,
        "plan": plan,
        "href": _address(view, card.href),
    }


def _values(
    view: NightPage,
    written: list[dict[str, Any]],
    rest: tuple[ExcursionCard, ...],
    *,
    digest: bool,
) -> dict[str, Any]:
    clock = clock_of(view)
    report = None
    if view.href:
        where = _address(view, view.href)
        key = "mail.report" if where else "mail.report_file"
        report = {"words": text(key, file=view.href), "href": where}
    return {
        "subject": subject(view),
        "sentence": night_sentence(view),
        "note": "" if digest else text("mail.yours"),
        "cards": written,
        "rest": [
            {"words": headline(c.excursion, clock), "href": _address(view, c.href)} for c in rest
        ],
        "any_plan": any(card["plan"] for card in written),
        "standing": [headline(card.excursion, clock) for card in ranked(view.standing)],
        "tail": digest and bool(view.cards or view.feeds or view.standing),
        "notices": [feed_sentence(notice, clock) for notice in view.feeds],
        "files": files_sentence(view),
        "readings": readings_sentence(view),
        "signals": signals_sentence(view),
        "quiet": quiet_sentence(view),
        "report": report,
        "bay": shown(view.edition.bay),
        "as_of": clock.full(view.edition.as_of),
        "zone": clock.zone_name(),
    }


def _address(view: NightPage, href: str | None) -> str | None:
    """The address of a page where the bay has one; a mail has no folder to be relative to."""
    safe = link(href)
    if safe is None or "://" in safe:
        return safe
    return f"{view.page_url.rstrip('/')}/{safe}" if view.page_url else None


@cache
def text_environment() -> Any:
    """The environment of plain text: nothing to escape, the rest as for pages."""
    return environment().overlay(autoescape=False)


def _safe_css() -> Any:
    from markupsafe import Markup

    return Markup((TEMPLATES / "mail.css").read_text("utf-8"))  # nosec B704


def _inlined(page: str) -> str:
    """The page with its styles at the elements: many mail programs drop style sheets."""
    import css_inline

    inliner = css_inline.CSSInliner(load_remote_stylesheets=False)
    return str(inliner.inline(page))

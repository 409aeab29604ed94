"""The front page of the reports folder: nights, excursions, reviews, linked by relative paths."""

from __future__ import annotations

from typing import Any
from urllib.parse import quote

from reports.model import Status
from reports.model_pages import IndexEntry, IndexPage
from reports.numbers import LocalClock, count
from reports.pages import link, page
from reports.review import month_name
from reports.sentences import tally
from reports.texts import plural, shown, text


def index_page(view: IndexPage) -> str:
    """The index as HTML."""
    clock = LocalClock(view.edition.zone, view.edition.as_of)
    newest = sorted(view.entries, key=lambda e: (e.at, e.number or 0, e.href), reverse=True)
    nights = [e for e in newest if e.kind == "night"]
    excursions = [e for e in newest if e.kind == "excursion"]
    reviews = [e for e in newest if e.kind == "review"]
    unsettled = [e for e in excursions if e.status != "closed"]
    unsettled.sort(key=lambda e: e.n_act == 0)
    values: dict[str, Any] = {
        "sentence": text(
            "index.sentence",
            bay=shown(view.edition.bay),
            nights=plural("n.nights", len(nights), count=count(len(nights))),
            open=plural("index.open_count", len(unsettled), count=count(len(unsettled))),
        ),
        "open": [
            {
                "tier": "act" if e.n_act else "watch",
                "tier_word": text("tier.act" if e.n_act else "tier.watch"),
                "href": _safe(e.href) or "#main",
                "words": text(
                    "index.open_item",
                    number=e.number,
                    headline=shown(e.headline),
                    status=_status(e.status),
                ),
            }
            for e in unsettled
        ],
        "parts": [
            {"title": text("index.nights"), "entries": [_night(e, clock) for e in nights]},
            {"title": text("index.reviews"), "entries": [_review(e) for e in reviews]},
            {"title": text("index.excursions"), "entries": [_found(e, clock) for e in excursions]},
        ],
    }
    return page(
        "index.html", view.edition, text("index.title", bay=shown(view.edition.bay)), values
    )


def _safe(href: str) -> str | None:
    """A relative link as a URL: file names may hold spaces, `#` or `?`."""
    whole = link(href)
    if whole is None or "://" in whole:
        return whole
    return quote(whole)


def _status(status: Status | None) -> str:
    return text(f"status.{status or 'open'}")


def _night(entry: IndexEntry, clock: LocalClock) -> dict[str, str | None]:
    weighed = tally(entry.n_act, entry.n_watch) or text("index.quiet")
    words = text("index.night", tally=weighed, headline=shown(entry.headline))
    return {"href": _safe(entry.href), "name": clock.full(entry.at), "words": words}


def _review(entry: IndexEntry) -> dict[str, str | None]:
    name = month_name(entry.month) if entry.month else shown(entry.headline)
    return {"href": _safe(entry.href), "name": name, "words": shown(entry.headline)}


def _found(entry: IndexEntry, clock: LocalClock) -> dict[str, str | None]:
    name = text("night.number", number=entry.number)
    words = text(
        "index.found",
        headline=shown(entry.headline),
        status=_status(entry.status),
        at=clock.moment(entry.at),
    )
    return {"href": _safe(entry.href), "name": name, "words": words}

"""What the front page of the reports folder lists: nights, excursions, reviews that are there."""

from __future__ import annotations

import json
from datetime import datetime
from pathlib import Path
from typing import Any

from sqlalchemy import select

from reports import model_pages
from reports.numbers import LocalClock
from reports.sentences import headline
from reports.views import Reader, excursion_of, investigation_href, night_href
from spc.records import findings
from spc.records.stamps import from_us
from spc.records.tables import excursions, passes

_MOST_NIGHTS = 400


def index_view(reader: Reader, folder: Path) -> model_pages.IndexPage:
    """Entries of every page in the folder that the records know."""
    entries = [*_nights(reader, folder), *_excursions(reader, folder), *_reviews(reader, folder)]
    return model_pages.IndexPage(reader.edition, tuple(entries))


def _nights(reader: Reader, folder: Path) -> list[model_pages.IndexEntry]:
    zone = reader.bay.settings.bay.zone
    rows = reader.connection.execute(
        select(passes.c.as_of_us, passes.c.result)
        .where(passes.c.finished == 1)
        .order_by(passes.c.as_of_us.desc())
        .limit(_MOST_NIGHTS)
    )
    found = reader.connection.execute(select(excursions.c.id, excursions.c.tier))
    tiers = {number: tier for number, tier in found}  # noqa: C416 - rows are no pairs to mypy
    out = []
    for as_of_us, text in rows:
        at = from_us(as_of_us, zone)
        href = night_href(at, reader.bay)
        if not (folder / href).is_file():
            continue
        result = json.loads(text)
        touched = [*result["excursions"]["opened"], *result["excursions"]["updated"]]
        n_act = sum(tiers.get(number) == "act" for number in touched)
        headline_text = str(result.get("sentence", ""))
        out.append(
            model_pages.IndexEntry("night", href, at, headline_text, n_act, len(touched) - n_act)
        )
    return out


def _excursions(reader: Reader, folder: Path) -> list[model_pages.IndexEntry]:
    zone = reader.bay.settings.bay.zone
    clock = LocalClock(zone, reader.as_of)
    out = []
    for one in findings.listed(reader.connection, until=reader.as_of):
        href = investigation_href(one.id)
        if not (folder / href).is_file():
            continue
        view = excursion_of(reader.document(one))
        out.append(
            model_pages.IndexEntry(
                "excursion",
                href,
                from_us(one.opened_us, zone),
                headline(view, clock),
                n_act=int(one.tier == "act"),
                n_watch=int(one.tier == "watch"),
                status=view.status,
                number=one.id,
            )
        )
    return out


def _reviews(reader: Reader, folder: Path) -> list[model_pages.IndexEntry]:
    zone = reader.bay.settings.bay.zone
    out = []
    for file in sorted((folder / "reviews").glob("review-????-??.html")):
        month = file.stem.removeprefix("review-")
        at = datetime.strptime(month, "%Y-%m").replace(tzinfo=zone)
        href = f"reviews/{file.name}"
        out.append(model_pages.IndexEntry("review", href, at, month, month=month))
    return out


def excursion_line(document: dict[str, Any], clock: LocalClock) -> str:
    """One excursion in one line, for the terminal."""
    view = excursion_of(document)
    parts = f"{view.id:>4}  {view.tier:5}  {view.status:9}  {headline(view, clock)}"
    first = view.suspects[0] if view.suspects else None
    if first is None:
        return parts
    return f"{parts}; likely {first.factor} {first.level}"

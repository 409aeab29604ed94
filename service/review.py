"""The monthly capability review: page, spreadsheet and rows."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from datetime import datetime

    from service.context import Progress, Session


@dataclass(frozen=True)
class Review:
    """What a review found and wrote: the contract's rows, lines for people, the page."""

    rows: list[dict[str, Any]]
    lines: list[str]
    page: Path


def write_review(
    session: Session, month: str, as_of: datetime, gauge_out: bool, progress: Progress
) -> Review:
    """Review a month and write its page and its spreadsheet; what could not be used is told.

    Parameters
    ----------
    month : YYYY-MM, in the bay's zone.
    as_of : the clock; nothing measured after it is looked at.
    gauge_out : take the gauge's share out of the sigmas.

    Raises
    ------
    CommandError
        For text that is no month.
    """
    from reports.review import review_page
    from reports.views import Reader
    from reports.views_review import review_href, review_view, workbook_href
    from reports.workbook import review_workbook
    from service.context import WRONG_USAGE, CommandError, tell
    from service.pages import write_whole
    from spc.monitoring.review import NoMonthError, review_month
    from spc.records.sessions import reading

    bay = session.bay
    with reading(session.engine) as connection:
        try:
            review = review_month(
                connection, bay, month, as_of, gauge_out=gauge_out, progress=progress
            )
        except NoMonthError as error:
            raise CommandError(str(error), WRONG_USAGE) from None
        view = review_view(Reader(connection, bay, as_of), review)
    folder = bay.path(bay.settings.nightly.reports)
    href = review_href(review.month)
    page = folder / href
    write_whole(page, review_page(view, href))
    _write_bytes(folder / workbook_href(review.month), review_workbook(view))
    for note in review.notes:
        tell(note)
    return Review(review.rows, _lines(view), page.absolute())


def _lines(view: Any) -> list[str]:
    """The month in words, as the first page says it."""
    from reports.review import decision_sentence, gap_sentence, review_sentence

    said = [review_sentence(view)]
    said += [decision_sentence(item) for item in view.decisions]
    said += [gap_sentence(gap) for gap in view.gaps]
    return said


def _write_bytes(file: Path, content: bytes) -> None:
    """Write a file so that a reader finds the old one or the new one, never a part."""
    file.parent.mkdir(parents=True, exist_ok=True)
    part = file.with_name(f".{file.name}.part")
    part.write_bytes(content)
    part.replace(file)

"""A real browser and every kind of page, rendered once for all tests of this folder."""

from __future__ import annotations

import os
import shutil
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from reports.index import index_page
from reports.investigation import investigation_page
from reports.night import night_page
from reports.review import review_page
from tests.conftest import skip_or_fail
from tests.reports import samples, samples_pages

_NAMES = ("chromium", "chromium-browser", "google-chrome")
_ARGUMENTS = (
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
)


def chromium() -> str | None:
    """The browser of this machine: $YELLOWBAY_CHROMIUM, or the first of the usual names."""
    named = os.environ.get("YELLOWBAY_CHROMIUM")
    if named:
        return named
    return next((found for name in _NAMES if (found := shutil.which(name))), None)


@pytest.fixture(scope="session")
def browser() -> Iterator[Any]:
    """A headless Chromium."""
    program = chromium()
    if program is None:
        skip_or_fail("no Chromium on this machine (set YELLOWBAY_CHROMIUM)")
    sync_api = pytest.importorskip("playwright.sync_api")
    with sync_api.sync_playwright() as playwright:
        started = playwright.chromium.launch(executable_path=program, args=list(_ARGUMENTS))
        yield started
        started.close()


@pytest.fixture(scope="session")
def pages() -> dict[str, str]:
    """Every kind of page, filled with hostile names wherever a name stands."""
    bad = samples.HOSTILE
    return {
        "nights/night.html": night_page(samples.night(bad)),
        "nights/quiet.html": night_page(samples.quiet_night()),
        "excursions/x.html": investigation_page(samples_pages.investigation(bad, n_streams=1)),
        "reviews/r.html": review_page(samples_pages.review(bad)),
        "index.html": index_page(samples_pages.index(bad)),
    }


@pytest.fixture(scope="session")
def folder(pages: dict[str, str], tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The pages as files, laid out as in the reports folder."""
    root = tmp_path_factory.mktemp("reports")
    for name, page in pages.items():
        target = root / name
        target.parent.mkdir(exist_ok=True)
        target.write_text(page, encoding="utf-8")
    return root

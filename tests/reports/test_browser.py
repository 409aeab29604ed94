"""Pages in a real browser, opened from files: nothing leaves, nothing overflows, keys reach all.

Accessibility rules: axe-core (Deque), as carried by the package axe-playwright-python.
"""

from __future__ import annotations

import csv
import io
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from tests.conftest import skip_or_fail
from tests.reports import samples

pytestmark = pytest.mark.browser

KINDS = (
    "nights/night.html",
    "nights/quiet.html",
    "excursions/x.html",
    "reviews/r.html",
    "index.html",
)
WIDTHS = (360, 768, 1440)
A4_MM, LETTER_MM, MARGIN_MM = 210, 215.9, 14
OVERFLOW = "document.documentElement.scrollWidth - document.documentElement.clientWidth"


class Watch:
    """A page that notes what it asks for and what goes wrong."""

    def __init__(self, page: Any) -> None:
        self.page = page
        self.requests: list[str] = []
        self.faults: list[str] = []
        page.on("request", lambda request: self.requests.append(request.url))
        page.on("console", lambda note: self.faults.append(note.text))
        page.on("pageerror", lambda error: self.faults.append(str(error)))
        page.on("dialog", lambda dialog: self.faults.append(f"dialog {dialog.message}"))

    def open(self, path: Path) -> Any:
        """Open a file and note the faults from there on."""
        self.page.goto(path.as_uri())
        return self.page


@pytest.fixture
def watch(browser: Any) -> Iterator[Watch]:
    context = browser.new_context(viewport={"width": 1000, "height": 900})
    context.set_default_timeout(20_000)
    yield Watch(context.new_page())
    context.close()


@pytest.mark.parametrize("kind", KINDS)
def test_nothing_leaves_and_nothing_overflows(watch: Watch, folder: Path, kind: str) -> None:
    page = watch.open(folder / kind)
    for width in WIDTHS:
        page.set_viewport_size({"width": width, "height": 900})
        assert page.evaluate(OVERFLOW) <= 0, f"{kind} at {width} px"
    for paper in (A4_MM, LETTER_MM):
        page.emulate_media(media="print")
        width = int((paper - 2 * MARGIN_MM) / 25.4 * 96)
        page.set_viewport_size({"width": width, "height": 1100})
        assert page.evaluate(OVERFLOW) <= 0, f"{kind} on paper of {paper} mm"
        cut = page.evaluate(
            "[...document.querySelectorAll('table')].filter(t => t.getClientRects().length &&"
            " t.getBoundingClientRect().right > innerWidth + 1).map(t => t.id)"
        )
        assert cut == [], "tables cut on paper"
    assert not page.locator(".tools button").filter(visible=True).count()
    assert watch.requests == [(folder / kind).as_uri()]
    assert watch.faults == []


@pytest.mark.parametrize("kind", KINDS)
def test_keys_reach_everything(watch: Watch, folder: Path, kind: str) -> None:
    page = watch.open(folder / kind)
    wanted = page.evaluate(
        """() => { const reached = 'a[href],button,input,summary,[tabindex="0"]';
            const all = [...document.querySelectorAll(reached)]
            .filter(e => e.checkVisibility() && !e.closest('details:not([open]) > :not(summary)'));
            window.focused = new Set();
            document.addEventListener('focusin', e => window.focused.add(e.target));
            window.wanted = all; return all.length; }"""
    )
    for _ in range(wanted + 1):
        page.keyboard.press("Tab")
    missed = page.evaluate(
        "window.wanted.filter(e => !window.focused.has(e)).map(e => e.outerHTML.slice(0, 80))"
    )
    assert missed == []
    assert watch.faults == []


@pytest.mark.parametrize("scheme", ["light", "dark"])
@pytest.mark.parametrize("kind", KINDS)
def test_no_serious_accessibility_fault(watch: Watch, folder: Path, kind: str, scheme: str) -> None:
    try:
        from axe_playwright_python.sync_playwright import Axe
    except ImportError:
        skip_or_fail("axe-playwright-python is not installed (it is in the test extra)")
    watch.page.emulate_media(color_scheme=scheme)
    page = watch.open(folder / kind)
    page.evaluate("document.querySelectorAll('details').forEach((d, i) => { d.open = i === 0; })")
    # a drawing is one image to assistive technology; its thousand shapes only cost time
    page.evaluate("document.querySelectorAll('.fig svg').forEach(s => s.replaceChildren())")
    found = Axe().run(page).response["violations"]
    serious = [
        (fault["id"], [node["html"][:120] for node in fault["nodes"][:3]])
        for fault in found
        if fault["impact"] in ("serious", "critical")
    ]
    assert serious == []


def test_a_point_tells_its_lot_under_the_pointer_and_by_keys(watch: Watch, folder: Path) -> None:
    page = watch.open(folder / "nights/night.html")
    figure = page.locator(".fig").first
    figure.focus()
    page.keyboard.press("End")
    said = page.locator(".tip").inner_text()
    assert "lot " in said
    assert "nm" in said
    assert page.locator(".say").first.inner_text() == said
    page.keyboard.press("ArrowLeft")
    assert page.locator(".tip").inner_text() != said
    page.keyboard.press("Escape")
    assert page.locator(".tip").count() == 0
    mark = figure.locator(".wide [data-say]").last
    mark.scroll_into_view_if_needed()
    box = mark.bounding_box()
    page.mouse.move(box["x"] + box["width"] / 2, box["y"] + box["height"] / 2)
    assert page.locator(".tip").inner_text() == mark.get_attribute("data-say")
    assert watch.faults == []


def test_charts_zoom_together_and_stay_on_the_bays_clock(watch: Watch, folder: Path) -> None:
    page = watch.open(folder / "excursions/x.html")
    page.locator("[data-zoom=onset]").click()
    page.wait_for_function("document.getElementById('zoom-status').textContent !== ''")
    assert page.locator("#zoom-status").inner_text() == "4.3 days shown"
    charts = page.locator(".fig .live")
    assert charts.count() == 2
    axes = [charts.nth(i).locator(".role-axis-label text").all_text_contents() for i in range(2)]
    days = [[label for label in axis if label[:3] in ("Mon", "Tue", "Wed", "Thu")] for axis in axes]
    assert days[0]
    assert all(labels == days[0] for labels in days), "one time axis for all"
    page.locator("[data-zoom=closer]").click()
    page.wait_for_function("document.getElementById('zoom-status').textContent.startsWith('2.1')")
    page.locator("#stream-1").focus()
    page.keyboard.press("0")
    page.wait_for_function("document.getElementById('zoom-status').textContent.startsWith('2')")
    assert watch.faults == []
    assert len(watch.requests) == 1


def test_lots_are_sorted_selected_and_taken_away(watch: Watch, folder: Path) -> None:
    page = watch.open(folder / "excursions/x.html")
    table = page.locator("#lots-at-risk")
    heads = table.locator("thead th")
    column = heads.all_inner_texts().index(
        next(h for h in heads.all_inner_texts() if h.startswith("Out of spec"))
    )
    heads.nth(column).locator("button").click()
    assert heads.nth(column).get_attribute("aria-sort") == "ascending"
    shares = table.locator(f"tbody td:nth-child({column + 2})")
    values = [float(shares.nth(i).get_attribute("data-v")) for i in range(shares.count())]
    assert values == sorted(values)
    assert len(values) == 40
    heads.nth(0).locator("button").click()
    for i in range(12):
        table.locator("tbody input").nth(i).check()
    with page.expect_download() as download:
        page.locator("#lots-at-risk-tools [data-do=csv]").click()
    raw = Path(download.value.path()).read_bytes().decode("utf-8-sig")
    rows = list(csv.reader(io.StringIO(raw, newline="")))
    assert rows[0][0] == "lot"
    assert len(rows) == 13
    assert download.value.suggested_filename == "excursion-41-lots.csv"
    for row in rows[1:]:
        assert not row[0].startswith(("=", "+", "-", "@", "\t"))
    taken = {row[0].removeprefix("'") for row in rows[1:]}
    assert taken & set(samples.HOSTILE), "names are exported whole"
    assert watch.faults == []


def test_hostile_names_are_read_as_text(watch: Watch, folder: Path) -> None:
    page = watch.open(folder / "excursions/x.html")
    said = page.locator("#lots-at-risk").inner_text()
    assert "<script>alert(1)</script>" in said
    assert '"><img src=x onerror=alert(2)>' in said
    assert "U+202E" in said
    assert page.evaluate("document.images.length") == 0
    assert watch.faults == []


def test_pages_print(watch: Watch, folder: Path) -> None:
    page = watch.open(folder / "reviews/r.html")
    for paper in ("A4", "Letter"):
        assert page.pdf(format=paper).startswith(b"%PDF")


@pytest.mark.parametrize("images", [True, False], ids=["images on", "images off"])
def test_the_mail_reads_on_a_phone(watch: Watch, tmp_path: Path, images: bool) -> None:
    import base64
    import re
    from email import message_from_bytes
    from email.policy import default

    from reports.message import MailOptions, messages

    view = samples.night(samples.HOSTILE)
    made = messages(view, MailOptions("spc@example.com", ("shift@example.com",)))[0]
    parsed = message_from_bytes(made.as_bytes(), policy=default)
    html = parsed.get_body(("html",)).get_content()
    for part in parsed.walk():
        if part.get_content_type() == "image/png" and images:
            data = base64.b64encode(part.get_content()).decode()
            cid = part["Content-ID"].strip("<>")
            html = html.replace(f"cid:{cid}", f"data:image/png;base64,{data}")
    if not images:
        html = re.sub(r'src="cid:[^"]*"', 'src=""', html)
    target = tmp_path / "mail.html"
    target.write_text(html, encoding="utf-8")
    page = watch.open(target)
    for width in (360, 768):
        page.set_viewport_size({"width": width, "height": 800})
        assert page.evaluate(OVERFLOW) <= 0
    top = page.locator("h1").inner_text()
    assert top.startswith("2 to act on, 2 to watch")
    widths = page.evaluate("[...document.images].map(i => i.naturalWidth)")
    assert len(widths) == 3
    assert all(width > 0 for width in widths) is images
    assert watch.faults == []

"""Pages as text: valid HTML, self-contained, the same bytes for the same values, names as text."""

from __future__ import annotations

import re
from dataclasses import replace
from pathlib import Path

import html5lib
import pytest

from reports.index import index_page
from reports.model_pages import IndexEntry
from reports.night import feed_sentence, night_page, ranked
from reports.numbers import LocalClock, plain
from reports.pages import link
from reports.review import month_name, review_page
from tests.reports import samples, samples_pages

KINDS = (
    "nights/night.html",
    "nights/quiet.html",
    "excursions/x.html",
    "reviews/r.html",
    "index.html",
)


@pytest.mark.parametrize("kind", KINDS)
def test_html_is_valid(pages: dict[str, str], kind: str) -> None:
    html5lib.HTMLParser(strict=True).parse(pages[kind])


@pytest.mark.parametrize("kind", KINDS)
def test_ids_are_there_once_and_every_anchor_leads_somewhere(
    pages: dict[str, str], kind: str
) -> None:
    tree = html5lib.parse(pages[kind], namespaceHTMLElements=False)
    ids = [element.get("id") for element in tree.iter() if element.get("id")]
    assert len(ids) == len(set(ids))
    anchors = [a.get("href")[1:] for a in tree.iter("a") if a.get("href", "").startswith("#")]
    assert set(anchors) <= set(ids)


@pytest.mark.parametrize("kind", KINDS)
def test_pages_ask_for_nothing(pages: dict[str, str], kind: str) -> None:
    tree = html5lib.parse(pages[kind], namespaceHTMLElements=False)
    assert not [e for e in tree.iter() if e.get("src") or e.tag in ("link", "iframe", "object")]
    policy = next(e.get("content") for e in tree.iter("meta") if e.get("http-equiv"))
    assert "default-src 'none'" in policy
    assert "unsafe-eval" not in policy
    assert "script-src 'sha256-" in policy
    for a in tree.iter("a"):
        assert not re.match(r"(?i)[a-z]+:|//|/", a.get("href")), "links are relative"


@pytest.mark.parametrize("kind", KINDS)
def test_hostile_names_stay_text(pages: dict[str, str], kind: str) -> None:
    page = pages[kind]
    tree = html5lib.parse(page, namespaceHTMLElements=False)
    assert not list(tree.iter("img"))
    assert "alert(1)" not in "".join(e.text or "" for e in tree.iter("script") if not e.get("id"))
    assert "\u202e" not in re.sub(r'data-v="[^"]*"', "", page), "only exports keep the mark"
    assert not [e for e in tree.iter() for name in e.attrib if str(name).startswith("on")]
    if kind != "nights/quiet.html":
        assert "&lt;script&gt;alert(1)&lt;/script&gt;" in page


def test_the_same_values_give_the_same_bytes(pages: dict[str, str]) -> None:
    assert night_page(samples.quiet_night()) == pages["nights/quiet.html"]
    assert review_page(samples_pages.review(samples.HOSTILE)) == pages["reviews/r.html"]
    assert index_page(samples_pages.index(samples.HOSTILE)) == pages["index.html"]


def test_a_quiet_night_says_so_first(pages: dict[str, str]) -> None:
    tree = html5lib.parse(pages["nights/quiet.html"], namespaceHTMLElements=False)
    head = next(tree.iter("h1"))
    assert head.text == "A quiet night: nothing moved on the 212 streams looked at."
    assert not list(tree.iter("article"))


def test_the_night_tells_everything_in_its_order(pages: dict[str, str]) -> None:
    tree = html5lib.parse(pages["nights/night.html"], namespaceHTMLElements=False)
    said = plain(" ".join("".join(next(tree.iter("main")).itertext()).split()))
    order = [
        "2 to act on, 2 to watch",
        "M1 resist thickness on TRK2 CUP1 moved",
        "Hold the lots",
        "Drift of M1 CD",
        "Still open from before",
        "CDS2 is late: last seen Wed 07:54, expected every 12 h.",
        "12 rows refused, the first in line 118, value = 12O1.4: not a number",
        "misc/readme.csv was refused whole",
        "46 files loaded",
        "61 204 readings stored",
        "19 signals on 341 points of 212 streams. Noise alone would give 4.7.",
        "Quiet: 206 streams with 322 points, nothing to tell.",
    ]
    places = [said.find(part) for part in order]
    assert -1 not in places, order[places.index(-1)]
    assert places == sorted(places)
    assert "Before anyone touches a tool" in said


def test_cards_are_ranked() -> None:
    order = [card.excursion.id for card in ranked(samples.cards()[::-1])]
    assert order == [41, 42, 43, 44]


@pytest.mark.parametrize(
    ("address", "safe"),
    [
        ("excursions/41.html", True),
        ("https://bay.example/r", True),
        ("javascript:alert(1)", False),
        ("JAVASCRIPT:alert(1)", False),
        ("data:text/html,x", False),
        ("//evil.example", False),
        ("\\\\server\\share", False),
        ("", False),
        (None, False),
    ],
)
def test_links_lead_nowhere_strange(address: str | None, safe: bool) -> None:
    assert (link(address) == address) is safe or not address
    assert (link(address) is not None) is safe


def test_every_kind_of_notice_has_its_sentence() -> None:
    clock = LocalClock(samples.ZONE, samples.AS_OF)
    notice = samples.night().feeds[1]
    for kind in ("late", "quarantined", "rejected", "waiting", "warned"):
        said = feed_sentence(replace(notice, kind=kind), clock)
        assert notice.name in said
        assert said.endswith(".")


def test_the_index_links_from_a_file_share(pages: dict[str, str]) -> None:
    entry = IndexEntry("night", "nights/a #1?.html", samples.AS_OF, "x")
    page = index_page(replace(samples_pages.index(), entries=(entry,)))
    assert 'href="nights/a%20%231%3F.html"' in page
    tree = html5lib.parse(pages["index.html"], namespaceHTMLElements=False)
    hrefs = {a.get("href") for a in tree.iter("a")}
    assert {"nights/2026-11-06.html", "excursions/41.html", "reviews/2026-10.html"} <= hrefs


def test_pages_below_the_folder_link_up(pages: dict[str, str]) -> None:
    assert 'href="../index.html"' in pages["nights/night.html"]
    assert 'href="../excursions/41.html"' in pages["nights/night.html"]


def test_months_have_names() -> None:
    assert month_name("2026-11") == "November 2026"
    with pytest.raises(ValueError):
        month_name("soon")


def test_modules_stay_small() -> None:
    import reports

    folder = Path(reports.__file__).parent
    long = [p.name for p in folder.glob("*.py") if len(p.read_text("utf-8").splitlines()) > 400]
    assert long == []


def test_a_page_says_which_site_values_are_gone() -> None:
    from reports.investigation import investigation_page

    view = samples_pages.investigation()
    bare = replace(view, wafer_map=None, overlay=None, sites_gone=True)
    for one, said in ((bare, True), (replace(view, wafer_map=None, overlay=None), False)):
        page = investigation_page(one)
        assert ("taken away by the retention rule" in page) is said
        assert ('<section id="maps">' in page) is said
    review = replace(samples_pages.review(), notes=("<b>M1</b>, 2026-03: sums alone",))
    assert "&lt;b&gt;M1&lt;/b&gt;, 2026-03: sums alone" in review_page(review)

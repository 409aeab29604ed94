"""Hostile names from the drops to every place they come out, and hands on the audit trail."""

from __future__ import annotations

import csv
import io
import json
from email import message_from_bytes
from email.policy import default
from pathlib import Path

import html5lib
import openpyxl
import pytest
from sqlalchemy import text

from spc.records.sessions import open_database
from tests.robustness.smallbay import SHIFTED_FROM, SmallBay, make

NIGHT = SHIFTED_FROM
# One for each lot of the cup that prints too thick, so that each stands on pages and in mails.
HOSTILE = {
    f"L{NIGHT:02d}20": '=HYPERLINK("http://x.example";"y")',
    f"L{NIGHT:02d}21": "<script>alert(1)</script>",
    f"L{NIGHT + 1:02d}20": "../../../etc/<img src=x onerror=alert(1)>",
    f"L{NIGHT + 1:02d}21": "+1+cmd|' /C calc'!A0 {{7*7}} {%x%}",
}


@pytest.fixture(scope="module")
def bay(tmp_path_factory: pytest.TempPathFactory) -> SmallBay:
    root = tmp_path_factory.mktemp("hostile")
    made = make(root / "bay", nights=NIGHT + 2)
    words = made.config.read_text("utf-8")
    made.config.write_text(
        words.replace('"Small bay"', '"=Bay\\r\\nBcc: thief@example.com\\r\\n\\r\\n<b>x"'), "utf-8"
    )
    for file in (made.root / "drops").glob("*.csv"):
        rows = list(csv.reader(io.StringIO(file.read_text("utf-8"))))
        out = io.StringIO()
        csv.writer(out, lineterminator="\n").writerows(
            [[HOSTILE.get(cell, "=T<i>RK" if cell == "TRK1" else cell) for cell in r] for r in rows]
        )
        made.drop(file.name, out.getvalue())
    made.nightly(NIGHT)
    made.nightly(NIGHT + 1)
    return made


def test_the_names_are_kept_as_they_are(bay: SmallBay) -> None:
    points = bay.json("points", "--characteristic", "M1 thickness")
    assert set(HOSTILE.values()) <= {p["lot"] for p in points}
    assert {p["context"]["tool"] for p in points} == {"=T<i>RK"}
    assert bay.json("excursions"), "something moved"


def test_pages_hold_them_as_text(bay: SmallBay) -> None:
    for one in bay.json("excursions"):
        bay.json("investigate", str(one["id"]))
    pages = bay.pages()
    assert any(b"onerror" in page for page in pages.values()), "the names are on the pages"
    assert any(b"&lt;script&gt;alert(1)" in page for page in pages.values())
    for name, page in pages.items():
        tree = html5lib.parse(page.decode("utf-8"), namespaceHTMLElements=False)
        for element in tree.iter():
            if not isinstance(element.tag, str):
                continue
            assert not [a for a in element.attrib if str(a).startswith("on")], name
            assert element.tag.rpartition("}")[2] not in ("img", "i", "iframe", "base"), name
            if element.tag.rpartition("}")[2] == "script":
                assert (element.text or "").strip() != "alert(1)", name
        assert b"49 " not in page.split(b"+1+cmd")[-1][:20], "no template runs in a name"
    inside = (bay.root / "reports").resolve()
    for file in bay.root.rglob("*.html"):
        assert inside in file.resolve().parents


def test_no_table_or_sheet_holds_a_formula(bay: SmallBay, tmp_path: Path) -> None:
    _status, points, _told = bay.here("points", "--characteristic", "M1 thickness", "--csv")
    [one] = [e for e in bay.json("excursions") if e["suspects"]][:1]
    lots = tmp_path / "lots.csv"
    bay.json("investigate", str(one["id"]), "--lots-csv", str(lots))
    for table in (points, lots.read_text("utf-8-sig")):
        cells = [cell for row in csv.reader(io.StringIO(table)) for cell in row]
        assert len(cells) > 20
        for cell in cells:
            assert not cell.startswith(("=", "+", "@", "\t", "\r")), cell
            assert not cell.startswith("-") or float(cell) < 0, cell
    bay.json("capability", "--month", "2026-10")
    sheets = list(bay.root.rglob("*.xlsx"))
    assert sheets
    for file in sheets:
        for sheet in openpyxl.load_workbook(file):
            for row in sheet.iter_rows():
                for cell in row:
                    assert cell.data_type != "f", (sheet.title, cell.coordinate, cell.value)
                    assert cell.hyperlink is None


def test_mails_have_the_headers_we_gave_them_and_no_other(bay: SmallBay) -> None:
    allowed = {
        "subject", "from", "to", "date", "message-id", "auto-submitted", "mime-version",
        "content-type",
    }  # fmt: skip
    mails = bay.mails()
    assert len(mails) >= 3
    for content in mails.values():
        mail = message_from_bytes(content, policy=default)
        assert {key.lower() for key in mail} == allowed
        assert str(mail["To"]) in ("b@example.com", "owner@example.com")
        assert "\n" not in str(mail["Subject"])
        assert mail.defects == []
        page = mail.get_body(("html",))
        assert page is not None
        assert "<script" not in page.get_content()
        assert "onerror=" not in page.get_content().replace("&lt;img src=x onerror=", "")


# ---- the record of hand actions ----------------------------------------------------------------


@pytest.fixture
def acted(bay: SmallBay, tmp_path: Path) -> SmallBay:
    copy = bay.copy(tmp_path / "acted")
    number = str(copy.json("excursions")[0]["id"])
    for words in ("first", "second", "third"):
        copy.json("excursions", "comment", number, words, "--who", "ana")
    return copy


def test_an_untouched_record_is_whole(acted: SmallBay) -> None:
    found = acted.json("audit")
    assert found["whole"]
    assert found["actions"] >= 3


@pytest.mark.parametrize(
    "tampering",
    [
        "UPDATE actions SET text = 'nothing' WHERE text = 'second'",
        "UPDATE actions SET who = 'bea' WHERE text = 'second'",
        "UPDATE actions SET at_us = at_us + 1 WHERE text = 'second'",
        "DELETE FROM actions WHERE text = 'second'",
        "UPDATE actions SET hash = '" + "0" * 64 + "' WHERE text = 'second'",
        "INSERT INTO actions (at_us, who, subject, action, text, detail, previous_hash, hash) "
        "SELECT at_us, who, subject, action, 'slipped in', detail, previous_hash, 'x' "
        "FROM actions WHERE text = 'second'",
    ],
)
def test_tampering_is_seen(acted: SmallBay, tampering: str) -> None:
    engine = open_database(acted.url)
    with engine.begin() as connection:
        connection.execute(text(tampering))
    engine.dispose()
    status, out, _told = acted.here("audit", "--json")
    found = json.loads(out)
    assert status == 1
    assert not found["whole"]
    assert found["broken_at"] is not None

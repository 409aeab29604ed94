"""All texts in one place: no key missing, none left over, no words in templates or beside it."""

from __future__ import annotations

import re
from pathlib import Path

import pytest

from reports import texts

REPORTS = Path(texts.__file__).parent
TEMPLATES = [*sorted((REPORTS / "templates").glob("*.html")), REPORTS / "templates/mail.txt"]
SOURCES = sorted(REPORTS.glob("*.py"))


def _sources() -> str:
    return "\n".join(p.read_text("utf-8") for p in (*SOURCES, *TEMPLATES))


def test_every_key_is_used() -> None:
    source = _sources()
    whole = set(re.findall(r"""["']([a-z][\w.-]*)["']""", source))
    starts = tuple(set(re.findall(r'f?"([a-z][\w-]*\.[\w.-]*?)(?:\{|" ~)', source)))
    unused = [
        key
        for key in texts.catalogue()
        if key not in whole and key.rsplit(".", 1)[0] not in whole and not key.startswith(starts)
    ]
    assert unused == []


def test_every_key_exists() -> None:
    called = re.findall(r'\b(?:text|t)\(\s*"([\w.-]+)"[,)]', _sources())
    counted = re.findall(r'\bplural\(\s*"([\w.-]+)"', _sources())
    assert len(called) > 100
    missing = [key for key in called if not texts.has(key)]
    missing += [
        key for key in counted for form in ("one", "other") if not texts.has(f"{key}.{form}")
    ]
    assert missing == []


@pytest.mark.parametrize("template", TEMPLATES, ids=lambda p: p.name)
def test_templates_hold_no_words(template: Path) -> None:
    bare = template.read_text("utf-8")
    bare = re.sub(r"\{%.*?%\}|\{\{.*?\}\}", " ", bare, flags=re.S)
    bare = re.sub(r"<[^>]*>", " ", bare, flags=re.S)
    bare = re.sub(r"&\w+;", " ", bare)
    assert re.findall(r"[A-Za-z]{2,}", bare) == []


def test_an_unknown_key_is_an_error() -> None:
    with pytest.raises(KeyError):
        texts.text("no.such.key")


def test_hidden_marks_are_made_visible() -> None:
    assert texts.shown("lot\u202egnp") == "lot\u27e8U+202E\u27e9gnp"
    assert texts.shown("a\x00b\nc") == "a\u27e8U+0000\u27e9b\u27e8U+000A\u27e9c"
    assert texts.shown("L-Ä 12 <b>") == "L-Ä 12 <b>", "what can be seen stays as it is"


def test_lists_in_words() -> None:
    assert texts.join(["a"]) == "a"
    assert texts.join(["a", "b", "c"]) == "a, b and c"
    assert texts.plural("n.lots", 1) == "1 lot"
    assert texts.plural("n.lots", 2) == "2 lots"

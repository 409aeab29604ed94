"""All texts of pages, mails and figures come from one catalogue, `texts_en.toml`.

A key is a dotted path; a text may hold named fields in braces. A text with a count is a table of
`one` and `other` and is read with `plural`. To translate, copy the file and name it in `LANGUAGE`.
"""

from __future__ import annotations

import re
import tomllib
from functools import cache
from pathlib import Path
from typing import Any

LANGUAGE = "en"


@cache
def catalogue(language: str = LANGUAGE) -> dict[str, str]:
    """All texts by key. Raises FileNotFoundError for a language that has no file."""
    raw = Path(__file__).with_name(f"texts_{language}.toml").read_bytes()
    return dict(_flat(tomllib.loads(raw.decode("utf-8")), ""))


def _flat(table: dict[str, Any], prefix: str) -> list[tuple[str, str]]:
    found: list[tuple[str, str]] = []
    for key, value in table.items():
        name = f"{prefix}{key}"
        found += _flat(value, name + ".") if isinstance(value, dict) else [(name, str(value))]
    return found


def text(key: str, **values: object) -> str:
    """The text of a key with its fields filled in. Raises KeyError for an unknown key."""
    template = catalogue()[key]
    return template.format(**values) if values else template.replace("{{", "{").replace("}}", "}")


def has(key: str) -> bool:
    """Whether the catalogue knows the key."""
    return key in catalogue()


def plural(key: str, n: int, **values: object) -> str:
    """The `one` or `other` form of a text; `n` may be written by the caller as `count`."""
    values.setdefault("count", n)
    return text(f"{key}.{'one' if n == 1 else 'other'}", **values)


def join(parts: list[str]) -> str:
    """`a`, `a and b`, `a, b and c`."""
    if len(parts) < 2:
        return "".join(parts)
    return text("join.last", head=text("join.comma").join(parts[:-1]), last=parts[-1])


# C0 and C1 controls, zero-width marks and those that turn the direction of text.
_HIDDEN = re.compile(
    "[\x00-\x1f\x7f-\x9f\u061c\u200b-\u200f\u2028-\u202e\u2060-\u2069\ufeff\ufff9-\ufffb]"
)


def shown(name: str) -> str:
    """A name from the data with every mark that hides or turns text made visible.

    `lot<U+202E>gnp` is written so, and cannot pass for another lot on a page.
    """
    return _HIDDEN.sub(lambda mark: f"\u27e8U+{ord(mark[0]):04X}\u27e9", name.strip(" "))

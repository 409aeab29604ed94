"""What is wrong with a configuration, said so that it can be mended.

One mistake is a value (`Mistake`); a file with mistakes raises `ConfigurationError`, which
carries all of them at once.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import Any

_VALUE_WIDTH = 60


@dataclass(frozen=True)
class Mistake:
    """One mistake of a configuration file.

    `key` is the dotted path of the key (`nightly.at`, `characteristic[2].rules[0]`), `value` what
    stands there (None where the key is missing), `reason` what is wrong, `mend` what to write.
    """

    file: str
    key: str
    value: Any
    reason: str
    mend: str

    def __str__(self) -> str:
        """Say it in one line."""
        shown = "" if self.value is None else f" = {_shorten(self.value)}"
        return f"{self.file}: {self.key}{shown}: {self.reason}. {self.mend}"


class ConfigurationError(Exception):
    """The configuration cannot be used; `mistakes` lists everything that is wrong with it."""

    def __init__(self, mistakes: list[Mistake]) -> None:
        self.mistakes = mistakes
        super().__init__("\n".join(str(m) for m in mistakes))


def _shorten(value: Any) -> str:
    # A password in a URL must not travel on into logs and terminals.
    text = re.sub(r"(://[^/@:\s]*:)[^/@\s]+@", r"\1***@", repr(value))
    return text if len(text) <= _VALUE_WIDTH else text[: _VALUE_WIDTH - 1] + "…"

"""What is wrong with a configuration, said so that it can be mended.

One mistake is a value (`Mistake`); a file with mistakes raises `ConfigurationError`, which
carries all of them at once.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import Any

from config.values import PASSWORD_IN_URL

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

    def __post_init__(self) -> None:
        """Take out what is or may be a secret: a mistake travels on into terminals and logs."""
        name = re.sub(r"\[\d+\]$", "", self.key).rpartition(".")[2]
        object.__setattr__(self, "value", _without_secrets(name, self.value))

    def __str__(self) -> str:
        """Say it in one line."""
        shown = "" if self.value is None else f" = {_shorten(self.value)}"
        return f"{self.file}: {self.key}{shown}: {self.reason}. {self.mend}"


class ConfigurationError(Exception):
    """The configuration cannot be used; `mistakes` lists everything that is wrong with it."""

    def __init__(self, mistakes: list[Mistake]) -> None:
        self.mistakes = mistakes
        super().__init__("\n".join(str(m) for m in mistakes))


def _without_secrets(name: str, value: Any) -> Any:
    """The value with passwords replaced by `***`, in tables and URLs too."""
    if isinstance(value, dict):
        return {k: _without_secrets(str(k), v) for k, v in value.items()}
    if isinstance(value, list):
        return [_without_secrets(name, v) for v in value]
    if value is not None and re.search(r"pass(word|wd)?$|secret|token", name, re.IGNORECASE):
        return "***"
    return PASSWORD_IN_URL.sub(_starred, value) if isinstance(value, str) else value


def _starred(match: re.Match[str]) -> str:
    return f"{match[1] or match[3]}***"


def _shorten(value: Any) -> str:
    text = repr(value)
    return text if len(text) <= _VALUE_WIDTH else text[: _VALUE_WIDTH - 1] + "…"

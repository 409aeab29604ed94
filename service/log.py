"""Structured logs on standard error: one line an event, `key=value` after the message."""

from __future__ import annotations

import json
import logging
import sys
import time

_STANDARD = set(vars(logging.makeLogRecord({}))) | {"message", "asctime", "taskName"}


class LineFormatter(logging.Formatter):
    """`2026-11-30T05:30:00Z INFO yellowbay.mail mail sent recipient=a@b message_id=…`."""

    converter = staticmethod(time.gmtime)  # type: ignore[assignment]

    def format(self, record: logging.LogRecord) -> str:
        """One line; values with spaces, quotes or line breaks are JSON."""
        stamp = self.formatTime(record, "%Y-%m-%dT%H:%M:%SZ")
        parts = [stamp, record.levelname, record.name, _plain(record.getMessage())]
        for key, value in vars(record).items():
            if key not in _STANDARD:
                parts.append(f"{key}={_quoted(value)}")
        line = " ".join(parts)
        if record.exc_info:
            line += " trace=" + json.dumps(self.formatException(record.exc_info))
        return line


def _plain(text: str) -> str:
    return text.replace("\n", " ")


def _quoted(value: object) -> str:
    text = str(value)
    plain = text and not any(c.isspace() or c in '"=' or not c.isprintable() for c in text)
    return text if plain else json.dumps(text, ensure_ascii=False)


def start_logging(level: int = logging.WARNING) -> None:
    """Send the program's own log to standard error, and nothing of other libraries below error."""
    handler = logging.StreamHandler(sys.stderr)
    handler.setFormatter(LineFormatter())
    logger = logging.getLogger("yellowbay")
    logger.handlers[:] = [handler]
    logger.propagate = False
    logger.setLevel(level)

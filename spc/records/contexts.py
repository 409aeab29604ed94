"""Contexts in the database: each combination of context columns once, found again by its digest."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterable, Mapping, Sequence

from sqlalchemy import Connection, select

from spc.records.tables import contexts

CHUNK = 500  # parameters of one statement; every database allows as many


def chunks(values: Sequence[object], size: int = CHUNK) -> Iterable[Sequence[object]]:
    """Cut a sequence into pieces that fit one statement."""
    return (values[i : i + size] for i in range(0, len(values), size))


def context_text(columns: Mapping[str, str]) -> str:
    """JSON of a context: sorted keys, empty columns left out."""
    kept = {key: value for key, value in columns.items() if value}
    return json.dumps(kept, sort_keys=True, ensure_ascii=False)


def context_digest(text: str) -> str:
    """SHA-256 of the JSON, in hexadecimal."""
    return hashlib.sha256(text.encode()).hexdigest()


class ContextStore:
    """The contexts seen so far in one transaction; asks the database only for new ones."""

    def __init__(self, connection: Connection) -> None:
        self._connection = connection
        self._columns: dict[int, dict[str, str]] = {}
        self._ids: dict[str, int] = {}

    def load(self, ids: Iterable[int]) -> None:
        """Read the contexts of these ids that are not known yet."""
        wanted = sorted(set(map(int, ids)) - self._columns.keys())
        for part in chunks(wanted):
            query = select(contexts.c.id, contexts.c.columns).where(contexts.c.id.in_(part))
            for number, text in self._connection.execute(query):
                self._columns[number] = json.loads(text)

    def columns(self, number: int) -> dict[str, str]:
        """Columns of one context, read before by `load` or stored by `ids_of`."""
        if number not in self._columns:
            self.load([number])
        return self._columns[number]

    def ids_of(self, wanted: Sequence[Mapping[str, str]]) -> list[int]:
        """Ids of contexts, storing those that the database lacks."""
        texts = [context_text(one) for one in wanted]
        new = sorted({text for text in texts if text not in self._ids})
        digests = {context_digest(text): text for text in new}
        self._find(digests)
        missing = [d for d, text in digests.items() if text not in self._ids]
        if missing:
            rows = [{"digest": d, "columns": digests[d]} for d in missing]
            self._connection.execute(contexts.insert(), rows)
            self._find({d: digests[d] for d in missing})
        return [self._ids[text] for text in texts]

    def _find(self, digests: Mapping[str, str]) -> None:
        for part in chunks(list(digests)):
            query = select(contexts.c.id, contexts.c.digest).where(contexts.c.digest.in_(part))
            for number, digest in self._connection.execute(query):
                self._ids[digests[digest]] = number
                self._columns[number] = json.loads(digests[digest])

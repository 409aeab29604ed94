"""Contexts in the database: each combination of context columns once, found again by its digest."""

from __future__ import annotations

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


class ContextStore:
    """The contexts seen so far in one transaction; asks the database only for new ones."""

    def __init__(self, connection: Connection) -> None:
        self._connection = connection
        self._columns: dict[int, dict[str, str]] = {}
        self._ids: dict[str, int] = {}
        # Imported here: that module takes `chunks` from this one.
        from spc.records.interned import Interned

        self._interned = Interned(contexts, "columns")

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
        if new:
            numbers = self._interned.ids(self._connection, new)
            for text, number in zip(new, numbers, strict=True):
                self._ids[text] = number
                self._columns[number] = json.loads(text)
        return [self._ids[text] for text in texts]

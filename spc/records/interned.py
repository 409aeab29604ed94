"""Contexts and layouts: texts that recur in many rows, kept once and found by their digest."""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass, field

from sqlalchemy import Connection, Table, select

from spc.records.bulk import any_of, upsert
from spc.records.tables import contexts, layouts

_KEPT = 200_000
_TOGETHER = 20_000  # digests asked for at once


@dataclass
class Interned:
    """Ids of texts of one table; knows those of committed transactions without asking again.

    Call `keep` after the commit and `forget` after a rollback.
    """

    table: Table
    column: str
    _known: dict[str, int] = field(default_factory=dict)
    _fresh: dict[str, int] = field(default_factory=dict)

    def ids(
        self, connection: Connection, texts: Sequence[str], sizes: Sequence[int] | None = None
    ) -> list[int]:
        """Ids of the texts; those that the database lacks are stored. `sizes` fills column `n`."""
        lacking = {
            text: i
            for i, text in enumerate(texts)
            if text not in self._known and text not in self._fresh
        }
        if lacking:
            # In the order of the digest, so that two writers cannot wait for each other.
            rows = sorted((hashlib.sha256(t.encode()).hexdigest(), t) for t in lacking)
            for i in range(0, len(rows), _TOGETHER):
                self._store(connection, rows[i : i + _TOGETHER], lacking, sizes)
        return [self._known[t] if t in self._known else self._fresh[t] for t in texts]

    def _store(
        self,
        connection: Connection,
        rows: Sequence[tuple[str, str]],
        place: dict[str, int],
        sizes: Sequence[int] | None,
    ) -> None:
        texts = dict(rows)
        self._find(connection, texts)
        new = [{"digest": d, self.column: t} for d, t in rows if t not in self._fresh]
        if not new:
            return
        if sizes is not None:
            for row in new:
                row["n"] = sizes[place[row[self.column]]]  # type: ignore[assignment]
        insert = upsert(connection, self.table).on_conflict_do_nothing(index_elements=["digest"])
        connection.execute(insert, new)
        self._find(connection, texts)

    def _find(self, connection: Connection, texts: dict[str, str]) -> None:
        table = self.table.c
        query = select(table.id, table.digest).where(any_of(connection, table.digest, list(texts)))
        for number, digest in connection.execute(query):
            self._fresh[texts[digest]] = number

    def keep(self) -> None:
        """The transaction was committed: what it stored is there to stay."""
        if len(self._known) > _KEPT:
            self._known.clear()
        self._known.update(self._fresh)
        self._fresh.clear()

    def forget(self) -> None:
        """The transaction was rolled back: what it stored is gone."""
        self._fresh.clear()


@dataclass
class Vocabulary:
    """Everything that is interned in one pass of the ingest."""

    contexts: Interned = field(default_factory=lambda: Interned(contexts, "columns"))
    layouts: Interned = field(default_factory=lambda: Interned(layouts, "sites"))

    def keep(self) -> None:
        """After a commit."""
        self.contexts.keep()
        self.layouts.keep()

    def forget(self) -> None:
        """After a rollback."""
        self.contexts.forget()
        self.layouts.forget()

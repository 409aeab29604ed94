"""An evaluation that puts aside what it finds, to be written in one short transaction.

While it reads and reckons it holds no lock, so that many can do so side by side on any database.
What the database has no number for yet (a new stream, a context, a set of limits) gets one beyond
all that a database gives; it is exchanged for the real one when all is written.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Connection, Table

from spc.monitoring import baselines
from spc.monitoring.limit_sets import LimitSet
from spc.monitoring.writer import Writer
from spc.records import reevaluations, series
from spc.records.columns import Columns
from spc.records.contexts import ContextStore, context_text
from spc.records.tables import points

PROVISIONAL = 2**50  # a float still tells such numbers apart
_IDS = ("stream_id", "baseline_id", "context_id", "step_context_id")


class ContextsToCome(ContextStore):
    """Contexts that the database lacks get a provisional number; nothing is stored."""

    def __init__(self, connection: Connection) -> None:
        super().__init__(connection)
        self.new: dict[str, int] = {}

    def ids_of(self, wanted: Sequence[Mapping[str, str]]) -> list[int]:
        """Ids of contexts, provisional for those that the database lacks."""
        texts = [context_text(one) for one in wanted]
        lacking = sorted({text for text in texts if text not in self._ids})
        known = reevaluations.known_contexts(self._connection, lacking)
        for text in lacking:
            if text not in known:
                known[text] = self.new[text] = PROVISIONAL + len(self.new)
            self._ids[text] = known[text]
            self._columns[known[text]] = json.loads(text)
        return [self._ids[text] for text in texts]


@dataclass
class _Aside:
    cleared: set[int] = field(default_factory=set)
    streams: dict[str, int] = field(default_factory=dict)  # new ones, provisional
    decisions: list[baselines.Decision] = field(default_factory=list)
    sets: dict[int, LimitSet] = field(default_factory=dict)  # new ones, by provisional number
    rows: list[tuple[Table, Columns]] = field(default_factory=list)


class Recorder(Writer):
    """Puts aside what `spc.monitoring.update.Update` finds of streams of one characteristic."""

    def __init__(self, connection: Connection) -> None:
        super().__init__(connection)
        self.contexts: ContextsToCome = ContextsToCome(connection)
        self.known: dict[str, int] = {}
        self._aside = _Aside()
        self._in_force: dict[int, LimitSet] = {}

    # ---- what the evaluation asks for -----------------------------------------------------------

    def stream_ids(self, characteristic: str, wanted: Sequence[str]) -> dict[str, int]:
        """Id of each stream by its context (JSON), provisional for new ones."""
        self.known = series.stream_ids(self.connection, characteristic)
        new = self._aside.streams
        for key in wanted:
            if key not in self.known and key not in new:
                new[key] = PROVISIONAL + len(new)
        return {**self.known, **new}

    def clear(self, stream_ids: Iterable[int]) -> None:
        """Remember streams whose points and wafer results go."""
        self._aside.cleared |= {number for number in stream_ids if number < PROVISIONAL}

    def decide(self, decisions: Sequence[baselines.Decision], as_of_us: int) -> int:
        """Remember decisions on automatic limits; returns how many sets are new."""
        self._aside.decisions += decisions
        for one in decisions:
            if one.new is not None:
                number = PROVISIONAL + len(self._aside.sets)
                fields = {**one.new.__dict__, "payload": json.loads(one.new.payload)}
                self._aside.sets[number] = LimitSet(id=number, **fields)
        return sum(one.new is not None for one in decisions)

    def in_force(self, stream_ids: Iterable[int]) -> list[LimitSet]:
        """Automatic and approved sets of streams, as the decisions will leave them."""
        wanted = set(stream_ids)
        gone = {one.withdraw for one in self._aside.decisions}
        known = [s for s in baselines.in_force(self.connection, wanted) if s.id not in gone]
        sets = known + [s for s in self._aside.sets.values() if s.stream_id in wanted]
        self._in_force |= {one.id: one for one in sets}
        return sorted(sets, key=lambda one: (one.stream_id, one.id))

    def insert(self, table: Table, rows: Columns) -> None:
        """Remember points or wafer results."""
        self._aside.rows.append((table, rows))

    # ---- what becomes of it ---------------------------------------------------------------------

    def digest(self) -> str:
        """Digest of every bit of the results, the same whatever numbers the database gives."""
        found = hashlib.sha256()
        key_of = {number: key for key, number in {**self.known, **self._aside.streams}.items()}
        payload_of = {
            number: hashlib.sha256(json.dumps(one.payload, sort_keys=True).encode()).hexdigest()
            for number, one in self._in_force.items()
        }
        for table, rows in self._aside.rows:
            found.update(table.name.encode())
            _add(found, _named(rows["stream_id"], key_of))
            if table is points:
                _add(found, _named(rows["baseline_id"], payload_of))
            for name in sorted(set(rows) - set(_IDS)):
                found.update(name.encode())
                _add(found, rows[name])
        return found.hexdigest()

    def write(self, connection: Connection, characteristic: str, as_of_us: int) -> None:
        """Write all that was put aside, on another connection, in the caller's transaction."""
        aside, writer = self._aside, Writer(connection)
        new_contexts = list(self.contexts.new)
        contexts = writer.contexts.ids_of([json.loads(text) for text in new_contexts])
        ids = writer.stream_ids(characteristic, list(aside.streams)) if aside.streams else {}
        stream_of = {number: ids[key] for key, number in aside.streams.items()}
        writer.clear(aside.cleared)
        decisions = [_of_stream(one, stream_of) for one in aside.decisions]
        made = baselines.carry_out(connection, decisions, as_of_us)
        numbers = (self.contexts.new[text] for text in new_contexts)
        context_of = dict(zip(numbers, contexts, strict=True))
        set_of = dict(zip(aside.sets, made, strict=True))
        real = {
            "stream_id": stream_of,
            "baseline_id": set_of,
            "context_id": context_of,
            "step_context_id": context_of,
        }
        for table, rows in aside.rows:
            changed = {n: _exchanged(rows[n], real[n]) for n in _IDS if n in rows}
            writer.insert(table, rows.having(**changed))


def _of_stream(one: baselines.Decision, stream_of: Mapping[int, int]) -> baselines.Decision:
    number = stream_of.get(one.stream_id, one.stream_id)
    new = None if one.new is None else replace(one.new, stream_id=number)
    return replace(one, stream_id=number, new=new)


def _exchanged(numbers: NDArray, real: Mapping[int, int]) -> NDArray:
    """Numbers with the provisional ones exchanged; NaN stays."""
    out = numbers.copy()
    at = np.flatnonzero(np.nan_to_num(numbers.astype(np.float64)) >= PROVISIONAL)
    if at.size:
        used, of = np.unique(numbers[at], return_inverse=True)
        out[at] = np.array([real[int(one)] for one in used])[of]
    return out


def _named(numbers: NDArray, names: Mapping[int, str]) -> NDArray:
    """What each number means, as text; NaN is empty."""
    used, of = np.unique(np.nan_to_num(numbers.astype(np.float64), nan=-1.0), return_inverse=True)
    texts = np.empty(used.size, dtype=object)
    texts[:] = [names[int(one)] if one >= 0 else "" for one in used]
    return np.asarray(texts[of])


def _add(digest: hashlib._Hash, values: NDArray) -> None:
    if values.dtype == object:
        plain = values.tolist()
        if plain and isinstance(plain[0], bytes):
            digest.update(json.dumps([len(one) for one in plain]).encode() + b"".join(plain))
        else:
            digest.update(json.dumps(plain).encode())
        return
    if values.dtype.kind == "f":
        values = np.where(np.isnan(values), np.nan, values)  # one NaN is as good as another
    digest.update(np.ascontiguousarray(values).tobytes())

"""Files on their way in: each claimed, read and stored, the next one read meanwhile."""

from __future__ import annotations

from collections.abc import Callable, Generator, Sequence
from concurrent.futures import Future, ThreadPoolExecutor
from contextlib import ExitStack, closing
from dataclasses import dataclass

from sqlalchemy import Engine

from config.load import Bay
from ingest.drops import Drop, NotSettledError, read_drop
from ingest.feeds import feeds_of
from ingest.prepare import Rulebook
from ingest.report import FileReport, waiting
from ingest.store import Fetched, Store
from ingest.units import planned_units
from spc.records import ledger
from spc.records.sessions import reading

# Larger files are not read ahead: two of the largest at once would need too much memory.
READ_AHEAD_BYTES = 16 * 1024 * 1024

Progress = Callable[[int, int, str], None]


def store_of(engine: Engine, bay: Bay, clock_us: int) -> Store:
    """What reads and stores the files of a bay."""
    with reading(engine) as connection:
        units = ledger.parameter_units(connection)
    rulebook = Rulebook(bay.settings, planned_units(bay.plan), units)
    return Store(engine, clock_us, feeds_of(bay.settings), rulebook)


def reports_of(
    todo: Sequence[Drop], store: Store, progress: Progress | None = None
) -> Generator[FileReport | None, None, None]:
    """Take in the files one by one; gives the report of each, None where it was in already."""
    with closing(_in_hand(todo, store)) as in_hand:
        for done, drop in enumerate(todo):
            if progress is not None:
                progress(done, len(todo), drop.path)
            claimed = next(in_hand)
            report = claimed.waiting
            if claimed.fetched is not None:
                report = store.store(claimed.fetched)
            yield report


@dataclass(frozen=True)
class _Claimed:
    """A file in hand: read, or the reason why it has to wait. `release` gives it back."""

    fetched: Fetched | None
    waiting: FileReport | None
    release: Callable[[], None]


def _fetch(drop: Drop, store: Store) -> _Claimed:
    """Claim, read and prepare one file; needs no transaction and may run beside the storing."""
    with ExitStack() as stack:
        if not stack.enter_context(ledger.claimed(store.engine, drop.path)):
            return _Claimed(None, waiting(drop.path, "another worker has it in hand"), _nothing)
        try:
            content = read_drop(drop, store.rulebook.settings.drops.max_file_bytes)
        except NotSettledError as error:
            return _Claimed(None, waiting(drop.path, str(error)), _nothing)
        with reading(store.engine) as connection:
            entry = ledger.entry_of(connection, content.digest)
        prepared = store.prepare(drop, content) if store.deserves_a_try(entry) else None
        return _Claimed(Fetched(drop, content, prepared), None, stack.pop_all().close)
    raise AssertionError  # pragma: no cover - the stack swallows nothing


def _nothing() -> None:
    """Release of what was never claimed."""


def _in_hand(todo: Sequence[Drop], store: Store) -> Generator[_Claimed, None, None]:
    """Each file in turn; while one is stored the next is read already, if it is not too large."""
    with ThreadPoolExecutor(1, thread_name_prefix="ingest") as pool:
        ahead: Future[_Claimed] | None = None
        try:
            for i, drop in enumerate(todo):
                current = ahead.result() if ahead is not None else _fetch(drop, store)
                ahead = None
                if i + 1 < len(todo) and todo[i + 1].size <= READ_AHEAD_BYTES:
                    ahead = pool.submit(_fetch, todo[i + 1], store)
                try:
                    yield current
                finally:
                    current.release()
        finally:
            if ahead is not None:
                ahead.result().release()

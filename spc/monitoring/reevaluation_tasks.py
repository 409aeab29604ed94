"""What a worker of a re-evaluation does: survey lots, or evaluate one partition of streams.

A task carries no readings and no password: the worker reads from the database itself and finds the
password in its own environment. It may be done twice or by two workers at once without harm: one
result is kept (`spc.records.reevaluations`).
"""

from __future__ import annotations

import hashlib
import json
import platform
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from functools import cache
from importlib.metadata import version
from pathlib import Path
from threading import Lock
from typing import Any

import numpy as np
from sqlalchemy import Engine

from config.control_plan import Characteristic
from config.load import Bay
from spc.monitoring.recorder import Recorder
from spc.monitoring.streams import place_in_streams
from spc.monitoring.update import Update
from spc.records import reevaluations, series
from spc.records.contexts import ContextStore
from spc.records.measurements import Marker, log_rows
from spc.records.sessions import open_database, reading

_COUNTED = ("numpy", "scipy", "statsmodels", "SQLAlchemy")


class VersionsDifferError(Exception):
    """A worker runs other code than whoever sent the task; its numbers might differ."""


@dataclass(frozen=True)
class Job:
    """What every task of a run needs. `bay` has no plan and no mail settings in it.

    run, epoch : 0 in the survey, which belongs to no run yet.
    """

    bay: Bay
    marker: Marker
    versions: Mapping[str, str]
    run: int = 0
    epoch: int = 0


@dataclass(frozen=True)
class Block:
    """Lots to be surveyed, and the characteristics that may take readings of them."""

    job: Job
    characteristics: tuple[Characteristic, ...]
    lots: tuple[str, ...]


@dataclass(frozen=True)
class Share:
    """A partition to be evaluated."""

    job: Job
    characteristic: Characteristic
    number: int


@dataclass
class Seen:
    """What a survey found of one stream."""

    measurements: int = 0
    last_us: int = 0
    lots: set[str] = field(default_factory=set)


Survey = dict[str, dict[str, Seen]]  # characteristic -> stream (JSON) -> what was seen


# ---- where a task runs ---------------------------------------------------------------------------


@cache
def versions() -> dict[str, str]:
    """What the numbers depend on: the code of `spc`, Python, the libraries."""
    code = hashlib.sha256()
    root = Path(__file__).resolve().parents[1]
    for file in sorted(root.rglob("*.py")):
        code.update(file.relative_to(root).as_posix().encode() + b"\0" + file.read_bytes())
    found = {name: version(name) for name in _COUNTED}
    return {"yellowbay": code.hexdigest()[:12], "python": platform.python_version(), **found}


def _check(job: Job) -> None:
    mine = versions()
    other = [
        f"{name} {mine.get(name)} (wanted {wanted})"
        for name, wanted in job.versions.items()
        if mine.get(name) != wanted
    ]
    if other:
        raise VersionsDifferError(
            f"the worker on {platform.node()} has {', '.join(other)}: install the same yellowbay "
            "with the same constraints.txt there"
        )


_ENGINES: dict[str, Engine] = {}
_OPENING = Lock()  # a worker may have several threads


def _database(job: Job) -> Engine:
    """The engine of this process; the password comes from the environment of this process."""
    _check(job)
    url, timeout = job.bay.database_url, job.bay.settings.database.statement_timeout_seconds
    with _OPENING:
        if url not in _ENGINES:
            _ENGINES[url] = open_database(url, statement_timeout_seconds=timeout)
        return _ENGINES[url]


def close_engines() -> None:
    """Close the connections that tasks in this process have used."""
    with _OPENING:
        for engine in _ENGINES.values():
            engine.dispose()
        _ENGINES.clear()


# ---- the survey ----------------------------------------------------------------------------------


class _NoNumbers(ContextStore):
    """A survey stores no contexts and needs no numbers of new ones."""

    def ids_of(self, wanted: Sequence[Mapping[str, str]]) -> list[int]:
        return [0] * len(wanted)


def survey(block: Block) -> Survey:
    """Which streams the readings of some lots are in; more lots than needed do no harm."""
    found: Survey = {}
    as_of_us = block.job.marker.as_of_us
    with reading(_database(block.job)) as connection:
        contexts = _NoNumbers(connection)
        for one in block.characteristics:
            layer = one.where.get("layer")
            layers = None if layer is None else [layer, ""]
            rows = reevaluations.surveyed(connection, one.parameters, as_of_us, layers, block.lots)
            if not len(rows):
                continue
            lots = sorted(set(rows["lot"].tolist()))
            log = log_rows(connection, as_of_us, lots, parameters=one.parameters)
            placed = place_in_streams(rows, log, contexts, one)
            mine = found.setdefault(one.name, {})
            for code, key in enumerate(placed.keys):
                taken = np.flatnonzero(placed.stream == code)
                seen = mine.setdefault(key, Seen())
                seen.measurements += taken.size
                seen.last_us = int(rows["measured_us"][taken].max())
                seen.lots |= set(rows["lot"][taken].tolist())
    return found


# ---- a partition ---------------------------------------------------------------------------------


def evaluate_share(share: Share) -> dict[str, Any] | None:
    """Evaluate the streams of a partition anew and write the results in one transaction.

    Returns what the partition came to, the same whoever did it; None where the run was taken over.
    """
    job = share.job
    engine = _database(job)
    with reading(engine) as connection:
        known = reevaluations.result_of(connection, job.run, share.number)
        part = reevaluations.part(connection, job.run, share.number)
        if known is not None or part is None:
            return known
        recorder, result = _evaluated(connection, share, part)
    with engine.begin() as connection:
        if not reevaluations.may_write(connection, job.run, job.epoch):
            return None
        if reevaluations.note(connection, job.run, share.number, result):
            recorder.write(connection, part.characteristic, job.marker.as_of_us)
            return result
        return reevaluations.result_of(connection, job.run, share.number)


def _evaluated(
    connection: Any, share: Share, part: reevaluations.Part
) -> tuple[Recorder, dict[str, Any]]:
    one, job = share.characteristic, share.job
    recorder = Recorder(connection)
    known = series.stream_ids(connection, one.name)
    stored = [known[key] for key in part.streams if key in known]
    update = Update(connection, job.bay, job.marker, recorder)
    found = update.run_streams(one, frozenset(part.streams), part.lots)
    return recorder, {
        "streams": len(found.touched),
        "points": found.points,
        "signals": found.signals,
        "signals_before": reevaluations.signals_of(connection, stored),
        "new_baselines": found.new_baselines,
        "notes": list(dict.fromkeys(found.notes)),
        "digest": recorder.digest(),
    }


def digest_of_all(results: Sequence[Mapping[str, Any]]) -> str:
    """Digest of the results of all partitions, in their order."""
    text = json.dumps([one["digest"] for one in results])
    return hashlib.sha256(text.encode()).hexdigest()

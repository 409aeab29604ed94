"""Runs of a re-evaluation: their partitions, what is done of them, and who may write for them.

A worker that was cut off may still be at work when its run goes on elsewhere, or when a nightly
pass has taken its place. So each result is written only while the run is `running` under the
worker's epoch and the partition has no result yet; the rows are locked until the commit.
"""

from __future__ import annotations

import hashlib
import json
import zlib
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from sqlalchemy import Connection, delete, func, select, update

from spc.records.bulk import any_of
from spc.records.columns import Columns, joined, of_rows
from spc.records.contexts import chunks
from spc.records.measurements import Marker
from spc.records.tables import (
    contexts,
    measurements,
    points,
    reevaluation_parts,
    reevaluations,
    streams,
)

RUNNING, FINISHED, OVERTAKEN = "running", "finished", "overtaken"

_SURVEYED = {
    "parameter": "o",
    "layer": "o",
    "lot": "o",
    "wafer": "o",
    "measured_us": "i",
    "processed_us": "f",
    "context_id": "i",
}
_runs, _parts = reevaluations.c, reevaluation_parts.c


@dataclass(frozen=True)
class NewRun:
    """A run that begins.

    key : digest of all that its results follow from. marker : how far it looks.
    plan_digests : characteristic -> digest of its plan, as `spc.records.evaluations` keeps it.
    whole : characteristics of which every stream is evaluated.
    """

    key: str
    marker: Marker
    plan_digests: Mapping[str, str]
    whole: Sequence[str]


@dataclass(frozen=True)
class Run:
    """A run under way; `epoch` is that of whoever asked."""

    id: int
    epoch: int
    key: str
    marker: Marker
    plan_digests: dict[str, str]
    whole: tuple[str, ...]


@dataclass(frozen=True)
class Part:
    """A partition: streams (contexts, JSON) of one characteristic and the lots they are in."""

    characteristic: str
    streams: tuple[str, ...]
    lots: tuple[str, ...]


def running(connection: Connection) -> Run | None:
    """The run that was begun and not finished, None when there is none."""
    row = connection.execute(
        select(reevaluations).where(_runs.status == RUNNING).order_by(_runs.id.desc()).limit(1)
    ).one_or_none()
    if row is None:
        return None
    marker = Marker(row.as_of_us, row.last_measurement_id, row.last_log_id)
    digests, whole = json.loads(row.plan_digests), tuple(json.loads(row.whole))
    return Run(row.id, row.epoch, row.key, marker, digests, whole)


def begin(connection: Connection, new: NewRun, parts: Sequence[Part]) -> None:
    """Keep a new run with its partitions, numbered from 0."""
    done = connection.execute(
        reevaluations.insert().values(
            key=new.key,
            status=RUNNING,
            epoch=1,
            as_of_us=new.marker.as_of_us,
            last_measurement_id=new.marker.last_measurement_id,
            last_log_id=new.marker.last_log_id,
            plan_digests=json.dumps(dict(new.plan_digests), sort_keys=True),
            whole=json.dumps(list(new.whole)),
        )
    )
    assert done.inserted_primary_key is not None  # an insert of one row has its key
    run = int(done.inserted_primary_key[0])
    rows = [
        {"run_id": run, "number": i, "characteristic": p.characteristic, "content": _packed(p)}
        for i, p in enumerate(parts)
    ]
    if rows:
        connection.execute(reevaluation_parts.insert(), rows)


def take_over(connection: Connection, run: Run) -> Run:
    """Go on with a run; whoever worked for it before is shut out."""
    epoch = run.epoch + 1
    connection.execute(update(reevaluations).where(_runs.id == run.id).values(epoch=epoch))
    return Run(run.id, epoch, run.key, run.marker, run.plan_digests, run.whole)


def overtake(connection: Connection) -> None:
    """Shut out every run under way: its results would be older than what follows."""
    connection.execute(
        update(reevaluations).where(_runs.status == RUNNING).values(status=OVERTAKEN)
    )


def drop_parts(connection: Connection) -> None:
    """Forget the partitions of runs that are over."""
    over = select(_runs.id).where(_runs.status != RUNNING)
    connection.execute(delete(reevaluation_parts).where(_parts.run_id.in_(over)))


def to_do(connection: Connection, run_id: int) -> list[tuple[int, str]]:
    """Number and characteristic of the partitions that have no result yet."""
    query = select(_parts.number, _parts.characteristic).where(
        _parts.run_id == run_id, _parts.result.is_(None)
    )
    rows = connection.execute(query.order_by(_parts.number))
    return [(row.number, row.characteristic) for row in rows]


def results(connection: Connection, run_id: int) -> list[dict[str, Any]]:
    """Results of the partitions that have one, by number."""
    query = select(_parts.result).where(_parts.run_id == run_id, _parts.result.is_not(None))
    return [json.loads(text) for text in connection.scalars(query.order_by(_parts.number))]


def part(connection: Connection, run_id: int, number: int) -> Part | None:
    """One partition, None where its run is over and forgotten."""
    query = select(_parts.characteristic, _parts.content).where(
        _parts.run_id == run_id, _parts.number == number
    )
    row = connection.execute(query).one_or_none()
    if row is None:
        return None
    content = json.loads(zlib.decompress(row.content))
    return Part(row.characteristic, tuple(content["streams"]), tuple(content["lots"]))


def result_of(connection: Connection, run_id: int, number: int) -> dict[str, Any] | None:
    """Result of one partition, None where it has none."""
    text = connection.scalar(
        select(_parts.result).where(_parts.run_id == run_id, _parts.number == number)
    )
    return None if text is None else dict(json.loads(text))


def may_write(connection: Connection, run_id: int, epoch: int) -> bool:
    """Whether the run goes on under this epoch; holds that until the end of the transaction."""
    asked = select(_runs.id).where(
        _runs.id == run_id, _runs.status == RUNNING, _runs.epoch == epoch
    )
    # Shared: workers do not wait for each other, who takes the run over waits for them.
    return connection.scalar(asked.with_for_update(read=True)) is not None


def note(connection: Connection, run_id: int, number: int, result: Mapping[str, Any]) -> bool:
    """Keep the result of a partition; False where another worker was first."""
    done = connection.execute(
        update(reevaluation_parts)
        .where(_parts.run_id == run_id, _parts.number == number, _parts.result.is_(None))
        .values(result=json.dumps(dict(result), sort_keys=True))
    )
    return done.rowcount == 1


def finish(connection: Connection, run: Run, result: Mapping[str, Any]) -> bool:
    """Close a run whose partitions are all done; False where it was taken over."""
    done = connection.execute(
        update(reevaluations)
        .where(_runs.id == run.id, _runs.status == RUNNING, _runs.epoch == run.epoch)
        .values(status=FINISHED, result=json.dumps(dict(result), sort_keys=True))
    )
    if done.rowcount != 1:
        return False
    drop_parts(connection)
    return True


def take_note(connection: Connection) -> dict[int, int]:
    """What a pass has to know: streams evaluated anew since the last one, and their first stamp.

    Runs under way are overtaken by the pass. Asked twice, the second answer is empty.
    """
    rows = connection.execute(
        select(_runs.id, _runs.plan_digests).where((_runs.told == 0) | (_runs.status == RUNNING))
    ).all()
    if not rows:
        return {}
    overtake(connection)
    ids = [row.id for row in rows]
    connection.execute(update(reevaluations).where(_runs.id.in_(ids)).values(told=1))
    names = sorted({name for row in rows for name in json.loads(row.plan_digests)})
    found: dict[int, int] = {}
    for some in chunks(names):
        first = (
            select(points.c.stream_id, func.min(points.c.at_us))
            .join(streams, streams.c.id == points.c.stream_id)
            .where(streams.c.characteristic.in_(some))
            .group_by(points.c.stream_id)
        )
        found |= {int(stream): int(us) for stream, us in connection.execute(first)}
    return found


# ---- the survey ----------------------------------------------------------------------------------


def read_lots(connection: Connection, as_of_us: int) -> list[tuple[str, str, str]]:
    """Parameter, layer and lot of everything measured up to a stamp."""
    m = measurements.c
    query = select(m.parameter, m.layer, m.lot).distinct().where(m.measured_us <= as_of_us)
    return sorted(tuple(row) for row in connection.execute(query))  # type: ignore[misc]


def surveyed(
    connection: Connection,
    parameters: Sequence[str],
    as_of_us: int,
    layers: Sequence[str] | None,
    lots: Sequence[str],
) -> Columns:
    """Measurements without their sites, of some lots."""
    m = measurements.c
    query = select(*(m[name] for name in _SURVEYED)).where(
        m.parameter.in_(list(parameters)), m.measured_us <= as_of_us
    )
    if layers is not None:
        query = query.where(m.layer.in_(list(layers)))
    parts = [
        of_rows(connection.execute(query.where(m.lot.in_(some))).all(), _SURVEYED)
        for some in chunks(sorted(lots))
    ]
    return joined(parts or [of_rows([], _SURVEYED)])


# ---- what a worker has to look up ----------------------------------------------------------------


def known_contexts(connection: Connection, texts: Iterable[str]) -> dict[str, int]:
    """Ids of those contexts (JSON) that the database has."""
    by_digest = {hashlib.sha256(text.encode()).hexdigest(): text for text in texts}
    if not by_digest:
        return {}
    query = select(contexts.c.id, contexts.c.digest).where(
        any_of(connection, contexts.c.digest, list(by_digest))
    )
    return {by_digest[digest]: number for number, digest in connection.execute(query)}


def signals_of(connection: Connection, stream_ids: Iterable[int]) -> int:
    """Points of streams that complete a rule, as they are stored."""
    total = 0
    for some in chunks(sorted(set(stream_ids))):
        query = select(func.count()).where(points.c.stream_id.in_(some), points.c.rules != "")
        total += int(connection.scalar(query) or 0)
    return total


def _packed(one: Part) -> bytes:
    content = {"streams": list(one.streams), "lots": list(one.lots)}
    return zlib.compress(json.dumps(content, ensure_ascii=False).encode())

"""Evaluating years of history anew, stream by stream, on as many cores as there are.

A nightly pass after a change of the plan does the same in one transaction on one core. Here the
streams are cut into partitions that do not depend on how many workers there are; each is evaluated
by the code of the nightly pass and written in a transaction of its own, with a note that it is
done. A run that was stopped goes on with what is not done. Excursions are left to the next pass.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass, replace
from typing import Any

from sqlalchemy import Connection, Engine

from config.control_plan import Characteristic, ControlPlan
from config.load import Bay
from config.settings import MailSettings
from spc.monitoring.reevaluation_engines import Runner
from spc.monitoring.reevaluation_tasks import (
    Block,
    Job,
    Seen,
    Share,
    Survey,
    digest_of_all,
    evaluate_share,
    survey,
    versions,
)
from spc.monitoring.work import digest_of, hand_digests
from spc.records import evaluations, reevaluations, series
from spc.records.measurements import Marker, newest_ids
from spc.records.reevaluations import NewRun, Part, Run
from spc.records.sessions import reading

LOTS_A_BLOCK = 1000
Progress = Callable[[str, int, int], None]


class OvertakenError(Exception):
    """A pass or another run took over; what it left undone is not done by this one."""


@dataclass(frozen=True)
class Wanted:
    """What to evaluate anew.

    characteristics : names; empty for all of the plan.
    since_us : only streams measured since that stamp (us), with all their points; None: all.
    clock_us : the clock where nothing was evaluated yet; else that of the last evaluation counts.
    """

    characteristics: tuple[str, ...] = ()
    since_us: int | None = None
    clock_us: int = 0


@dataclass(frozen=True)
class Report:
    """What a run came to.

    partitions : all of the run, and of these the ones that an earlier attempt had done.
    digest : of every bit of the results; the same on any engine with any number of workers.
    """

    as_of_us: int
    engine: str
    workers: int
    characteristics: int
    partitions: int
    done_before: int
    streams: int
    points: int
    signals: int
    signals_before: int
    new_baselines: int
    left_to_nightly: tuple[str, ...]
    notes: tuple[str, ...]
    digest: str


@dataclass(frozen=True)
class _Course:
    """What a run works with; `chosen` are the characteristics wanted."""

    engine: Engine
    bay: Bay
    wanted: Wanted
    runner: Runner
    progress: Progress

    @property
    def chosen(self) -> list[Characteristic]:
        names = self.wanted.characteristics
        return [one for one in self.bay.plan.characteristic if not names or one.name in names]


def reevaluate(
    engine: Engine, bay: Bay, wanted: Wanted, runner: Runner, progress: Progress
) -> Report:
    """Evaluate streams anew, going on with a run that was stopped; the caller holds the lock.

    Raises
    ------
    OvertakenError
        When a pass or another run took over meanwhile.
    spc.monitoring.reevaluation_engines.EngineError
        When workers keep dying or the scheduler is lost.
    """
    course = _Course(engine, bay, wanted, runner, progress)
    run = _begun(course)
    job = replace(_job(bay, run.marker), run=run.id, epoch=run.epoch)
    named = {one.name: one for one in course.chosen}
    with reading(engine) as connection:
        left = reevaluations.to_do(connection, run.id)
        before = len(reevaluations.results(connection, run.id))
    shares = [Share(job, named[name], number) for number, name in left]
    total = before + len(shares)
    progress("evaluating", before, total)
    for done, result in enumerate(runner.each(evaluate_share, shares), before + 1):
        if result is None:
            raise OvertakenError("a pass or another run took over: run it again")
        progress("evaluating", done, total)
    return _finished(engine, run, runner, before)


# ---- beginning, or going on ----------------------------------------------------------------------


def _begun(course: _Course) -> Run:
    """The run to go on with, or a new one with its partitions."""
    with course.engine.begin() as connection:
        run = reevaluations.running(connection)
        marker, digests = _looked_at(connection, course, run)
        key = _key(digests, marker, course)
        if run is not None and run.key == key:
            return reevaluations.take_over(connection, run)
        reevaluations.overtake(connection)
        reevaluations.drop_parts(connection)
        lots = reevaluations.read_lots(connection, marker.as_of_us)
    found = _surveyed(course, list(_blocks(_job(course.bay, marker), course.chosen, lots)))
    with course.engine.begin() as connection:
        parts, whole = _parts(connection, course, found)
        reevaluations.begin(connection, NewRun(key, marker, digests, whole), parts)
        begun = reevaluations.running(connection)
    assert begun is not None  # it was written in this transaction
    return begun


def _surveyed(course: _Course, blocks: Sequence[Block]) -> Survey:
    found: Survey = {}
    course.progress("looking for streams", 0, len(blocks))
    for done, some in enumerate(course.runner.each(survey, blocks), 1):
        _add(found, some)
        course.progress("looking for streams", done, len(blocks))
    return found


def _looked_at(
    connection: Connection, course: _Course, run: Run | None
) -> tuple[Marker, dict[str, str]]:
    """How far to look, and the digest of the plan of each characteristic."""
    bay, kept = course.bay, evaluations.all_kept(connection)
    clocks = [kept[c.name][1].as_of_us for c in bay.plan.characteristic if c.name in kept]
    if clocks:
        as_of_us = max(clocks)
    else:
        as_of_us = course.wanted.clock_us if run is None else run.marker.as_of_us
    by_hand, radius = hand_digests(connection), bay.settings.bay.wafer_radius_mm
    digests = {one.name: digest_of(one, radius, by_hand) for one in course.chosen}
    return Marker(as_of_us, *newest_ids(connection)), digests


def _key(digests: dict[str, str], marker: Marker, course: _Course) -> str:
    """Digest of all that the results and their partitions follow from."""
    shape = [
        digests,
        [marker.as_of_us, marker.last_measurement_id, marker.last_log_id],
        course.wanted.since_us,
        course.bay.settings.compute.partition_measurements,
        versions(),
    ]
    return hashlib.sha256(json.dumps(shape, sort_keys=True).encode()).hexdigest()


def _job(bay: Bay, marker: Marker) -> Job:
    """What tasks need of the bay: no plan, no addresses."""
    settings = bay.settings.model_copy(update={"mail": MailSettings(), "feed": ()})
    short = Bay(bay.file, settings, ControlPlan.model_construct(characteristic=()))
    return Job(short, marker, versions())


def _blocks(
    job: Job, chosen: Sequence[Characteristic], lots: Iterable[tuple[str, str, str]]
) -> Iterator[Block]:
    """Lots that readings of the plan are of, some at a time."""
    wanted: dict[str, list[str | None]] = {}
    for one in chosen:
        for parameter in one.parameters:
            wanted.setdefault(parameter, []).append(one.where.get("layer"))
    names = sorted(
        {
            lot
            for parameter, layer, lot in lots
            if any(asked in (None, layer) or layer == "" for asked in wanted.get(parameter, ()))
        }
    )
    for i in range(0, len(names), LOTS_A_BLOCK):
        yield Block(job, tuple(chosen), tuple(names[i : i + LOTS_A_BLOCK]))


def _add(found: Survey, some: Survey) -> None:
    for name, streams in some.items():
        mine = found.setdefault(name, {})
        for key, seen in streams.items():
            known = mine.setdefault(key, Seen())
            known.measurements += seen.measurements
            known.last_us = max(known.last_us, seen.last_us)
            known.lots |= seen.lots


# ---- partitions ----------------------------------------------------------------------------------


def _parts(connection: Connection, course: _Course, found: Survey) -> tuple[list[Part], list[str]]:
    """The partitions, and the characteristics that they cover whole."""
    since_us, size = course.wanted.since_us, course.bay.settings.compute.partition_measurements
    parts: list[Part] = []
    whole: list[str] = []
    for one in course.chosen:
        every = found.get(one.name, {})
        seen = {k: s for k, s in every.items() if since_us is None or s.last_us >= since_us}
        gone = series.stream_ids(connection, one.name).keys() - every.keys()
        if len(seen) == len(every):
            whole.append(one.name)
            if gone:  # no reading is in them any more: what they had is taken away
                parts.append(Part(one.name, tuple(sorted(gone)), ()))
        parts += _cut(one.name, seen, size)
    return parts, whole


def _cut(name: str, seen: dict[str, Seen], size: int) -> Iterator[Part]:
    """Streams in turn until a partition is full; those that share lots stand side by side."""
    keys: list[str] = []
    lots: set[str] = set()
    count = 0
    for key in _neighbours(seen):
        if keys and count + seen[key].measurements > size:
            yield Part(name, tuple(keys), tuple(sorted(lots)))
            keys, lots, count = [], set(), 0
        keys.append(key)
        lots |= seen[key].lots
        count += seen[key].measurements
    if keys:
        yield Part(name, tuple(keys), tuple(sorted(lots)))


def _neighbours(seen: dict[str, Seen]) -> list[str]:
    """Streams by the first stream that they share a lot with, directly or through others.

    A partition reads its lots whole; the fewer partitions share a lot, the less is read twice.
    """
    leader = {key: key for key in seen}

    def first(key: str) -> str:
        while leader[key] != key:
            leader[key] = leader[leader[key]]
            key = leader[key]
        return key

    owner: dict[str, str] = {}
    for key in sorted(seen):
        for lot in seen[key].lots:
            one, other = sorted((first(owner.setdefault(lot, key)), first(key)))
            leader[other] = one
    return sorted(seen, key=lambda key: (first(key), key))


# ---- the end -------------------------------------------------------------------------------------


def _finished(engine: Engine, run: Run, runner: Runner, before: int) -> Report:
    """Close the run, and remember how far its characteristics were evaluated."""
    with engine.begin() as connection:
        results = reevaluations.results(connection, run.id)
        report = _report(results, run, runner, before)
        if not reevaluations.finish(connection, run, _kept(report)):
            raise OvertakenError("a pass or another run took over: run it again")
        for name in run.whole:
            evaluations.keep(connection, name, run.plan_digests[name], run.marker)
    return report


def _report(results: Sequence[dict[str, Any]], run: Run, runner: Runner, before: int) -> Report:
    def total(name: str) -> int:
        return sum(int(one[name]) for one in results)

    return Report(
        as_of_us=run.marker.as_of_us,
        engine=runner.name,
        workers=runner.workers,
        characteristics=len(run.plan_digests),
        partitions=len(results),
        done_before=before,
        streams=total("streams"),
        points=total("points"),
        signals=total("signals"),
        signals_before=total("signals_before"),
        new_baselines=total("new_baselines"),
        left_to_nightly=tuple(sorted(set(run.plan_digests) - set(run.whole))),
        notes=tuple(dict.fromkeys(note for one in results for note in one["notes"])),
        digest=digest_of_all(results),
    )


def _kept(report: Report) -> dict[str, Any]:
    names = ("engine", "workers", "partitions", "streams", "points", "signals", "digest")
    return {name: getattr(report, name) for name in names}

"""One evaluation: from what the readings say to points, limits and rule hits in the records.

The state after it is a function of the readings and log rows up to the clock and of the limits
approved by hand, whatever order the files came in. Work follows what is new: the lots with new
rows, the streams they are in, and the last points of those streams.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from datetime import datetime

from sqlalchemy import Connection, Engine

from config.control_plan import Characteristic
from config.load import Bay
from spc.monitoring.work import Work, digest_of, hand_digests, work_of
from spc.records import evaluations, reevaluations
from spc.records.measurements import Changed, Marker, changed_lots, newest_ids
from spc.records.stamps import to_us

Progress = Callable[[str, int, int], None]


def _silent(_what: str, _done: int, _total: int) -> None:
    return None


@dataclass(frozen=True)
class Evaluation:
    """What one evaluation did.

    Attributes
    ----------
    streams : streams known after it.
    points_evaluated : points made from readings that were new, changed or newly past the clock.
    signals : those of them in monitoring that complete a rule.
    touched : stream id -> stamp (us) of its first point that is new or changed, here or by a
        re-evaluation since the last pass.
    new_baselines : streams whose automatic limits were set or set anew.
    notes : readings that could not be used, and why.
    """

    streams: int
    points_evaluated: int = 0
    signals: int = 0
    touched: dict[int, int] = field(default_factory=dict)
    new_baselines: int = 0
    notes: tuple[str, ...] = ()


@dataclass(frozen=True)
class _Task:
    characteristic: Characteristic
    digest: str
    work: Work


def evaluate(
    engine: Engine, bay: Bay, as_of: datetime, progress: Progress | None = None
) -> Evaluation:
    """Bring points, limits and rule hits up to date with the readings, in one transaction.

    Parameters
    ----------
    as_of : the clock; nothing measured or processed after it is looked at.
    progress : called with what is done, how many characteristics are, and how many there are.
    """
    with engine.begin() as connection:
        return evaluate_in(connection, bay, as_of, progress or _silent)


def evaluate_in(
    connection: Connection, bay: Bay, as_of: datetime, progress: Progress = _silent
) -> Evaluation:
    """As `evaluate`, in a transaction of the caller."""
    measurement, log = newest_ids(connection)
    now = Marker(to_us(as_of), measurement, log)
    touched = reevaluations.take_note(connection)
    tasks, quiet = _tasks(connection, bay, now)
    points = signals = made = 0
    notes: list[str] = []
    if tasks:
        # pandas and the statistics are loaded only on nights with something to do.
        from spc.monitoring.update import Update

        update = Update(connection, bay, now)
        for done, task in enumerate(tasks):
            progress("evaluating", done, len(tasks))
            result = update.run(task.characteristic, task.work)
            evaluations.keep(connection, task.characteristic.name, task.digest, now)
            touched |= result.touched
            points, signals = points + result.points, signals + result.signals
            made += result.new_baselines
            notes += result.notes
        progress("evaluating", len(tasks), len(tasks))
    evaluations.move_on(connection, quiet, now)
    known = evaluations.stream_count(connection, [c.name for c in bay.plan.characteristic])
    return Evaluation(known, points, signals, touched, made, tuple(dict.fromkeys(notes)))


def _tasks(connection: Connection, bay: Bay, now: Marker) -> tuple[list[_Task], list[str]]:
    """Characteristics with something to do, and the names of the others."""
    known = evaluations.all_kept(connection)
    by_hand = hand_digests(connection)
    changes: dict[Marker, Changed] = {}
    tasks, quiet = [], []
    for one in bay.plan.characteristic:
        digest = digest_of(one, bay.settings.bay.wafer_radius_mm, by_hand)
        before = known.get(one.name)
        if before is None or before[0][:32] != digest[:32] or now.as_of_us < before[1].as_of_us:
            tasks.append(_Task(one, digest, Work(everything=True)))
            continue
        if before[1] not in changes:
            changes[before[1]] = changed_lots(connection, before[1], now)
        work = work_of(one, digest, before, changes[before[1]])
        if work.anything:
            tasks.append(_Task(one, digest, work))
        else:
            quiet.append(one.name)
    return tasks, quiet

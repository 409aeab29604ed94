"""Where the tasks of a re-evaluation run: in this process, on all its cores, or on many machines.

Nothing heavy is imported here: a process of the pool reads this module before its numeric libraries
are loaded, and the distributed engine is loaded only where it is configured.
"""

from __future__ import annotations

import os
import uuid
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import ProcessPoolExecutor, as_completed
from concurrent.futures.process import BrokenProcessPool
from contextlib import closing, contextmanager
from typing import TYPE_CHECKING, Any, Protocol, TypeVar

if TYPE_CHECKING:
    from config.load import Bay

T = TypeVar("T")
R = TypeVar("R")

DEATHS_IN_A_ROW = 3  # a task that kills so many workers one after the other is given up
CONNECT_SECONDS = 30.0
_THREADS = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")


class EngineError(Exception):
    """The engine that was asked for is not there, or gave up; the text says the mend."""


class NotConfiguredError(EngineError):
    """The configuration asks for what cannot be."""


class Runner(Protocol):
    """Does tasks and gives their results as they come."""

    name: str
    workers: int

    def each(self, task: Callable[[T], R], items: Sequence[T]) -> Iterator[R]:
        """Results of a function, which must be importable, for each item; in any order.

        Raises EngineError when workers keep dying, and whatever the function raises.
        """
        ...


@contextmanager
def runner_for(bay: Bay) -> Iterator[Runner]:
    """The engine of the configuration: `[compute] scheduler`, else the cores of this machine.

    Raises
    ------
    NotConfiguredError
        When the settings ask for the impossible, or for an engine that is not installed.
    EngineError
        When the scheduler is not to be reached, or has no workers.
    """
    compute = bay.settings.compute
    if compute.scheduler is None:
        workers = compute.workers or len(os.sched_getaffinity(0))
        runner = Processes(workers) if workers > 1 else InThisProcess()
        with closing(runner):
            yield runner
        return
    if bay.database_url.startswith("sqlite"):
        raise NotConfiguredError(
            "compute.scheduler is set, but the database is a SQLite file, which other machines "
            "cannot read: move it with `yellowbay move --to postgresql+psycopg://…`, or take "
            "compute.scheduler out to use the cores of this machine"
        )
    client = _connected(bay)
    try:
        yield OnCluster(client)
    finally:
        client.close()


class InThisProcess:
    """One task after the other."""

    name, workers = "one process", 1

    def each(self, task: Callable[[T], R], items: Sequence[T]) -> Iterator[R]:
        """As `Runner.each`."""
        yield from map(task, items)

    def close(self) -> None:
        """Close the connections that the tasks have used."""
        from spc.monitoring.reevaluation_tasks import close_engines

        close_engines()


class Processes:
    """Processes on this machine, each with one thread of arithmetic; they last until `close`."""

    name = "processes"

    def __init__(self, workers: int) -> None:
        self.workers = workers
        self._pool: ProcessPoolExecutor | None = None

    def each(self, task: Callable[[T], R], items: Sequence[T]) -> Iterator[R]:
        """As `Runner.each`. A worker that dies is replaced and its task is done again."""
        left, deaths = dict(enumerate(items)), 0
        while left:
            pool = self._started()
            try:
                number_of = {pool.submit(task, item): i for i, item in left.items()}
                for future in as_completed(number_of):
                    result = future.result()
                    del left[number_of[future]]
                    deaths = 0
                    yield result
            except BrokenProcessPool as error:
                self.close()
                deaths += 1
                if deaths >= DEATHS_IN_A_ROW:
                    raise EngineError(
                        f"a worker died {deaths} times without getting on (out of memory?): set "
                        "compute.workers lower and run it again, it goes on where it was"
                    ) from error

    def _started(self) -> ProcessPoolExecutor:
        if self._pool is None:
            import multiprocessing

            spawn = multiprocessing.get_context("spawn")
            self._pool = ProcessPoolExecutor(self.workers, spawn, initializer=_one_thread)
        return self._pool

    def close(self) -> None:
        """Let the processes end; what waits is dropped, what runs is let finish."""
        if self._pool is not None:
            self._pool.shutdown(cancel_futures=True)
            self._pool = None


def _one_thread() -> None:
    """In a new worker, before anything numeric is loaded: the processes share the cores."""
    for name in _THREADS:
        os.environ[name] = "1"


class OnCluster:
    """The workers of a Dask scheduler. One that is lost has its tasks done by the others."""

    name = "dask"

    def __init__(self, client: Any) -> None:
        self._client = client
        self.workers = len(client.scheduler_info(n_workers=-1)["workers"])

    def each(self, task: Callable[[T], R], items: Sequence[T]) -> Iterator[R]:
        """As `Runner.each`."""
        from distributed import CancelledError, KilledWorker, as_completed

        mark = uuid.uuid4().hex[:8]
        futures = [
            self._client.submit(task, item, key=f"yellowbay-{mark}-{i}", pure=False)
            for i, item in enumerate(items)
        ]
        try:
            for future in as_completed(futures, loop=self._client.loop):
                yield future.result()
                future.release()
        except KilledWorker as error:
            raise EngineError(
                "a partition was lost with its worker again and again (out of memory?): give the "
                "workers more memory and run it again, it goes on where it was"
            ) from error
        except (CancelledError, OSError) as error:
            raise EngineError(
                f"the scheduler was lost ({type(error).__name__}): run it again when it is back, "
                "it goes on where it was"
            ) from error
        finally:
            self._client.cancel(futures)


def _connected(bay: Bay) -> Any:
    """A client of the configured scheduler, with at least one worker."""
    try:
        from distributed import Client
        from distributed.security import Security
    except ImportError as error:
        raise NotConfiguredError(
            "compute.scheduler is set, but the distributed engine is not installed here "
            f"({error.name}): pip install 'yellowbay[fab]', or take compute.scheduler out"
        ) from error
    compute = bay.settings.compute
    address, security = str(compute.scheduler), None
    if compute.ca_file and compute.cert_file and compute.key_file:
        security = Security(
            require_encryption=True,
            tls_ca_file=str(bay.path(compute.ca_file)),
            tls_client_cert=str(bay.path(compute.cert_file)),
            tls_client_key=str(bay.path(compute.key_file)),
        )
    try:
        client = Client(address, timeout=CONNECT_SECONDS, security=security, set_as_default=False)
    except (OSError, TimeoutError, ValueError) as error:
        raise EngineError(
            f"the scheduler {address} is not to be reached ({type(error).__name__}): start it with "
            "`dask scheduler`, or take compute.scheduler out to use the cores of this machine"
        ) from error
    try:
        client.wait_for_workers(1, timeout=2 * CONNECT_SECONDS)
    except TimeoutError as error:
        client.close()
        raise EngineError(
            f"the scheduler {address} has no workers: start some with `dask worker {address}`"
        ) from error
    return client

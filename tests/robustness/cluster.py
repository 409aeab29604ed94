"""A real scheduler and real workers of the distributed engine, each a process of its own."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

ONE_THREAD = {"OMP_NUM_THREADS": "1", "OPENBLAS_NUM_THREADS": "1"}


class Cluster:
    """Scheduler and workers; what they say is in files in the folder."""

    def __init__(self, folder: Path, workers: int, tls: Sequence[str] = (), **env: str) -> None:
        self.folder = folder
        self._env = {**os.environ, **ONE_THREAD, **env}
        self._tls = list(tls)
        self._all: list[subprocess.Popen[bytes]] = []
        file = folder / "scheduler.json"
        protocol = ["--protocol", "tls"] if tls else []
        words = ["--host", "127.0.0.1", "--port", "0", "--scheduler-file", str(file), *protocol]
        self._start("scheduler", *words)
        wait_for(lambda: file.is_file() and file.read_text("utf-8").strip().endswith("}"))
        self.address: str = json.loads(file.read_text("utf-8"))["address"]
        self.workers = [
            self._start("worker", self.address, "--no-nanny", "--nthreads", "1", "--name", f"w{i}")
            for i in range(workers)
        ]

    def _start(self, kind: str, *words: str) -> subprocess.Popen[bytes]:
        log = self.folder / f"{kind}{len(self._all)}.log"
        module = f"distributed.cli.dask_{kind}"
        with log.open("wb") as out:
            process = subprocess.Popen(
                [sys.executable, "-m", module, *words, *self._tls, "--no-dashboard"],
                cwd=self.folder,
                env=self._env,
                stdout=out,
                stderr=subprocess.STDOUT,
            )
        self._all.append(process)
        return process

    def kill(self, number: int) -> None:
        """`kill -9` of one worker."""
        self.workers[number].send_signal(signal.SIGKILL)
        self.workers[number].wait()

    def said(self) -> str:
        """All that scheduler and workers said."""
        return "\n".join(file.read_text("utf-8") for file in sorted(self.folder.glob("*.log")))

    def close(self) -> None:
        """End all of them."""
        for process in self._all:
            process.kill()
        for process in self._all:
            process.wait()


def wait_for(ready: Callable[[], Any], seconds: float = 90.0, every: float = 0.02) -> Any:
    """Wait until something is true and return it; fail when it does not come."""
    end = time.monotonic() + seconds
    while not (found := ready()):
        assert time.monotonic() < end, f"did not come in {seconds:g} s: {ready}"
        time.sleep(every)
    return found

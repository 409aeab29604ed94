"""Run the benchmarks one after the other: `python -m tests.benchmarks [name …]`.

Without names: those of ingest, nights, the engine, the start and the reports, which take some ten
minutes on a free machine of two cores, and draw docs/growth.svg anew. `attribution` (how often
causes are found), `reevaluation` (beyond one machine) and `evaluation` are run when named.
"""

from __future__ import annotations

import os
import runpy
import sys
from pathlib import Path

from tests.benchmarks.measure import versions

GROWTH = Path(__file__).resolve().parents[2] / "docs" / "growth.svg"
# Name -> options: ingest, nights, the engine (three of them), the start, the reports.
ALWAYS: dict[str, list[str]] = {
    "ingest": ["--postgres", "--engine"],
    "nights": ["--figure", str(GROWTH)],
    "rules": [],
    "components": [],
    "triage": [],
    "start": [],
    "reports": [],
}
WHEN_NAMED = ("evaluation", "attribution", "reevaluation")


def main() -> None:
    """Print what was asked for."""
    for threads in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS"):
        os.environ.setdefault(threads, "1")  # figures are of one core unless said otherwise
    chosen = sys.argv[1:] or list(ALWAYS)
    known = (*ALWAYS, *WHEN_NAMED)
    unknown = [name for name in chosen if name not in known]
    if unknown:
        sys.exit(f"no benchmark {', '.join(unknown)}; there are {', '.join(known)}")
    print(versions())
    for name in chosen:
        print(f"\n== {name}", flush=True)
        sys.argv = [f"bench_{name}", *ALWAYS.get(name, [])]
        runpy.run_module(f"tests.benchmarks.bench_{name}", run_name="__main__")


if __name__ == "__main__":
    main()

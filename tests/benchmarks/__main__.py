"""Run the benchmarks one after the other: `python -m tests.benchmarks [name …]`."""

from __future__ import annotations

import runpy
import sys

NAMES = ("rules", "components", "ingest", "evaluation", "attribution", "reevaluation")


def main() -> None:
    chosen = sys.argv[1:] or list(NAMES)
    unknown = [name for name in chosen if name not in NAMES]
    if unknown:
        sys.exit(f"no benchmark {', '.join(unknown)}; there are {', '.join(NAMES)}")
    for name in chosen:
        print(f"\n== {name}", flush=True)
        sys.argv = [f"bench_{name}"]
        runpy.run_module(f"tests.benchmarks.bench_{name}", run_name="__main__")


if __name__ == "__main__":
    main()

"""Write spc/stats/ar1_table.py: false-signal factors of run rules on AR(1) streams.

Run by hand from the root of the project: python -m tests.benchmarks.generate_ar1_table
The numbers are computed, not simulated, so there is no seed; a run takes a few minutes.
"""

from __future__ import annotations

from itertools import combinations
from pathlib import Path

import numpy as np

from spc.stats.ar1_chain import log_factors
from spc.stats.rules import WESTERN_ELECTRIC

GRID = tuple(float(x) for x in np.round(np.arange(-0.5, 0.9501, 0.025), 3))
TARGET = Path(__file__).resolve().parents[2] / "spc" / "stats" / "ar1_table.py"

HEAD = '''"""False-signal factors of the Western Electric rules on AR(1) streams: a generated table.

Written by tests/benchmarks/generate_ar1_table.py; do not edit by hand. For each choice of rules
(sorted names) the natural logarithms of the factors "run" and "point" at each `PHI`, as defined by
`spc.stats.autocorrelation.false_signal_factor`.
"""

from __future__ import annotations

'''


def rows(numbers: tuple[float, ...], digits: int, indent: str) -> list[str]:
    """Numbers as lines of at most 100 characters."""
    lines, line = [], indent
    for number in numbers:
        text = f"{number:.{digits}f}, "
        if len(line) + len(text) > 100:
            lines.append(line.rstrip())
            line = indent
        line += text
    return [*lines, line.rstrip()]


def main() -> None:
    """Compute and write the table."""
    names = [rule.name for rule in WESTERN_ELECTRIC]
    out = [
        HEAD.rstrip("\n"),
        "",
        "# fmt: off",
        "PHI: tuple[float, ...] = (",
        *rows(GRID, 3, "    "),
    ]
    out += [")", ""]
    out += ["_Curve = tuple[tuple[float, ...], tuple[float, ...]]", ""]
    out += ["TABLE: dict[tuple[str, ...], _Curve] = {"]
    for count in range(1, len(names) + 1):
        for chosen in combinations(names, count):
            key = tuple(sorted(chosen))
            tail = "," if count == 1 else ""
            out.append("    (" + ", ".join(f'"{name}"' for name in key) + tail + "): (")
            for curve in log_factors(key, GRID):
                out += ["        (", *rows(curve, 5, "            "), "        ),"]
            out.append("    ),")
    out += ["}", "# fmt: on", ""]
    TARGET.write_text("\n".join(out).replace("-0.00000", "0.00000"), encoding="utf-8")


if __name__ == "__main__":
    main()

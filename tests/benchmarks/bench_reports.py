"""The report of a bad night: page and mails of 20 excursions on 200 streams, and one investigation.

    python -m tests.benchmarks.bench_reports

Every row is done for the first time in its process: the renderer, the templates and the imports
included. Aims: page and mails together within 10 s, pages below 3 MB.
"""

from __future__ import annotations

import argparse
import time
from collections.abc import Callable, Sequence

EXCURSIONS = 20


def took(label: str, work: Callable[[], Sequence[bytes]]) -> float:
    """Do something, print what it took and the largest of what it made; returns wall seconds."""
    cpu, wall = time.process_time(), time.perf_counter()
    made = work()
    cpu, wall = time.process_time() - cpu, time.perf_counter() - wall
    largest = max(len(one) for one in made) / 1e6
    print(f"{label:40s} {cpu:6.2f} s CPU {wall:6.2f} s wall, {len(made)} x up to {largest:.2f} MB")
    return wall


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.parse_args()
    from reports.investigation import investigation_page
    from reports.message import MailOptions, messages
    from reports.night import night_page
    from tests.reports.samples import crowded_night
    from tests.reports.samples_pages import investigation

    night = crowded_night(EXCURSIONS)
    options = MailOptions(sender="spc@example.com", shift_list=("shift@example.com",))
    page = took(f"night page, {EXCURSIONS} excursions", lambda: [night_page(night).encode("utf-8")])
    mails = took("its mails", lambda: [one.as_bytes() for one in messages(night, options)])
    print(f"{'page and mails':40s} {page + mails:27.2f} s wall (aim 10)")
    view = investigation()
    took("one investigation, first", lambda: [investigation_page(view).encode("utf-8")])
    took("one investigation, any other", lambda: [investigation_page(view).encode("utf-8")])


if __name__ == "__main__":
    main()

"""Fuzz the door, guided by coverage: `python -m tests.ingest.fuzz_door --seconds 60 --seed 1`.

Files are mutated from the example drops; a mutation that reaches a new line of `ingest/` joins the
corpus. Every file must be read or refused without an exception, quickly, with every row accounted
for, and must give the same result when it is read again. A file that does not is written to the
folder given by `--keep`.
"""

from __future__ import annotations

import argparse
import hashlib
import random
import sys
import time
from collections.abc import Callable
from pathlib import Path
from types import FrameType
from typing import Any

from config.settings import BaySettings, DropSettings, FeedSettings, Settings, WideColumns
from ingest.drops import Content
from ingest.feeds import Feed, feeds_of
from ingest.prepare import Prepared, Rulebook, prepare

ROOT = Path(__file__).resolve().parents[2]
EXAMPLES = ROOT / "fixtures" / "example_drops"
INGEST = str(ROOT / "ingest")
TOKENS = [
    *(
        b'"',
        b'""',
        b",",
        b";",
        b"\n",
        b"\r\n",
        b"\r",
        b"\0",
        b"\xff",
        b"\xef\xbb\xbf",
        b"\xc2\xb5m",
    ),
    *(b"NaN", b"1e400", b"-0", b"1e-400", b"9" * 40, b"0x1", b"inf", b"1,5", b"", b" ", b"\t"),
    *(b"2026-03-29T01:30:00", b"2026-10-25T01:30:00", b"0001-01-01", b"9999-12-31T23:59:59"),
    *(b"2026-05-01T24:00:00Z", b"nm", b"um", b"kg", b"resist_thickness", b"overlay_x", b"x" * 300),
    *(
        b"measured_at",
        b"processed_at",
        b"site",
        b"x_mm",
        b"y_mm",
        b"at",
        b"kind",
        b"layer",
        b"unit",
    ),
]


def _feeds(settings: Settings) -> list[Feed]:
    wide = FeedSettings(
        name="wide",
        files="*",
        separator=";",
        decimal=",",
        thousands=".",
        skip_lines=1,
        encoding="cp1252",
        stamp_format="%d.%m.%Y %H:%M:%S",
        columns={"measured_at": "Zeit", "lot": "Los", "wafer": "Scheibe"},
        constants={"unit": "angstrom"},
        wide=(WideColumns(columns="T_*", parameter="resist_thickness", places={"1": (0.0, 1.0)}),),
    )
    zone = settings.bay.zone
    return [feeds_of(settings).house, Feed(wide, zone, "wide")]


def _lines_of(run: Callable[[], Prepared]) -> tuple[Prepared, set[tuple[str, int]]]:
    """Result of a call and the lines of `ingest/` that it reached."""
    reached: set[tuple[str, int]] = set()

    def inside(frame: FrameType, event: str, _argument: Any) -> Any:
        if event == "line":
            reached.add((frame.f_code.co_filename, frame.f_lineno))
        return inside

    def enter(frame: FrameType, _event: str, _argument: Any) -> Any:
        return inside if frame.f_code.co_filename.startswith(INGEST) else None

    sys.settrace(enter)
    try:
        result = run()
    finally:
        sys.settrace(None)
    return result, reached


def mutate(data: bytes, other: bytes, rng: random.Random) -> bytes:
    """Change a file in one to six places, mostly below its header."""
    body = 0
    if rng.random() < 0.8:
        body = data.find(b"\n", data.find(b"\n") + 1 if data.startswith(b"Film") else 0) + 1
    head, raw = data[:body], bytearray(data[body:])
    for _ in range(rng.randint(1, 6)):
        at = rng.randint(0, len(raw))
        end = min(len(raw), at + rng.choice([0, 1, 1, 2, 8, 40]))
        choice = rng.randrange(6)
        if choice == 0:
            raw[at:end] = rng.choice(TOKENS)
        elif choice == 1:
            raw[at:at] = bytes(rng.randrange(256) for _ in range(rng.randint(1, 4)))
        elif choice == 2:
            del raw[at:end]
        elif choice == 3:
            raw[at:at] = raw[at:end] * rng.randint(1, 3)
        elif choice == 4:
            start = rng.randint(0, len(other))
            raw[at:at] = other[start : start + rng.randint(1, 80)]
        else:
            lines = bytes(raw).split(b"\n")
            rng.shuffle(lines)
            raw = bytearray(b"\n".join(lines))
    return head + bytes(raw[:20_000])


def check(prepared: Prepared) -> tuple[object, ...]:
    """Whether the rows are accounted for; what must be the same when the file is read again."""
    if prepared.refused is not None:
        assert prepared.refused.reason
        return (str(prepared.refused),)
    good = 0
    batch = prepared.batch
    if batch is not None:
        good = len(batch.events) if hasattr(batch, "events") else 0
        good = batch.n if hasattr(batch, "n") else good
        good = len(batch.processed_us) if hasattr(batch, "processed_us") else good
    assert prepared.rows == good + prepared.rejected, (prepared.rows, good, prepared.rejected)
    reasons = prepared.reasons()
    assert len(reasons) == prepared.rejected
    for one in (*reasons, *prepared.warned()):
        assert one.line is not None
        for text in (one.reason, one.value, one.text):
            assert "\0" not in (text or "")
            (text or "").encode("utf-8")
    return prepared.rows, good, *map(str, reasons)


def main() -> int:
    """Fuzz for a while and say what was tried."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--seconds", type=float, default=60)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--keep", type=Path, default=Path("fuzz-failures"))
    options = parser.parse_args()
    rng = random.Random(options.seed)
    settings = Settings(
        bay=BaySettings(name="f", time_zone="Europe/Dublin", control_plan=Path("p.toml")),
        drops=DropSettings(max_field_characters=256),
    )
    rulebook = Rulebook(settings, {"resist_thickness": "nm", "overlay_x": "nm"}, {"cd": "nm"})
    feeds = _feeds(settings)
    corpus = [(p.read_bytes(), feeds["wide" in p.name]) for p in sorted(EXAMPLES.rglob("*.csv"))]
    reached: set[tuple[str, int]] = set()
    tried = failures = refused = 0
    end = time.monotonic() + options.seconds
    while time.monotonic() < end:
        data, feed = rng.choice(corpus)
        data = mutate(data, rng.choice(corpus)[0], rng)
        content = Content(hashlib.sha256(data).hexdigest(), data)
        tried += 1
        try:
            prepared, lines = _lines_of(lambda c=content, f=feed: prepare(c, f, rulebook))  # type: ignore[misc]
            said = check(prepared)
            assert said == check(prepare(content, feed, rulebook)), "not the same again"
        except Exception as error:  # whatever it is, it is what we look for
            failures += 1
            options.keep.mkdir(parents=True, exist_ok=True)
            (options.keep / f"{content.digest[:12]}.csv").write_bytes(data)
            print(f"{feed.name}: {type(error).__name__}: {error}", file=sys.stderr)
            continue
        refused += prepared.refused is not None
        if not lines <= reached:
            reached |= lines
            corpus.append((data, feed))
    print(
        f"{tried} files tried, {refused} refused whole, {failures} failures, "
        f"{len(corpus)} in the corpus, {len(reached)} lines of ingest/ reached"
    )
    return 1 if failures else 0


if __name__ == "__main__":
    sys.exit(main())

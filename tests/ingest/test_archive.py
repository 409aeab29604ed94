"""Old drops are packed into the archive; whatever happens, none is lost and none is touched that
was not taken in."""

from __future__ import annotations

import errno
import gzip
import hashlib
import os
from datetime import datetime, timedelta
from pathlib import Path
from typing import Any

import pytest

from config.errors import ConfigurationError
from ingest import archive
from ingest.archive import ArchiveReport, archive_drops, due_drops
from spc.records import archived
from spc.records.sessions import reading
from tests.ingest.intake import CLOCK, Intake, sheet  # fmt: skip
from tests.ingest.intake import reading as row

KEEP = "[retention]\narchive_drops_after_days = 30\n"
LATER = CLOCK + timedelta(days=31)


def sheets(intake: Intake, *names: str) -> dict[str, str]:
    """Drops of one reading each, with different contents."""
    texts = {name: sheet(row(1200 + i, lot=f"L{i}")) for i, name in enumerate(names)}
    for name, text in texts.items():
        intake.drop(name, text)
    return texts


def run(intake: Intake, clock: datetime = LATER, **more: Any) -> ArchiveReport:
    return archive_drops(intake.engine, intake.bay, clock, **more)


def packed(intake: Intake) -> dict[str, str]:
    """What is in the archive: text by path below it."""
    folder = intake.root / "archive"
    files = [p for p in sorted(folder.rglob("*")) if p.is_file()]
    return {
        p.relative_to(folder).as_posix(): gzip.decompress(p.read_bytes()).decode() for p in files
    }


def lying(intake: Intake) -> list[str]:
    return sorted(
        p.relative_to(intake.drops).as_posix() for p in intake.drops.rglob("*") if p.is_file()
    )


def test_nothing_moves_without_the_setting(intake: Intake) -> None:
    sheets(intake, "a.csv")
    intake.take()
    assert run(intake) == ArchiveReport()
    assert lying(intake) == ["a.csv"]


def test_old_drops_are_packed_by_month_and_found_again(intake: Intake) -> None:
    intake.reconfigure(KEEP)
    texts = sheets(intake, "a.csv", "gauge 2/b.csv", "c.csv.gz")
    before = (intake.drops / "c.csv.gz").read_bytes()
    intake.take()
    assert run(intake, CLOCK + timedelta(days=29)) == ArchiveReport(), "not old enough"
    report = run(intake)
    assert (report.archived, report.due, report.failed) == (3, 0, ())
    assert lying(intake) == []
    assert packed(intake) == {
        "2026-05/a.csv.gz": texts["a.csv"],
        "2026-05/c.csv.gz": texts["c.csv.gz"],
        "2026-05/gauge 2/b.csv.gz": texts["gauge 2/b.csv"],
    }
    assert (intake.root / "archive/2026-05/c.csv.gz").read_bytes() == before
    with reading(intake.engine) as connection:
        [found] = archived.find(connection, "2/B".lower())
        assert found.archive_path == "2026-05/gauge 2/b.csv.gz"
        [same] = archived.find(connection, found.content_hash[:10])
        assert same == found
        assert archived.find(connection, "%") == []
    assert found.content_hash == hashlib.sha256(texts["gauge 2/b.csv"].encode()).hexdigest()
    assert run(intake) == ArchiveReport()


def test_a_drop_that_comes_again_is_still_known(intake: Intake) -> None:
    intake.reconfigure(KEEP)
    texts = sheets(intake, "a.csv")
    intake.take()
    run(intake)
    intake.drop("a.csv", texts["a.csv"], age=60)
    intake.drop("copy of a.csv", texts["a.csv"], age=60)
    report = intake.take()
    assert report.drops == {"loaded": 0, "duplicate": 1, "quarantined": 0, "waiting": 0}
    assert report.readings["loaded"] == 0
    assert run(intake, LATER + timedelta(days=31)).archived == 2
    assert packed(intake) == {
        "2026-05/a.csv.gz": texts["a.csv"],
        "2026-05/copy of a.csv.gz": texts["a.csv"],
    }


def test_one_name_with_many_contents(intake: Intake) -> None:
    intake.reconfigure(KEEP)
    found = set()
    for i in range(3):
        text = sheet(row(1200 + i, lot=f"L{i}"))
        found.add(text)
        intake.drop("latest.csv", text, age=3600 - 60 * i)
        intake.take()
        run(intake)
    assert set(packed(intake).values()) == found
    assert len(packed(intake)) == 3


def test_what_was_not_taken_in_is_not_touched(intake: Intake, tmp_path: Path) -> None:
    intake.reconfigure(KEEP)
    sheets(intake, "good.csv", "changed.csv")
    intake.drop("refused.csv", "no,header,we,know\n1,2,3,4\n")
    intake.drop("notes.txt", "not a drop")
    intake.take()
    intake.drop("changed.csv", sheet(row(1, lot="other")), age=60)
    intake.drop("new.csv", sheet(row(2, lot="new")))
    (intake.drops / "link.csv").symlink_to(intake.drops / "good.csv")
    run(intake)
    assert lying(intake) == ["changed.csv", "new.csv", "notes.txt", "refused.csv"]
    assert list(packed(intake)) == ["2026-05/good.csv.gz"]
    assert os.path.islink(intake.drops / "link.csv"), "a link is left for its owner"


def test_rows_that_were_rejected_do_not_keep_a_file(intake: Intake) -> None:
    intake.reconfigure(KEEP)
    intake.drop("part.csv", sheet(row(1), row("nonsense", site="2")))
    assert intake.take().readings["rejected"] == 1
    assert run(intake).archived == 1


def test_it_stops_when_asked_and_goes_on_the_next_night(intake: Intake) -> None:
    intake.reconfigure(KEEP)
    sheets(intake, *(f"{i}.csv" for i in range(5)))
    intake.take()
    asked = iter(range(2))
    report = run(intake, stop=lambda: next(asked, None) is None)
    assert (report.archived, report.due) == (2, 3)
    assert len(due_drops(intake.engine, intake.bay, LATER)) == 3
    assert run(intake).archived == 3


@pytest.mark.parametrize("number", [errno.ENOSPC, errno.EIO])
@pytest.mark.parametrize("name", ["fsync", "unlink", "lstat"])
def test_a_failing_disk_loses_nothing(
    intake: Intake, monkeypatch: pytest.MonkeyPatch, name: str, number: int
) -> None:
    intake.reconfigure(KEEP)
    texts = sheets(intake, "a.csv", "b.csv")
    intake.take()
    real = getattr(archive.os, name)

    def fail(what: Any, *rest: Any, **named: Any) -> Any:
        if name == "fsync" or str(what).endswith("a.csv"):
            raise OSError(number, os.strerror(number), str(what))
        return real(what, *rest, **named)

    with monkeypatch.context() as patched:
        patched.setattr(archive.os, name, fail)
        report = run(intake)
    assert report.failed[0].startswith("a.csv: ")
    assert os.strerror(number) in report.failed[0]
    assert "a.csv" in lying(intake)
    assert run(intake).failed == ()
    assert lying(intake) == []
    assert {p.split("/")[-1]: t for p, t in packed(intake).items()} == {
        f"{n}.gz": t for n, t in texts.items()
    }
    assert list((intake.root / "archive").rglob(".*")) == []


def test_a_copy_that_is_not_what_was_taken_in_is_thrown_away(
    intake: Intake, monkeypatch: pytest.MonkeyPatch
) -> None:
    intake.reconfigure(KEEP)
    file = intake.drop("a.csv", sheet(row(1)))
    intake.take()
    status = file.stat()
    file.write_text(sheet(row(2)))  # rotten: the same size and stamps, other bytes
    os.utime(file, ns=(status.st_atime_ns, status.st_mtime_ns))
    [why] = run(intake).failed
    assert "not what was taken in" in why
    assert (lying(intake), packed(intake)) == (["a.csv"], {})


def test_a_half_written_archive_is_not_trusted(intake: Intake) -> None:
    intake.reconfigure(KEEP)
    text = sheets(intake, "a.csv")["a.csv"]
    intake.take()
    place = intake.root / "archive" / "2026-05" / "a.csv.gz"
    place.parent.mkdir(parents=True)
    place.write_bytes(gzip.compress(text.encode())[:30])
    assert run(intake).archived == 1
    [whole] = [p for p in place.parent.iterdir() if p != place]
    assert gzip.decompress(whole.read_bytes()).decode() == text


def test_a_drop_that_changes_under_our_hands_stays(
    intake: Intake, monkeypatch: pytest.MonkeyPatch
) -> None:
    intake.reconfigure(KEEP)
    file = intake.drop("a.csv", sheet(row(1)))
    intake.take()
    real = archived.record

    def change(*arguments: Any) -> None:
        real(*arguments)
        file.write_text(sheet(row(1), row(2, site="2")))

    monkeypatch.setattr(archived, "record", change)
    [why] = run(intake).failed
    assert "was changed just now" in why
    assert lying(intake) == ["a.csv"]


def test_the_archive_may_not_lie_in_the_drop_folder(intake: Intake) -> None:
    for folder in ("drops", "drops/archive", "./x/../drops/old"):
        with pytest.raises(ConfigurationError, match=r"lies in drops\.folder"):
            intake.reconfigure(f'[retention]\narchive = "{folder}"\n')
    intake.reconfigure('[retention]\narchive = "drops-archive"\n')


def test_triage_keeps_what_it_looks_back_on(intake: Intake) -> None:
    with pytest.raises(ConfigurationError, match="keep_history_days"):
        intake.reconfigure("[retention]\naggregate_sites_after_days = 59\n")
    intake.reconfigure("[retention]\naggregate_sites_after_days = 60\n")

"""The small example drops do what their page says."""

from __future__ import annotations

import re
import shutil
from pathlib import Path

from tests.ingest.intake import Intake

EXAMPLES = Path(__file__).resolve().parents[2] / "fixtures" / "example_drops"


def test_examples(intake: Intake) -> None:
    page = (EXAMPLES / "README.md").read_text("utf-8")
    feed = re.search(r"```toml\n(.*?)```", page, re.DOTALL)
    assert feed is not None
    intake.reconfigure(feed[1])
    shutil.copytree(EXAMPLES, intake.drops, dirs_exist_ok=True)
    report = intake.take()
    found = {f.path: f for f in report.files}
    assert sorted(found) == sorted(re.findall(r"\| `([^`]+\.csv)`", page))
    assert report.drops == {"loaded": 7, "duplicate": 0, "quarantined": 1, "waiting": 0}
    assert report.readings == {"loaded": 19, "duplicate": 1, "superseded": 2, "rejected": 7}
    assert found["handover.csv"].outcome == "quarantined"
    broken = found["broken_rows.csv"]
    assert [r.line for r in broken.reasons] == [3, 4, 5, 6, 7, 8, 10]
    assert len({r.reason for r in broken.reasons}) == 7
    assert found["bay_events.csv"].counts.loaded == 2
    assert found["film/film_gauge_wide.csv"].counts.loaded == 5
    assert all(f.warnings == () for f in report.files)
    lots = {row[0] for row in intake.query("SELECT lot FROM measurements")}
    assert lots == {"000123", "000124", "000125"}
    [(context,)] = intake.query(
        "SELECT c.columns FROM process_log p JOIN contexts c ON c.id = p.context_id "
        "WHERE p.wafer = '12'"
    )
    assert '"resist_batch": "RB-0412"' in context

"""The script of live charts is made once, and made again when what was kept is not whole."""

from __future__ import annotations

from pathlib import Path

import pytest

from reports.bundle import bundled


@pytest.fixture
def cache(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "cache"))
    return tmp_path / "cache" / "yellowbay"


def test_it_is_made_once(cache: Path) -> None:
    made: list[str] = []

    def make() -> str:
        made.append("let \u00b5 = 1;\r\n")
        return made[-1]

    assert bundled(make, "a") == bundled(make, "a") == made[0]
    assert len(made) == 1
    bundled(make, "b")
    assert len(made) == 2
    assert len(list(cache.iterdir())) == 2


@pytest.mark.parametrize("kept", [b"", b"let ", b"\xff\xfe"])
def test_what_was_cut_or_changed_is_made_again(cache: Path, kept: bytes) -> None:
    bundled(lambda: "let a = 1;", "a")
    (file,) = cache.iterdir()
    file.write_bytes(kept)
    assert bundled(lambda: "let a = 1;", "a") == "let a = 1;"
    assert bundled(lambda: "not asked for", "a") == "let a = 1;"


def test_it_is_made_each_time_where_nothing_can_be_kept(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    (tmp_path / "file").touch()
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "file"))
    assert bundled(lambda: "first", "a") == "first"
    assert bundled(lambda: "second", "a") == "second"

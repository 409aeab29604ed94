"""The script that makes charts live, bundled once for each version of the renderer.

Bundling takes longer than a night's page. It gives the same bytes for the same version, so they are
kept in the user's cache folder, under a name that holds their SHA-256. Where nothing can be kept
there, they are made each time.
"""

from __future__ import annotations

import hashlib
import os
from collections.abc import Callable
from contextlib import suppress
from importlib.metadata import version
from pathlib import Path


def bundled(make: Callable[[], str], kind: str) -> str:
    """The script of a kind as `make` gives it, from the cache folder where it lies there whole."""
    stem = f"{kind}-{version('vl-convert-python')}-"
    with suppress(OSError, RuntimeError, UnicodeDecodeError):
        for file in sorted(_folder().glob(f"{stem}*.js")):
            raw = file.read_bytes()
            if file.name == f"{stem}{hashlib.sha256(raw).hexdigest()}.js":
                return raw.decode("utf-8")
    script = make()
    with suppress(OSError, RuntimeError):
        _keep(script.encode("utf-8"), stem)
    return script


def _keep(raw: bytes, stem: str) -> None:
    folder = _folder()
    folder.mkdir(parents=True, exist_ok=True)
    part = folder / f".{stem}{os.getpid()}.part"
    part.write_bytes(raw)
    part.replace(folder / f"{stem}{hashlib.sha256(raw).hexdigest()}.js")


def _folder() -> Path:
    """Raises RuntimeError where the user has no home."""
    named = os.environ.get("XDG_CACHE_HOME")
    return (Path(named) if named else Path.home() / ".cache") / "yellowbay"

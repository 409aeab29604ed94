"""Specs of figures -> pictures: PNG for mail, SVG for pages, and a live spec with its scripts."""

from __future__ import annotations

import html
import json
import os
import re
import struct
import zlib
from collections.abc import Callable, Iterator, Mapping
from concurrent.futures import ThreadPoolExecutor
from functools import cache
from typing import Any

from reports.bundle import bundled
from reports.style import light, role_variables

Spec = Mapping[str, Any]
_IDS = re.compile(r'\bid="((?:clip|gradient)[\w-]*)"')
_LONG_DECIMALS = re.compile(r"\d+\.\d{2,}(?:e-?\d+)?")
_VL_VERSION = "6.1"


def png(spec: Spec, scale: float = 2.0) -> bytes:
    """The figure as a PNG on paper, for mail. Same spec, same bytes on one machine."""
    import vl_convert

    solid = {**spec, "background": light("sheet")}
    raw = vl_convert.vegalite_to_png(solid, vl_version=_VL_VERSION, scale=scale)
    return _repacked(bytes(raw))


def png_size(picture: bytes) -> tuple[int, int]:
    """Width and height in pixels of a PNG. Raises ValueError for anything else."""
    if picture[:8] != b"\x89PNG\r\n\x1a\n":
        raise ValueError("not a PNG")
    width, height = struct.unpack(">II", picture[16:24])
    return int(width), int(height)


def _chunks(picture: bytes) -> Iterator[tuple[bytes, bytes]]:
    place = 8
    while place < len(picture):
        (length,) = struct.unpack(">I", picture[place : place + 4])
        yield picture[place + 4 : place + 8], picture[place + 8 : place + 8 + length]
        place += 12 + length


def _repacked(picture: bytes) -> bytes:
    """The same picture deflated again, for the mail's sake: less than half as large.

    The highest level of zlib would take five times as long for a twentieth less.
    """
    parts, pixels = [], b""
    for kind, body in _chunks(picture):
        if kind == b"IDAT":
            pixels += body
        elif kind in (b"IHDR", b"pHYs"):
            parts.append((kind, body))
    parts.append((b"IDAT", zlib.compress(zlib.decompress(pixels), 7)))
    parts.append((b"IEND", b""))
    packed = b"".join(
        struct.pack(">I", len(body)) + kind + body + struct.pack(">I", zlib.crc32(kind + body))
        for kind, body in parts
    )
    return b"\x89PNG\r\n\x1a\n" + packed if len(packed) + 8 < len(picture) else picture


def svg(spec: Spec, name: str, label: str) -> str:
    """The figure as an SVG to stand in a page: colours by role, ids made its own by `name`.

    `label` says in a sentence what is to be seen. Text of the data is escaped by the renderer.
    """
    import vl_convert

    drawing = vl_convert.vegalite_to_svg(dict(spec), vl_version=_VL_VERSION)
    drawing = drawing[drawing.index("<svg") :]
    # the renderer counts its ids over all drawings of a process; a page must not depend on that
    for i, own in enumerate(dict.fromkeys(_IDS.findall(drawing))):
        drawing = drawing.replace(f'id="{own}"', f'id="{name}-{i}"')
        drawing = drawing.replace(f"url(#{own})", f"url(#{name}-{i})")
    drawing = _lean(drawing)
    head, rest = drawing.split(">", 1)
    size = dict(re.findall(r'\b(width|height|viewBox)="([^"]*)"', head))
    opening = (
        f'<svg xmlns="http://www.w3.org/2000/svg" width="{size["width"]}" '
        f'height="{size["height"]}" viewBox="{size["viewBox"]}" role="img" '
        f'aria-label="{html.escape(label)}"'
    )
    return opening + ">" + rest


class Picture:
    """An SVG on its way into a page: drawn beside the work, and waited for by the template."""

    def __init__(self, spec: Spec, name: str, label: str) -> None:
        self._svg = drawer().submit(svg, spec, name, label)

    def __html__(self) -> str:
        """What the template puts in."""
        return self._svg.result()


@cache
def drawer() -> ThreadPoolExecutor:
    """Draws while the next figure is made ready.

    Two threads: the renderer lays out one figure at a time, another is turned to pixels meanwhile.
    """
    return ThreadPoolExecutor(2, thread_name_prefix="drawing")


os.register_at_fork(after_in_child=drawer.cache_clear)  # threads do not come along


_WASTE = re.compile(
    r' role="graphics-(?:object|symbol)"| aria-roledescription="[^"]*"| aria-hidden="true"'
    r'| stroke-miterlimit="10"| font-weight="normal"| opacity="1"| pointer-events="none"'
    r'| class="background"| xlink:href=""'
)
_GEOMETRY = re.compile(r' (d|transform|x|y|x1|y1|x2|y2|width|height)="([^"]*)"')
_EMPTY_PATH = re.compile(r'<path d="M0,0h0v0h0Z"[^>]*/>')


def _lean(drawing: str) -> str:
    """Without what no reader needs: roles inside a picture that is one image, long decimals.

    Only tags are touched, never the text of the data.
    """
    return _EMPTY_PATH.sub("", re.sub(r"<[^>]*>", _lean_tag, drawing))


def _lean_tag(tag: re.Match[str]) -> str:
    kept = _WASTE.sub("", tag[0])
    # a point's words move to a data attribute: aria-label is not allowed on a plain path
    kept = re.sub(r'^(<path [^>]*?)aria-label="', r'\1data-say="', kept)
    kept = re.sub(r' aria-label="[^"]*"', "", kept)
    kept = _GEOMETRY.sub(lambda m: f' {m[1]}="{_LONG_DECIMALS.sub(_short, m[2])}"', kept)
    return role_variables(kept)


def _short(digits: re.Match[str]) -> str:
    return f"{float(digits[0]):.1f}".removesuffix(".0")


@cache
def live_script() -> str:
    """Vega, Vega-Lite and Vega-Embed in one script, for pages that zoom."""
    import vl_convert

    # the stub of the package wants a snippet; the package does not
    make: Callable[..., str] = vl_convert.javascript_bundle
    script = bundled(lambda: make(vl_version=_VL_VERSION), f"vega-lite-{_VL_VERSION}")
    return script.replace("</script", "<\\/script")


def live_json(value: object) -> str:
    """JSON that is safe inside a script element of a page."""
    raw = json.dumps(value, ensure_ascii=False, separators=(",", ":"), sort_keys=True)
    for mark, code in (("<", "003c"), (">", "003e"), ("&", "0026")):
        raw = raw.replace(mark, "\\u" + code)
    return raw.replace("\u2028", "\\u2028").replace("\u2029", "\\u2029")

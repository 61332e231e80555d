"""The report as a tagged PDF, typeset from the same content as the page."""

from __future__ import annotations

import json
import shutil
import tempfile
from collections.abc import Callable
from datetime import datetime
from functools import cache
from pathlib import Path
from typing import Any

import matplotlib
import typst

from reconcile.report.blocks import Report, as_data

_TEMPLATE = Path(__file__).with_name("document.typ")

# The document's text face comes with the typesetter; what it lacks is taken from this one, whose glyphs are known.
_FALLBACK = Path(matplotlib.get_data_path()) / "fonts" / "ttf" / "DejaVuSans.ttf"

# A word longer than this may be broken anywhere: addresses, file names and checksums must not run out of their cell.
LONGEST_WORD = 14

# ISO 19005-2 (archival, level A) and ISO 14289-1 (accessible): the typesetter refuses what breaks their rules.
STANDARDS = ("a-2a", "ua-1")

_ABSENT_GLYPH = "\u25a1"  # □
_BREAK = "\u200b"


def write_document(report: Report, figures: Path, path: Path, now: datetime) -> None:
    """Write report.pdf; `figures` is the folder of the figures' files, `now` the date that the file carries.

    Characters of which neither typeface has a glyph are drawn as □, and the document says so.
    """
    data = as_data(report)
    # What the file says of itself is not laid out: no places to break.
    about = {"title": _drawable(data["title"]), "number": _drawable(data["number"])}
    missing = False

    def fitted(text: str) -> str:
        nonlocal missing
        kept = _drawable(text)
        missing = missing or kept != text
        return _breakable(kept)

    data = _mapped(data, fitted)
    data["about"] = about
    data["missing_glyphs"] = missing
    data["date"] = {"year": now.year, "month": now.month, "day": now.day}
    with tempfile.TemporaryDirectory(prefix="report-") as name:
        root = Path(name)
        shutil.copy(_TEMPLATE, root / "document.typ")
        (root / "fonts").mkdir()
        shutil.copy(_FALLBACK, root / "fonts")
        for block in (
            block for section in data["sections"] for block in section["blocks"] if block["type"] == "drawing"
        ):
            block["file"] = block["vector"] or block["raster"]
            shutil.copy(figures / block["file"], root / block["file"])
        path.write_bytes(_typeset(root, json.dumps(data)))


def _typeset(root: Path, data: str) -> bytes:
    """Return the PDF: archival and accessible where its text allows, else merely tagged."""

    def compiled(standards: Any) -> bytes:
        made = typst.compile(
            root / "document.typ",
            root=root,
            font_paths=[root / "fonts"],
            ignore_system_fonts=True,
            sys_inputs={"report": data},
            format="pdf",
            pdf_standards=standards,
        )
        return bytes(made)

    try:
        return compiled(list(STANDARDS))
    except typst.TypstError:
        # Some rare character broke a rule of the profile: a report without the profile is better than none.
        return compiled([])


def _mapped(data: Any, change: Callable[[str], str], key: str = "") -> Any:
    """Return nested lists and dictionaries with every shown text changed; names of files and types stay."""
    if isinstance(data, str):
        return data if key in ("type", "tone", "kind", "key", "raster", "vector", "status") else change(data)
    if isinstance(data, list):
        return [_mapped(item, change, key) for item in data]
    if isinstance(data, dict):
        return {name: _mapped(item, change, name) for name, item in data.items()}
    return data


@cache
def _glyphs() -> frozenset[int]:
    from matplotlib.ft2font import FT2Font

    return frozenset(FT2Font(str(_FALLBACK)).get_charmap())


def _drawable(text: str) -> str:
    """Return text with □ in place of each character that the fallback typeface has no glyph for."""
    return "".join(character if ord(character) in _glyphs() else _ABSENT_GLYPH for character in text)


def _breakable(text: str) -> str:
    """Return text in which words longer than `LONGEST_WORD` may be broken."""
    return " ".join(word if len(word) <= LONGEST_WORD else _split(word) for word in text.split(" "))


def _split(word: str) -> str:
    """Put invisible places to break into one long word: after its joints, and in any case every few characters."""
    parts, since = [], 0
    for character in word:
        parts.append(character)
        since += 1
        if character in "/_!.-\\:,;=" or since >= LONGEST_WORD:
            parts.append(_BREAK)
            since = 0
    return "".join(parts)

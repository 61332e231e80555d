"""The parts that a report is made of, free of any file format: each rendering walks over the same ones."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal

from reconcile.report.lines import plain


@dataclass(frozen=True, slots=True)
class Statement:
    """A paragraph."""

    text: str
    tone: Literal["plain", "good", "alert", "quiet"] = "plain"


@dataclass(frozen=True, slots=True)
class Heading:
    """A heading inside a section."""

    text: str


@dataclass(frozen=True, slots=True)
class Listing:
    """Sentences under each other."""

    items: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Column:
    """One column of a table."""

    title: str
    kind: Literal["text", "number", "wide"] = "text"  # wide: takes what room is left


@dataclass(frozen=True, slots=True)
class Table:
    """Cells of text under named columns."""

    caption: str
    columns: tuple[Column, ...]
    rows: tuple[tuple[str, ...], ...]
    flagged: frozenset[int] = frozenset()  # rows to set off, by position
    prominent: bool = False  # set larger: an answer, not a record


@dataclass(frozen=True, slots=True)
class Drawing:
    """A figure, by the names of its files in figures/."""

    group: Literal["kinds", "energies", "inputs"]  # the section it belongs to
    caption: str
    alternative: str  # what it shows, for those who cannot see it
    raster: str  # PNG
    vector: str | None = None  # SVG; None: only the PNG exists


@dataclass(frozen=True, slots=True)
class Blanks:
    """Lines to fill in by hand."""

    labels: tuple[str, ...]


Block = Statement | Heading | Listing | Table | Drawing | Blanks


@dataclass(frozen=True, slots=True)
class Section:
    """A titled part of the report."""

    key: str  # stable, for links
    title: str
    blocks: tuple[Block, ...]


@dataclass(frozen=True, slots=True)
class Report:
    """The whole report."""

    number: str  # on every page
    title: str
    lines: tuple[str, ...]  # under the title: who, where, when
    status: Literal["final", "provisional"]
    status_words: str
    status_reasons: tuple[str, ...]
    sections: tuple[Section, ...]
    issued: str  # ISO 8601 date


def as_data(report: Report) -> dict[str, Any]:
    """Return the report as dictionaries, lists and clean one-line text: the form that both renderings read."""
    return {
        "number": plain(report.number),
        "title": plain(report.title),
        "lines": [plain(line) for line in report.lines],
        "status": report.status,
        "status_words": report.status_words,
        "status_reasons": [plain(reason) for reason in report.status_reasons],
        "issued": report.issued,
        "sections": [
            {"key": section.key, "title": section.title, "blocks": [_block(block) for block in section.blocks]}
            for section in report.sections
        ],
    }


def _block(block: Block) -> dict[str, Any]:
    match block:
        case Statement(text, tone):
            return {"type": "statement", "text": plain(text), "tone": tone}
        case Heading(text):
            return {"type": "heading", "text": plain(text)}
        case Listing(items):
            return {"type": "listing", "items": [plain(item) for item in items]}
        case Table():
            return {
                "type": "table",
                "caption": plain(block.caption),
                "prominent": block.prominent,
                "columns": [{"title": plain(column.title), "kind": column.kind} for column in block.columns],
                "rows": [
                    {"cells": [plain(cell) for cell in row], "flagged": i in block.flagged}
                    for i, row in enumerate(block.rows)
                ],
            }
        case Drawing():
            return {
                "type": "drawing",
                "caption": plain(block.caption),
                "alternative": plain(block.alternative),
                "raster": block.raster,
                "vector": block.vector,
            }
        case Blanks(labels):
            return {"type": "blanks", "labels": [plain(label) for label in labels]}

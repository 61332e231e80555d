"""A sheet as cells, each with its place: what a spreadsheet or a CSV holds before anybody reads a number in it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from reconcile.campaign.refusal import Note, Place


@dataclass(frozen=True, slots=True)
class Cell:
    """One cell as it stands."""

    place: Place
    content: str | float | bool | None = None  # text without the blanks at its ends, or a number; None: blank
    fault: str | None = None  # what makes it unreadable: a date, an error, a formula without a stored value
    struck: bool = False  # struck through
    percent: bool = False  # a number that the sheet shows as a percentage

    @property
    def text(self) -> str:
        """The cell as text; a whole number without a decimal point, a blank one as ''."""
        if self.content is None:
            return ""
        if isinstance(self.content, bool):
            return str(self.content).upper()
        if isinstance(self.content, float):
            return (
                str(int(self.content)) if self.content.is_integer() and abs(self.content) < 1e15 else repr(self.content)
            )
        return self.content

    @property
    def blank(self) -> bool:
        """Whether nothing stands there."""
        return self.fault is None and (self.content is None or self.content == "")


@dataclass(frozen=True, slots=True)
class Row:
    """One row; cells that were not stored are missing."""

    number: int  # from 1, as the sheet or the file counts
    cells: Mapping[int, Cell]  # by column, from 1
    hidden: bool = False

    def get(self, column: int) -> Cell | None:
        """Return a cell, or None where none was stored."""
        return self.cells.get(column)


@dataclass(frozen=True, slots=True)
class Merged:
    """A range of merged cells, ends included."""

    top: int
    left: int
    bottom: int
    right: int


@dataclass(frozen=True, slots=True)
class Sheet:
    """The rows of one sheet, or of one .csv file."""

    place: Place  # of the sheet
    rows: tuple[Row, ...]
    merged: tuple[Merged, ...] = ()
    delimited: bool = False  # of a text file, whose cells have their line as place
    commas: bool = False  # commas between its cells: an unquoted decimal comma tears a row
    notes: tuple[Note, ...] = field(default=())

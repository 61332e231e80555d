"""An .xlsx file → cells, each with its address, what makes it unreadable, and whether it is struck through."""

from __future__ import annotations

import datetime
import re
import warnings
import zipfile
from collections.abc import Iterable
from pathlib import Path
from typing import Any

from reconcile.campaign.refusal import Place, Refusal, nearest
from reconcile.read.cells import Cell, Row, Sheet
from reconcile.read.preflight import SheetFacts, examine

# What openpyxl raises on workbooks that it cannot make sense of.
_TROUBLE = (
    KeyError,
    ValueError,
    TypeError,
    AttributeError,
    IndexError,
    OSError,
    EOFError,
    SyntaxError,
    zipfile.BadZipFile,
)
_ZEROS = re.compile("0+")
_DATES = (datetime.datetime, datetime.date, datetime.time, datetime.timedelta)


def read_workbook(path: Path, name: str, sheets: tuple[str, ...]) -> list[Sheet]:
    """Return the asked sheets of a workbook, in the asked order; the first one where none is asked.

    Parameters
    ----------
    path : the file
    name : its address in messages
    sheets : names, matched without regard to case and blanks where that leaves one; empty: the first sheet

    Raises
    ------
    Refusal
        The file cannot be read, or has no such sheet.
    """
    facts = examine(path, name)
    if not facts:
        raise Refusal(Place(name), found="no sheet", expected="a workbook with a sheet", remedy="Check the file.")
    titles = [_title(wanted, list(facts), name) for wanted in sheets] or [next(iter(facts))]
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # openpyxl tells of charts and validations that it leaves out
            import openpyxl

            book = openpyxl.load_workbook(path, read_only=True, data_only=True)
            try:
                return [_sheet(book[title], Place(name, sheet=title), facts[title]) for title in titles]
            finally:
                book.close()
    except _TROUBLE as error:
        raise Refusal(
            Place(name),
            found=f"a workbook that cannot be read ({error})",
            expected="a workbook as a spreadsheet program saves it",
            remedy="Open it in the spreadsheet program and save it as .xlsx.",
        ) from None


def _title(wanted: str, titles: list[str], name: str) -> str:
    if wanted in titles:
        return wanted
    folded = [title for title in titles if "".join(title.split()).casefold() == "".join(wanted.split()).casefold()]
    if len(folded) == 1:
        return folded[0]
    near = nearest(wanted, titles)
    raise Refusal(
        Place(name),
        found=f"no sheet '{wanted}'",
        expected=f"one of its sheets: {', '.join(titles)}",
        remedy=f'Write sheet = "{near}" if that is meant.' if near else "Correct the key `sheet`.",
    )


def _sheet(worksheet: Any, place: Place, facts: SheetFacts) -> Sheet:
    worksheet.reset_dimensions()  # some programs write a wrong one, and rows would be lost
    rows = []
    for number, stored in enumerate(worksheet.iter_rows(), start=1):
        cells = _cells(stored, place, facts)
        if cells:
            rows.append(Row(number, cells, number in facts.hidden_rows))
    return Sheet(place, tuple(rows), tuple(facts.merged))


def _cells(stored: Iterable[Any], sheet: Place, facts: SheetFacts) -> dict[int, Cell]:
    cells = {}
    for number, cell in enumerate(stored, start=1):
        address = getattr(cell, "coordinate", None)
        if address is None:  # an empty cell that was not stored
            continue
        found = _cell(cell, Place(sheet.file, sheet=sheet.sheet, cell=address), address in facts.uncomputed)
        if not found.blank:
            cells[number] = found
    return cells


def _cell(cell: Any, place: Place, uncomputed: bool) -> Cell:
    struck = bool(cell.has_style and cell.font is not None and cell.font.strike)
    if uncomputed:
        return Cell(place, fault="a formula without a stored value", struck=struck)
    value, shown_as = cell.value, str(cell.number_format or "")
    if cell.data_type == "e":
        return Cell(place, fault=f"the error {value}", struck=struck)
    if isinstance(value, _DATES):
        return Cell(place, fault=f"a date or time ({value})", content=str(value), struck=struck)
    if isinstance(value, bool) or value is None:
        return Cell(place, value, struck=struck)
    if isinstance(value, (int, float)):
        if isinstance(value, int) and _ZEROS.fullmatch(shown_as) and len(shown_as) > len(str(value)):
            return Cell(place, str(value).zfill(len(shown_as)), struck=struck)  # a name such as 007, kept as a number
        return Cell(place, float(value), struck=struck, percent="%" in shown_as)
    text = str(value).replace("\u200b", "").replace("\ufeff", "").strip()
    return Cell(place, text or None, struck=struck)

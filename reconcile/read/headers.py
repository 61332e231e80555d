"""Where the columns of a sheet are: its row of headers, its row of units, and the unit of each column."""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping
from dataclasses import dataclass

from reconcile.campaign.campaign import Table
from reconcile.campaign.number_text import is_blank
from reconcile.campaign.quantity import EXAMPLES, UnknownUnit, parse_unit
from reconcile.campaign.refusal import Note, Place, Refusal, nearest
from reconcile.read.cells import Cell, Merged, Row, Sheet

Specs = Mapping[str, str | None]  # columns that may be named, with the SI unit of each; None: text

_BRACKETS = re.compile(r"[(\[]([^()\[\]]*(?:\([^()]*\)[^()\[\]]*)?)[)\]]")
# Columns in which a cell merged downwards is one number, not the same number in every row.
_ONE_EACH = frozenset({"value", "count"})


@dataclass(frozen=True, slots=True)
class Column:
    """One named column of a sheet."""

    key: str  # its name in the manifest: "shot", "value" …
    header: str  # as the file writes it
    number: int  # from 1
    place: Place
    unit: str  # as written; "1" for a pure number
    si_unit: str | None  # None: text
    decimal: str = "."


@dataclass(frozen=True, slots=True)
class Layout:
    """A sheet whose columns were found."""

    sheet: Sheet
    header: Row
    numbers: Mapping[str, int]  # of each named column by its key, of a filter's by "only " and its header
    columns: Mapping[str, Column]
    below: Mapping[int, Row]  # rows under headers and units, by number
    merged: Mapping[int, list[Merged]]  # ranges under the headers, by each row that they cover
    notes: tuple[Note, ...]

    def cells(self, row: Row, keys: Iterable[str]) -> dict[str, Cell]:
        """Return a row's cells by key; one merged downwards counts for every row, unless it holds the value itself."""
        numbers = {key: self.numbers[key] for key in keys}
        found = {key: cell for key, number in numbers.items() if (cell := row.get(number)) is not None}
        for area in self.merged.get(row.number, ()):
            for key, number in numbers.items():
                if key not in found and key not in _ONE_EACH and area.left == number == area.right:
                    first = self.below.get(area.top)
                    cell = first.get(number) if first else None
                    if cell is not None:
                        found[key] = cell
        return found


def folded(header: str) -> str:
    """Return a header for comparison: case, blanks around and repeated, and the micro sign do not count."""
    return " ".join(header.replace("µ", "u").replace("μ", "u").split()).casefold()


def lay_out(sheet: Sheet, table: Table, specs: Specs) -> Layout:
    """Find the columns of a sheet.

    Raises
    ------
    Refusal
        No row holds every named column, two columns have one header, or a column is without its unit.
    """
    header = header_row(sheet, table)
    if header is None:
        raise _no_header(sheet, table)
    numbers = _column_numbers(sheet, header, table)
    below = {row.number: row for row in sheet.rows if row.number > header.number}
    units = _units_row(below, header, numbers, specs)
    if units is not None:
        del below[units.number]
    notes: list[Note] = []
    columns: dict[str, Column] = {}
    for key in sorted(table.columns, key=lambda one: one == "uncertainty"):  # which takes its value's unit
        inherited = columns["value"].unit if key == "uncertainty" and "value" in columns else None
        cell, si, under = header.cells[numbers[key]], specs.get(key), units.get(numbers[key]) if units else None
        unit = "1" if si is None else _unit(key, cell, under, table, (si, inherited))
        columns[key] = Column(key, cell.text, numbers[key], cell.place, unit, si)
        if si is not None:
            _note_other_unit(columns[key], table, notes)
    return Layout(sheet, header, numbers, columns, below, _merged_by_row(sheet, header.number), tuple(notes))


def header_row(sheet: Sheet, table: Table) -> Row | None:
    """Return the first row that holds every named column, cells of merged ranges filled in; None where there is none."""
    wanted = {folded(name) for name in _named(table)}
    for row in _with_merged(sheet):
        if wanted <= {folded(cell.text) for cell in row.cells.values()}:
            return row
    return None


def _named(table: Table) -> list[str]:
    return [*table.columns.values(), *table.only]


def _with_merged(sheet: Sheet) -> Iterable[Row]:
    """Yield every row with each cell of a merged range holding what its first cell holds."""
    if not sheet.merged:
        yield from sheet.rows
        return
    by_number = {row.number: row for row in sheet.rows}
    covering = _merged_by_row(sheet, 0)
    for row in sheet.rows:
        cells = dict(row.cells)
        for area in covering.get(row.number, ()):
            first = by_number.get(area.top)
            source = first.get(area.left) if first else None
            if source is not None:
                for column in range(area.left, area.right + 1):
                    cells.setdefault(column, source)
        yield Row(row.number, cells, row.hidden)


def _merged_by_row(sheet: Sheet, above: int) -> dict[int, list[Merged]]:
    """Return the merged ranges that begin below the row `above`, by each row that they cover."""
    last = sheet.rows[-1].number if sheet.rows else 0
    found: dict[int, list[Merged]] = {}
    for area in sheet.merged:
        if area.top > above:
            for number in range(area.top, min(area.bottom, last) + 1):
                found.setdefault(number, []).append(area)
    return found


def _no_header(sheet: Sheet, table: Table) -> Refusal:
    wanted = {folded(name): name for name in _named(table)}
    best, best_found = None, 0
    for row in _with_merged(sheet):
        found = len(wanted.keys() & {folded(cell.text) for cell in row.cells.values()})
        if found > best_found:
            best, best_found = row, found
    headers = [] if best is None else list(dict.fromkeys(cell.text for cell in best.cells.values() if cell.text))
    missing = [name for key, name in wanted.items() if key not in {folded(header) for header in headers}]
    near = nearest(missing[0], headers) if missing else None
    seen = f" in row {best.number}: {', '.join(headers)}" if best else ""
    return Refusal(
        sheet.place,
        found=f"no header {' and '.join(repr(name) for name in missing)}{seen}",
        expected=f"one row that holds {', '.join(repr(name) for name in wanted.values())}",
        remedy=f"Write '{near}' in the manifest if that is meant."
        if near
        else "Correct columns in the manifest, or the sheet.",
    )


def _column_numbers(sheet: Sheet, header: Row, table: Table) -> dict[str, int]:
    wanted = {**table.columns, **{f"only {name}": name for name in table.only}}
    found = {}
    for key, name in wanted.items():
        fitting = [number for number, cell in header.cells.items() if folded(cell.text) == folded(name)]
        exact = [number for number in fitting if header.cells[number].text == name]
        chosen = exact if exact else fitting
        merged = not sheet.delimited and len({header.cells[number].place for number in chosen}) == 1
        if len(chosen) > 1 and not merged:
            raise Refusal(
                header.cells[chosen[-1]].place,
                found=f"{len(chosen)} columns with the header '{name}'",
                expected="one",
                remedy="Give the columns different headers, there and in the manifest.",
            )
        found[key] = min(chosen)
    return found


# --- units ------------------------------------------------------------------------------------------------------


def _units_row(below: Mapping[int, Row], header: Row, numbers: Mapping[str, int], specs: Specs) -> Row | None:
    """Return the row directly under the headers where it holds units: no number, and a unit in a numeric column."""
    row = below.get(header.number + 1)
    if row is None:
        return None
    texts = [
        cell.text
        for key, number in numbers.items()
        if specs.get(key) is not None and (cell := row.get(number)) is not None and not is_blank(cell.text)
    ]
    if not texts or not all(_is_unit(_unbracketed(text)) for text in texts):
        return None
    return row if any(not text.isdigit() for text in texts) else None


def _is_unit(text: str) -> bool:
    try:
        parse_unit(text)
    except UnknownUnit:
        return False
    return True


def _unbracketed(text: str) -> str:
    match = _BRACKETS.fullmatch(text.strip())
    return match.group(1) if match else text


def _unit(key: str, header: Cell, under: Cell | None, table: Table, expected: tuple[str, str | None]) -> str:
    """Return a column's unit: of the manifest, else of the row of units, else of its header, else its value's.

    `expected`: the SI unit of its quantity, and the unit of the value that an uncertainty belongs to.
    """
    si, inherited = expected
    in_row = None if under is None or is_blank(under.text) else _unbracketed(under.text)
    stated = table.units.get(key) or in_row or _bracketed_unit(header.text, si, key) or inherited
    if stated is None and si == "1":
        return "1"
    if stated is not None and _fits(stated, si, key):
        return parse_unit(stated).text
    known = None
    try:
        parse_unit(stated or "")
    except UnknownUnit as unknown:
        known = unknown.known
    example = EXAMPLES.get(si, si).partition(" ")[2] or si
    raise Refusal(
        header.place,
        found=f"the header '{header.text}' " + (f"with the unit '{stated}'" if stated else "without a unit"),
        expected=f"a unit of {key} in brackets, such as ({example})",
        remedy=f"Write '{known}' if that is meant."
        if known
        else f'Add units = {{ {key} = "…" }} to this table of the manifest.',
    )


def _bracketed_unit(header: str, si: str, key: str) -> str | None:
    """Return the unit in a header's brackets: the last that fits, else the last that is one, else the last text."""
    candidates: list[str] = [text.strip() for text in _BRACKETS.findall(header) if text.strip()]
    fitting = [text for text in candidates if _fits(text, si, key)]
    if si == "1":  # a count or fraction needs no unit: other brackets are a remark
        return fitting[-1] if fitting else None
    best = fitting or [text for text in candidates if _is_unit(text)] or candidates
    return best[-1] if best else None


def _fits(text: str, si: str, key: str) -> bool:
    if key == "uncertainty" and text == "%":
        return True
    return _is_unit(text) and parse_unit(text).dimension == parse_unit(si).dimension


def _note_other_unit(column: Column, table: Table, notes: list[Note]) -> None:
    """Note where the manifest writes a header with another unit than the file: the file's counts."""
    named = _bracketed_unit(table.columns[column.key], column.si_unit or "1", column.key)
    if named is None or not _is_unit(named) or column.key in table.units:
        return
    if parse_unit(named) != parse_unit(column.unit):
        what = f"'{column.header}' is read in {column.unit}; the manifest writes that header with ({named})"
        notes.append(Note(str(column.place), what))

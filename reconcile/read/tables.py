"""A spreadsheet or .csv → rows of named cells: headers found, decimal signs settled, each cell with its place."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path

from reconcile.campaign.campaign import Table
from reconcile.campaign.number_text import decimal_evidence, is_blank, settle_decimal, to_float
from reconcile.campaign.quantity import parse_unit
from reconcile.campaign.refusal import Note, Place, Refusal, nearest
from reconcile.read.cells import Cell, Row, Sheet
from reconcile.read.delimited import read_delimited
from reconcile.read.headers import Column, Layout, Specs, folded, header_row, lay_out
from reconcile.read.workbook import read_workbook

TARGETS = ("shot", "sample")
# First words of rows that sum up the others, in the languages of the laboratories at hand; no shot has such a name.
_SUMMARIES = frozenset(
    {
        *("total", "totals", "sum", "sums", "mean", "average", "avg", "median", "std", "stdev", "sd", "min", "max"),
        *("minimum", "maximum", "count", "summe", "gesamt", "mittel", "mittelwert", "standardabweichung", "anzahl"),
        *("somme", "moyenne"),
    }
)


@dataclass(frozen=True, slots=True)
class TableRow:
    """One row below the header."""

    place: Place  # of the whole row
    cells: Mapping[str, Cell]  # by the column's name; blank ones are missing
    whole: tuple[tuple[int, str], ...]  # every stored cell of the row, to tell equal rows
    fault: str | None = None  # why the row as a whole cannot be read


@dataclass(frozen=True, slots=True)
class SheetRead:
    """The rows of one sheet that count, and what a person should know of its reading."""

    place: Place
    columns: Mapping[str, Column]
    rows: tuple[TableRow, ...]
    notes: tuple[Note, ...] = field(default=())


def read_table(path: Path, name: str, table: Table, specs: Specs) -> list[SheetRead]:
    """Read the rows of one file that a table names.

    Parameters
    ----------
    path : the file, .xlsx or .csv
    name : its address in messages, relative to the campaign folder
    table : the manifest's entry: columns, units, sheets, filter, decimal sign, delimiter, encoding
    specs : columns that may be named, with the SI unit of each (None: text)

    Returns
    -------
    list[SheetRead]
        One for each sheet.

    Raises
    ------
    Refusal
        The file cannot be read as a whole: damaged, no such sheet or column, a column without its unit, a decimal
        sign that cannot be settled.
    """
    suffix = path.suffix.lower()
    if suffix == ".xlsx":
        sheets = read_workbook(path, name, table.sheets)
    elif suffix in {".csv", ".txt", ".tsv"}:
        sheet = read_delimited(
            path, name, table.encoding, table.delimiter, lambda one: header_row(one, table) is not None
        )
        sheets = [sheet]
    else:
        raise Refusal(
            Place(name),
            found=f"a file that ends in '{path.suffix}'",
            expected=".xlsx or .csv",
            remedy="Open it in the spreadsheet program and save it as .xlsx.",
        )
    return [_read_sheet(one, table, specs) for one in sheets]


def number(cell: Cell | None, column: Column) -> float | None:
    """Return a cell's number in its column's unit, or None where it is blank or a dash.

    Raises
    ------
    Refusal
        An error, a date, a formula without a stored value, or no number.
    """
    if cell is None or cell.blank:
        return None
    if cell.fault is not None:
        raise unreadable(cell, f"a number in '{column.header}'")
    if isinstance(cell.content, float):
        if cell.percent and column.unit != "%" and column.si_unit != "1":
            raise Refusal(
                cell.place,
                found=f"{cell.content * 100:g} % in '{column.header}'",
                expected=f"a number in {column.unit}",
                remedy='Add units = { uncertainty = "%" } to this table of the manifest.'
                if column.key == "uncertainty"
                else "Correct the cell, or its format.",
            )
        return cell.content * 100 if cell.percent and column.unit == "%" else cell.content
    text = cell.text
    if is_blank(text):
        return None
    percent = text.endswith("%") and (column.si_unit == "1" or column.unit == "%")
    try:
        value = to_float(text[:-1].strip() if percent else text, column.decimal)
    except ValueError:
        raise Refusal(
            cell.place,
            found=f"'{text}' in '{column.header}'",
            expected=f"a number, its decimal sign '{column.decimal}'",
            remedy="Correct the cell; clear it where there is no reading.",
        ) from None
    return value / 100 if percent and column.unit != "%" else value


def in_si(value: float, column: Column) -> float:
    """Return a number of a column in SI."""
    return parse_unit(column.unit).to_si(value)


def unreadable(cell: Cell, expected: str) -> Refusal:
    """Return the refusal of a cell that holds a date, an error or a formula without a stored value."""
    fault = cell.fault or f"'{cell.text}'"
    remedy = "Correct the cell."
    if "formula" in fault:
        remedy = "Open the file in the spreadsheet program, let it calculate, and save it."
    elif "date" in fault:
        remedy = "Format the cell as text and type it again: the spreadsheet turned it into a date."
    return Refusal(cell.place, found=fault, expected=expected, remedy=remedy)


def name_in(cell: Cell | None, what: str) -> str | None:
    """Return the name of a shot, a sample or a level; None where the cell is blank or a dash.

    Raises
    ------
    Refusal
        A date, an error, a formula without a stored value, or text that is no name.
    """
    if cell is None or cell.blank:
        return None
    if cell.fault is not None:
        raise unreadable(cell, f"the name of a {what}")
    text = cell.text
    if is_blank(text):
        return None
    if len(text) > 80 or "/" in text or "\\" in text or any(ord(sign) < 32 or ord(sign) == 127 for sign in text):
        raise Refusal(
            cell.place,
            found=f"'{text[:40]}'",
            expected=f"the name of a {what}: up to 80 characters without / and \\",
            remedy="Correct the name.",
        )
    return text


def _read_sheet(sheet: Sheet, table: Table, specs: Specs) -> SheetRead:
    layout = lay_out(sheet, table, specs)
    notes = [*sheet.notes, *layout.notes]
    targets = [key for key in TARGETS if key in table.columns]
    kept = []
    for row in layout.below.values():
        cells = layout.cells(row, table.columns)
        if _counts(cells, targets, layout.columns, notes):
            kept.append((row, _row(layout, row, cells)))
    kept = _filtered(kept, layout, table, notes)
    hidden = [str(row.number) for row, _ in kept if row.hidden]
    if hidden:
        listed = ", ".join(hidden[:8]) + (" …" if len(hidden) > 8 else "")
        notes.append(
            Note(str(sheet.place), f"{len(hidden)} hidden row{'s were' if len(hidden) > 1 else ' was'} read ({listed})")
        )
    rows = tuple(row for _, row in kept)
    columns = _settled(layout.columns, rows, table, notes)
    return SheetRead(sheet.place, columns, rows, tuple(notes))


def _counts(cells: Mapping[str, Cell], targets: list[str], columns: Mapping[str, Column], notes: list[Note]) -> bool:
    """Return whether a row holds a shot or sample: no blank row, total, note or repeated header."""
    named = [
        (columns[key], cell)
        for key in targets
        if (cell := cells.get(key)) is not None and (cell.fault is not None or not is_blank(cell.text))
    ]
    if not named:
        return not targets and bool(cells)
    column, cell = named[0]
    if folded(cell.text) == folded(column.header):
        return False
    if cell.text.casefold().rstrip(" :") in _SUMMARIES:
        notes.append(Note(str(cell.place), f"'{cell.text}' taken as a row that sums up others, and left out"))
        return False
    return True


def _row(layout: Layout, row: Row, cells: dict[str, Cell]) -> TableRow:
    sheet, last = layout.sheet, max(layout.header.cells)
    place = Place(sheet.place.file, sheet=sheet.place.sheet, line=row.number)
    whole = tuple((number_, cell.fault or cell.text) for number_, cell in sorted(row.cells.items()))
    torn = sheet.commas and bool(row.cells) and max(row.cells) > last
    return TableRow(place, cells, whole, f"a row of {max(row.cells)} cells below {last} headers" if torn else None)


_Kept = list[tuple[Row, TableRow]]


def _filtered(kept: _Kept, layout: Layout, table: Table, notes: list[Note]) -> _Kept:
    """Return the rows that `only` keeps; the others are counted in a note."""
    if not table.only:
        return kept
    keys = {f"only {name}": " ".join(wanted.split()) for name, wanted in table.only.items()}
    remaining: _Kept = []
    seen: set[str] = set()
    for row, found in kept:
        cells = layout.cells(row, keys)
        texts = {key: " ".join(cells[key].text.split()) if key in cells else "" for key in keys}
        seen.update(texts.values())
        if texts == keys:
            remaining.append((row, found))
    wanted = " and ".join(f"{name} = '{text}'" for name, text in table.only.items())
    if not remaining and kept:
        near = nearest(next(iter(table.only.values())), sorted(seen))
        raise Refusal(
            layout.sheet.place,
            found=f"no row with {wanted}",
            expected="at least one row that `only` keeps",
            remedy=f"Write '{near}' in `only` if that is meant." if near else "Correct `only` in the manifest.",
        )
    left = len(kept) - len(remaining)
    if left:
        what = f"{left} row{'s' if left > 1 else ''} left out: only rows with {wanted} are kept"
        notes.append(Note(str(layout.sheet.place), what))
    return remaining


def _settled(
    columns: Mapping[str, Column], rows: tuple[TableRow, ...], table: Table, notes: list[Note]
) -> dict[str, Column]:
    """Return the columns with the decimal sign of each; raises Refusal where it stays open."""
    typed = {key: _typed(key, column, rows) for key, column in columns.items()}
    evidence = {key: {decimal_evidence(text) for text in texts} - {None} for key, texts in typed.items()}
    done = {}
    for key, column in columns.items():
        try:
            sign = table.decimal or settle_decimal(typed[key]) or "."
        except ValueError as open_numbers:
            raise _unsettled(column, str(open_numbers)) from None
        if table.decimal is None and any("," in text for text in typed[key]) and evidence[key]:
            how = "a decimal comma" if sign == "," else "a decimal point, commas between thousands"
            notes.append(Note(str(column.place), f"'{column.header}' read with {how}"))
        done[key] = replace(column, decimal=sign)
    if table.decimal is None and any(column.decimal == "," for column in done.values()):
        for key, column in done.items():
            if evidence[key] == {"?."}:  # 1.234 alone is a decimal point, but not beside decimal commas
                example = next(text for text in typed[key] if decimal_evidence(text) == "?.")
                raise _unsettled(column, f"'{example}' beside columns with a decimal comma")
    return done


def _typed(key: str, column: Column, rows: tuple[TableRow, ...]) -> list[str]:
    """Return the numbers of a column that stand there as text."""
    if column.si_unit is None:
        return []
    cells = (cell for row in rows if (cell := row.cells.get(key)) is not None)
    return [cell.text.rstrip(" %") for cell in cells if cell.fault is None and isinstance(cell.content, str)]


def _unsettled(column: Column, numbers: str) -> Refusal:
    return Refusal(
        column.place,
        found=f"{numbers} in '{column.header}', which can be read in two ways",
        expected="numbers that show which sign is the decimal one",
        remedy='Add decimal = "," or decimal = "." to this table of the manifest.',
    )

"""A spreadsheet or .csv → rows of named cells: the header found, units and decimal signs settled, each cell with its place."""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from pathlib import Path

from reconcile.campaign.campaign import Table
from reconcile.campaign.number_text import decimal_evidence, is_blank, settle_decimal, to_float
from reconcile.campaign.quantity import EXAMPLES, UnknownUnit, parse_unit
from reconcile.campaign.refusal import Note, Place, Refusal, nearest
from reconcile.read.cells import Cell, Merged, Row, Sheet
from reconcile.read.delimited import read_delimited
from reconcile.read.workbook import read_workbook

TARGETS = ("shot", "sample")
_BRACKETS = re.compile(r"[(\[]([^()\[\]]*(?:\([^()]*\)[^()\[\]]*)?)[)\]]")
# First words of rows that sum up the others, in the languages of the laboratories at hand; no shot has such a name.
_SUMMARIES = frozenset(
    {
        *("total", "totals", "sum", "sums", "mean", "average", "avg", "median", "std", "stdev", "sd", "min", "max"),
        *("minimum", "maximum", "count", "summe", "gesamt", "mittel", "mittelwert", "standardabweichung", "anzahl"),
        *("somme", "moyenne"),
    }
)


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


def read_table(path: Path, name: str, table: Table, specs: Mapping[str, str | None]) -> list[SheetRead]:
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
            path, name, table.encoding, table.delimiter, lambda one: _header_row(one, table) is not None
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


def folded(header: str) -> str:
    """Return a header for comparison: case, blanks around and repeated, and the micro sign do not count."""
    return " ".join(header.replace("µ", "u").replace("μ", "u").split()).casefold()


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


def _read_sheet(sheet: Sheet, table: Table, specs: Mapping[str, str | None]) -> SheetRead:
    header = _header_row(sheet, table)
    if header is None:
        raise _no_header(sheet, table)
    places = _column_numbers(sheet, header, table)
    below = [row for row in sheet.rows if row.number > header.number]
    merged = _merged_by_row(sheet, header.number)
    units_row = _units_row(below, header, places, specs)
    if units_row is not None:
        below.remove(units_row)
    notes = list(sheet.notes)
    columns = {}
    for key in table.columns:
        columns[key] = _column(key, header, places[key], units_row, table, specs, notes)
    target = next((key for key in TARGETS if key in table.columns), None)
    kept, hidden = [], []
    last = max(header.cells)
    for row in below:
        cells = _named_cells(row, {key: places[key] for key in table.columns}, merged, sheet)
        if _counts(row, cells, target, columns, table, merged, notes, places, sheet):
            kept.append(_row(sheet, row, cells, last))
            if row.hidden:
                hidden.append(row.number)
    if hidden:
        listed = ", ".join(str(one) for one in hidden[:8]) + (" …" if len(hidden) > 8 else "")
        notes.append(
            Note(str(sheet.place), f"{len(hidden)} hidden row{'s were' if len(hidden) > 1 else ' was'} read ({listed})")
        )
    filtered = _filtered(kept, below, places, table, merged, sheet, notes)
    columns = _settled(columns, filtered, table, notes)
    return SheetRead(sheet.place, columns, tuple(filtered), tuple(notes))


# --- the header -------------------------------------------------------------------------------------------------


def _named(table: Table) -> list[str]:
    return [*table.columns.values(), *table.only]


def _header_row(sheet: Sheet, table: Table) -> Row | None:
    """Return the first row that holds every named column, cells of merged ranges filled in."""
    wanted = {folded(name) for name in _named(table)}
    for row in _with_merged(sheet):
        if wanted <= {folded(cell.text) for cell in row.cells.values()}:
            return row
    return None


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
            for column in range(area.left, area.right + 1) if source is not None else ():
                cells.setdefault(column, source)  # type: ignore[arg-type]
        yield Row(row.number, cells, row.hidden)


def _merged_by_row(sheet: Sheet, below: int) -> dict[int, list[Merged]]:
    """Return the merged ranges that begin below a row, by each row that they cover."""
    last = sheet.rows[-1].number if sheet.rows else 0
    found: dict[int, list[Merged]] = {}
    for area in sheet.merged:
        if area.top > below:
            for number_ in range(area.top, min(area.bottom, last) + 1):
                found.setdefault(number_, []).append(area)
    return found


def _no_header(sheet: Sheet, table: Table) -> Refusal:
    wanted = {folded(name): name for name in _named(table)}
    best = max(
        _with_merged(sheet),
        key=lambda row: len(wanted.keys() & {folded(cell.text) for cell in row.cells.values()}),
        default=None,
    )
    headers = [] if best is None else [cell.text for cell in best.cells.values() if cell.text]
    missing = [name for key, name in wanted.items() if key not in {folded(header) for header in headers}]
    if len(missing) == len(wanted):
        headers = headers[:0]
    near = nearest(missing[0], headers) if missing else None
    seen = f" in row {best.number}: {', '.join(headers)}" if headers and best else ""
    return Refusal(
        sheet.place,
        found=f"no row of headers with {' and '.join(repr(name) for name in missing)}{seen}",
        expected=f"one row that holds {', '.join(repr(name) for name in wanted.values())}",
        remedy=f"Write '{near}' in the manifest if that is meant."
        if near
        else "Correct columns in the manifest, or the sheet.",
    )


def _column_numbers(sheet: Sheet, header: Row, table: Table) -> dict[str, int]:
    """Return the number of each named column, by its key or, of a filter, by its header."""
    wanted = {**table.columns, **{f"only {name}": name for name in table.only}}
    found = {}
    for key, name in wanted.items():
        fitting = [number_ for number_, cell in header.cells.items() if folded(cell.text) == folded(name)]
        exact = [number_ for number_ in fitting if header.cells[number_].text == name]
        chosen = exact if len(exact) == 1 else fitting
        if len({header.cells[number_].place for number_ in chosen}) > 1 or (sheet.delimited and len(chosen) > 1):
            raise Refusal(
                header.cells[chosen[0]].place,
                found=f"{len(chosen)} columns with the header '{name}'",
                expected="one",
                remedy="Give the columns different headers, there and in the manifest.",
            )
        found[key] = min(chosen)
    return found


# --- units ------------------------------------------------------------------------------------------------------


def _units_row(below: list[Row], header: Row, places: Mapping[str, int], specs: Mapping[str, str | None]) -> Row | None:
    """Return the row directly under the headers where it holds units: no number, and a unit in a numeric column."""
    row = below[0] if below else None
    if row is None or row.number > header.number + 2:
        return None
    texts = [
        cell.text
        for key, number_ in places.items()
        if specs.get(key) is not None and (cell := row.get(number_)) is not None and not is_blank(cell.text)
    ]
    if not texts or not all(_is_unit(text) for text in texts):
        return None
    return row if any(not text.isdigit() for text in texts) else None


def _is_unit(text: str) -> bool:
    try:
        parse_unit(_unbracketed(text))
    except UnknownUnit:
        return False
    return True


def _unbracketed(text: str) -> str:
    match = _BRACKETS.fullmatch(text.strip())
    return match.group(1) if match else text


def _column(
    key: str,
    header: Row,
    number_: int,
    units_row: Row | None,
    table: Table,
    specs: Mapping[str, str | None],
    notes: list[Note],
) -> Column:
    cell, si = header.cells[number_], specs.get(key)
    if si is None:
        return Column(key, cell.text, number_, cell.place, "1", None)
    under = units_row.get(number_) if units_row is not None else None
    in_row = None if under is None or is_blank(under.text) else _unbracketed(under.text)
    stated = table.units.get(key) or in_row or _bracketed_unit(cell.text, si, key)
    if stated is None and key == "uncertainty" and "value" in table.columns:
        stated = _column("value", header, _value_number(header, table), units_row, table, specs, []).unit
    unit = _checked_unit(stated, si, key, cell)
    named = _bracketed_unit(table.columns[key], si, key)
    if named is not None and stated not in {None, named} and _is_unit(named) and parse_unit(named) != parse_unit(unit):
        notes.append(Note(str(cell.place), f"'{key}' is read in {unit}; the manifest writes its header with ({named})"))
    return Column(key, cell.text, number_, cell.place, unit, si)


def _value_number(header: Row, table: Table) -> int:
    wanted = folded(table.columns["value"])
    return min(number_ for number_, cell in header.cells.items() if folded(cell.text) == wanted)


def _bracketed_unit(header: str, si: str, key: str) -> str | None:
    """Return the unit in a header's brackets: the last that fits, else the last that is one, else the last text."""
    candidates = [text.strip() for text in _BRACKETS.findall(header) if text.strip()]
    for fits in (lambda text: _fits(text, si, key), _is_unit):
        matching = [text for text in candidates if fits(text)]
        if matching:
            return matching[-1]
    return candidates[-1] if candidates and si != "1" else None


def _fits(text: str, si: str, key: str) -> bool:
    if key == "uncertainty" and text == "%":
        return True
    return _is_unit(text) and parse_unit(text).dimension == parse_unit(si).dimension


def _checked_unit(stated: str | None, si: str, key: str, header: Cell) -> str:
    if stated is None and si == "1":
        return "1"
    if stated is not None and _fits(stated, si, key):
        return parse_unit(stated).text
    known = None
    if stated is not None and not _is_unit(stated):
        try:
            parse_unit(stated)
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


# --- rows -------------------------------------------------------------------------------------------------------


def _named_cells(
    row: Row, places: Mapping[str, int], merged: Mapping[int, list[Merged]], sheet: Sheet
) -> dict[str, Cell]:
    """Return a row's named cells; one merged downwards counts for every row, unless it holds the value itself."""
    found = {key: cell for key, number_ in places.items() if (cell := row.get(number_)) is not None}
    for area in merged.get(row.number, ()):
        for key, number_ in places.items():
            if key not in found and key not in {"value", "count"} and area.left == number_ == area.right:
                first = next((one for one in sheet.rows if one.number == area.top), None)
                cell = first.get(number_) if first else None
                if cell is not None:
                    found[key] = cell
    return found


def _counts(
    row: Row,
    cells: Mapping[str, Cell],
    target: str | None,
    columns: Mapping[str, Column],
    table: Table,
    merged: Mapping[int, list[Merged]],
    notes: list[Note],
    places: Mapping[str, int],
    sheet: Sheet,
) -> bool:
    """Return whether a row holds a shot or sample: no blank row, total, note or repeated header."""
    if target is None:
        return bool(cells)
    cell = cells.get(target)
    if cell is None or (cell.fault is None and is_blank(cell.text)):
        return False
    if folded(cell.text) == folded(columns[target].header):
        return False
    if cell.text.casefold().rstrip(" :") in _SUMMARIES:
        notes.append(Note(str(cell.place), f"'{cell.text}' taken as a row that sums up others, and left out"))
        return False
    return True


def _row(sheet: Sheet, row: Row, cells: dict[str, Cell], last: int) -> TableRow:
    place = Place(sheet.place.file, sheet=sheet.place.sheet, line=row.number)
    whole = tuple((number_, cell.fault or cell.text) for number_, cell in sorted(row.cells.items()))
    fault = None
    if sheet.delimited and max(row.cells) > last:
        fault = f"a row of {max(row.cells)} cells below {last} headers"
    return TableRow(place, cells, whole, fault)


def _filtered(
    kept: list[TableRow],
    below: list[Row],
    places: Mapping[str, int],
    table: Table,
    merged: Mapping[int, list[Merged]],
    sheet: Sheet,
    notes: list[Note],
) -> list[TableRow]:
    """Return the rows that `only` keeps; the others are counted in a note."""
    if not table.only:
        return kept
    filters = {name: places[f"only {name}"] for name in table.only}
    by_number = {row.number: _named_cells(row, filters, merged, sheet) for row in below}
    remaining: list[TableRow] = []
    seen: set[str] = set()
    for row in kept:
        cells = by_number[row.place.line or 0]
        texts = {name: cells[name].text if name in cells else "" for name in filters}
        seen.update(texts.values())
        if all(" ".join(texts[name].split()) == " ".join(wanted.split()) for name, wanted in table.only.items()):
            remaining.append(row)
    wanted = " and ".join(f"{name} = '{text}'" for name, text in table.only.items())
    if not remaining and kept:
        near = nearest(next(iter(table.only.values())), sorted(seen))
        raise Refusal(
            sheet.place,
            found=f"no row with {wanted}",
            expected="at least one row that `only` keeps",
            remedy=f"Write '{near}' in `only` if that is meant." if near else "Correct `only` in the manifest.",
        )
    left = len(kept) - len(remaining)
    if left:
        notes.append(
            Note(str(sheet.place), f"{left} row{'s' if left > 1 else ''} left out: only rows with {wanted} are kept")
        )
    return remaining


# --- decimal signs ----------------------------------------------------------------------------------------------


def _settled(columns: Mapping[str, Column], rows: list[TableRow], table: Table, notes: list[Note]) -> dict[str, Column]:
    """Return the columns with the decimal sign of each; raises Refusal where it stays open."""
    done, evidence = {}, {}
    for key, column in columns.items():
        texts = []
        if column.si_unit is not None:
            cells = (row.cells.get(key) for row in rows)
            texts = [
                cell.text for cell in cells if cell is not None and cell.fault is None and isinstance(cell.content, str)
            ]
        try:
            sign = table.decimal or settle_decimal(texts)
        except ValueError as open_numbers:
            raise _unsettled(column, str(open_numbers)) from None
        evidence[key] = {decimal_evidence(text) for text in texts} - {None}
        if table.decimal is None and any("," in text for text in texts) and evidence[key]:
            how = "a decimal comma" if sign == "," else "a decimal point, commas between thousands"
            notes.append(Note(str(column.place), f"'{column.header}' read with {how}"))
        done[key] = Column(key, column.header, column.number, column.place, column.unit, column.si_unit, sign or ".")
    if table.decimal is None and any(column.decimal == "," for column in done.values()):
        for key, column in done.items():
            if evidence[key] == {"?."}:
                example = next(
                    cell.text
                    for row in rows
                    if (cell := row.cells.get(key)) is not None and decimal_evidence(cell.text) == "?."
                )
                raise _unsettled(column, f"'{example}' beside columns with a decimal comma")
    return done


def _unsettled(column: Column, numbers: str) -> Refusal:
    return Refusal(
        column.place,
        found=f"{numbers} in '{column.header}', which can be read in two ways",
        expected="numbers that show which sign is the decimal one",
        remedy='Add decimal = "," or decimal = "." to this table of the manifest.',
    )

"""A trace in a .csv file → its columns: the layout found in the first lines, the numbers read by pandas' C parser."""

from __future__ import annotations

import csv
import io
import math
from pathlib import Path

import numpy as np

from reconcile.campaign.campaign import Table
from reconcile.campaign.number_text import settle_decimal
from reconcile.campaign.quantity import parse_unit
from reconcile.campaign.refusal import Note, Place, Refusal
from reconcile.read.cells import Cell, Row, Sheet
from reconcile.read.delimited import LARGEST, read_text
from reconcile.read.headers import Layout, header_row, lay_out
from reconcile.read.trace_types import UNITS, Array, Columns, TraceSettings, damaged

_HEAD = 200  # lines in which headers are looked for: a recorder's settings take some dozens
_SIGNS = 60  # rows that settle the decimal sign; the parser refuses a later one that departs from them
_DELIMITERS = (",", ";", "\t", "|")


def read_text_trace(path: Path, name: str, settings: TraceSettings) -> Columns:
    """Return the columns of a .csv trace, in SI.

    Headers may stand below a block of the recorder's settings.

    Raises
    ------
    Refusal
        The file cannot be read, has no such column, or holds what is no number.
    """
    if path.is_file() and path.stat().st_size > LARGEST:
        raise Refusal(
            Place(name),
            found="a text file of more than 200 MB",
            expected="a trace of some thousand samples",
            remedy="Export only the stretch from before the laser pulse to after the collapse, or export as .npz or .h5.",
        )
    text, note = read_text(path, name, settings.encoding)
    if not text.strip():
        raise damaged(name, "an empty file", "a trace")
    table = Table(
        "probe-trace",
        "",
        Place(name),
        columns={key: settings.columns[key] for key in UNITS if key in settings.columns},
        units=settings.units,
    )
    sheet = _head(text, name, settings.delimiter, table)
    layout = lay_out(sheet[0], table, UNITS)
    rows = sorted(layout.below)
    if not rows:
        raise damaged(name, "headers and no sample below them", "a trace")
    decimal = settings.decimal or _decimal(layout, name)
    first = rows[0]
    values = _numbers(text, name, sheet[1], decimal, layout, first)
    notes = [*layout.notes]
    if note:
        notes.append(Note(name, note))
    return Columns(values["voltage"], values.get("time"), None, first, tuple(notes))


def _head(text: str, name: str, delimiter: str | None, table: Table) -> tuple[Sheet, str]:
    """Return the first lines as cells, and the delimiter that shows the named headers."""
    lines = text.split("\n", _HEAD)[:_HEAD]
    if delimiter is None and lines[0].strip().lower().startswith("sep=") and len(lines[0].strip()) == 5:
        delimiter = lines[0].strip()[4]
    sheets = []
    for one in [delimiter] if delimiter else _DELIMITERS:
        sheet = _cells(lines, name, one)
        if header_row(sheet, table) is not None:
            return sheet, one
        sheets.append((sheet, one))
    return max(sheets, key=lambda sheet: sum(len(row.cells) > 1 for row in sheet[0].rows))


def _cells(lines: list[str], name: str, delimiter: str) -> Sheet:
    rows = []
    for number, line in enumerate(lines, start=1):
        fields = next(csv.reader([line.rstrip("\r")], delimiter=delimiter, skipinitialspace=True), [])
        place = Place(name, line=number)
        cells = {column: Cell(place, field.strip()) for column, field in enumerate(fields, start=1) if field.strip()}
        if cells:
            rows.append(Row(number, cells))
    return Sheet(Place(name), tuple(rows), delimited=True, commas=delimiter == ",")


def _decimal(layout: Layout, name: str) -> str:
    numbers = layout.numbers.values()
    rows = list(layout.below.values())[:_SIGNS]
    texts = [cell.text for row in rows for number in numbers if (cell := row.get(number)) is not None]
    try:
        return settle_decimal(texts) or "."
    except ValueError as error:
        raise Refusal(
            Place(name),
            found=f"the number {error}, which has two readings",
            expected="one decimal sign",
            remedy='Add decimal = "," or decimal = "." to this table of the manifest.',
        ) from None


def _numbers(  # reason: the layout's parts one by one
    text: str, name: str, delimiter: str, decimal: str, layout: Layout, first: int
) -> dict[str, Array]:
    import pandas as pd

    keys = list(layout.columns)
    at = [layout.columns[key].number - 1 for key in keys]
    try:
        frame = pd.read_csv(
            io.StringIO(text),
            sep=delimiter,
            decimal=decimal,
            header=None,
            names=range(max(max(row.cells) for row in layout.below.values())),
            index_col=False,
            skiprows=first - 1,
            usecols=at,
            skipinitialspace=True,
            dtype=np.float64,
            engine="c",
        )
    except (ValueError, OverflowError):  # a parser's error is a ValueError
        raise _not_a_number(text, name, delimiter, decimal, at, first) from None
    values: dict[str, Array] = {}
    for key, column in zip(keys, at, strict=True):
        numbers = frame[column].to_numpy(dtype=np.float64)
        values[key] = numbers * parse_unit(layout.columns[key].unit).size
    _no_torn_end(values, text, name)
    return values


def _no_torn_end(values: dict[str, Array], text: str, name: str) -> None:
    """Refuse a last row without all its numbers: the copy or the recording broke off there."""
    blank = [key for key, numbers in values.items() if math.isnan(numbers[-1])]
    if blank and all(np.isfinite(numbers[:-1]).all() for numbers in values.values()):
        last = text.rstrip().count("\n") + 1
        raise Refusal(
            Place(name, line=last),
            found=f"a last row without {' and '.join(blank)}: the file breaks off",
            expected="a whole file",
            remedy="Export or copy the trace again.",
        )


def _not_a_number(
    text: str, name: str, delimiter: str, decimal: str, at: list[int], first: int
) -> Refusal:  # reason: see _numbers
    """Find the line that is no row of numbers, for the message."""
    for number, line in enumerate(text.split("\n"), start=1):
        if number < first or not line.strip():
            continue
        fields = [field.strip() for field in line.split(delimiter)]
        for column in at:
            field = fields[column] if column < len(fields) else ""
            try:
                float(field.strip('"').replace(decimal, ".") or "nan")
            except ValueError:
                return Refusal(
                    Place(name, line=number),
                    found=f"'{field[:40]}'",
                    expected="a number",
                    remedy="Correct or take out the line; decimal and delimiter in the manifest say how numbers are written.",
                )
    return damaged(name, "rows that cannot be split into columns", "one delimiter and one decimal sign in all rows")

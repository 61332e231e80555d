"""A .csv file → cells: its encoding and delimiter found, each line with its number."""

from __future__ import annotations

import codecs
import csv
import io
from collections.abc import Callable
from pathlib import Path

from reconcile.campaign.refusal import Note, Place, Refusal
from reconcile.read.cells import Cell, Row, Sheet

_DELIMITERS = (",", ";", "\t", "|")
LARGEST = 200 * 1024 * 1024  # bytes; a table of readings is thousands of times smaller


def read_text(path: Path, name: str, encoding: str | None) -> tuple[str, str | None]:
    """Return a file's text, and a note where its encoding had to be guessed.

    Parameters
    ----------
    path : the file
    name : its address in messages
    encoding : as stated; None: UTF-8, else that of Western European Windows

    Raises
    ------
    Refusal
        The file cannot be read, or not as text.
    """
    place = Place(name)
    try:
        if path.stat().st_size > LARGEST:
            raise Refusal(
                place,
                found="a file of more than 200 MB",
                expected="a table of readings",
                remedy="Leave out what is no reading.",
            )
        raw = path.read_bytes()
    except OSError as error:
        raise Refusal(
            place,
            found=f"a file that cannot be opened ({error.strerror})",
            expected="a readable file",
            remedy="Check it.",
        ) from None
    if encoding is not None:
        return _decoded(raw, encoding, place), None
    if raw.startswith((codecs.BOM_UTF16_LE, codecs.BOM_UTF16_BE)):
        return _decoded(raw, "utf-16", place), None
    if b"\0" in raw:
        raise Refusal(
            place,
            found="bytes that are no text",
            expected="a .csv file of text",
            remedy="Save it as CSV (UTF-8), or give it the ending that it should have.",
        )
    try:
        return raw.decode("utf-8-sig"), None
    except UnicodeDecodeError:
        text = _decoded(raw, "cp1252", place)
        return text, "no UTF-8: read as Windows-1252; `encoding` in the manifest says otherwise"


def _decoded(raw: bytes, encoding: str, place: Place) -> str:
    try:
        return raw.decode(encoding)
    except LookupError:
        raise Refusal(
            place,
            found=f"the encoding '{encoding}'",
            expected="one that Python knows, such as utf-8 or cp1252",
            remedy="Correct the key `encoding` of this table.",
        ) from None
    except UnicodeDecodeError as error:
        line = raw[: error.start].count(b"\n") + 1
        raise Refusal(
            Place(place.file, line=line),
            found=f"a byte that is no {encoding} text",
            expected="text in one encoding",
            remedy="Save the file as UTF-8, or state `encoding` for this table.",
        ) from None


def read_delimited(
    path: Path, name: str, encoding: str | None, delimiter: str | None, fits: Callable[[Sheet], bool]
) -> Sheet:
    """Return the rows of a .csv file.

    Parameters
    ----------
    path : the file
    name : its address in messages
    encoding, delimiter : as stated; None: found
    fits : whether a sheet holds the header row that is looked for; it settles the delimiter

    Raises
    ------
    Refusal
        The file cannot be read, or a quoted cell does not end.
    """
    text, note = read_text(path, name, encoding)
    notes = (Note(name, note),) if note else ()
    first, _, rest = text.partition("\n")
    if delimiter is None and first.strip().lower().startswith("sep=") and len(first.strip()) == 5:
        delimiter, text = first.strip()[4], "\n" + rest
    if delimiter is not None:
        return _split(text, name, delimiter, notes)
    sheets: list[Sheet] = []
    trouble: Refusal | None = None
    for candidate in _DELIMITERS:
        try:
            sheet = _split(text, name, candidate, notes)
        except Refusal as refusal:
            trouble = trouble or refusal
            continue
        if fits(sheet):
            return sheet
        sheets.append(sheet)
    if not sheets and trouble is not None:
        raise trouble
    return max(sheets, key=lambda sheet: sum(len(row.cells) > 1 for row in sheet.rows))


def _split(text: str, name: str, delimiter: str, notes: tuple[Note, ...]) -> Sheet:
    reader = csv.reader(io.StringIO(text, newline=""), delimiter=delimiter, strict=True, skipinitialspace=True)
    rows: list[Row] = []
    start = 1
    while True:
        try:
            fields = next(reader)
        except StopIteration:
            break
        except csv.Error as error:
            raise Refusal(
                Place(name, line=start),
                found=f"a row that cannot be split into cells ({error})",
                expected="quotation marks in pairs around a cell",
                remedy="Correct the quotation marks in this line or below it.",
            ) from None
        place = Place(name, line=start)
        cells = {column: Cell(place, field.strip()) for column, field in enumerate(fields, start=1) if field.strip()}
        rows.append(Row(start, cells))
        start = reader.line_num + 1
    return Sheet(Place(name), tuple(rows), delimited=True, commas=delimiter == ",", notes=notes)

"""A look into an .xlsx file before it is opened: is it one, is it safe, and what openpyxl's quick reading would lose.

Each part is streamed, so that a small file that unpacks to a huge one is refused without unpacking it.
"""

from __future__ import annotations

import posixpath
import re
import zipfile
import zlib
from dataclasses import dataclass, field
from pathlib import Path
from typing import IO
from xml.parsers import expat

from reconcile.campaign.refusal import Place, Refusal
from reconcile.read.cells import Merged

LARGEST_FILE = 100 * 1024 * 1024  # bytes, packed
LARGEST_PART = 200 * 1024 * 1024  # bytes, unpacked
LARGEST_WHOLE = 1024 * 1024 * 1024  # bytes, unpacked
MOST_PARTS = 2_000
MOST_ROWS = 1_000_000
MOST_COLUMNS = 2_000
MOST_CELLS = 20_000_000  # of the rectangle from A1 to the last cell
_CHUNK = 1 << 16
_REFERENCE = re.compile("([A-Z]{1,3})([0-9]{1,7})")
_OLE = b"\xd0\xcf\x11\xe0"  # .xls, and .xlsx under a password


@dataclass(slots=True)
class SheetFacts:
    """What a sheet's own XML says besides its values."""

    hidden_rows: set[int] = field(default_factory=set)
    merged: list[Merged] = field(default_factory=list)
    uncomputed: set[str] = field(default_factory=set)  # formulas without a stored value, by cell
    last_row: int = 0
    last_column: int = 0


def column_number(letters: str) -> int:
    """Return the number of a column from its letters: A is 1."""
    number = 0
    for letter in letters:
        number = 26 * number + ord(letter) - ord("A") + 1
    return number


def examine(path: Path, name: str) -> dict[str, SheetFacts]:
    """Return the facts of every sheet, by the sheet's name, in the workbook's order.

    Parameters
    ----------
    path : the file
    name : its address in messages

    Raises
    ------
    Refusal
        It is no .xlsx file, is damaged, or is larger than a table of readings can be.
    """
    place = Place(name)
    try:
        if path.stat().st_size > LARGEST_FILE:
            raise _too_large(place, "a file of more than 100 MB")
        with path.open("rb") as stream:
            if stream.read(4) == _OLE:
                raise Refusal(
                    place,
                    found="an older .xls file, or one under a password",
                    expected="an .xlsx file without a password",
                    remedy="Open it in the spreadsheet program and save it as .xlsx.",
                )
        with zipfile.ZipFile(path) as archive:
            _check_parts(archive, place)
            sheets = _sheet_parts(archive)
            return {title: _facts(archive, part, place) for title, part in sheets.items()}
    except OSError as error:
        raise Refusal(
            place,
            found=f"a file that cannot be opened ({error.strerror})",
            expected="a readable file",
            remedy="Check it.",
        ) from None
    except (zipfile.BadZipFile, zlib.error, EOFError, KeyError, ValueError, NotImplementedError, RuntimeError) as error:
        raise Refusal(
            place,
            found=f"a damaged file ({error})",
            expected="a workbook as a spreadsheet program saves it",
            remedy="Open it in the spreadsheet program and save it as .xlsx.",
        ) from None
    except expat.ExpatError as error:
        raise Refusal(
            place,
            found=f"a workbook with broken XML ({error})",
            expected="a workbook as a spreadsheet program saves it",
            remedy="Open it in the spreadsheet program and save it as .xlsx.",
        ) from None


def _too_large(place: Place, found: str) -> Refusal:
    return Refusal(
        place,
        found=found,
        expected="a table of readings",
        remedy="Copy the cells that count into a new workbook and save that.",
    )


def _check_parts(archive: zipfile.ZipFile, place: Place) -> None:
    parts = archive.infolist()
    names = [part.filename for part in parts]
    if len(parts) > MOST_PARTS or sum(part.file_size for part in parts) > LARGEST_WHOLE:
        raise _too_large(place, "a workbook that unpacks to more than 1 GB or 2000 parts")
    if len(set(names)) != len(names) or any(name.startswith("/") or ".." in name.split("/") for name in names):
        raise ValueError("its parts have impossible names")
    for part in parts:
        if part.file_size > LARGEST_PART and part.filename.endswith(".xml"):
            raise _too_large(place, f"a workbook whose part {part.filename} unpacks to more than 200 MB")
        if part.filename.endswith((".xml", ".rels")) and not part.filename.startswith("xl/worksheets/sheet"):
            _walk(archive, part.filename, _Guard())


class _Guard:
    """Walks through one XML part; refuses a document type, which no spreadsheet program writes."""

    def start(self, tag: str, attributes: dict[str, str]) -> None:
        """Pass over an element."""

    def end(self, tag: str) -> None:
        """Pass over its end."""

    def text(self, content: str) -> None:
        """Pass over text."""


def _walk(archive: zipfile.ZipFile, part: str, visitor: _Guard) -> None:
    parser = expat.ParserCreate()
    parser.buffer_text = True

    def refuse_doctype(*_: object) -> None:
        raise ValueError("it declares a document type")

    parser.StartDoctypeDeclHandler = refuse_doctype
    parser.StartElementHandler = lambda tag, attributes: visitor.start(tag.rpartition(":")[2], attributes)
    parser.EndElementHandler = lambda tag: visitor.end(tag.rpartition(":")[2])
    parser.CharacterDataHandler = visitor.text
    declared, counted = archive.getinfo(part).file_size, 0
    with archive.open(part) as stream:
        while chunk := _chunk(stream):
            counted += len(chunk)
            if counted > declared:
                raise ValueError("a part is larger than it declares")
            parser.Parse(chunk, False)
        parser.Parse(b"", True)


def _chunk(stream: IO[bytes]) -> bytes:
    return stream.read(_CHUNK)


class _Attributes(_Guard):
    """Collects the attributes of one kind of element."""

    def __init__(self, tag: str) -> None:
        self.tag = tag
        self.found: list[dict[str, str]] = []

    def start(self, tag: str, attributes: dict[str, str]) -> None:
        """Keep the attributes, their prefixes taken off."""
        if tag == self.tag:
            self.found.append({key.rpartition(":")[2]: value for key, value in attributes.items()} | attributes)


def _sheet_parts(archive: zipfile.ZipFile) -> dict[str, str]:
    """Return the part of each worksheet by its name; sheets that hold a chart only are left out."""
    sheets, relations, package = _Attributes("sheet"), _Attributes("Relationship"), _Attributes("Relationship")
    _walk(archive, "_rels/.rels", package)
    documents = [entry["Target"] for entry in package.found if entry["Type"].endswith("/officeDocument")]
    book = documents[0].lstrip("/") if documents else "xl/workbook.xml"
    folder, name = posixpath.split(book)
    _walk(archive, book, sheets)
    _walk(archive, f"{folder}/_rels/{name}.rels", relations)
    target = {entry["Id"]: entry["Target"] for entry in relations.found if entry["Type"].endswith("/worksheet")}
    found = {}
    for sheet in sheets.found:
        relation = next(value for key, value in sheet.items() if key.endswith(":id") or key == "r:id")
        if relation in target:
            part = target[relation]
            found[sheet["name"]] = part[1:] if part.startswith("/") else posixpath.normpath(f"{folder}/{part}")
    return found


class _SheetVisitor(_Guard):
    """Collects what openpyxl's quick reading does not tell: hidden rows, merged cells, formulas without a value."""

    def __init__(self, place: Place) -> None:
        self.facts = SheetFacts()
        self.place = place
        self.row = 0
        self.cell, self.kind = "", ""
        self.formula = self.value = self.in_value = False

    def start(self, tag: str, attributes: dict[str, str]) -> None:
        """Take in a row, a cell, a formula, a value or a merged range."""
        if tag == "c":
            self.cell, self.kind = attributes.get("r", ""), attributes.get("t", "")
            self.formula = self.value = False
            self._reach(self.cell)
        elif tag == "f":
            self.formula = True
        elif tag == "v":
            self.in_value = True
            self.value = self.kind == "str"  # a stored empty text is a value
        elif tag == "row":
            self.row = int(attributes.get("r", self.row + 1))
            self._bound(self.row, 0)
            if attributes.get("hidden") in {"1", "true"}:
                self.facts.hidden_rows.add(self.row)
        elif tag == "mergeCell":
            first, _, last = attributes["ref"].partition(":")
            top, left = self._position(first)
            bottom, right = self._position(last or first)
            self.facts.merged.append(Merged(top, left, bottom, right))

    def text(self, content: str) -> None:
        """Note that a value holds something."""
        if self.in_value and content:
            self.value = True

    def end(self, tag: str) -> None:
        """Judge a cell at its end."""
        if tag == "v":
            self.in_value = False
        elif tag == "c" and self.formula and not self.value:
            self.facts.uncomputed.add(self.cell)

    def _position(self, reference: str) -> tuple[int, int]:
        match = _REFERENCE.fullmatch(reference)
        if match is None:
            raise ValueError(f"it has a cell named '{reference}'")
        return int(match.group(2)), column_number(match.group(1))

    def _reach(self, reference: str) -> None:
        if reference:
            self._bound(*self._position(reference))

    def _bound(self, row: int, column: int) -> None:
        facts = self.facts
        facts.last_row, facts.last_column = max(facts.last_row, row), max(facts.last_column, column)
        if (
            facts.last_row > MOST_ROWS
            or facts.last_column > MOST_COLUMNS
            or facts.last_row * facts.last_column > MOST_CELLS
        ):
            raise _too_large(self.place, f"a sheet that reaches to row {facts.last_row}, column {facts.last_column}")


def _facts(archive: zipfile.ZipFile, part: str, place: Place) -> SheetFacts:
    visitor = _SheetVisitor(place)
    _walk(archive, part, visitor)
    return visitor.facts

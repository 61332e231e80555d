"""A height map → an array of heights: a 32-bit float TIFF or a grid of numbers as text, missing points as NaN."""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from reconcile.campaign.number_text import is_blank, settle_decimal, to_float
from reconcile.campaign.refusal import Note, Place, Refusal
from reconcile.read.delimited import read_text
from reconcile.read.heights_tiff import MOST_POINTS, read_tiff_heights

Array = NDArray[np.float64]

FEWEST_SIDE = 8  # points a side; fewer hold no crater and its surround
MOST_MISSING = 0.5  # share of the points
_DELIMITERS = (";", "\t", "|", ",", None)  # None: blanks
_HEAD = 5000  # cells that settle the decimal sign
_MISSING_WORDS = frozenset(
    {"nan", "bad", "n/a", "na", "null", "none", "inf", "-inf", "+inf", "-nan", "1.#qnan", "-1.#ind"}
)
_STARS = re.compile(r"[*#?]+")


@dataclass(frozen=True, slots=True)
class Surface:
    """One height map."""

    height: Array  # (rows, columns) [m], upwards positive; NaN: a missing point
    notes: tuple[Note, ...] = ()


def read_surface(
    path: Path,
    name: str,
    height_unit_in_m: float,
    *,
    delimiter: str | None = None,
    decimal: str | None = None,
    encoding: str | None = None,
) -> Surface:
    """Return the heights that a file holds.

    Parameters
    ----------
    path : the file; its ending says what it is
    name : its address in messages, relative to the campaign folder
    height_unit_in_m : the unit of its numbers [m]
    delimiter, decimal, encoding : of a grid of text, as stated; None: found

    Raises
    ------
    Refusal
        The file cannot be read, is no height map, is larger than 64 million points, or more than half of it is missing.
    """
    kind = path.suffix.lower()
    notes: list[Note] = []
    if kind in {".tif", ".tiff"}:
        raw, told, no_data = read_tiff_heights(path, name)
        notes.extend(Note(name, one) for one in told)
    elif kind in {".csv", ".txt", ".tsv", ".asc", ".dat"}:
        raw, no_data = _read_grid(path, name, (delimiter, decimal, encoding), notes), None
    else:
        raise Refusal(
            Place(name),
            found=f"a file that ends in '{path.suffix}'",
            expected="a height map as .tif (32-bit float) or a .csv grid",
            remedy="Export the map in one of these forms.",
        )
    height = _without_marks(raw, no_data, name, notes)
    _check(height, name)
    return Surface(height * height_unit_in_m, tuple(notes))


def _check(height: Array, name: str) -> None:
    rows, columns = height.shape
    if min(rows, columns) < FEWEST_SIDE:
        raise Refusal(
            Place(name),
            found=f"{rows} rows of {columns} points",
            expected=f"a height map of at least {FEWEST_SIDE} by {FEWEST_SIDE} points",
            remedy="Check that the file is a map and not a profile or a table.",
        )
    missing = float(np.mean(np.isnan(height)))
    if missing > MOST_MISSING:
        what = (
            "a map without a single height"
            if missing == 1
            else f"a map with {100 * missing:.0f} % of its points missing"
        )
        raise Refusal(
            Place(name),
            found=what,
            expected="heights at more than half of the points",
            remedy="Measure the site again, with more light or a smaller slope.",
        )


def _without_marks(raw: Array, no_data: float | None, name: str, notes: list[Note]) -> Array:
    """Return the heights with NaN where a number stands for a missing point: infinite, declared, or a repeated extreme."""
    height = np.where(np.isfinite(raw), raw, np.nan)
    if no_data is not None:
        height[height == no_data] = np.nan
    for extreme in (np.min, np.max):
        known = height[np.isfinite(height)]
        if known.size < 4:
            break
        mark = float(extreme(known))
        rest = known[known != mark]
        repeated = known.size - rest.size
        if repeated < 2 or rest.size < 2:
            continue
        # Heights that were measured do not repeat one number far outside the range of all others.
        if abs(mark - float(extreme(rest))) > float(np.ptp(rest)) or abs(mark) > 1e30:
            height[height == mark] = np.nan
            notes.append(Note(name, f"the number {mark:g}, which stands at {repeated} points, was taken as 'missing'"))
    return height


_Settings = tuple[str | None, str | None, str | None]  # delimiter, decimal sign, encoding


def _read_grid(path: Path, name: str, settings: _Settings, notes: list[Note]) -> Array:
    delimiter, decimal, encoding = settings
    text, guessed = read_text(path, name, encoding)
    if guessed:
        notes.append(Note(name, guessed))
    lines = [(number, line) for number, line in enumerate(text.splitlines(), start=1) if line.strip()]
    if not lines:
        raise Refusal(Place(name), found="an empty file", expected="rows of heights", remedy="Export the map again.")
    split, decimal = _settled(lines, delimiter, decimal, name)
    first = next((at for at, (_, line) in enumerate(lines) if _is_data(split(line), decimal)), None)
    if first is None:
        raise Refusal(
            Place(name, line=lines[0][0]),
            found=f"'{lines[0][1].strip()[:40]}' and no row of numbers",
            expected="rows of heights, all as long as each other",
            remedy="Export the map as a grid: one line a row of points.",
        )
    if first:
        notes.append(Note(name, f"{first} line{'s' if first > 1 else ''} above the first row of heights passed over"))
    rows = [split(line) for _, line in lines[first:]]
    if all(len(row) > 1 and not row[-1] for row in rows):
        rows = [row[:-1] for row in rows]  # each line ends with a delimiter
    width = len(rows[0])
    if width * len(rows) > MOST_POINTS:
        raise Refusal(
            Place(name),
            found=f"{len(rows)} rows of {width} points",
            expected=f"at most {MOST_POINTS // 10**6} million points",
            remedy="Cut the map to the crater and its surround.",
        )
    height = np.empty((len(rows), width))
    for at, row in enumerate(rows):
        place = Place(name, line=lines[first + at][0])
        if len(row) != width:
            raise Refusal(
                place,
                found=f"{len(row)} points in a row",
                expected=f"{width}, as in the first row",
                remedy="The file may have been cut short: export the map again.",
            )
        height[at] = _row(row, decimal, place)
    return height


def _settled(
    lines: list[tuple[int, str]], delimiter: str | None, decimal: str | None, name: str
) -> tuple[Callable[[str], list[str]], str]:
    """Return how a line is split, and the decimal sign."""
    middle = len(lines) // 2  # away from titles above and remarks below
    sample = [line for _, line in lines[middle : middle + 20]]
    candidates = _DELIMITERS if delimiter is None else (delimiter,)
    trouble: Refusal | None = None
    for candidate in candidates:
        split = _splitter(candidate)
        cells = [split(line) for line in sample]
        if delimiter is None and max(len(row) for row in cells) < 2:
            continue
        signs = (decimal,) if decimal else ("." if candidate == "," else None,)
        try:
            sign = signs[0] or settle_decimal(cell for row in cells for cell in row[: _HEAD // 20]) or "."
        except ValueError as open_numbers:
            trouble = trouble or Refusal(
                Place(name),
                found=f"{open_numbers}, which can be read in two ways",
                expected="numbers that show which sign is the decimal one",
                remedy='Add decimal = "," or decimal = "." to this table of the manifest.',
            )
            continue
        if delimiter is not None or any(_is_data(row, sign) for row in cells):
            return split, sign
    if trouble is not None:
        raise trouble
    raise Refusal(
        Place(name, line=lines[middle][0]),
        found=f"'{lines[middle][1].strip()[:40]}'",
        expected="a row of heights with one delimiter between them",
        remedy="Export the map as a grid, or state `delimiter` and `decimal` for this table.",
    )


def _splitter(delimiter: str | None) -> Callable[[str], list[str]]:
    if delimiter is None or delimiter == " ":
        return lambda line: line.split()
    return lambda line: [cell.strip().strip('"') for cell in line.split(delimiter)]


def _is_missing(cell: str) -> bool:
    return is_blank(cell) or cell.casefold() in _MISSING_WORDS or _STARS.fullmatch(cell) is not None


def _is_number(cell: str, decimal: str) -> bool:
    try:
        to_float(cell, decimal)
    except ValueError:
        return False
    return True


def _is_data(row: list[str], decimal: str) -> bool:
    """Return whether a row is one of heights: at least two cells, of those that are not blank more numbers than words."""
    told = [cell for cell in row if not _is_missing(cell)]
    return len(row) > 1 and (2 * sum(_is_number(cell, decimal) for cell in told) > len(told) or not told)


def _row(cells: list[str], decimal: str, place: Place) -> Array:
    try:  # the quick way, for rows of plain numbers
        return np.array([cell.replace(",", ".") for cell in cells] if decimal == "," else cells, dtype=np.float64)
    except ValueError:
        return np.array([_height(cell, decimal, place) for cell in cells])


def _height(cell: str, decimal: str, place: Place) -> float:
    if _is_missing(cell):
        return float("nan")
    try:
        return to_float(cell, decimal)
    except ValueError:
        raise Refusal(
            place,
            found=f"'{cell[:40]}'",
            expected=f"a height as a number, its decimal sign '{decimal}'",
            remedy="Correct the cell; leave a missing point blank.",
        ) from None

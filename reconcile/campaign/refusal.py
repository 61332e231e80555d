"""Where something stands, and how input that cannot be used is refused."""

from __future__ import annotations

import difflib
from collections.abc import Iterable
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Place:
    """Where a value was read: ``craters.xlsx!profiler!C14``, ``radii.csv!line 14``, ``campaign.toml!beam.delivery``."""

    file: str  # relative to the campaign folder, with forward slashes
    sheet: str | None = None  # None: the file has no sheets
    cell: str | None = None  # as a spreadsheet names it, "C14"
    line: int | None = None  # from 1
    key: str | None = None  # of a manifest, "beam.spot_radius"

    def __str__(self) -> str:
        """Return the address as it stands in every output."""
        line = None if self.line is None else f"line {self.line}"
        return "!".join(part for part in (self.file, self.sheet, self.cell, line, self.key) if part)


class Refusal(Exception):
    """Input that cannot be used: where it is, what was found, what was expected, what to do.

    Parameters are sentences or parts of sentences for the person who made the file.
    """

    def __init__(self, place: Place | str, *, found: str, expected: str, remedy: str) -> None:
        self.place = place
        self.found = found
        self.expected = expected
        self.remedy = remedy
        super().__init__(f"{place}: found {found}; expected {expected}. {remedy}")

    @property
    def reason(self) -> str:
        """The refusal without its address."""
        return f"found {self.found}; expected {self.expected}. {self.remedy}"

    def __reduce__(self) -> tuple[object, ...]:
        """Survive the way back from a worker process."""
        return _rebuild, (self.place, self.found, self.expected, self.remedy)


def _rebuild(place: Place | str, found: str, expected: str, remedy: str) -> Refusal:
    return Refusal(place, found=found, expected=expected, remedy=remedy)


@dataclass(frozen=True, slots=True)
class Refused:
    """One file, row or reading that was left out, and why."""

    source: str  # its address, as `Place` prints it
    reason: str


@dataclass(frozen=True, slots=True)
class Note:
    """Something taken or mended on reading that a person should know."""

    source: str
    note: str


def nearest(word: str, known: Iterable[str]) -> str | None:
    """Return the known word most like `word`, or None where none is near."""
    candidates = list(known)
    folded = {candidate.casefold(): candidate for candidate in reversed(candidates)}
    match = difflib.get_close_matches(word.casefold(), list(folded), n=1, cutoff=0.5)
    return folded[match[0]] if match else None

"""What comes together while a campaign is read: notes, refusals, files; and which names the log knows."""

from __future__ import annotations

import re
from collections.abc import Iterable
from dataclasses import dataclass, field
from pathlib import Path

from reconcile.campaign.campaign import Campaign, Table
from reconcile.campaign.files import sha256_of
from reconcile.campaign.patterns import composed, matching, relative_path, resolve
from reconcile.campaign.readings import FileRead
from reconcile.campaign.refusal import Note, Place, Refusal, Refused, nearest


@dataclass(slots=True)
class Collected:
    """Refusals, notes and files, in the order in which they were met."""

    refused: list[Refused] = field(default_factory=list)
    notes: list[Note] = field(default_factory=list)
    files: dict[str, FileRead] = field(default_factory=dict)
    asked: set[str] = field(default_factory=set)  # files that something in the manifest names
    refused_readings: int = 0  # how many readings are among the refused

    def refuse(self, refusal: Refusal) -> None:
        """Keep the refusal of one row, cell or file, and go on."""
        self.refused.append(Refused(str(refusal.place), refusal.reason))

    def refuse_reading(self, refusal: Refusal) -> None:
        """Keep the refusal of one reading, and go on."""
        self.refuse(refusal)
        self.refused_readings += 1

    def note(self, source: Place | str, note: str) -> None:
        """Keep a note, once."""
        entry = Note(str(source), note)
        if entry not in self.notes:
            self.notes.append(entry)

    def read(self, folder: Path, name: str, place: Place) -> Path:
        """Return the path of a file that is about to be read, its checksum noted; raises Refusal."""
        path = resolve(folder, name, place)
        self.asked.add(name)
        if name not in self.files:
            try:
                self.files[name] = FileRead(name, sha256_of(path))
            except OSError as error:
                raise Refusal(
                    place,
                    found=f"a file '{name}' that cannot be read ({error.strerror})",
                    expected="a readable file",
                    remedy="Check the file.",
                ) from None
        return path


def spreadsheets(campaign: Campaign, file: str, place: Place) -> list[str]:
    """Return the files that a table's `file` names, in a fixed order.

    Raises
    ------
    Refusal
        There is none.
    """
    relative_path(file, place)
    if "*" not in file:
        if (campaign.folder / file).is_file():
            return [file]
        here = [path.relative_to(campaign.folder).as_posix() for path in _near(campaign.folder, file)]
        near = nearest(file, here)
        raise Refusal(
            place,
            found=f"no file '{file}'",
            expected="a file in the campaign folder",
            remedy=f"Write '{near}' if that is meant." if near else "Correct the name, or add the file.",
        )
    found = matching(campaign.folder, file)
    if not found:
        raise Refusal(
            place,
            found=f"no file that matches '{file}'",
            expected="at least one file in the campaign folder",
            remedy="Correct the pattern, or add the files.",
        )
    return found


def _near(folder: Path, file: str) -> list[Path]:
    beside = (folder / file).parent
    return sorted(path for path in beside.iterdir() if path.is_file()) if beside.is_dir() else []


class Names:
    """The names of the log's shots or samples, and which of them a name written elsewhere means."""

    def __init__(self, known: Iterable[str], what: str) -> None:
        self.known = {composed(name): name for name in known}
        self.what = what
        self.folded: dict[str, list[str]] = {}
        for name in self.known:
            self.folded.setdefault(_folded(name), []).append(name)

    def meant(self, written: str, place: Place, collected: Collected) -> str:
        """Return the log's name for a written one.

        A name that fits only without regard to case, blanks and leading zeros is taken, with a note, when exactly one
        fits.

        Raises
        ------
        Refusal
            None fits, or more than one.
        """
        written = composed(written)
        if written in self.known:
            return self.known[written]
        fitting = self.fitting(written)
        if len(fitting) == 1:
            collected.note(place, f"'{written}' taken as the {self.what} '{fitting[0]}' of the log")
            return fitting[0]
        near = nearest(written, self.known)
        raise Refusal(
            place,
            found=f"the {self.what} '{written}', "
            + (f"which fits {' and '.join(repr(name) for name in fitting)}" if fitting else "which is not in the log"),
            expected=f"a {self.what} of the log",
            remedy=f"Write '{near}' if that is meant." if near else "Correct the name, here or in the log.",
        )

    def fitting(self, written: str) -> list[str]:
        """Return the log's names that fit a written one: itself, else those that differ in case, blanks and leading zeros."""
        exact = self.known.get(composed(written))
        return [exact] if exact is not None else self.folded.get(_folded(written), [])


def _folded(name: str) -> str:
    return re.sub(r"(?<!\d)0+(?=\d)", "", "".join(composed(name).split()).casefold())


def same_source(first: Table, second: Table) -> bool:
    """Return whether two tables of one kind would read the same cells of a file that both name."""
    if first.kind != second.kind:
        return False
    if first.sheets and second.sheets and not set(first.sheets) & set(second.sheets):
        return False
    if bool(first.sheets) != bool(second.sheets):
        return False
    if first.columns.get("value") != second.columns.get("value"):
        return False
    shared = set(first.only) & set(second.only)
    return all(first.only[name] == second.only[name] for name in shared)

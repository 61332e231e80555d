"""Paths as a manifest writes them: relative, inside the campaign folder, with * or {fields} in them."""

from __future__ import annotations

import re
import unicodedata
from collections.abc import Iterable, Iterator
from functools import cache
from pathlib import Path, PurePosixPath

from reconcile.campaign.quantity import UnknownUnit, parse_unit
from reconcile.campaign.refusal import Place, Refusal, nearest

FIELDS = ("shot", "sample", "delay", "frame")
OUTPUT_MARK = "checksums.sha256"  # lies in every folder that a close-out wrote
_FIELD = re.compile(r"\{([^{}]*)\}")
_DELAY_UNIT = re.compile(r"\{delay\}([A-Za-zµμ]+)")
_OWN = ("campaign.toml", "campaign.new.toml", "decisions.csv")


def relative_path(text: str, place: Place) -> str:
    """Return a path with forward slashes, relative to the campaign folder.

    Raises
    ------
    Refusal
        It is absolute or leaves the folder.
    """
    path = text.strip().replace("\\", "/")
    parts = PurePosixPath(path).parts
    if path.startswith("/") or re.match("[A-Za-z]:", path) or ".." in parts or path.startswith("~"):
        raise Refusal(
            place,
            found=f"the path '{text}'",
            expected="a path relative to the campaign folder that does not leave it",
            remedy="Copy the file into the campaign folder and name it there.",
        )
    if not parts or any(not sign.isprintable() for sign in path):
        raise Refusal(place, found=f"the path '{text}'", expected="the name of a file", remedy="Correct the name.")
    return PurePosixPath(path).as_posix()


def check_pattern(text: str, place: Place) -> str:
    """Return a pattern with {fields} as a clean relative path.

    Raises
    ------
    Refusal
        It leaves the folder, an unknown field, none, or a delay without its unit behind it.
    """
    pattern = relative_path(text, place)
    fields = _FIELD.findall(pattern)
    for field in fields:
        if field not in FIELDS:
            near = nearest(field, FIELDS)
            raise Refusal(
                place,
                found=f"the field {{{field}}}",
                expected=f"one of {', '.join(f'{{{name}}}' for name in FIELDS)}",
                remedy=f"Write {{{near}}} if that is meant." if near else "Write * for what is none of these.",
            )
        if fields.count(field) > 1:
            raise Refusal(
                place, found=f"{{{field}}} twice", expected="each field once", remedy="Write * in the other place."
            )
    if not {"shot", "sample"} & set(fields):
        raise Refusal(
            place,
            found=f"'{text}' without {{shot}} or {{sample}}",
            expected="a pattern that says which shot or sample a file belongs to",
            remedy="Put {shot} where the name of the shot stands.",
        )
    if "delay" in fields:
        match = _DELAY_UNIT.search(pattern)
        unit = match.group(1) if match else ""
        if not _is_time(unit):
            raise Refusal(
                place,
                found=f"{{delay}} with '{unit}' behind it" if unit else "{delay} without a unit behind it",
                expected="a unit of time right behind {delay}, as in {delay}ns",
                remedy="Write the unit there as the file names have it.",
            )
    return pattern


def _is_time(unit: str) -> bool:
    try:
        return parse_unit(unit).dimension == parse_unit("s").dimension
    except UnknownUnit:
        return False


def files_below(folder: Path) -> Iterator[Path]:
    """Yield every file of the campaign folder in a fixed order, hidden ones and output folders passed over."""
    for path in sorted(folder.iterdir(), key=lambda entry: entry.name):
        if path.name.startswith((".", "~$")):
            continue
        if path.is_dir() and not path.is_symlink():
            if not (path / OUTPUT_MARK).is_file():
                yield from files_below(path)
        elif path.is_file():
            yield path


def matching(folder: Path, pattern: str) -> list[str]:
    """Return the files that match a pattern with * or {fields}, relative to the folder, in a fixed order.

    Case counts, as the pattern is written. No pattern looks into an output folder.
    """
    expression = re.compile("".join(_piece(part) for part in _parts(pattern)))
    names = (path.relative_to(folder).as_posix() for path in files_below(folder))
    return [name for name in names if expression.fullmatch(composed(name))]


def composed(name: str) -> str:
    """Return a name with each accented letter as one character: some systems store such letters in two."""
    return unicodedata.normalize("NFC", name)


def delay_unit(pattern: str) -> str | None:
    """Return the unit behind {delay}; None where the pattern has no delay."""
    match = _DELAY_UNIT.search(pattern)
    return match.group(1) if match else None


def fields_of(pattern: str) -> tuple[str, ...]:
    """Return the names of the fields of a pattern, in its order."""
    return tuple(_FIELD.findall(pattern))


def ways(pattern: str, name: str, most: int = 1000) -> list[dict[str, str]]:
    """Return the ways to read a name by a pattern: what each {field} stands for; empty where it does not match.

    Shorter text for earlier fields comes first; no more than `most` ways are returned.
    """
    parts, text = _parts(pattern), composed(name)
    found: dict[tuple[tuple[str, str], ...], None] = {}

    @cache
    def fits(number: int, at: int) -> bool:
        return (
            at == len(text)
            if number == len(parts)
            else any(fits(number + 1, end) for end in _ends(parts[number], text, at))
        )

    def walk(number: int, at: int, taken: tuple[tuple[str, str], ...]) -> None:
        if len(found) >= most:
            return
        if not any(_FIELD.match(part) for part in parts[number:]):
            found.setdefault(taken)
            return
        part = parts[number]
        for end in _ends(part, text, at):
            if fits(number + 1, end):
                walk(number + 1, end, (*taken, (part[1:-1], text[at:end])) if _FIELD.match(part) else taken)

    if fits(0, 0):
        walk(0, 0, ())
    return [dict(taken) for taken in found]


def _ends(part: str, text: str, at: int) -> Iterable[int]:
    """Return where one part of a pattern can end that begins at a place of the text."""
    if part.startswith("**"):
        return range(at, len(text) + 1)
    slash = text.find("/", at)
    last = len(text) if slash < 0 else slash
    if part == "?":
        return range(at + 1, min(at + 1, last) + 1)
    if part == "*":
        return range(at, last + 1)
    if _FIELD.match(part):
        return range(at + 1, last + 1)
    return (at + len(part),) if text.startswith(part, at) else ()


def _parts(pattern: str) -> list[str]:
    return [part for part in re.split(r"(\{[^{}]*\}|\*+|\?)", composed(pattern)) if part]


def _piece(part: str) -> str:
    if part == "?":
        return "[^/]"
    if part.startswith("{") or part == "*":
        return "[^/]*" if part == "*" else "[^/]+"
    return ".*" if part.startswith("**") else re.escape(part)


def resolve(folder: Path, name: str, place: Place) -> Path:
    """Return the file behind a relative path; raises Refusal where a link leads out of the folder."""
    path = folder / name
    if not path.resolve().is_relative_to(folder.resolve()):
        raise Refusal(
            place,
            found=f"'{name}', which leads out of the campaign folder",
            expected="a file inside the campaign folder",
            remedy="Copy the file into the campaign folder.",
        )
    return path


def unasked(folder: Path, asked: Iterable[str]) -> tuple[str, ...]:
    """Return the files of the folder that nothing asked for."""
    known = {*asked, *_OWN}
    names = (path.relative_to(folder).as_posix() for path in files_below(folder))
    return tuple(name for name in names if name not in known)

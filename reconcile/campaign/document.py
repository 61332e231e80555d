"""The manifest as text: its syntax, its lines, and a section of it that is read key by key."""

from __future__ import annotations

import re
import tomllib
from collections.abc import Iterable, Mapping
from datetime import date
from pathlib import Path
from typing import Any

from reconcile.campaign.campaign import Quantity
from reconcile.campaign.quantity import parse_quantity
from reconcile.campaign.refusal import Place, Refusal, nearest
from reconcile.campaign.schema import Key

_AT = re.compile(r" \(at (?:line (\d+), column \d+|end of document)\)")
_HEADER = re.compile(r"\s*\[(\[)?\s*([^\]]+?)\s*\]")
_ASSIGNED = re.compile(r"""\s*("[^"]*"|'[^']*'|[A-Za-z0-9_.-]+)\s*=""")


class Document:
    """A manifest that was read: its content, and the line of every key."""

    def __init__(self, path: Path) -> None:
        """Read the file; raises Refusal where it is missing, not UTF-8 or not TOML."""
        self.name = path.name
        try:
            raw = path.read_bytes()
        except OSError as error:
            raise Refusal(
                self.name,
                found=f"no readable file {path.as_posix()} ({error.strerror})",
                expected="a campaign folder that holds campaign.toml",
                remedy="Give the campaign's folder, or write a campaign.toml there as README shows.",
            ) from None
        try:
            text = raw.decode("utf-8-sig")
        except UnicodeDecodeError as error:
            line = raw[: error.start].count(b"\n") + 1
            raise Refusal(
                Place(self.name, line=line),
                found="a byte that is not UTF-8",
                expected="UTF-8 text",
                remedy="Save the file with the encoding UTF-8.",
            ) from None
        text = text.replace("\r\n", "\n")
        self.lines = text.split("\n")
        try:
            self.content: dict[str, Any] = tomllib.loads(text)
        except tomllib.TOMLDecodeError as error:
            raise self._syntax(str(error)) from None
        self.line_of = _key_lines(self.lines)

    def _syntax(self, message: str) -> Refusal:
        match = _AT.search(message)
        line = int(match.group(1)) if match and match.group(1) else len(self.lines)
        said = _AT.sub("", message)
        written = self.lines[line - 1].strip() if line <= len(self.lines) else ""
        remedy = "Correct this line, or the one above it."
        if "escape" in said.lower() or "\\" in said:
            remedy = "Write paths with / or in single quotes."
        elif re.search(r"=\s*[+-]?\d+,\d", written):
            remedy = "Write 20.5, not 20,5; and a quantity with a unit in quotes."
        elif re.search(r"=\s*[+-]?[\d.]+\s*[^\s\d,#]", written):
            remedy = 'Write a quantity with its unit in quotes, as in "21 um ± 1 um".'
        elif "overwrite" in said or "twice" in said or "redefine" in said:
            remedy = "This key or table stands twice: keep one."
        return Refusal(
            Place(self.name, line=line),
            found=f"'{written}' ({said[:1].lower()}{said[1:]})",
            expected="valid TOML",
            remedy=remedy,
        )

    def place(self, key: str) -> Place:
        """Return the place of a key such as ``beam.delivery`` or ``readings.2.columns``."""
        asked = key
        while asked and asked not in self.line_of:
            asked = asked.rpartition(".")[0]
        return Place(self.name, line=self.line_of.get(asked), key=key)

    def comment(self, key: str) -> str | None:
        """Return the comment behind a key, on its own line."""
        line = self.place(key).line
        _, mark, comment = self.lines[line - 1].partition("#") if line else ("", "", "")
        return comment.strip() if mark and comment.strip() else None


def _key_lines(lines: list[str]) -> dict[str, int]:
    """Return the line of each table and key, for messages; keys of inline tables have the line they start on."""
    found: dict[str, int] = {}
    count: dict[str, int] = {}
    table, fence = "", None
    for number, line in enumerate(lines, start=1):
        if fence is None and (header := _HEADER.match(line)):
            table = header.group(2).replace('"', "").replace(" ", "")
            if header.group(1):
                count[table] = count.get(table, 0) + 1
                table = f"{table}.{count[table]}"
            found.setdefault(table, number)
        elif fence is None and (assigned := _ASSIGNED.match(line)):
            key = assigned.group(1).strip("\"'")
            found.setdefault(f"{table}.{key}" if table else key, number)
        for mark in ('"""', "'''"):
            if line.count(mark) % 2 and fence in {None, mark}:
                fence = mark if fence is None else None
    return found


class Section:
    """One table of the manifest; it remembers which ± were stated on what is no input."""

    def __init__(self, document: Document, path: str, content: object, unused: list[str]) -> None:
        """Take the table at `path`; raises Refusal where there is none."""
        self.document, self.path, self.unused = document, path, unused
        if not isinstance(content, dict):
            raise Refusal(
                document.place(path),
                found=described(content),
                expected=f"a table [{path}]",
                remedy=f"Write [{path}] on a line of its own, its keys below it.",
            )
        self.content: dict[str, Any] = content

    def key(self, name: str) -> str:
        """Return the full name of a key."""
        return f"{self.path}.{name}" if self.path else name

    def place(self, name: str = "") -> Place:
        """Return the place of a key, or of the table."""
        return self.document.place(self.key(name) if name else self.path)

    def refuse_unknown(self, known: Iterable[str]) -> None:
        """Refuse a key that is not among the known ones, with the nearest of them."""
        names = list(known)
        for name in self.content:
            if name not in names:
                near = nearest(name, names)
                raise Refusal(
                    self.place(name),
                    found=f"the unknown key '{name}'",
                    expected=f"one of {', '.join(names)}",
                    remedy=f"Write '{near}' if that is meant." if near else "Take it out.",
                )

    def require(self, name: str, meaning: str) -> Any:
        """Return what a key holds; refuse a table without it."""
        if name not in self.content:
            raise Refusal(
                self.place(),
                found=f"no '{name}'" + (f" in [{self.path}]" if self.path else ""),
                expected=f"{self.key(name)}: {meaning}",
                remedy=f"Add {name} = … there.",
            )
        return self.content[name]

    def text(self, name: str, meaning: str, *, required: bool = False) -> str | None:
        """Return a text, or None; a date serves as one."""
        value = self.require(name, meaning) if required else self.content.get(name)
        if value is None:
            return None
        if isinstance(value, date):
            return value.isoformat()
        if not isinstance(value, str) or not value.strip():
            raise Refusal(
                self.place(name), found=described(value), expected=f"text: {meaning}", remedy="Write it in quotes."
            )
        return value

    def texts(self, name: str, meaning: str) -> tuple[str, ...]:
        """Return one text or a list of them."""
        value = self.content.get(name)
        if value is None:
            return ()
        values = value if isinstance(value, list) else [value]
        if not values or not all(isinstance(entry, str) and entry.strip() for entry in values):
            raise Refusal(
                self.place(name),
                found=described(value),
                expected=f"text or a list of texts: {meaning}",
                remedy='Write ["one", "two"].',
            )
        return tuple(values)

    def words(self, name: str, meaning: str) -> dict[str, str]:
        """Return a table of texts, such as `columns`; numbers in it are taken as they are written."""
        value = self.content.get(name)
        if value is None:
            return {}
        section = self.section(name)
        for key, entry in section.content.items():
            if isinstance(entry, (bool, dict, list)) or not str(entry).strip():
                raise Refusal(
                    section.place(key),
                    found=described(entry),
                    expected=f"text: {meaning}",
                    remedy="Write it in quotes.",
                )
        return {key: str(entry) for key, entry in section.content.items()}

    def section(self, name: str) -> Section:
        """Return the table under a key."""
        return Section(self.document, self.key(name), self.content[name], self.unused)

    def quantity(self, name: str, spec: Key) -> Quantity | None:
        """Return a quantity in SI, or None; refuse it outside its range, or without ± where one is needed."""
        raw = self.require(name, spec.meaning) if spec.required else self.content.get(name)
        if raw is None:
            return None
        place = self.place(name)
        if not isinstance(raw, (str, int, float)):
            raise Refusal(
                place, found=described(raw), expected=spec.meaning, remedy="Write it in quotes, with its unit."
            )
        quantity = parse_quantity(raw, spec.unit or "1", place)
        if not spec.allows(quantity.value):
            raise Refusal(
                place,
                found=f"'{quantity.text}'",
                expected=f"{spec.meaning}, {spec.range_text}",
                remedy="Correct the number.",
            )
        if spec.needs_u and quantity.u is None:
            raise Refusal(
                place,
                found=f"'{quantity.text}' without an uncertainty",
                expected=f'its standard uncertainty, as in "{quantity.text} ± …"',
                remedy="State the ± (k = 1); ± 0 makes it exact.",
            )
        if quantity.u is not None and not spec.is_input:
            self.unused.append(self.key(name))
        return quantity


def described(value: object) -> str:
    """Say what stands there, for a message."""
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, Mapping):
        return "a table"
    if isinstance(value, list):
        return "a list"
    if value is None:
        return "nothing"
    return f"'{value}'"


def refuse_open_questions(document: Document, questions: Mapping[str, str]) -> None:
    """Refuse a manifest in which a "?" stands; the message asks the first question and counts the others.

    Parameters
    ----------
    document : the manifest
    questions : meaning of each key, by its full name
    """
    still_open = list(_open_keys(document.content, ""))
    if not still_open:
        return
    key = still_open[0]
    asked = document.comment(key) or f"what is {key} ({questions.get(key, 'see README')})?"
    others = f" {len(still_open) - 1} more stand open: {', '.join(still_open[1:])}." if len(still_open) > 1 else ""
    raise Refusal(
        document.place(key),
        found=f'"?", an open question: {asked}',
        expected="the answer",
        remedy=f"Write it there.{others}",
    )


def _open_keys(content: object, path: str) -> Iterable[str]:
    if isinstance(content, dict):
        for key, value in content.items():
            yield from _open_keys(value, f"{path}.{key}" if path else key)
    elif isinstance(content, list):
        for number, value in enumerate(content, start=1):
            yield from _open_keys(value, f"{path}.{number}")
    elif isinstance(content, str) and content.strip() == "?":
        yield path

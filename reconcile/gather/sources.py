"""Tables of images and traces: which file belongs to which shot or sample, and to which delay."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from reconcile.campaign.campaign import Campaign, Table
from reconcile.campaign.kinds import KINDS, Kind, yields
from reconcile.campaign.number_text import decimal_evidence, to_float
from reconcile.campaign.patterns import (
    composed,
    delay_unit,
    fields_of,
    files_below,
    matching,
    relative_path,
    resolve,
    ways,
)
from reconcile.campaign.quantity import parse_unit
from reconcile.campaign.refusal import Place, Refusal
from reconcile.campaign.schema import FILE_KINDS
from reconcile.gather.collected import Collected, spreadsheets
from reconcile.gather.values import Known
from reconcile.read.headers import Column
from reconcile.read.tables import TableRow, in_si, name_in, number, read_table, unreadable

_LIST_COLUMNS = {"shot": None, "sample": None, "path": None, "delay": "s", "frame": None}


@dataclass(frozen=True, slots=True)
class Source:
    """One image or trace that a table asks for."""

    name: str  # relative to the campaign folder, forward slashes
    path: Path
    target: str  # name of the shot or sample
    delay: float | None  # [s] of its first page; None: the kind has none
    set_aside: str | None = None  # why a person took it out of the fit


def target_of(table: Table) -> Kind:
    """Return the kind that says what a table of files belongs to, a shot or a sample, and whether it has a delay."""
    return KINDS[yields(table.kind)[0]]


def find_sources(campaign: Campaign, known: Known, collected: Collected) -> dict[int, list[Source]]:
    """Return the files of every table of images or traces, by the table's number from 0, in a fixed order.

    What cannot be told of one file refuses that file; a file that two tables name is refused.

    Raises
    ------
    Refusal
        A pattern matches nothing, names no shot or sample, or states the delay twice; a list cannot be read.
    """
    tables = {index: table for index, table in enumerate(campaign.tables) if table.kind in FILE_KINDS}
    others = _other_files(campaign, tables.values())
    named = {index: _named(campaign, table, collected, others) for index, table in tables.items()}
    times: dict[str, int] = {}
    for candidates in named.values():
        for name in {one.name for one in candidates}:
            times[name] = times.get(name, 0) + 1
    found: dict[int, list[Source]] = {}
    refused: set[str] = set()
    for index, table in tables.items():
        found[index] = []
        for candidate in named[index]:
            if times[candidate.name] == 1:
                _take(candidate, campaign, table, known, collected, found[index])
            elif candidate.name not in refused:
                refused.add(candidate.name)
                collected.refuse_reading(_named_twice(candidate.name))
    return found


@dataclass(frozen=True, slots=True)
class _Candidate:
    """A file that a table names, before anything is known of it."""

    name: str
    place: Place  # where it is named: the file itself, or a cell of the list
    row: TableRow | None = None  # of the list; None: found by a pattern
    columns: dict[str, Column] | None = None


def _named_twice(name: str) -> Refusal:
    return Refusal(
        Place(name),
        found="a file that two tables name",
        expected="one table for each file",
        remedy="Correct the patterns in the manifest.",
    )


def _other_files(campaign: Campaign, tables: Iterable[Table]) -> set[str]:
    """Return the files that the manifest names for something else; no pattern takes them for an image or a trace."""
    named = {campaign.log.file, *(table.file for table in campaign.tables)}
    named |= {table.listed["file"] for table in campaign.tables if table.listed}
    if campaign.probe is not None and campaign.probe.sensitivity_file is not None:
        named.add(campaign.probe.sensitivity_file["file"])
    found = {
        name for file in named if file for name in ([file] if "*" not in file else matching(campaign.folder, file))
    }
    for table in tables:
        for extra in (table.options.get("background"), (table.options.get("graticule") or {}).get("file")):
            if extra is not None:
                found.update(spreadsheets(campaign, extra, table.place))
    return found


def _named(campaign: Campaign, table: Table, collected: Collected, others: set[str]) -> list[_Candidate]:
    """Return what a table names, in a fixed order; raises Refusal where that is nothing."""
    _check_fields(table)
    if table.files is None:
        candidates = _listed(campaign, table, collected)
    else:
        matched = [name for name in matching(campaign.folder, table.files) if name not in others]
        if not matched:
            raise Refusal(
                table.place,
                found=f"no file that matches '{table.files}'",
                expected="at least one file in the campaign folder",
                remedy="Correct the pattern, or add the files.",
            )
        candidates = [_Candidate(name, Place(name)) for name in matched]
    collected.asked.update(one.name for one in candidates)
    return candidates


def _check_fields(table: Table) -> None:
    """Refuse a table that cannot say what its files belong to, or says their delay twice."""
    kind = target_of(table)
    listed = table.listed["columns"] if table.listed else {}
    given = set(listed) | set(fields_of(table.files or ""))
    if "shot" not in given and kind.target == "shot":
        raise Refusal(
            table.place,
            found=f"{table.kind} by sample",
            expected=f"the shot of each file: a {kind.words} belongs to a shot",
            remedy="Put {shot} where the name of the shot stands, or name the list's column of the shot.",
        )
    if "delay" in given and "first_delay" in table.options:
        raise Refusal(
            table.place,
            found="both first_delay and a delay of each file",
            expected="one of them",
            remedy="Take first_delay out; frame_interval may stay, it counts from each file's delay.",
        )


def _listed(campaign: Campaign, table: Table, collected: Collected) -> list[_Candidate]:
    """Return the files that the rows of a list name; one that is not there refuses its row."""
    entry: dict[str, Any] = dict(table.listed or {})
    folder = entry.pop("folder")
    source = Table(kind="list", name=table.name, place=table.place, **entry)
    composed_names: dict[str, str] = {}
    found: list[_Candidate] = []
    for name in spreadsheets(campaign, source.file or "", table.place):
        path = collected.read(campaign.folder, name, table.place)
        for sheet in read_table(path, name, source, _LIST_COLUMNS):
            collected.notes.extend(sheet.notes)
            for row in sheet.rows:
                cell = row.cells.get("path")
                if cell is None or cell.blank:
                    continue
                try:
                    if cell.fault is not None:
                        raise unreadable(cell, "the name of a file")
                    file = relative_path(f"{folder}/{cell.text}" if folder else cell.text, cell.place)
                    if not (campaign.folder / file).is_file():
                        composed_names = composed_names or _composed_names(campaign.folder)
                        file = composed_names.get(composed(file), file)
                    if not (campaign.folder / file).is_file():
                        raise Refusal(
                            cell.place,
                            found=f"'{cell.text}', which is no file '{file}' in the campaign folder",
                            expected="the name of a file",
                            remedy="Correct the name, or add the file.",
                        )
                except Refusal as refusal:
                    collected.refuse_reading(refusal)
                    continue
                found.append(_Candidate(file, cell.place, row, dict(sheet.columns)))
    return found


def _composed_names(folder: Path) -> dict[str, str]:
    names = (path.relative_to(folder).as_posix() for path in files_below(folder))
    return {composed(name): name for name in names}


def _take(
    candidate: _Candidate, campaign: Campaign, table: Table, known: Known, collected: Collected, taken: list[Source]
) -> None:
    """Add what a candidate is to the sources, or refuse it."""
    try:
        source = _source(candidate, campaign, table, known, collected)
        earlier = next((one for one in reversed(taken) if one.name == source.name), None) if candidate.row else None
        if earlier is not None:
            if (earlier.target, earlier.delay) != (source.target, source.delay):
                raise Refusal(
                    candidate.place,
                    found=f"the file '{source.name}' once more, for another {target_of(table).target} or delay",
                    expected="each file once",
                    remedy="Correct the list; its first row for the file was taken.",
                )
            collected.note(candidate.place, f"'{source.name}' is listed more than once; it counts once")
            return
    except Refusal as refusal:
        collected.refuse_reading(refusal)
        return
    taken.append(source)


def _source(candidate: _Candidate, campaign: Campaign, table: Table, known: Known, collected: Collected) -> Source:
    kind = target_of(table)
    path = resolve(campaign.folder, candidate.name, candidate.place)
    if candidate.row is None:
        texts, aside = _meaning(candidate.name, table, known), None
        delay = _written_delay(texts["delay"], table, candidate.place) if "delay" in texts else None
    else:
        texts, delay, aside = _row_says(candidate)
    target = _target(texts, kind, candidate.place, known, collected)
    if not kind.has_delay:
        return Source(candidate.name, path, target, None, aside)
    if delay is None:
        first = table.options.get("first_delay")
        delay = first.value if first is not None else known.log.shots[target].delay
    if delay is None or delay < 0:
        raise Refusal(
            candidate.place,
            found="no delay" if delay is None else f"a delay of {delay:g} s",
            expected=f"the time after the pulse at which the {kind.words} was taken, 0 or later",
            remedy="Give it in the file's name, the list, the log, or by first_delay.",
        )
    return Source(candidate.name, path, target, delay, aside)


def _row_says(candidate: _Candidate) -> tuple[dict[str, str], float | None, str | None]:
    """Return a listed file's names, delay [s] and why it is set aside."""
    assert candidate.row is not None and candidate.columns is not None
    cells = candidate.row.cells
    if candidate.row.fault is not None:
        raise Refusal(
            candidate.place,
            found=candidate.row.fault,
            expected="no more cells than headers",
            remedy="Put names that hold the sign between the cells in quotes.",
        )
    texts = {key: text for key in ("shot", "sample") if (text := name_in(cells.get(key), key)) is not None}
    delay = None
    if "delay" in candidate.columns:
        column = candidate.columns["delay"]
        value = number(cells.get("delay"), column)
        delay = None if value is None else in_si(value, column)
    struck = [cell for key in ("path", "shot", "sample") if (cell := cells.get(key)) is not None and cell.struck]
    return texts, delay, f"struck through at {struck[0].place}" if struck else None


def _target(texts: dict[str, str], kind: Kind, place: Place, known: Known, collected: Collected) -> str:
    """Return the shot or sample that a file belongs to, by the log's name; raises Refusal."""
    names = {field: known.target(field, text, place, collected) for field, text in texts.items() if field in _NAMED}
    if kind.target in names:
        return names[kind.target]
    sample = known.log.shots[names["shot"]].sample if "shot" in names else None
    if sample is None:
        raise Refusal(
            place,
            found=f"no {kind.target}",
            expected=f"the {kind.target} that the file belongs to",
            remedy=f"Name the {kind.target} in the file's name or the list, or the shot's sample in the log.",
        )
    return sample


_NAMED = ("shot", "sample")


def _meaning(name: str, table: Table, known: Known) -> dict[str, str]:
    """Return what a name's fields stand for: of several ways the one whose shot or sample is in the log."""
    every = ways(table.files or "", name)
    # A delay must be a number: that settles most names that can be cut in two ways.
    every = [way for way in every if _is_number(way.get("delay", "0"))] or every
    exact = [way for way in every if all(_fits(field, text, known, exactly=True) for field, text in way.items())]
    best = exact or [way for way in every if all(_fits(field, text, known) for field, text in way.items())]
    if not best:
        return every[-1]
    told = {tuple((field, text) for field, text in way.items() if field != "frame") for way in best}
    if len(told) > 1:
        shown = sorted(" ".join(f"{field} '{text}'" for field, text in way) for way in told)
        raise Refusal(
            Place(name),
            found=f"a name that can be read as {' and as '.join(shown[:3])}",
            expected="one way to read it",
            remedy="Rename the file, make the pattern stricter, or give a list of the files.",
        )
    return best[0]


def _fits(field: str, text: str, known: Known, *, exactly: bool = False) -> bool:
    """Return whether the log has what a field stands for; of a delay or frame it knows nothing."""
    if field not in _NAMED:
        return True
    names = known.shots if field == "shot" else known.samples
    fitting = names.fitting(text)
    return len(fitting) == 1 and (not exactly or composed(fitting[0]) == text)


def _is_number(text: str) -> bool:
    for decimal in (".", ","):
        try:
            to_float(text, decimal)
        except ValueError:
            continue
        return True
    return False


def _written_delay(text: str, table: Table, place: Place) -> float:
    """Return the delay [s] that a file's name states."""
    evidence = decimal_evidence(text)
    if table.decimal is None and evidence == "?,":
        raise Refusal(
            place,
            found=f"the delay '{text}', which can be read in two ways",
            expected="a number that shows its decimal sign",
            remedy='Add decimal = "," or decimal = "." to this table of the manifest.',
        )
    try:
        value = to_float(text, table.decimal or ("," if evidence == "," else "."))
    except ValueError:
        raise Refusal(
            place,
            found=f"'{text}' where the pattern has {{delay}}",
            expected="a number",
            remedy="Rename the file, or correct the pattern.",
        ) from None
    return parse_unit(delay_unit(table.files or "") or "s").to_si(value)

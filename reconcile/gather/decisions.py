"""decisions.csv: a person's word on shots, samples and readings."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

from reconcile.campaign.campaign import Campaign
from reconcile.campaign.kinds import KINDS
from reconcile.campaign.readings import Decision, Reading, Shot
from reconcile.campaign.refusal import Place, Refusal, nearest
from reconcile.gather.collected import Collected
from reconcile.gather.log import Log
from reconcile.gather.values import Known
from reconcile.read.cells import Row, Sheet
from reconcile.read.delimited import read_delimited
from reconcile.read.headers import folded

FILE = "decisions.csv"
DECISIONS = ("set-aside", "keep", "undecided")
_NEEDED = ("decision", "kind", "reason", "by", "on")
_COLUMNS = ("shot", "sample", "kind", "source", "decision", "reason", "by", "on")

_Target = tuple[str | None, str | None, str | None, str | None]  # shot, sample, kind, source


def read_decisions(
    campaign: Campaign, known: Known, readings: list[Reading], collected: Collected
) -> tuple[Decision, ...]:
    """Return the lines of decisions.csv that hold: for one target the last.

    Raises
    ------
    Refusal
        The file cannot be read, or the target or the decision of a line is unknown.
    """
    if not (campaign.folder / FILE).is_file():
        return ()
    path = collected.read(campaign.folder, FILE, Place(FILE))
    header, rows = _rows(path, collected)
    columns = {folded(cell.text): number for number, cell in header.cells.items()}
    sources = {(one.kind, str(one.place)) for one in readings}
    refused = {one.source for one in collected.refused}
    held: dict[_Target, Decision] = {}
    for row in rows:
        fields = {name: _field(row, columns.get(name)) for name in _COLUMNS}
        if not any(fields.values()):
            continue
        decision = _decision(fields, Place(FILE, line=row.number), known, collected)
        if decision.source is not None and decision.source not in refused:
            _check_source(decision, sources)
        if not decision.reason and decision.decision != "undecided":
            collected.note(decision.place, "a decision without a reason")
        target = (decision.shot, decision.sample, decision.kind, decision.source)
        held[target] = decision
    return tuple(held.values())


def _rows(path: Path, collected: Collected) -> tuple[Row, list[Row]]:
    sheet = read_delimited(path, FILE, None, None, lambda one: _header(one) is not None)
    header = _header(sheet)
    collected.notes.extend(sheet.notes)
    if header is None:
        first = sheet.rows[0] if sheet.rows else Row(1, {})
        headers = [cell.text for cell in first.cells.values()]
        missing = [name for name in _NEEDED if name not in {folded(one) for one in headers}] or ["shot"]
        near = nearest(missing[0], headers)
        raise Refusal(
            Place(FILE, line=first.number),
            found=f"no column '{missing[0]}' in: {', '.join(headers) or 'nothing'}",
            expected=f"the headers {', '.join(_COLUMNS)}",
            remedy=f"Write '{missing[0]}' for '{near}' if that is meant." if near else f"Add the column {missing[0]}.",
        )
    return header, [row for row in sheet.rows if row.number > header.number]


def _header(sheet: Sheet) -> Row | None:
    for row in sheet.rows:
        names = {folded(cell.text) for cell in row.cells.values()}
        if names >= set(_NEEDED) and names & {"shot", "sample"}:
            return row
    return None


def _field(row: Row, column: int | None) -> str | None:
    cell = row.get(column) if column is not None else None
    return None if cell is None or cell.blank else cell.text


def _decision(fields: dict[str, str | None], place: Place, known: Known, collected: Collected) -> Decision:
    decision, kind = fields["decision"] or "", fields["kind"]
    if decision not in DECISIONS:
        near = nearest(decision, DECISIONS)
        raise Refusal(
            place,
            found=f"the decision '{decision}'",
            expected=f"one of {', '.join(DECISIONS)}",
            remedy=f"Write '{near}' if that is meant." if near else "Correct the line.",
        )
    if bool(fields["shot"]) == bool(fields["sample"]):
        raise Refusal(
            place,
            found="both a shot and a sample" if fields["shot"] else "neither a shot nor a sample",
            expected="a shot or a sample",
            remedy="Name the one that the decision is about.",
        )
    if kind is not None and kind not in KINDS:
        near = nearest(kind, KINDS)
        raise Refusal(
            place,
            found=f"the kind '{kind}'",
            expected=f"a kind as in readings.csv: {', '.join(KINDS)}",
            remedy=f"Write '{near}' if that is meant." if near else "Correct the line; empty means all kinds.",
        )
    shot = known.shots.meant(fields["shot"], place, collected) if fields["shot"] else None
    sample = known.samples.meant(fields["sample"], place, collected) if fields["sample"] else None
    return Decision(
        shot,
        sample,
        kind,
        fields["source"],
        decision,
        fields["reason"] or "",
        fields["by"] or "",
        fields["on"] or "",
        place,
    )


def _check_source(decision: Decision, sources: set[tuple[str, str]]) -> None:
    written = {source for kind, source in sources if decision.kind in {None, kind}}
    if decision.source in written:
        return
    near = nearest(decision.source or "", sorted(written))
    raise Refusal(
        decision.place,
        found=f"the source '{decision.source}'",
        expected="the address of a reading, as in readings.csv",
        remedy=f"Write '{near}' if that is meant." if near else "Correct the line; empty means all of that kind.",
    )


def decided(
    log: Log, readings: list[Reading], decisions: tuple[Decision, ...]
) -> tuple[tuple[Shot, ...], tuple[Reading, ...]]:
    """Return shots and readings with a person's word on them.

    A word on one reading goes before one on all of its kind, and that before one on all of the shot or sample. A word
    on a shot goes before a struck-through cell; the readings of a shot that is set aside are set aside with it.
    """
    words = {(one.shot, one.sample, one.kind, one.source): one for one in decisions if one.decision != "undecided"}
    shots = {name: _shot(shot, words.get((name, None, None, None))) for name, shot in log.shots.items()}
    return tuple(shots.values()), tuple(_reading(one, shots, words) for one in readings)


def _reason(decision: Decision) -> str:
    return decision.reason or "no reason given"


def _shot(shot: Shot, word: Decision | None) -> Shot:
    if word is None:
        return shot
    if word.decision == "keep":
        return replace(shot, set_aside=None, kept=_reason(word))
    return replace(shot, set_aside=_reason(word))


def _reading(reading: Reading, shots: dict[str, Shot], words: dict[_Target, Decision]) -> Reading:
    shot = shots.get(reading.shot) if reading.shot is not None else None
    if shot is not None and shot.set_aside is not None:
        return replace(reading, set_aside=f"its shot is set aside: {shot.set_aside}")
    source = str(reading.place)
    targets = [(reading.kind, source), (None, source), (reading.kind, None)]
    if reading.sample is not None:
        targets.append((None, None))
    for kind, where in targets:
        word = words.get((reading.shot, reading.sample, kind, where))
        if word is not None:
            aside = word.decision == "set-aside"
            return replace(reading, set_aside=_reason(word) if aside else None, kept=None if aside else _reason(word))
    return reading

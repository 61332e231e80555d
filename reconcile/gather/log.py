"""The log → shots."""

from __future__ import annotations

from dataclasses import dataclass

from reconcile.campaign.campaign import Campaign
from reconcile.campaign.readings import Shot
from reconcile.campaign.refusal import Place, Refusal
from reconcile.campaign.schema import LOG_COLUMNS
from reconcile.gather.collected import Collected, spreadsheets
from reconcile.read.cells import Cell
from reconcile.read.headers import Column
from reconcile.read.tables import SheetRead, TableRow, in_si, name_in, number, read_table

# Columns that hold whole numbers from 1, and the ranges of the others [SI].
_COUNTS = ("pulses", "sites")
_RANGES = {
    "standoff": "above 0",
    "spot_radius": "above 0",
    "transmission": "above 0 and at most 1",
    "delay": "0 or later",
}
_ALLOWED = {
    "standoff": lambda value: value > 0,
    "spot_radius": lambda value: value > 0,
    "transmission": lambda value: 0 < value <= 1,
    "delay": lambda value: value >= 0,
}


@dataclass(frozen=True, slots=True)
class Log:
    """The shots that can be used, and the names of those that cannot."""

    shots: dict[str, Shot]
    lost: dict[str, str]  # name of a refused shot → where it stands
    samples: tuple[str, ...]
    lost_samples: tuple[str, ...]  # of refused shots alone


def read_log(campaign: Campaign, collected: Collected) -> Log:
    """Read every row of the log.

    Raises
    ------
    Refusal
        The log cannot be read as a whole, one shot stands in rows that differ, or no row has a readable energy.
    """
    shots: dict[str, Shot] = {}
    lost: dict[str, str] = {}
    lost_samples: list[str] = []
    rows: dict[str, TableRow] = {}
    log = campaign.log
    for name in spreadsheets(campaign, log.file or "", log.place):
        path = collected.read(campaign.folder, name, log.place)
        for sheet in read_table(path, name, log, LOG_COLUMNS):
            collected.notes.extend(sheet.notes)
            for row in sheet.rows:
                _take(row, sheet, campaign, collected, (shots, lost, rows, lost_samples))
    if not shots:
        raise Refusal(
            Place(log.file or ""),
            found=f"{len(lost)} shots, none of them usable" if lost else "no row with a shot",
            expected="shots with an energy above 0",
            remedy=f"Correct the log: {collected.refused[0].reason}"
            if collected.refused
            else "Correct columns in [shots].",
        )
    samples = tuple(dict.fromkeys(shot.sample for shot in shots.values() if shot.sample))
    return Log(shots, lost, samples, tuple(name for name in dict.fromkeys(lost_samples) if name not in samples))


_Kept = tuple[dict[str, Shot], dict[str, str], dict[str, TableRow], list[str]]


def _take(row: TableRow, sheet: SheetRead, campaign: Campaign, collected: Collected, kept: _Kept) -> None:
    shots, lost, rows, lost_samples = kept
    try:
        name = name_in(row.cells.get("shot"), "shot")
    except Refusal as refusal:
        collected.refuse(refusal)
        return
    if name is None:
        return
    place = row.cells["shot"].place
    if name in rows:
        if rows[name].whole == row.whole:
            collected.note(place, f"the row of shot '{name}' stands twice; it counts once")
            return
        raise Refusal(
            place,
            found=f"shot '{name}', which stands at {rows[name].cells['shot'].place} with other values",
            expected="one row for each shot",
            remedy="Correct the shot's name, or take one of the rows out.",
        )
    rows[name] = row
    try:
        shots[name] = _shot(name, row, sheet, campaign, collected)
    except Refusal as refusal:
        collected.refuse(refusal)
        lost[name] = str(refusal.place)
        sample = row.cells.get("sample")
        if sample is not None and sample.fault is None and sample.text:
            lost_samples.append(sample.text)


def _shot(name: str, row: TableRow, sheet: SheetRead, campaign: Campaign, collected: Collected) -> Shot:
    place = row.cells["shot"].place
    if row.fault is not None:
        raise Refusal(
            row.place,
            found=row.fault,
            expected="no more cells than headers",
            remedy="A decimal comma in a file with commas between the cells? Put such numbers in quotes, or use ';'.",
        )
    energy_key = "energy" if "energy" in sheet.columns else "power"
    energy = _quantity(energy_key, row, sheet)
    if energy is None or energy <= 0:
        cell = row.cells.get(energy_key)
        raise Refusal(
            cell.place if cell else place,
            found=f"the {energy_key} '{cell.text if cell else ''}' of shot '{name}'",
            expected="a number above 0",
            remedy="Type it; without it the shot and its readings are left out.",
        )
    rate = campaign.beam.repetition_rate
    if energy_key == "power" and rate is not None:
        energy /= rate.value
    struck = [cell for key in ("shot", energy_key) if (cell := row.cells.get(key)) is not None and cell.struck]
    return Shot(
        name=name,
        metered_energy=energy,
        place=place,
        pulses=_count("pulses", row, sheet),
        sites=_count("sites", row, sheet),
        level=_label("level", row, collected),
        sample=_label("sample", row, collected),
        standoff=_ranged("standoff", row, sheet),
        spot_radius=_ranged("spot_radius", row, sheet),
        transmission=_ranged("transmission", row, sheet) or 1.0,
        delay=_ranged("delay", row, sheet),
        time=_text(row.cells.get("time")),
        note=_text(row.cells.get("note")),
        set_aside=f"struck through at {struck[0].place}" if struck else None,
    )


def _quantity(key: str, row: TableRow, sheet: SheetRead) -> float | None:
    column: Column | None = sheet.columns.get(key)
    if column is None:
        return None
    value = number(row.cells.get(key), column)
    return None if value is None else in_si(value, column)


def _count(key: str, row: TableRow, sheet: SheetRead) -> int:
    value = _quantity(key, row, sheet)
    if value is None:
        return 1
    if value < 1 or not float(value).is_integer():
        raise _out_of_range(row.cells[key], key, "a whole number from 1")
    return int(value)


def _ranged(key: str, row: TableRow, sheet: SheetRead) -> float | None:
    value = _quantity(key, row, sheet)
    if value is not None and not _ALLOWED[key](value):
        raise _out_of_range(row.cells[key], key, f"a {key} {_RANGES[key]}")
    return value


def _out_of_range(cell: Cell, key: str, expected: str) -> Refusal:
    return Refusal(cell.place, found=f"the {key} '{cell.text}'", expected=expected, remedy="Correct the cell.")


def _label(key: str, row: TableRow, collected: Collected) -> str | None:
    """Return a level or sample; a cell that holds none is refused alone, and the shot stays without it."""
    try:
        return name_in(row.cells.get(key), key)
    except Refusal as refusal:
        collected.refuse(refusal)
        return None


def _text(cell: Cell | None) -> str | None:
    """Return a remark or a time as it stands; a date is as good as any."""
    if cell is None or (cell.fault is not None and cell.content is None):
        return None
    return cell.text or None

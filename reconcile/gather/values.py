"""Tables of readings: one number a row, with its own uncertainty."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from reconcile.campaign.campaign import Table
from reconcile.campaign.kinds import KINDS, Kind
from reconcile.campaign.number_text import is_blank, to_float
from reconcile.campaign.quantity import parse_unit
from reconcile.campaign.readings import Reading
from reconcile.campaign.refusal import Place, Refusal
from reconcile.gather.collected import Collected, Names
from reconcile.gather.log import Log
from reconcile.read.cells import Cell
from reconcile.read.headers import Column
from reconcile.read.tables import SheetRead, TableRow, in_si, name_in, number

_NOT_DETECTED = ("n.d.", "nd", "n.d")
_NEGATIVE = 3.0  # a number further below 0 than this many of its uncertainties is no noise, but a sign or a slip


@dataclass(frozen=True, slots=True)
class Known:
    """What the log knows."""

    log: Log
    shots: Names
    samples: Names

    def target(self, kind_target: str, written: str, place: Place, collected: Collected) -> str:
        """Return the log's name of a shot or sample; raises Refusal where it has none, or refused it."""
        names = self.shots if kind_target == "shot" else self.samples
        name = names.meant(written, place, collected)
        lost = self.log.lost if kind_target == "shot" else dict.fromkeys(self.log.lost_samples, "the log")
        if name in lost:
            raise Refusal(
                place,
                found=f"the {kind_target} '{name}', which was refused ({lost[name]})",
                expected=f"a {kind_target} whose energy is known",
                remedy="Correct the log.",
            )
        return name


def read_values(table: Table, sheet: SheetRead, known: Known, collected: Collected, seen: set[object]) -> list[Reading]:
    """Return the readings of one sheet, in the order of its rows.

    Parameters
    ----------
    table : the manifest's entry, of one of the kinds
    sheet : the rows
    known : the log's names
    collected : takes refusals and notes
    seen : rows of this table that were read already; equal ones count once
    """
    kind = KINDS[table.kind]
    readings = []
    for row in sheet.rows:
        value_cell = row.cells.get("value")
        if value_cell is None or (value_cell.fault is None and is_blank(value_cell.text)):
            continue
        if row.whole in seen:
            collected.note(value_cell.place, "a row equal to an earlier one; it counts once")
            continue
        seen.add(row.whole)
        try:
            readings.append(_reading(kind, table, row, sheet, known, collected))
        except Refusal as refusal:
            collected.refuse_reading(refusal)
    return readings


def _reading(kind: Kind, table: Table, row: TableRow, sheet: SheetRead, known: Known, collected: Collected) -> Reading:
    cell = row.cells["value"]
    check_whole(row)
    name_cell = row.cells[kind.target]
    written = name_in(name_cell, kind.target) or ""
    target = known.target(kind.target, written, name_cell.place, collected)
    delay = _delay(kind, row, sheet, known, target) if kind.has_delay else None
    value, limit = _value_or_limit(cell, sheet.columns["value"], table)
    u = None
    if value is not None:
        u = _uncertainty(value, row, sheet, table, cell)
        _check_value(kind, value, u, table, cell)
        stated = table.detection_limit
        if stated is not None and value < stated.value:
            value, u, limit = None, None, stated.value
    struck = [one for one in (cell, name_cell) if one.struck]
    return Reading(
        kind=kind.name,
        shot=target if kind.target == "shot" else None,
        sample=target if kind.target == "sample" else None,
        table=table.name,
        place=cell.place,
        delay=delay,
        value=value,
        u=u,
        limit=limit,
        set_aside=f"struck through at {struck[0].place}" if struck else None,
    )


def check_whole(row: TableRow) -> None:
    """Refuse a row that was torn."""
    if row.fault is not None:
        raise Refusal(
            row.place,
            found=row.fault,
            expected="no more cells than headers",
            remedy="A decimal comma in a file with commas between the cells? Put such numbers in quotes, or use ';'.",
        )


def _delay(kind: Kind, row: TableRow, sheet: SheetRead, known: Known, target: str) -> float:
    column = sheet.columns.get("delay")
    cell = row.cells.get("delay")
    if column is None:
        delay = known.log.shots[target].delay
    else:
        value = number(cell, column)
        delay = None if value is None else in_si(value, column)
    if delay is None or delay < 0:
        place = (cell or row.cells["value"]).place
        raise Refusal(
            place,
            found=f"the delay '{cell.text}'" if cell is not None else "no delay",
            expected=f"the time after the pulse at which the {kind.words} was read, 0 or later",
            remedy="Type it.",
        )
    return delay


def _value_or_limit(cell: Cell, column: Column, table: Table) -> tuple[float | None, float | None]:
    """Return the value, or the limit that it lies below, in SI."""
    text = cell.text
    if cell.fault is None and isinstance(cell.content, str):
        if text[0] in "<≤":
            return None, _limit_in(text, cell, column)
        words = {*_NOT_DETECTED, *("".join(word.split()).casefold() for word in table.not_detected)}
        if "".join(text.split()).casefold() in words:
            if table.detection_limit is None:
                raise Refusal(
                    cell.place,
                    found=f"'{text}'",
                    expected="a limit that it lies below",
                    remedy='Add detection_limit = "…" to this table of the manifest, or type "<" and the limit.',
                )
            return None, table.detection_limit.value
    value = number(cell, column)
    if value is None:
        raise Refusal(cell.place, found="nothing", expected="a number", remedy="Type it.")
    return in_si(value, column), None


def _limit_in(text: str, cell: Cell, column: Column) -> float:
    try:
        limit = in_si(to_float(text.lstrip("<≤= "), column.decimal), column)
    except ValueError:
        limit = 0.0
    if limit <= 0:
        raise Refusal(
            cell.place, found=f"'{text}'", expected='"<" and a number above 0', remedy="Correct the number behind it."
        )
    return limit


def _uncertainty(value: float, row: TableRow, sheet: SheetRead, table: Table, cell: Cell) -> float:
    """Return a reading's own standard uncertainty: of its cell, else of the table, in SI."""
    column, own = sheet.columns.get("uncertainty"), row.cells.get("uncertainty")
    written = number(own, column) if column is not None else None
    if written is not None and column is not None:
        relative = column.unit == "%" and column.si_unit != "1"
        u = abs(value) * written / 100 if relative else written * parse_unit(column.unit).size
    elif table.uncertainty is not None:
        u = table.uncertainty.value * (abs(value) if table.uncertainty.unit == "%" else 1.0)
    else:
        raise Refusal(
            (own or cell).place,
            found="a reading without an uncertainty",
            expected="its standard uncertainty",
            remedy='Type it, or add uncertainty = "…" to this table for blank cells.',
        )
    if not u > 0:
        raise Refusal(
            (own or cell).place,
            found=f"the uncertainty '{own.text}'"
            if own is not None
            else "an uncertainty of 0 (a share of a reading of 0)",
            expected="an uncertainty above 0: what would differ on measuring again",
            remedy="State how far repeated readings scatter.",
        )
    return u


_Rule = tuple[Callable[[float, float], bool], str]


# What a number of these kinds may be, given how far noise reaches below 0; of all others see `_rule`.
_RULES: dict[str, _Rule] = {
    "arrival-time": (lambda value, noise: True, "a time"),
    "reflected-fraction": (
        lambda value, noise: -noise <= value <= 1 + noise,
        "a share from 0 to 1 (or in %, with % in the header)",
    ),
    "geometric-sd": (lambda value, noise: value >= 1, "a factor of 1 or more"),
}


# What no bench shows, by unit: numbers beyond these are slips of a unit or of a decimal.
_MOST = {"m": 1.0, "s": 10.0, "Pa2 s": 1e18, "Pa": 1e15, "m3": 1.0, "1": 1e4}


def _never(value: float, bound: float) -> bool:
    """Allow nothing."""
    del value, bound
    return False


def _check_value(kind: Kind, value: float, u: float, table: Table, cell: Cell) -> None:
    """Refuse a number that such a reading cannot be."""
    limit = table.detection_limit.value if table.detection_limit is not None else 0.0
    allowed, expected = _rule(kind)
    if value > _MOST[kind.unit]:
        allowed, expected = _never, "something that fits on a bench"
    if not allowed(value, max(limit, _NEGATIVE * u)) and not 0 <= value < limit:
        raise Refusal(
            cell.place,
            found=f"a {kind.words} of '{cell.text}'",
            expected=expected,
            remedy="Correct the sign, the unit or the number; clear the cell where there is no reading.",
        )


def _rule(kind: Kind) -> _Rule:
    if kind.name in _RULES:
        return _RULES[kind.name]
    if kind.logarithmic:
        return (lambda value, noise: value > 0), "a number above 0"
    return (lambda value, noise: value > -noise), "a number above 0 but for its uncertainty"

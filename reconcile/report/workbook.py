"""results.xlsx: the close-out for people who go on in a spreadsheet. Typed cells, SI units, 16 digits; text stays text."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from datetime import datetime
from pathlib import Path
from typing import Any

import xlsxwriter

from reconcile.campaign.kinds import KINDS
from reconcile.inference.outcome import CloseOut
from reconcile.report.machine import number, printable

# A spreadsheet cell holds no more; what is longer is cut and says so.
LONGEST_CELL = 32_000

Cell = str | float | int | None
Row = tuple[tuple[Cell, ...], bool]  # its cells, and whether it is set off as flagged

_NOT_SOUND = ("misread", "stray", "set-aside")


def write_workbook(close_out: CloseOut, path: Path, now: datetime) -> None:
    """Write results.xlsx; `now` is the creation date that the file carries."""
    options = {"strings_to_formulas": False, "strings_to_urls": False, "strings_to_numbers": False}
    with xlsxwriter.Workbook(str(path), options) as book:
        book.set_properties(
            {"title": _cell_text(close_out.gathered.campaign.name), "created": now.replace(tzinfo=None)}
        )
        formats = {
            "head": book.add_format(
                {"bold": True, "bg_color": "#E4E8EE", "bottom": 1, "text_wrap": True, "valign": "top"}
            ),
            "flag": book.add_format({"bg_color": "#FBE9DC"}),
        }
        for name, header, rows in _sheets(close_out):
            _write_sheet(book.add_worksheet(name), header, rows, formats)


def _sheets(close_out: CloseOut) -> Iterable[tuple[str, Sequence[str], list[Row]]]:
    gathered = close_out.gathered
    yield "inputs", _INPUTS, _inputs(close_out)
    yield "shots", _SHOTS, _shots(close_out)
    yield "readings", _READINGS, _readings(close_out)
    yield "refused", ("source", "reason"), [((item.source, item.reason), False) for item in gathered.refused]
    decisions: list[Row] = [
        ((item.shot, item.sample, item.kind, item.source, item.decision, item.reason, item.by, item.on), False)
        for item in gathered.decisions
    ]
    yield "decisions", ("shot", "sample", "kind", "source", "decision", "reason", "by", "on"), decisions
    yield "notes", ("source", "note"), [((note.source, note.note), False) for note in gathered.notes]
    warned: list[Row] = [
        ((item.where, item.what, item.value, item.limit, item.unit, item.advice), False) for item in close_out.warnings
    ]
    yield "warnings", ("where", "what", "value", "limit", "unit", "advice"), warned


_INPUTS = (
    "input",
    "unit",
    "mean",
    "standard uncertainty",
    "2.5 %",
    "16 %",
    "median",
    "84 %",
    "97.5 %",
    "prior mean",
    "prior standard deviation",
    "informed",
    "prior as written",
    "belongs to",
    "meaning",
)


def _inputs(close_out: CloseOut) -> list[Row]:
    strained = {item.input for item in close_out.strained}
    rows: list[Row] = []
    for result in close_out.inputs:
        entry, summary = result.entry, result.summary
        cells = (
            entry.name,
            entry.unit,
            summary.mean,
            summary.sd,
            summary.q025,
            summary.q16,
            summary.median,
            summary.q84,
            summary.q975,
            result.prior_mean,
            result.prior_sd,
            result.informed,
            "derived" if result.prior is None else result.prior.text,
            entry.belongs_to,
            entry.meaning,
        )
        rows.append((cells, entry.name in strained))
    return rows


_SHOTS = (
    "shot",
    "level",
    "sample",
    "logged energy (J)",
    "pulses",
    "sites",
    "transmission",
    "incident fluence (J/m²)",
    "u (J/m²)",
    "incident 2.5 % (J/m²)",
    "incident 97.5 % (J/m²)",
    "absorbed fluence (J/m²)",
    "u (J/m²)",
    "absorbed 2.5 % (J/m²)",
    "absorbed 97.5 % (J/m²)",
    "absorbed fluence (J/cm²)",
    "u (J/cm²)",
    "energy ratio",
    "u",
    "p misread",
    "verdict",
    "reasons",
    "note",
    "source",
)


def _shots(close_out: CloseOut) -> list[Row]:
    rows: list[Row] = []
    for result in close_out.shots:
        shot, incident, absorbed = result.shot, result.incident_fluence, result.absorbed_fluence
        cells = (
            shot.name,
            shot.level,
            shot.sample,
            shot.metered_energy,
            shot.pulses,
            shot.sites,
            shot.transmission,
            *(incident.mean, incident.sd, incident.q025, incident.q975),
            *(absorbed.mean, absorbed.sd, absorbed.q025, absorbed.q975),
            *(absorbed.mean / 1e4, absorbed.sd / 1e4),
            result.energy_ratio,
            result.energy_ratio_sd,
            result.p_misread,
            result.verdict,
            "; ".join(result.reasons),
            shot.note,
            str(shot.place),
        )
        rows.append((cells, result.verdict in _NOT_SOUND))
    return rows


_READINGS = (
    "shot",
    "sample",
    "kind",
    "delay (s)",
    "value (SI)",
    "u (SI)",
    "below limit (SI)",
    "unit",
    "expected (SI)",
    "u of expected (SI)",
    "p stray",
    "verdict",
    "table",
    "set aside or kept because",
    "source",
)


def _readings(close_out: CloseOut) -> list[Row]:
    rows: list[Row] = []
    for result in close_out.readings:
        reading = result.reading
        cells = (
            reading.shot,
            reading.sample,
            reading.kind,
            reading.delay,
            reading.value,
            reading.u,
            reading.limit,
            KINDS[reading.kind].unit,
            result.predicted,
            result.predicted_sd,
            result.p_stray,
            result.verdict,
            reading.table,
            reading.set_aside if reading.set_aside is not None else reading.kept,
            str(reading.place),
        )
        rows.append((cells, result.verdict in _NOT_SOUND))
    return rows


def _write_sheet(sheet: Any, header: Sequence[str], rows: Sequence[Row], formats: dict[str, Any]) -> None:
    """Write one sheet: headers frozen, numbers as numbers, text as text, absent numbers as empty cells."""
    sheet.freeze_panes(1, 1)
    for column, title in enumerate(header):
        sheet.write_string(0, column, title, formats["head"])
        widest = max((len(str(cells[column])) for cells, _ in rows[:200] if isinstance(cells[column], str)), default=0)
        sheet.set_column(column, column, min(60, max(12, len(title) * 0.7, widest + 1)))
    for line, (cells, flagged) in enumerate(rows, start=1):
        look = formats["flag"] if flagged else None
        for column, cell in enumerate(cells):
            if isinstance(cell, str):
                sheet.write_string(line, column, _cell_text(cell), look)
            elif number(cell) is not None:
                sheet.write_number(line, column, float(cell), look)  # type: ignore[arg-type]
            elif flagged:
                sheet.write_blank(line, column, None, look)
    if rows:
        sheet.autofilter(0, 0, len(rows), len(header) - 1)


def _cell_text(text: str) -> str:
    kept = printable(text)
    return kept if len(kept) <= LONGEST_CELL else kept[: LONGEST_CELL - 1] + "…"

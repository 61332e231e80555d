"""A campaign's files → shots, readings, and what could not be read."""

from __future__ import annotations

from pathlib import Path

from reconcile.campaign.campaign import Campaign, Table
from reconcile.campaign.kinds import KINDS
from reconcile.campaign.patterns import matching, unasked
from reconcile.campaign.progress import Progress, silent
from reconcile.campaign.readings import Gathered, Reading
from reconcile.campaign.refusal import Place, Refusal
from reconcile.campaign.schema import table_columns
from reconcile.gather.collected import Collected, Names, same_source, spreadsheets
from reconcile.gather.decisions import decided, read_decisions
from reconcile.gather.log import Log, read_log
from reconcile.gather.pictures import Pictures
from reconcile.gather.sizes import SizeTable
from reconcile.gather.sources import find_sources
from reconcile.gather.values import Known, read_values
from reconcile.read.tables import read_table


def gather(
    campaign: Campaign, *, workers: int = 1, progress: Progress | None = None, overlays: Path | None = None
) -> Gathered:
    """Read the log and every table of readings; measure every image, trace and map.

    Parameters
    ----------
    campaign : the manifest
    workers : processes that measure files; spreadsheets are read in this one. Never changes a number
    progress : told of the tables read, and of each table's files measured; None: nobody is
    overlays : existing folder into which what was found is drawn, a picture a file; None: nothing is drawn

    Returns
    -------
    Gathered
        Shots in the log's order, readings in the manifest's and then the rows'.

    Raises
    ------
    Refusal
        The log, or a file that the manifest names, cannot be read as a whole; a pattern matches nothing; a table of
        files lacks what it needs to be measured; a decision is about something unknown; or every reading was refused.
    OSError
        A drawing cannot be written.
    """
    progress = progress or silent
    collected = Collected()
    collected.read(campaign.folder, campaign.log.place.file, campaign.log.place)
    log = read_log(campaign, collected)
    known = Known(log, Names([*log.shots, *log.lost], "shot"), Names([*log.samples, *log.lost_samples], "sample"))
    _refuse_overlaps(campaign)
    if campaign.probe is not None and campaign.probe.sensitivity_file is not None:
        file = campaign.probe.sensitivity_file["file"]
        collected.asked.update(
            spreadsheets(campaign, file, Place(campaign.log.place.file, key="probe.sensitivity_file"))
        )
    sources = find_sources(campaign, known, collected)
    found: dict[int, list[Reading]] = {}
    for number, table in enumerate(campaign.tables):
        progress("reading", number, len(campaign.tables))
        if number not in sources:
            found[number] = _read(campaign, table, known, collected)
    progress("reading", len(campaign.tables), len(campaign.tables))
    pictures = Pictures(campaign, known, collected, overlays)
    found |= pictures.measure(sources, workers, progress)
    readings = [reading for number in sorted(found) for reading in found[number]]
    decisions = read_decisions(campaign, known, readings, collected)
    shots, kept = decided(log, readings, decisions)
    if not kept and collected.refused_readings:
        raise Refusal(
            campaign.log.place.file,
            found=f"{collected.refused_readings} readings, none of which can be used",
            expected="at least one reading",
            remedy=f"The first one refused: {_first_reading(collected)}",
        )
    return Gathered(
        campaign=campaign,
        shots=shots,
        readings=kept,
        refused=tuple(collected.refused),
        notes=tuple(collected.notes),
        decisions=decisions,
        files=tuple(collected.files.values()),
        unasked=unasked(campaign.folder, collected.asked),
        overlays=pictures.drawn,
    )


def _first_reading(collected: Collected) -> str:
    first = collected.refused[0]
    return f"{first.source}: {first.reason}"


def _read(campaign: Campaign, table: Table, known: Known, collected: Collected) -> list[Reading]:
    readings: list[Reading] = []
    sizes = None if table.kind in KINDS else SizeTable(table, known, collected)
    seen: set[object] = set()
    for name in spreadsheets(campaign, table.file or "", table.place):
        path = collected.read(campaign.folder, name, table.place)
        for sheet in read_table(path, name, table, table_columns(table.kind)):
            for note in sheet.notes:
                collected.note(note.source, note.note)
            if sizes is not None:
                sizes.read(sheet)
            else:
                readings.extend(read_values(table, sheet, known, collected, seen))
    return readings if sizes is None else sizes.readings()


def _refuse_overlaps(campaign: Campaign) -> None:
    """Refuse two tables of one kind that would read the same cells: they would count twice."""
    for number, second in enumerate(campaign.tables):
        for first in campaign.tables[:number]:
            if first.file is None or second.file is None or not same_source(first, second):
                continue
            shared = set(_names(campaign, first)) & set(_names(campaign, second))
            if shared:
                raise Refusal(
                    second.place,
                    found=f"the file '{min(shared)}', which the table at line {first.place.line} reads as {first.kind} too",
                    expected="each reading once",
                    remedy="Take one of the tables out, or keep them apart with sheet or only.",
                )


def _names(campaign: Campaign, table: Table) -> list[str]:
    return matching(campaign.folder, table.file) if table.file and "*" in table.file else [table.file or ""]


__all__ = ["Log", "gather"]

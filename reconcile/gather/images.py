"""Tables of frames, traces, maps and micrographs: which files they name. This version reads none of them."""

from __future__ import annotations

from pathlib import PurePosixPath
from typing import Any

from reconcile.campaign.campaign import Campaign, Table
from reconcile.campaign.patterns import matching
from reconcile.campaign.refusal import Place, Refusal
from reconcile.gather.collected import Collected, spreadsheets
from reconcile.read.tables import read_table


def refuse_files(campaign: Campaign, table: Table, collected: Collected) -> None:
    """Refuse each file of the table by name.

    Raises
    ------
    Refusal
        The pattern matches nothing, or the list cannot be read.
    """
    for extra in (table.options.get("background"), (table.options.get("graticule") or {}).get("file")):
        if extra is not None:
            collected.asked.update(spreadsheets(campaign, extra, table.place))
    names = _matched(campaign, table) if table.files is not None else _listed(campaign, table, collected)
    for name in names:
        if name in collected.asked:
            collected.refuse_reading(
                Refusal(
                    Place(name),
                    found="a file that two tables name",
                    expected="one table for each file",
                    remedy="Correct the patterns in the manifest.",
                )
            )
            continue
        collected.asked.add(name)
        collected.refuse_reading(
            Refusal(
                Place(name),
                found=f"a file for {table.kind}, not read yet by this version",
                expected="readings in .xlsx or .csv tables",
                remedy="Measure it elsewhere and give its numbers as a table.",
            )
        )


def _matched(campaign: Campaign, table: Table) -> list[str]:
    names = matching(campaign.folder, table.files or "")
    if not names:
        raise Refusal(
            table.place,
            found=f"no file that matches '{table.files}'",
            expected="at least one file in the campaign folder",
            remedy="Correct the pattern, or add the files.",
        )
    return names


def _listed(campaign: Campaign, table: Table, collected: Collected) -> list[str]:
    entry: dict[str, Any] = dict(table.listed or {})
    folder = PurePosixPath(entry.pop("folder") or "")
    source = Table(kind="list", name=table.name, place=table.place, **entry)
    found: list[str] = []
    for name in spreadsheets(campaign, source.file or "", table.place):
        path = collected.read(campaign.folder, name, table.place)
        for sheet in read_table(path, name, source, {"delay": "s"}):
            collected.notes.extend(sheet.notes)
            for row in sheet.rows:
                cell = row.cells.get("path")
                if cell is None or cell.blank:
                    continue
                file = (folder / cell.text.replace("\\", "/")).as_posix()
                if cell.fault is None and ".." not in PurePosixPath(file).parts and (campaign.folder / file).is_file():
                    found.append(file)
                    continue
                collected.refuse_reading(
                    Refusal(
                        cell.place,
                        found=f"'{cell.text}', which is no file '{file}' in the campaign folder",
                        expected="the name of a file",
                        remedy="Correct the name, or add the file.",
                    )
                )
    return list(dict.fromkeys(found))

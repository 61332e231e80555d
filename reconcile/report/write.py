"""One entry: every file of a close-out into an empty folder, checksums last."""

from __future__ import annotations

import re
import shutil
from collections.abc import Mapping
from datetime import UTC, datetime
from pathlib import Path

from reconcile.campaign.files import check_output, whole_folder, write_checksums
from reconcile.campaign.readings import Gathered
from reconcile.inference.outcome import CloseOut
from reconcile.report import content, document, figures, machine, page, workbook


def write(close_out: CloseOut, folder: Path, *, now: datetime | None = None) -> None:
    """Write the whole close-out.

    Parameters
    ----------
    close_out : all that there is to say
    folder : empty, existing; the caller moves it into place once it is whole
    now : date of issue; None: this moment. The same close-out and date give the same files.

    Raises
    ------
    OSError
        A file cannot be written.
    """
    now = now or datetime.now(UTC)
    results_sha256 = machine.write_results(close_out, folder / "results.json")
    machine.write_inputs_toml(close_out, results_sha256, folder / "inputs.toml")
    campaign = close_out.gathered.campaign.name
    machine.write_posterior(close_out.posterior, campaign, folder / "posterior.nc", now.isoformat(timespec="seconds"))
    machine.write_readings(close_out.readings, folder / "readings.csv")
    machine.write_refused(close_out.gathered.refused, folder / "refused.csv")
    machine.write_input_checksums(close_out.gathered.files, folder / "inputs.sha256")
    workbook.write_workbook(close_out, folder / "results.xlsx", now)
    drawings = figures.draw(close_out, folder / "figures")
    report = content.build(close_out, drawings, results_sha256, now)
    page.write_page(report, folder / "figures", folder / "report.html")
    document.write_document(report, folder / "figures", folder / "report.pdf", now)
    copy_overlays(close_out.gathered.overlays, folder)
    write_checksums(folder)


def write_gathered(gathered: Gathered, folder: Path) -> Path:
    """Write what was read and measured, before any fit: readings.csv with empty fit columns, refused.csv, overlays.

    Returns the folder written, whole: `folder`, or one beside it where that cannot be replaced.

    Raises
    ------
    Refusal
        `folder` lies in the campaign's, or holds what could be harmed.
    OSError
        A file cannot be written.
    """
    check_output(folder, gathered.campaign.folder)
    output = whole_folder(folder)
    with output as staging:
        machine.write_unfitted_readings(gathered.readings, staging / "readings.csv")
        machine.write_refused(gathered.refused, staging / "refused.csv")
        machine.write_input_checksums(gathered.files, staging / "inputs.sha256")
        copy_overlays(gathered.overlays, staging)
    return output.final or folder


def copy_overlays(overlays: Mapping[str, Path], folder: Path) -> None:
    """Copy what was found on each image or trace into overlays/, under a name that every system can hold."""
    if not overlays:
        return
    target = folder / "overlays"
    target.mkdir(exist_ok=True)
    taken: set[str] = set()
    for source, path in overlays.items():
        stem = re.sub(r"[^\w.-]+", "_", source)[-100:].strip("._") or "overlay"
        name, again = f"{stem}{path.suffix}", 2
        # Two names that differ only in case are one file on some systems.
        while name.casefold() in taken:
            name, again = f"{stem}-{again}{path.suffix}", again + 1
        taken.add(name.casefold())
        shutil.copyfile(path, target / name)

"""An invented campaign's folder as laboratories keep it: workbooks with titles, two decimal signs, remarks, blemishes."""

from __future__ import annotations

import datetime
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

import xlsxwriter
from xlsxwriter.workbook import Workbook
from xlsxwriter.worksheet import Worksheet

from reconcile.invent.campaign import DEPTH_LIMIT, Invented, InventedReading, InventedShot
from reconcile.invent.folder import Cell, manifest_head, number, save_csv, save_text
from reconcile.invent.truth import BENCH

CREATED = datetime.datetime(2026, 3, 14, 18, 0)  # noqa: DTZ001 - a workbook's own clock has no zone
NAME = "basin-07"
TITLE = "Gold under water, small basin, run 7"


@dataclass(frozen=True, slots=True)
class Blemishes:
    """What is odd in the folder, by shot; none of it is a planted fault."""

    struck: str  # its name is struck through in the log: set aside
    unreadable: str  # its crater diameter is a formula without a stored value: refused
    hidden: str  # its row of the sound table is hidden: read, with a note
    misspelt: str  # its radius stands under a name in capitals, with a blank: taken, with a note
    doubled: str  # its lifetime was entered twice: one reading, with a note


def blemishes(invented: Invented) -> Blemishes:
    """Choose the shots that the folder's oddities fall on: sound ones, each with all that is needed."""
    planted = {reading.shot for reading in invented.readings if reading.stray}
    planted |= {shot.name for shot in invented.shots if shot.misread_factor != 1.0}
    free = [shot for shot in invented.shots if shot.name not in planted and shot.sample is None]
    free.sort(key=lambda shot: shot.pulses)  # single pulses first
    taken: list[str] = []

    def choose(kind: str, level: str) -> str:
        read = {reading.shot for reading in invented.of(kind)}
        fit = [shot.name for shot in free if shot.name in read and shot.name not in taken and shot.level >= level]
        taken.append(fit[0])
        return fit[0]

    return Blemishes(
        struck=choose("bubble-lifetime", "L3"),
        unreadable=choose("crater-diameter", "L4"),
        hidden=choose("pressure-integral", "L5"),
        misspelt=choose("bubble-radius", "L2"),
        doubled=choose("bubble-lifetime", "L6"),
    )


def write_untidy(invented: Invented, folder: Path) -> None:
    """Write the tables as people keep them, their manifest, a stray note and a README."""
    write_tables(invented, folder, blemishes(invented), "Camera 1: bubble radii from the frames")
    save_text(folder / "README.txt", _README)
    save_text(folder / "campaign.toml", manifest_head(NAME, TITLE) + TABLES)


def write_tables(invented: Invented, folder: Path, odd: Blemishes, radii_title: str) -> None:
    """Write workbooks and text tables with their oddities, and the note that lies with them.

    Parameters
    ----------
    invented : its readings and histograms are what is written down.
    odd : where the oddities fall.
    radii_title : the line above the radii.
    """
    _write_log(invented, folder / "shot log.xlsx", odd)
    _write_craters(invented, folder / "craters.xlsx", odd)
    _write_radii(invented, folder / "radii.csv", odd, radii_title)
    _write_lifetimes(invented, folder / "lifetimes.csv", odd)
    _write_sound(invented, folder / "sound.xlsx", odd)
    _write_sizes(invented, folder / "tem counts.xlsx")
    save_text(folder / "notes.txt", _NOTES)


@contextmanager
def _workbook(path: Path) -> Iterator[Workbook]:
    """Open a new workbook whose bytes do not depend on when it is written."""
    book = xlsxwriter.Workbook(path, {"strings_to_formulas": False, "strings_to_urls": False})
    book.set_properties({"title": path.stem, "author": "operator A", "created": CREATED})
    yield book
    book.close()


def _write_row(sheet: Worksheet, row: int, cells: Sequence[Cell]) -> None:
    for column, cell in enumerate(cells):
        if isinstance(cell, str) and cell:
            sheet.write_string(row, column, cell)
        elif isinstance(cell, int | float):
            sheet.write_number(row, column, cell)


def _micro(value: float) -> float:
    """Return a value in millionths of its SI unit, as typed."""
    return float(number(1e6 * value))


def _write_log(invented: Invented, path: Path, odd: Blemishes) -> None:
    """Titles, an empty row between levels, one shot struck through, a closing remark."""
    with _workbook(path) as book:
        sheet, struck = book.add_worksheet("log"), book.add_format({"font_strikeout": True})
        sheet.set_column(6, 6, 40)
        _write_row(sheet, 0, ["Small basin, run 7: gold plate under 6 mm of water"])
        _write_row(sheet, 1, ["operator A", None, "energies: meter 2, mean of the pulses of one place"])
        _write_row(sheet, 3, ["Shot", "Energy (uJ)", "Pulses", "Level", "Sample", "Sites", "Remarks"])
        row, level = 4, invented.shots[0].level
        for shot in invented.shots:
            row += shot.level != level
            level = shot.level
            cells = _log_row(shot, odd)
            _write_row(sheet, row, cells)
            if shot.name == odd.struck:
                sheet.write_string(row, 0, shot.name, struck)
                sheet.write_number(row, 1, _micro(shot.logged_energy), struck)
            row += 1
        _write_row(sheet, row + 1, [None, None, None, None, None, None, "end of run; water changed, plate stored dry"])


def _log_row(shot: InventedShot, odd: Blemishes) -> list[Cell]:
    remark = "scan, colloid collected" if shot.sites > 1 else None
    if shot.name == odd.struck:
        remark = "shutter late, discard"
    return [shot.name, _micro(shot.logged_energy), shot.pulses, shot.level, shot.sample, shot.sites, remark]


def _write_craters(invented: Invented, path: Path, odd: Blemishes) -> None:
    """Depth and diameter side by side, units under the headers, "n.d." and "<", one formula that was never computed."""
    diameters = {reading.shot: reading for reading in invented.of("crater-diameter")}
    with _workbook(path) as book:
        sheet = book.add_worksheet("profiler")
        _write_row(sheet, 0, ["Craters, run 7", None, None, "depth: mean of two lines; diameter: at the surface"])
        _write_row(sheet, 2, ["Shot", "Depth", "u", "Diameter", "Remarks"])
        _write_row(sheet, 3, [None, "um", "um", "um"])
        for row, depth in enumerate(invented.of("crater-depth"), start=4):
            across = diameters.get(depth.shot)
            cells = [depth.shot, *_depth_cells(depth, row), _micro(across.value or 0.0) if across else "-"]
            _write_row(sheet, row, cells)
            if across and depth.shot == odd.unreadable:
                half = number(1e6 * (across.value or 0.0) / 2)
                sheet.write_formula(row, 3, f"=2*{half}", None, "")
        check = book.add_worksheet("step check")
        _write_row(check, 0, ["Step height standard", "nominal (nm)", "found (nm)"])
        _write_row(check, 1, ["before", 180, 182])
        _write_row(check, 2, ["after", 180, 179])


def _depth_cells(depth: InventedReading, row: int) -> list[Cell]:
    if depth.value is None or depth.u is None:
        return ["n.d." if row % 2 == 0 else f"<{number(1e6 * DEPTH_LIMIT)}", None]
    return [_micro(depth.value), _micro(depth.u)]


def _write_radii(invented: Invented, path: Path, odd: Blemishes, title: str) -> None:
    rows = [
        (
            _misspelt(reading.shot or "") if reading.shot == odd.misspelt else reading.shot,
            number(1e6 * (reading.delay or 0.0)),
            number(1e6 * (reading.value or 0.0)),
            number(1e6 * (reading.u or 0.0)),
        )
        for reading in invented.of("bubble-radius")
    ]
    save_csv(path, ("Shot", "Delay (us)", "Radius (um)", "u (um)"), rows, above=(title, ""))


def _misspelt(shot: str) -> str:
    """Return the name as somebody else would type it."""
    return f"{shot[0].upper()} {shot[1:].lstrip('0')}"


def _write_lifetimes(invented: Invented, path: Path, odd: Blemishes) -> None:
    """Semicolons, decimal commas and an old encoding, as another computer's program exports them; one row twice."""
    rows: list[tuple[Cell, ...]] = []
    for reading in invented.of("bubble-lifetime"):
        row = (reading.shot, number(1e6 * (reading.value or 0.0)).replace(".", ","))
        rows.extend([row, row] if reading.shot == odd.doubled else [row])
    save_csv(path, ("Shot", "Lifetime (µs)"), rows, delimiter=";", encoding="cp1252")


def _write_sound(invented: Invented, path: Path, odd: Blemishes) -> None:
    arrivals = {reading.shot: reading for reading in invented.of("arrival-time")}
    with _workbook(path) as book:
        sheet = book.add_worksheet("first pulse")
        _write_row(sheet, 0, ["Hydrophone 1, first pulse only; gate closes before the echo of the surface"])
        _write_row(sheet, 2, ["Shot", "Int p2 dt (Pa2 s)", "Arrival (ns)"])
        for row, integral in enumerate(invented.of("pressure-integral"), start=3):
            arrival = arrivals[integral.shot].value or 0.0
            _write_row(sheet, row, [integral.shot, integral.value, float(number(1e9 * arrival))])
            if integral.shot == odd.hidden:
                sheet.set_row(row, None, None, {"hidden": True})


def _write_sizes(invented: Invented, path: Path) -> None:
    """One block a sample, with its total under it."""
    with _workbook(path) as book:
        sheet = book.add_worksheet("counts")
        _write_row(sheet, 0, ["TEM, particles counted by size"])
        _write_row(sheet, 1, ["Sample", "From (nm)", "To (nm)", "Count"])
        row = 2
        for histogram in invented.histograms:
            for low, high, count in zip(histogram.edges[:-1], histogram.edges[1:], histogram.counts, strict=True):
                edges = [float(number(1e9 * low)), float(number(1e9 * high))]
                _write_row(sheet, row, [histogram.sample, *edges, int(count)])
                row += 1
            _write_row(sheet, row, [None, None, "total", int(histogram.counts.sum())])
            row += 2


_NOTES = """Run 7, small basin.
Water from the still, 20 degC before and after. Bath level checked twice: 6.0 mm.
Plate shifted by 0.3 mm after every shot, new row for every level.
Camera did not store every frame; hydrophone recorder off for some shots (disk full).
"""

_README = """This folder is invented. A laboratory that does not exist fires 72 shots at a gold plate under 6 mm of water and
writes down what it reads of them: crater depths and diameters, bubble radii and lifetimes, the first pressure pulse and
its arrival at a hydrophone, particle sizes of six samples. The folder is as untidy as such folders are: titles above the
headers, units in three places, a table with decimal commas, a shot struck through, a row hidden, a formula that was
never computed, notes that nobody asked for. campaign.toml says what is what.

The readings were simulated with more physics than the close-out's own model holds, from true numbers that truth/ lists.
Three readings were made grossly wrong on purpose, and three energies in the log are wrong by a factor between 1.5 and
2.2; truth/ says which. Close the campaign out first, then look there to see how well it did.
"""

TABLES = f"""
[shots]
file = "shot log.xlsx"
sheet = "log"
columns.shot = "Shot"
columns.energy = "Energy (uJ)"
columns.pulses = "Pulses"
columns.level = "Level"
columns.sample = "Sample"
columns.sites = "Sites"
columns.note = "Remarks"

[[readings]]
kind = "crater-depth"
name = "profiler"
file = "craters.xlsx"
sheet = "profiler"
columns = {{ shot = "Shot", value = "Depth", uncertainty = "u" }}
scale = "{BENCH["scale.profiler"].text}"
detection_limit = "{number(1e9 * DEPTH_LIMIT)} nm"

[[readings]]
kind = "crater-diameter"
name = "profiler-plane"
file = "craters.xlsx"
sheet = "profiler"
columns = {{ shot = "Shot", value = "Diameter" }}
uncertainty = "0.5 um"

[[readings]]
kind = "bubble-radius"
name = "camera"
file = "radii.csv"
columns = {{ shot = "Shot", delay = "Delay (us)", value = "Radius (um)", uncertainty = "u (um)" }}

[[readings]]
kind = "bubble-lifetime"
name = "beam-deflection"
file = "lifetimes.csv"
columns = {{ shot = "Shot", value = "Lifetime (us)" }}
uncertainty = "0.15 us"
decimal = ","
delimiter = ";"
encoding = "cp1252"

[[readings]]
kind = "pressure-integral"
name = "hydrophone"
file = "sound.xlsx"
sheet = "first pulse"
columns = {{ shot = "Shot", value = "Int p2 dt (Pa2 s)" }}
uncertainty = "6 %"

[[readings]]
kind = "arrival-time"
name = "hydrophone-clock"
file = "sound.xlsx"
sheet = "first pulse"
columns = {{ shot = "Shot", value = "Arrival (ns)" }}
uncertainty = "3 ns"

[[readings]]
kind = "size-counts"
name = "tem"
file = "tem counts.xlsx"
sheet = "counts"
columns = {{ sample = "Sample", lower = "From (nm)", upper = "To (nm)", count = "Count" }}
"""

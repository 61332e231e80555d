"""An invented campaign as a folder: manifest, tables, and the true numbers in `truth/`."""

from __future__ import annotations

import csv
import io
from collections.abc import Iterable, Sequence
from pathlib import Path

from reconcile.campaign.refusal import Refusal
from reconcile.invent.campaign import DEPTH_LIMIT, Invented, InventedReading, Style
from reconcile.invent.truth import BENCH

Cell = str | float | int | None


def write(invented: Invented, folder: Path, *, style: Style) -> None:
    """Write a campaign folder; see `Invented.write`.

    Raises
    ------
    Refusal : the folder exists and holds something, or is a file.
    """
    if folder.exists() and (not folder.is_dir() or any(folder.iterdir())):
        raise Refusal(
            folder.as_posix(),
            found="a folder that holds something" if folder.is_dir() else "a file",
            expected="a folder that does not exist yet, or an empty one",
            remedy="Name another folder.",
        )
    folder.mkdir(parents=True, exist_ok=True)
    if style == "untidy":
        from reconcile.invent.untidy import write_untidy  # it writes with this module's helpers

        write_untidy(invented, folder)
    elif style == "files":
        from reconcile.invent.files import write_files  # pictures need more than tables do

        write_files(invented, folder)
        return
    else:
        write_plain(invented, folder)
    write_truth(invented, folder / "truth")


def write_plain(invented: Invented, folder: Path) -> None:
    """Write tidy CSV tables and their manifest."""
    log = [
        (shot.name, number(1e6 * shot.logged_energy), shot.pulses, shot.level, shot.sample, shot.sites)
        for shot in invented.shots
    ]
    save_csv(folder / "shots.csv", ("Shot", "Energy (uJ)", "Pulses", "Level", "Sample", "Sites"), log)
    for kind, file, columns, size in (
        ("crater-depth", "depths.csv", ("Shot", "Depth (nm)", "u (nm)"), 1e9),
        ("crater-diameter", "diameters.csv", ("Shot", "Diameter (um)"), 1e6),
        ("bubble-radius", "radii.csv", ("Shot", "Delay (us)", "Radius (um)", "u (um)"), 1e6),
        ("bubble-lifetime", "lifetimes.csv", ("Shot", "Lifetime (us)"), 1e6),
        ("pressure-integral", "pressures.csv", ("Shot", "Integral (Pa2 s)"), 1.0),
        ("arrival-time", "arrivals.csv", ("Shot", "Arrival (ns)"), 1e9),
    ):
        rows = [_row(reading, size, with_u=len(columns) > 2) for reading in invented.of(kind)]
        save_csv(folder / file, columns, rows)
    save_csv(folder / "sizes.csv", ("Sample", "From (nm)", "To (nm)", "Count"), size_rows(invented))
    manifest = manifest_head(f"invented-{invented.seed}", "Gold under water, an invented campaign") + _PLAIN_TABLES
    save_text(folder / "campaign.toml", manifest)


def size_rows(invented: Invented) -> list[tuple[Cell, ...]]:
    """Return the particle counts as rows of sample, lower edge, upper edge [nm] and count."""
    return [
        (histogram.sample, number(1e9 * low), number(1e9 * high), int(count))
        for histogram in invented.histograms
        for low, high, count in zip(histogram.edges[:-1], histogram.edges[1:], histogram.counts, strict=True)
    ]


def write_truth(invented: Invented, folder: Path) -> None:
    """Write the true numbers, the true energies and the planted faults."""
    folder.mkdir()
    lines = [
        "# The true numbers behind this invented campaign, in SI units: for whoever wants to see how well a close-out",
        "# did. Nothing that closes out the campaign reads them. Energies shot by shot, with the planted misread ones,",
        "# are in truth_shots.csv; readings that were made wrong on purpose in truth_strays.csv.",
        f"seed = {invented.seed}",
        "",
        "[inputs]",
        *(f'"{name}" = {value:.6g}' for name, value in invented.truth.values.items()),
        "",
        "[derived]",
        *(f'"{name}" = {value:.6g}' for name, value in invented.truth.derived().items()),
        "",
    ]
    save_text(folder / "truth.toml", "\n".join(lines))
    columns = (
        "shot", "level", "pulses", "logged energy (uJ)", "true energy (uJ)", "true over logged", "own deviation",
        "misread by a factor of", "incident fluence (kJ/m2)", "absorbed fluence (kJ/m2)",
    )  # fmt: skip
    shots = [
        (
            shot.name, shot.level, shot.pulses, number(1e6 * shot.logged_energy), number(1e6 * shot.true_energy, 6),
            number(shot.true_energy / shot.logged_energy, 6), number(shot.deviation, 4), number(shot.misread_factor, 4),
            number(1e-3 * shot.incident_fluence, 6), number(1e-3 * shot.absorbed_fluence, 6),
        )
        for shot in invented.shots
    ]  # fmt: skip
    save_csv(folder / "truth_shots.csv", columns, shots)
    strays = [
        (reading.kind, reading.shot, number(reading.value, 6), number(reading.true, 6))
        for reading in invented.readings
        if reading.stray
    ]
    save_csv(folder / "truth_strays.csv", ("kind", "shot", "written (SI)", "true (SI)"), strays)


def number(value: float | None, digits: int = 9) -> str:
    """Return a number as a person would type it; nothing for None."""
    return "" if value is None else f"{value:.{digits}g}"


def save_csv(
    path: Path,
    columns: Sequence[str],
    rows: Iterable[Sequence[Cell]],
    *,
    delimiter: str = ",",
    encoding: str = "utf-8",
    above: Sequence[str] = (),
) -> None:
    """Write a table as text, with lines above its headers where there are any; the same bytes on every system."""
    text = io.StringIO(newline="")
    for line in above:
        text.write(line + "\n")
    writer = csv.writer(text, delimiter=delimiter, lineterminator="\n")
    writer.writerow(columns)
    writer.writerows(rows)
    save_text(path, text.getvalue(), encoding=encoding)


def save_text(path: Path, text: str, *, encoding: str = "utf-8") -> None:
    """Write a text with its line ends as they are."""
    with path.open("w", encoding=encoding, newline="") as file:
        file.write(text)


def _row(reading: InventedReading, size: float, *, with_u: bool) -> tuple[Cell, ...]:
    delay = () if reading.delay is None else (number(1e6 * reading.delay),)
    value = "n.d." if reading.value is None else number(size * reading.value)
    u = (number(None if reading.u is None else size * reading.u),) if with_u else ()
    return (reading.shot, *delay, value, *u)


def manifest_head(name: str, title: str) -> str:
    """Return a manifest down to the probe: what does not depend on how the tables are kept."""
    return f'''contract = 1

[campaign]
name = "{name}"
title = "{title}"
date = 2026-03-14
laboratory = "an invented laboratory"
operator = "operator A"
liquid_temperature = "20 degC"

[target]
material = "gold"
thickness = "1 mm"

[liquid]
material = "water"
path = "6.0 mm"
height = "6.0 mm"
wall_distance = "15 mm"

[beam]
wavelength = "1030 nm"
pulse_duration = "350 fs"
spot_radius = "{BENCH["spot_radius"].text}"
delivery = "{BENCH["delivery"].text}"
repetition_rate = "1 kHz"
entry_radius = "0.4 mm"

[energy_meter]
calibration = "{BENCH["meter_calibration"].text}"
shot_jitter = "3 %"
identity = "meter 2"

[probe]
standoff = "{BENCH["standoff"].text}"
angle = "{BENCH["probe_angle"].text}"
aperture = "0.2 mm"
sensitivity = "{BENCH["probe_sensitivity"].text}"
bandwidth = "{BENCH["probe_response"].text}"
trigger_offset = "{BENCH["trigger_offset"].text}"
identity = "hydrophone 1"
'''


_PLAIN_TABLES = f'''
[shots]
file = "shots.csv"
columns.shot = "Shot"
columns.energy = "Energy (uJ)"
columns.pulses = "Pulses"
columns.level = "Level"
columns.sample = "Sample"
columns.sites = "Sites"

[[readings]]
kind = "crater-depth"
name = "profiler"
file = "depths.csv"
columns = {{ shot = "Shot", value = "Depth (nm)", uncertainty = "u (nm)" }}
scale = "{BENCH["scale.profiler"].text}"
detection_limit = "{number(1e9 * DEPTH_LIMIT)} nm"

[[readings]]
kind = "crater-diameter"
name = "profiler-plane"
file = "diameters.csv"
columns = {{ shot = "Shot", value = "Diameter (um)" }}
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

[[readings]]
kind = "pressure-integral"
name = "hydrophone"
file = "pressures.csv"
columns = {{ shot = "Shot", value = "Integral (Pa2 s)" }}
uncertainty = "6 %"

[[readings]]
kind = "arrival-time"
name = "hydrophone-clock"
file = "arrivals.csv"
columns = {{ shot = "Shot", value = "Arrival (ns)" }}
uncertainty = "3 ns"

[[readings]]
kind = "size-counts"
name = "tem"
file = "sizes.csv"
columns = {{ sample = "Sample", lower = "From (nm)", upper = "To (nm)", count = "Count" }}
'''

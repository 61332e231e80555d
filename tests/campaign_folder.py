"""A small campaign folder for tests: a manifest, a log and one table, each to be replaced or changed."""

from __future__ import annotations

from pathlib import Path

from reconcile.campaign.manifest import load
from reconcile.campaign.readings import Gathered
from reconcile.gather import gather

MANIFEST = """\
contract = 1

[campaign]
name = "small-1"

[target]
material = "gold"

[liquid]
material = "water"
height = "6.0 mm"

[beam]
wavelength = "1030 nm"
pulse_duration = "350 fs"
spot_radius = "21 um ± 1 um"
delivery = "0.82 ± 0.02"

[energy_meter]
calibration = "1.00 ± 0.03"

[shots]
file = "shots.csv"
columns = { shot = "Shot", energy = "Energy (uJ)" }

[[readings]]
kind = "crater-depth"
file = "craters.csv"
columns = { shot = "Shot", value = "Depth (um)", uncertainty = "u (um)" }
"""

LOG = "Shot,Energy (uJ)\ns001,10\ns002,20\ns003,30\n"
CRATERS = "Shot,Depth (um),u (um)\ns001,0.412,0.020\ns002,0.515,0.021\n"


def write(
    folder: Path, *changes: tuple[str, str], more: str = "", log: str | None = LOG, craters: str | None = CRATERS
) -> Path:
    """Write the campaign and return its folder.

    Parameters
    ----------
    folder : a new or empty folder
    changes : (old, new) in the manifest's text; the old one must stand there
    more : added to the manifest's end
    log, craters : the .csv files; None: not written
    """
    manifest = MANIFEST
    for old, new in changes:
        assert old in manifest, old
        manifest = manifest.replace(old, new)
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "campaign.toml").write_text(manifest + more, encoding="utf-8")
    for name, text in (("shots.csv", log), ("craters.csv", craters)):
        if text is not None:
            (folder / name).write_text(text, encoding="utf-8")
    return folder


def gathered(folder: Path) -> Gathered:
    """Return what is gathered of a campaign folder."""
    return gather(load(folder))

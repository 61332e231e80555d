"""The keys of campaign.toml: what each means, its unit and range, and whether it must carry a ±."""

from __future__ import annotations

import math
from dataclasses import dataclass

from reconcile.campaign.kinds import KINDS


@dataclass(frozen=True, slots=True)
class Key:
    """One key of the manifest that holds a quantity."""

    meaning: str
    unit: str | None = "1"  # SI
    required: bool = False
    is_input: bool = False  # stands for an uncertain input: its ± is propagated
    needs_u: bool = False  # refused without ±
    low: float = 0.0
    high: float = math.inf
    low_counts: bool = False  # the lower end itself is allowed

    def allows(self, value: float) -> bool:
        """Return whether a value lies in the physical range."""
        return self.low < value <= self.high or (self.low_counts and value == self.low)

    @property
    def range_text(self) -> str:
        """The range in words."""
        least = "at least" if self.low_counts else "above"
        unit = "" if self.unit in {None, "1"} else f" {self.unit}"
        if self.high == math.inf:
            return f"{least} {self.low:g}{unit}"
        return f"{least} {self.low:g} and at most {self.high:g}{unit}"


def _input(meaning: str, unit: str = "1", **more: float) -> Key:
    return Key(meaning, unit, is_input=True, needs_u=True, **more)  # type: ignore[arg-type]


QUANTITIES: dict[str, dict[str, Key]] = {
    "campaign": {
        "ambient_pressure": Key("ambient pressure", "Pa"),
        "liquid_temperature": Key("temperature of the liquid", "K"),
    },
    "target": {"thickness": Key("thickness of the target", "m")},
    "liquid": {
        "path": Key("path of the beam in the liquid above the target", "m"),
        "height": Key("height of the liquid above the target, to the free surface", "m"),
        "wall_distance": Key("distance from the site to the nearest wall", "m"),
    },
    "beam": {
        "wavelength": Key("wavelength in vacuum", "m", required=True),
        "pulse_duration": Key("pulse duration, FWHM", "s", required=True),
        "spot_radius": Key("1/e² intensity radius at the target", "m", required=True, is_input=True, needs_u=True),
        "delivery": Key(
            "share of the metered energy that arrives at the target",
            required=True,
            is_input=True,
            needs_u=True,
            high=1.0,
        ),
        "repetition_rate": Key("repetition rate of bursts", "Hz"),
        "entry_radius": Key("1/e² radius where the beam enters the liquid", "m"),
    },
    "energy_meter": {
        "calibration": Key("factor on every logged energy", required=True, is_input=True, needs_u=True),
        "shot_jitter": Key("typical relative deviation of one shot from its log", high=1.0),
    },
    "probe": {
        "standoff": _input("distance from site to probe", "m"),
        "angle": _input("angle of the probe from the surface normal", "rad", low_counts=True, high=math.pi / 2),
        "aperture": Key("active diameter of the probe", "m"),
        "sensitivity": _input("voltage of the probe per pressure", "V/Pa"),
        "bandwidth": Key("−3 dB bandwidth of the probe", "Hz", is_input=True),
        "trigger_offset": _input("recorded time of the laser pulse", "s", low=-math.inf),
        "sensitivity_uncertainty": Key(
            "relative standard uncertainty of the sensitivity file", is_input=True, high=1.0
        ),
    },
    "readings": {
        "scale": _input("error that all readings of this table share, a factor on true values"),
        "pixel_pitch": _input("size of one pixel at the object", "m"),
        "first_delay": Key("delay of the first page after the pulse", "s", low_counts=True),
        "frame_interval": Key("time from page to page", "s"),
        "sample_interval": Key("time from sample to sample", "s"),
        "start": Key("recorded time of the first sample", "s", low=-math.inf),
        "full_scale": Key("voltage of a full-scale sample", "V"),
    },
}

TEXTS: dict[str, dict[str, str]] = {
    "campaign": {
        "name": "letters, digits, - and _; names the report folder",
        "title": "title of the report",
        "date": "date of the campaign",
        "laboratory": "where it was done",
        "operator": "who did it",
        "place": "where it was done",
        "note": "a note for the report",
    },
    "target": {"material": "the target's material"},
    "liquid": {"material": "the liquid"},
    "beam": {},
    "energy_meter": {},
    "probe": {},
}
ABOUT = {"identity": "which instrument it is", "certificate": "its certificate", "note": "a note for the report"}
INSTRUMENTS = ("beam", "energy_meter", "probe", "readings")
TOP = ("contract", "campaign", "target", "liquid", "beam", "energy_meter", "probe", "shots", "readings", "priors")

# Columns of the log: SI unit, or None for text.
LOG_COLUMNS: dict[str, str | None] = {
    "shot": None, "energy": "J", "power": "W", "pulses": "1", "level": None, "sample": None, "sites": "1",
    "standoff": "m", "spot_radius": "m", "transmission": "1", "delay": "s", "time": None, "note": None,
}  # fmt: skip

TABLE_KEYS = ("file", "sheet", "only", "columns", "units", "decimal", "delimiter", "encoding")
READINGS_KEYS = ("kind", "name", "scale", *ABOUT, *TABLE_KEYS)
VALUE_KEYS = ("uncertainty", "detection_limit", "not_detected")

# What each table kind beyond the kinds takes: its own keys, and its columns with their SI units (None: text).
FILE_KINDS: dict[str, tuple[str, ...]] = {
    "crater-map": ("files", "list", "pixel_pitch", "height_unit"),
    "shadowgraph": (
        "files", "list", "pixel_pitch", "graticule", "target_edge", "background", "first_delay", "frame_interval",
    ),
    "probe-trace": ("files", "list", "sample_interval", "start", "full_scale"),
    "micrograph": ("files", "list", "pixel_pitch", "graticule"),
}  # fmt: skip
SIZE_COLUMNS: dict[str, dict[str, str | None]] = {
    "size-counts": {"sample": None, "lower": "m", "upper": "m", "count": "1"},
    "particle-list": {"sample": None, "value": "m"},
}
FILE_COLUMNS: dict[str, dict[str, str | None]] = {"probe-trace": {"time": "s", "voltage": "V"}}
EDGES = ("bottom", "top", "left", "right")


def table_columns(kind: str) -> dict[str, str | None]:
    """Return the columns that a table of this kind may name, with their SI units (None: text)."""
    if kind == "log":
        return LOG_COLUMNS
    if kind in SIZE_COLUMNS:
        return SIZE_COLUMNS[kind]
    if kind in KINDS:
        entry = KINDS[kind]
        delay: dict[str, str | None] = {"delay": "s"} if entry.has_delay else {}
        return {entry.target: None, **delay, "value": entry.unit, "uncertainty": entry.unit}
    return FILE_COLUMNS.get(kind, {})


def table_keys(kind: str) -> tuple[str, ...]:
    """Return the keys of a [[readings]] table of this kind."""
    if kind in FILE_KINDS:
        without = {"file", "sheet"} | (set() if kind in FILE_COLUMNS else {"columns", "units"})
        return tuple(key for key in READINGS_KEYS if key not in without) + FILE_KINDS[kind]
    return READINGS_KEYS + (VALUE_KEYS if kind in KINDS else ())


def questions() -> dict[str, str]:
    """Return the meaning of every key, by its full name."""
    quantities = {f"{table}.{key}": spec.meaning for table, keys in QUANTITIES.items() for key, spec in keys.items()}
    texts = {f"{table}.{key}": meaning for table, keys in TEXTS.items() for key, meaning in keys.items()}
    return quantities | texts

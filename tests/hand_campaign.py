"""A small campaign put together by hand, with every kind of reading: no file is read for it."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path

from reconcile.campaign.campaign import Beam, Campaign, EnergyMeter, Liquid, Prior, Probe, Quantity, Table, Target
from reconcile.campaign.readings import Gathered, Reading, Shot
from reconcile.campaign.refusal import Place

HERE = Place("campaign.toml")
NOMINAL_RADIUS, NOMINAL_STANDOFF = 21e-6, 5e-3  # [m]
NOMINAL_SENSITIVITY, NOMINAL_TRIGGER = 2e-8, 3e-8  # [V/Pa], [s]
NOMINAL_PITCH = {"camera": 1.6e-6, "microscope": 0.9e-9}  # [m]


def quantity(value: float, u: float | None, unit: str) -> Quantity:
    """Return a quantity; its text is of no interest here."""
    return Quantity(value, u, unit, f"{value} {unit}")


TABLES = (
    Table("crater-depth", "profiler", HERE, scale=quantity(1.0, 0.02, "1")),
    Table("crater-depth", "afm", HERE, scale=quantity(1.0, 0.05, "1")),
    Table("crater-diameter", "diameters", HERE),
    Table("shadowgraph", "camera", HERE, pixel_pitch=quantity(NOMINAL_PITCH["camera"], 2e-8, "m")),
    Table("bubble-lifetime", "lifetimes", HERE),
    Table("probe-trace", "traces", HERE),
    Table("reflected-fraction", "mirror", HERE, scale=quantity(1.0, 0.03, "1")),
    Table("micrograph", "microscope", HERE, pixel_pitch=quantity(NOMINAL_PITCH["microscope"], 2e-11, "m")),
)


def campaign(priors: Mapping[str, Prior] | None = None) -> Campaign:
    """Return the manifest of gold in water; `priors` are stated ones."""
    return Campaign(
        name="by-hand",
        folder=Path("by-hand"),
        target=Target("gold"),
        liquid=Liquid("water", height=quantity(6e-3, 1e-4, "m")),
        beam=Beam(
            wavelength=quantity(1030e-9, None, "m"),
            pulse_duration=quantity(350e-15, None, "s"),
            spot_radius=quantity(NOMINAL_RADIUS, 8e-7, "m"),
            delivery=quantity(0.82, 0.02, "1"),
        ),
        meter=EnergyMeter(quantity(1.0, 0.03, "1"), shot_jitter=quantity(0.03, None, "1")),
        log=Table("log", "shots", HERE, file="shots.csv"),
        tables=TABLES,
        ambient_pressure=quantity(101_325.0, None, "Pa"),
        liquid_temperature=quantity(293.15, None, "K"),
        probe=Probe(
            standoff=quantity(NOMINAL_STANDOFF, 3e-5, "m"),
            angle=quantity(0.35, 0.09, "rad"),
            sensitivity=quantity(NOMINAL_SENSITIVITY, 2e-9, "V/Pa"),
            bandwidth=quantity(50e6, None, "Hz"),
            trigger_offset=quantity(NOMINAL_TRIGGER, 1e-8, "s"),
        ),
        priors=dict(priors or {}),
    )


SHOTS = (
    Shot("ordinary", 20e-6, HERE, sample="vial"),
    Shot(
        "ten-pulses", 40e-6, HERE, pulses=10, spot_radius=30e-6, transmission=0.8, standoff=6e-3, sites=3, sample="vial"
    ),
    Shot("misread", 15e-6, HERE, sample="vial"),  # its readings are those of 1.8 times the energy
    Shot("near-threshold", 6.0e-6, HERE),
    Shot("nothing-seen", 5.5e-6, HERE),
    Shot("one-reading", 25e-6, HERE),
    Shot("filmed", 30e-6, HERE),
    Shot("without-readings", 18e-6, HERE, sample="vial"),
    Shot("set-aside", 22e-6, HERE, sample="vial", set_aside="mirror knocked"),
)


# Of tables whose readings are not of the table's own kind.
TABLE_KIND = {"camera": "shadowgraph", "traces": "probe-trace"}


def reading(kind: str, shot: str, table: str, value: float, u: float, delay: float | None = None) -> Reading:
    """Return a measured reading of a shot."""
    return Reading(kind, shot, None, table, HERE, delay=delay, value=value, u=u, table_kind=TABLE_KIND.get(table))


def below(kind: str, shot: str, table: str, limit: float) -> Reading:
    """Return a reading below a limit."""
    return Reading(kind, shot, None, table, HERE, limit=limit)


# Numbers by hand, round ones near what the shots show at `INPUTS`; some agree with the others, some do not.
READINGS = (
    reading("crater-depth", "ordinary", "profiler", 2.10e-7, 8e-9),
    reading("crater-depth", "ordinary", "profiler", 2.00e-7, 8e-9),
    reading("crater-depth", "ordinary", "afm", 2.31e-7, 5e-9),
    reading("crater-diameter", "ordinary", "diameters", 3.6e-5, 9e-7),
    reading("bubble-radius", "ordinary", "camera", 7.4e-5, 1.5e-6, 4e-6),
    reading("bubble-radius", "ordinary", "camera", 9.3e-5, 1.5e-6, 8e-6),
    reading("bubble-lifetime", "ordinary", "lifetimes", 1.80e-5, 2e-7),
    reading("pressure-integral", "ordinary", "traces", 95.0, 9.0),
    reading("arrival-time", "ordinary", "traces", 3.36e-6, 8e-9),
    reading("reflected-fraction", "ordinary", "mirror", 0.83, 0.03),
    reading("crater-depth", "ten-pulses", "profiler", 1.6e-6, 5e-8),
    reading("crater-diameter", "ten-pulses", "diameters", 4.9e-5, 1e-6),
    reading("bubble-lifetime", "ten-pulses", "lifetimes", 2.1e-5, 2e-7),
    reading("pressure-integral", "ten-pulses", "traces", 90_000.0, 9.0),  # a unit slip of 1000
    reading("arrival-time", "ten-pulses", "traces", 4.02e-6, 8e-9),
    reading("crater-depth", "misread", "profiler", 2.45e-7, 8e-9),
    reading("crater-diameter", "misread", "diameters", 4.3e-5, 9e-7),
    reading("bubble-lifetime", "misread", "lifetimes", 2.12e-5, 2e-7),
    reading("crater-depth", "near-threshold", "afm", 1.2e-8, 3e-9),
    reading("crater-diameter", "near-threshold", "diameters", 8e-6, 1.2e-6),
    reading("bubble-lifetime", "near-threshold", "lifetimes", 4.0e-6, 2e-7),
    below("crater-depth", "nothing-seen", "profiler", 2e-9),
    below("crater-diameter", "nothing-seen", "diameters", 3e-6),
    below("bubble-lifetime", "nothing-seen", "lifetimes", 2e-6),
    reading("crater-diameter", "one-reading", "diameters", 4.1e-5, 9e-7),
    # More delays than the likelihood multiplies in one go.
    *(
        reading("bubble-radius", "filmed", "camera", 1.12e-4 - 1.1e-5 * (n - 7.5) ** 2 / 14, 2e-6, 1.3e-6 * n + 1e-6)
        for n in range(15)
    ),
    Reading("median-diameter", None, "vial", "microscope", HERE, value=1.30e-8, u=4e-10, table_kind="micrograph"),
    Reading("median-diameter", None, "vial", "microscope", HERE, value=1.21e-8, u=4e-10, table_kind="micrograph"),
)


def gathered(
    priors: Mapping[str, Prior] | None = None, without: tuple[str, ...] = (), shots: tuple[Shot, ...] = SHOTS
) -> Gathered:
    """Return shots and readings, kinds of `without` left out."""
    return Gathered(campaign(priors), shots, tuple(entry for entry in READINGS if entry.kind not in without))


# One value of every input that this campaign has, somewhat off every prior's centre. SI.
INPUTS: dict[str, float] = {
    "absorbed_fraction": 0.115,
    "absorption_exponent": 0.06,
    "delivery": 0.81,
    "heated_depth": 1.15e-7,
    "heated_depth_exponent": -0.17,
    "removal_energy_density": 6.4e9,
    "removal_factor": 1.12,
    "threshold_depth": 2.3e-8,
    "incubation_exponent": 0.9,
    "pressure_coefficient": 1.7,
    "bubble_yield": 0.12,
    "bubble_yield_exponent": 0.05,
    "shock_factor": 0.45,
    "fragment_factor": 0.043,
    "wall_prolongation": 1.04,
    "bubble_gas": 0.003,
    "melt_surface_tension": 0.5,
    "melt_viscosity": 3e-3,
    "spot_radius": 2.14e-5,
    "meter_calibration": 0.985,
    "probe_sensitivity": 2.15e-8,
    "probe_response": 3.4e-9,
    "probe_angle": 0.4,
    "standoff": 5.02e-3,
    "trigger_offset": 3.6e-8,
    "energy_jitter": 0.035,
    "stray_rate": 0.06,
    "misread_rate": 0.03,
    "scale.profiler": 1.015,
    "scale.afm": 0.97,
    "scale.mirror": 1.02,
    "pixel_pitch.camera": 1.63e-6,
    "pixel_pitch.microscope": 0.905e-9,
    "scatter.crater-depth": 0.06,
    "scatter.crater-diameter": 0.04,
    "scatter.bubble-radius": 0.03,
    "scatter.bubble-lifetime": 0.025,
    "scatter.pressure-integral": 0.07,
    "scatter.arrival-time": 1.2e-8,
    "scatter.median-diameter": 0.06,
    "scatter.reflected-fraction": 0.05,
}

"""The uncertain inputs: name, unit, range, scale, meaning and default prior, in one fixed order."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

INFINITY = math.inf


@dataclass(frozen=True, slots=True)
class Input:
    """One uncertain number that the reduced model or an instrument brings."""

    name: str
    unit: str  # SI
    belongs_to: Literal["m", "i", "c", "-"]  # material and liquid, instrument, this campaign; "-": derived from several
    meaning: str
    scale: Literal["linear", "log", "logit"]  # on which its posterior is nearest to normal
    low: float  # physical range
    high: float
    default: str | None = None  # prior as written; None: it comes from the manifest, the material or other inputs
    derived: bool = False


INPUTS: dict[str, Input] = {
    entry.name: entry
    for entry in (
        Input("absorbed_fraction", "1", "m", "share of the arriving pulse energy that the target absorbs, at 10 kJ/m² incident fluence", "log", 0, 1),
        Input("absorption_exponent", "1", "m", "how the absorbed fraction scales with incident fluence", "linear", -0.9, INFINITY, "normal(0, 0.15)"),
        Input("delivery", "1", "i", "share of the metered pulse energy that arrives at the target surface", "log", 0, 1),
        Input("coupling", "1", "-", "delivery times absorbed fraction, at 10 kJ/m² incident", "log", 0, 1, derived=True),
        Input("coupling_over_threshold", "m2/J", "-", "delivery × absorbed fraction × meter calibration over threshold fluence", "log", 0, INFINITY, derived=True),
        Input("absorbed_fluence_per_energy", "1/m2", "-", "peak absorbed fluence per logged joule at the nominal spot and 10 kJ/m² incident", "log", 0, INFINITY, derived=True),
        Input("incident_fluence_per_energy", "1/m2", "-", "peak incident fluence per logged joule at the nominal spot", "log", 0, INFINITY, derived=True),
        Input("heated_depth", "m", "m", "energy depth of the heated layer at 1 kJ/m² absorbed", "log", 0, INFINITY, "lognormal(100 nm, 45 %)"),
        Input("heated_depth_exponent", "1", "m", "how the heated depth scales with absorbed fluence", "linear", -0.9, 0.9, "normal(-0.20, 0.12)"),
        Input("removal_energy_density", "J/m3", "m", "threshold fluence over heated depth there", "log", 0, INFINITY, "lognormal(6e9 J/m3, 40 %)"),
        Input("threshold_fluence", "J/m2", "-", "absorbed fluence at which removal starts, one pulse", "log", 0, INFINITY, derived=True),
        Input("removal_factor", "1", "m", "crater depth scale over that of the heated layer", "log", 0, INFINITY, "lognormal(1, 30 %)"),
        Input("threshold_depth", "m", "m", "depth of a crater just above threshold", "log", 0, INFINITY, "lognormal(20 nm, 80 %)"),
        Input("incubation_exponent", "1", "m", "threshold of N pulses = threshold × N^(exponent − 1)", "log", 0.6, 1, "normal(0.88, 0.05)"),
        Input("pressure_coefficient", "1", "m", "initial pressure over energy density", "log", 0, INFINITY, "lognormal(1.5, 60 %)"),
        Input("bubble_yield", "1", "m", "bubble energy over absorbed energy, at 1 kJ/m² absorbed", "log", 0, INFINITY, "lognormal(0.1, 90 %)"),
        Input("bubble_yield_exponent", "1", "m", "how the bubble yield scales with absorbed fluence", "linear", -INFINITY, INFINITY, "normal(0, 0.1)"),
        Input("shock_factor", "1", "m", "shock energy over kinetic energy of the expelled layer", "log", 0, INFINITY, "lognormal(0.5, 70 %)"),
        Input("fragment_factor", "1", "m", "median particle diameter over the fastest-growing wavelength", "log", 0, INFINITY, "lognormal(0.04, 70 %)"),
        Input("wall_prolongation", "1", "m", "bubble lifetime over that of an ideal hemisphere", "log", 0, INFINITY, "lognormal(1.03, 4 %)"),
        Input("bubble_gas", "1", "m", "gas pressure in the bubble at its largest over the ambient overpressure", "log", 0, INFINITY, "fixed(0.003)"),
        Input("melt_surface_tension", "N/m", "m", "surface tension of the hot liquid metal", "log", 0, INFINITY, "fixed(0.5 N/m)"),
        Input("melt_viscosity", "Pa s", "m", "viscosity of the hot liquid metal", "log", 0, INFINITY, "fixed(3 mPa s)"),
        Input("spot_radius", "m", "i", "1/e² intensity radius of the beam at the target", "log", 0, INFINITY),
        Input("meter_calibration", "1", "i", "factor on every logged energy, common to all shots", "log", 0, INFINITY),
        Input("probe_sensitivity", "V/Pa", "i", "voltage of the probe per pressure", "log", 0, INFINITY),
        Input("probe_response", "s", "i", "response time of the probe, 1/(2π bandwidth)", "log", 0, INFINITY),
        Input("probe_angle", "rad", "i", "angle of the probe from the surface normal", "linear", 0, math.pi / 2),
        Input("standoff", "m", "c", "distance from site to probe", "log", 0, INFINITY),
        Input("trigger_offset", "s", "c", "recorded time of the laser pulse", "linear", -INFINITY, INFINITY),
        Input("energy_jitter", "1", "c", "spread of single shots about their log", "log", 0, INFINITY, "lognormal(3 %, 50 %)"),
        Input("stray_rate", "1", "c", "share of stray readings", "logit", 0, 1, "logitnormal(5 %, 1)"),
        Input("misread_rate", "1", "c", "share of misread energies", "logit", 0, 1, "logitnormal(2 %, 1)"),
    )
}

# Inputs of which a campaign has one for each table or kind; the part before the dot.
FAMILIES: dict[str, Input] = {
    entry.name: entry
    for entry in (
        Input("pixel_pitch", "m", "i", "size of one pixel at the object", "log", 0, INFINITY),
        Input("scale", "1", "i", "error that all readings of one table share, a factor on true values", "log", 0, INFINITY),
        Input("scatter", "1", "c", "relative spread of a kind beyond its stated uncertainties", "log", 0, INFINITY),
    )
}


def describe(name: str) -> Input:
    """Return the entry of an input by its full name, `scale.profiler` included; raises KeyError for an unknown one."""
    if name in INPUTS:
        return INPUTS[name]
    family = FAMILIES[name.partition(".")[0]]
    unit = "s" if name == "scatter.arrival-time" else family.unit
    return Input(name, unit, family.belongs_to, family.meaning, family.scale, family.low, family.high)

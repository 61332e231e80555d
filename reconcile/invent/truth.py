"""The true numbers of an invented campaign, and what its laboratory believes of its instruments."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from reconcile.physics import beam, removal

NARROWED = 1.2  # [sd] true material numbers lie this near to the centre of the default priors
LARGEST_SHARE = 0.9  # [1] of the strongest pulse, absorbed
LARGEST_YIELD = 0.5  # [1] bubble and shock energy over absorbed energy of the strongest pulse
LARGEST_THRESHOLD = 1000.0  # [J/m²] so that the levels span a factor of ten below the model's upper limit


@dataclass(frozen=True, slots=True)
class Stated:
    """What the laboratory states of one of its instruments."""

    value: float  # [SI]
    u: float  # [SI]
    text: str  # as its manifest has it


BENCH: dict[str, Stated] = {
    "spot_radius": Stated(21e-6, 1e-6, "21 um ± 1 um"),
    "delivery": Stated(0.82, 0.02, "0.82 ± 0.02"),
    "meter_calibration": Stated(1.0, 0.03, "1.00 ± 0.03"),
    "probe_sensitivity": Stated(0.45e-6, 0.045e-6, "0.45 V/MPa ± 10 %"),
    "probe_response": Stated(1 / (2 * math.pi * 30e6), 0.15 / (2 * math.pi * 30e6), "30 MHz"),
    "probe_angle": Stated(0.0, math.radians(5), "0 deg ± 5 deg"),
    "standoff": Stated(5e-3, 0.1e-3, "5.0 mm ± 0.1 mm"),
    "trigger_offset": Stated(0.0, 20e-9, "0 ns ± 20 ns"),
    "scale.profiler": Stated(1.0, 0.02, "1.00 ± 0.02"),
}

# Centre and spread of what is drawn: the default priors of the inputs. "ln": the spread is one of the logarithm.
# The cold absorptance of gold under water at 1030 nm, 0.0271, is computed from n = 0.2421, k = 6.7038 (Johnson &
# Christy 1972, Phys Rev B 6, 4370) and n_w = 1.3244 (Kedenburg et al. 2012); a hot surface takes some 3.5 times that.
_MATERIAL: tuple[tuple[str, str, float, float], ...] = (
    ("absorbed_fraction", "ln", 3.5 * 0.0271, 0.6),
    ("absorption_exponent", "linear", 0.0, 0.15),
    ("heated_depth", "ln", 100e-9, 0.45),
    ("heated_depth_exponent", "linear", -0.20, 0.12),
    ("removal_energy_density", "ln", 6e9, 0.4),
    ("removal_factor", "ln", 1.0, 0.3),
    ("threshold_depth", "ln", 20e-9, 0.8),
    ("incubation_exponent", "linear", 0.88, 0.05),
    ("pressure_coefficient", "ln", 1.5, 0.6),
    ("bubble_yield", "ln", 0.1, 0.9),
    ("bubble_yield_exponent", "linear", 0.0, 0.1),
    ("shock_factor", "ln", 0.5, 0.7),
    ("fragment_factor", "ln", 0.04, 0.7),
    ("wall_prolongation", "ln", 1.03, 0.04),
    ("energy_jitter", "ln", 0.03, 0.5),
    ("scatter.crater-depth", "ln", 0.05, 0.7),
    ("scatter.crater-diameter", "ln", 0.05, 0.7),
    ("scatter.bubble-radius", "ln", 0.05, 0.7),
    ("scatter.bubble-lifetime", "ln", 0.02, 0.7),
    ("scatter.pressure-integral", "ln", 0.05, 0.7),
    ("scatter.arrival-time", "ln", 10e-9, 0.7),
    ("scatter.median-diameter", "ln", 0.05, 0.7),
)
_FIXED = {"bubble_gas": 3e-3, "melt_surface_tension": 0.5, "melt_viscosity": 3e-3}


@dataclass(frozen=True, slots=True)
class Truth:
    """The true values of all inputs by name, SI; derived ones follow from them.

    Rates of strays and misread energies are not among them: faults are planted, not drawn.
    """

    values: Mapping[str, float]

    def __getitem__(self, name: str) -> float:
        """Return a true value; raises KeyError for an unknown name."""
        return self.values[name] if name in self.values else self.derived()[name]

    def derived(self) -> dict[str, float]:
        """Return the true values of the derived inputs by name, SI."""
        v = self.values
        threshold = float(
            removal.threshold_fluence(v["removal_energy_density"], v["heated_depth"], v["heated_depth_exponent"])
        )
        coupling = v["absorbed_fraction"] * v["delivery"]
        incident = v["delivery"] * v["meter_calibration"] * float(beam.peak_fluence(1.0, v["spot_radius"]))
        return {
            "coupling": coupling,
            "coupling_over_threshold": coupling * v["meter_calibration"] / threshold,
            "absorbed_fluence_per_energy": v["absorbed_fraction"] * incident,
            "incident_fluence_per_energy": incident,
            "threshold_fluence": threshold,
        }

    def logged_energy(self, absorbed_fluence: float) -> float:
        """Return the logged energy whose sound shot absorbs a given fluence on the axis [J]."""
        share = absorbed_fluence / (self["absorbed_fraction"] * beam.REFERENCE_INCIDENT)
        incident = beam.REFERENCE_INCIDENT * math.pow(share, 1 / (1 + self["absorption_exponent"]))
        return incident / self["incident_fluence_per_energy"]


def draw_truth(rng: np.random.Generator) -> Truth:
    """Draw the true numbers of a campaign.

    Material numbers and scatters come from the default priors, cut at 1.2 standard deviations; instruments come from
    what `BENCH` states, uncut (the response time's spread is one of its logarithm). Draws that absorb or give out
    more than they may at the strongest level, or whose threshold is too high for ten-fold levels, are drawn again.

    Parameters
    ----------
    rng : the source of all randomness.
    """
    from reconcile.invent.nature import energy_share  # the fuller physics judges the draw

    while True:
        values = dict(_FIXED)
        for name, scale, centre, spread in _MATERIAL:
            deviation = spread * _narrowed(rng)
            values[name] = centre * math.exp(deviation) if scale == "ln" else centre + deviation
        for name, stated in BENCH.items():
            values[name] = stated.value + stated.u * float(rng.standard_normal())
        response = BENCH["probe_response"]
        values["probe_response"] = response.value * math.exp(response.u / response.value * float(rng.standard_normal()))
        values["probe_angle"] = abs(values["probe_angle"])
        truth = Truth(values)
        if truth["threshold_fluence"] > LARGEST_THRESHOLD:
            continue
        fluence = strongest_fluence(truth)
        incident = truth.logged_energy(fluence) * truth["incident_fluence_per_energy"]
        if fluence / incident < LARGEST_SHARE and energy_share(truth, fluence) < LARGEST_YIELD:
            return truth


def strongest_fluence(truth: Truth) -> float:
    """Return the absorbed fluence of the strongest level [J/m²].

    It is the one at 30 times the threshold's energy, but 10 kJ/m² at most, up to which the reduced model is stated.
    """
    return min(10e3, truth["threshold_fluence"] * math.pow(30, 1 + truth["absorption_exponent"]))


def _narrowed(rng: np.random.Generator) -> float:
    """Draw from a normal distribution cut at `NARROWED` standard deviations."""
    while True:
        drawn = float(rng.standard_normal())
        if abs(drawn) < NARROWED:
            return drawn

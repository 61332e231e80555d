"""The reduced model joined up: from inputs and energies to what each kind of reading should show."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from reconcile.campaign.campaign import Campaign, Table
from reconcile.campaign.materials import properties_of_liquid, properties_of_target
from reconcile.physics import beam, bubble, contact, fragments, heating, removal, sound
from reconcile.physics.matter import Fluid, Metal

Array: TypeAlias = NDArray[np.float64]
Inputs = Mapping[str, Array]  # by input name; each (draws,) or a scalar array, SI

REFERENCE_INCIDENT = beam.REFERENCE_INCIDENT  # [J/m²] at which the absorbed fraction is stated
REFERENCE_ABSORBED = heating.REFERENCE_FLUENCE  # [J/m²] at which heated depth and bubble yield are stated

# Relative error that the closed form of R(t) makes against integrated bubble motion, in units of the largest radius.
MOTION_ERROR = 0.005
# What one deviation of the kinds with logarithmic residuals is never predicted below [unit of the kind].
TINY = 1e-30


@dataclass(frozen=True, slots=True)
class Conditions:
    """What is taken as known of a campaign: matter, ambient, nominal geometry. SI."""

    metal: Metal
    fluid: Fluid
    overpressure: float  # ambient pressure less vapour pressure
    height: float | None  # of liquid above the target; None: taken as deep
    spot_radius: float  # nominal
    standoff: float | None  # nominal; None: no probe
    sensitivity: float | None  # nominal
    trigger_offset: float  # nominal; 0 where none is stated
    pixel_pitch: Mapping[str, float]  # nominal, by table

    @classmethod
    def of(cls, campaign: Campaign) -> Conditions:
        """Take the conditions from a manifest; raises Refusal where a material lacks a property."""
        target, liquid = properties_of_target(campaign), properties_of_liquid(campaign)
        metal = Metal(**{name: getattr(target, name) for name in Metal.__dataclass_fields__})
        fluid = Fluid(**{name: getattr(liquid, name) for name in Fluid.__dataclass_fields__})
        probe = campaign.probe
        height = campaign.liquid.height or campaign.liquid.path
        return cls(
            metal,
            fluid,
            overpressure=campaign.ambient_pressure.value - fluid.vapour_pressure,
            height=height.value if height else None,
            spot_radius=campaign.beam.spot_radius.value,
            standoff=probe.standoff.value if probe and probe.standoff else None,
            sensitivity=probe.sensitivity.value if probe and probe.sensitivity else None,
            trigger_offset=probe.trigger_offset.value if probe and probe.trigger_offset else 0.0,
            pixel_pitch={table.name: table.pixel_pitch.value for table in campaign.tables if table.pixel_pitch},
        )


@dataclass(frozen=True, slots=True)
class Exposures:
    """Energies and places at which the model is asked, before any input is applied; arrays broadcast to (n, draws)."""

    energy: Array  # [J] logged energy times filter transmission, with the shot's own deviation in it
    pulses: Array
    spot_radius: Array  # [m] nominal
    standoff: Array  # [m] nominal; NaN where there is no probe


class Expected:
    """What the reduced model expects of some exposures, for a batch of draws; each part is worked out when asked for.

    Parameters
    ----------
    conditions : constants of the campaign
    inputs : (draws,) arrays by input name
    exposures : arrays that broadcast with (draws,) on the last axis
    """

    def __init__(self, conditions: Conditions, inputs: Inputs, exposures: Exposures) -> None:
        self.conditions = conditions
        self.inputs = inputs
        self.exposures = exposures

    @cached_property
    def radius(self) -> Array:
        """Spot radius [m]: nominal values share the relative error of the manifest's."""
        return self.inputs["spot_radius"] * (self.exposures.spot_radius / self.conditions.spot_radius)

    @cached_property
    def standoff(self) -> Array:
        """Distance to the probe [m]: nominal values share the error of the manifest's."""
        if self.conditions.standoff is None:
            return self.inputs["standoff"]
        return self.exposures.standoff + (self.inputs["standoff"] - self.conditions.standoff)

    @cached_property
    def incident(self) -> Array:
        """Incident fluence on the axis [J/m²]."""
        arriving = self.inputs["delivery"] * self.inputs["meter_calibration"] * self.exposures.energy
        return beam.peak_fluence(arriving, self.radius)

    @cached_property
    def absorbed(self) -> Array:
        """Absorbed fluence on the axis [J/m²]."""
        inputs = self.inputs
        return beam.absorbed_fluence(self.incident, inputs["absorbed_fraction"], inputs["absorption_exponent"])

    @cached_property
    def excess(self) -> Array:
        """Logarithm of absorbed over threshold fluence, soft at the threshold."""
        inputs = self.inputs
        exponent = inputs["heated_depth_exponent"]
        single = removal.threshold_fluence(inputs["removal_energy_density"], inputs["heated_depth"], exponent)
        threshold = removal.incubated(single, self.exposures.pulses, inputs["incubation_exponent"])
        return removal.log_excess(self.absorbed, threshold)

    @cached_property
    def depth_of_heat(self) -> Array:
        """Energy depth of the heated layer on the axis [m]."""
        return heating.heated_depth(self.absorbed, self.inputs["heated_depth"], self.inputs["heated_depth_exponent"])

    @cached_property
    def crater_depth(self) -> Array:
        """Depth [m] of the crater of all pulses."""
        inputs = self.inputs
        one = removal.crater_depth(
            self.excess,
            self.depth_of_heat,
            inputs["heated_depth_exponent"],
            inputs["removal_factor"],
            inputs["threshold_depth"],
        )
        return self.exposures.pulses * one

    @cached_property
    def crater_diameter(self) -> Array:
        """Diameter [m] of the crater."""
        return removal.crater_diameter(self.excess, self.radius)

    @cached_property
    def volume_of_one_pulse(self) -> Array:
        """Volume [m³] that one pulse removes."""
        inputs = self.inputs
        return removal.crater_volume(
            self.excess,
            self.depth_of_heat,
            inputs["heated_depth_exponent"],
            inputs["removal_factor"],
            inputs["threshold_depth"],
            self.radius,
        )

    @cached_property
    def largest_radius(self) -> Array:
        """Largest radius [m] of the bubble."""
        inputs, fluid = self.inputs, self.conditions.fluid
        energy = bubble.bubble_energy(
            self.absorbed, self.excess, self.radius, inputs["bubble_yield"], inputs["bubble_yield_exponent"]
        )
        return bubble.largest_radius(energy, self.conditions.overpressure, fluid.surface_tension)

    @cached_property
    def motion(self) -> Array:
        """Largest radius [m], durations [s] of growth and of collapse; stacked, (3, n, draws)."""
        conditions, inputs = self.conditions, self.inputs
        largest, gas, fluid = self.largest_radius, inputs["bubble_gas"], conditions.fluid
        prolongation = inputs["wall_prolongation"] * bubble.boundary_factor(largest, conditions.height)
        collapse = bubble.collapse_time(largest, conditions.overpressure, fluid, gas, prolongation)
        growth = bubble.growth_time(collapse, largest, conditions.overpressure, fluid, gas)
        return np.stack(np.broadcast_arrays(largest, growth, collapse))

    @cached_property
    def lifetime(self) -> Array:
        """Time [s] from the pulse to the first collapse."""
        return self.motion[1] + self.motion[2]

    @cached_property
    def source(self) -> sound.Source:
        """The heated spot as a source of sound."""
        inputs = self.inputs
        return sound.Source(
            fluence=self.absorbed,
            excess=self.excess,
            depth=self.depth_of_heat,
            depth_exponent=inputs["heated_depth_exponent"],
            pressure_coefficient=inputs["pressure_coefficient"],
            shock_factor=inputs["shock_factor"],
            radius=self.radius,
        )

    @cached_property
    def pulse(self) -> sound.Pulse:
        """The pressure pulse at the probe."""
        inputs = self.inputs
        conditions = self.conditions
        return sound.pressure_pulse(
            self.source, self.standoff, inputs["probe_angle"], conditions.metal, conditions.fluid
        )

    @cached_property
    def pressure_integral(self) -> Array:
        """∫p²dt [Pa²·s] of the first pulse as recorded by a probe of the nominal sensitivity."""
        fluid = self.conditions.fluid
        return sound.recorded_integral(self.pulse, self.inputs["probe_response"], self.standoff, fluid)

    @cached_property
    def shock_yield(self) -> Array:
        """Shock energy over absorbed energy."""
        absorbed_energy = self.absorbed * np.pi * self.radius**2 / 2.0
        return sound.shock_energy(self.source, self.conditions.metal, self.conditions.fluid) / absorbed_energy

    @cached_property
    def median_diameter(self) -> Array:
        """Number median diameter [m] of the particles of one exposure."""
        inputs, metal, fluid = self.inputs, self.conditions.metal, self.conditions.fluid
        pressure = inputs["pressure_coefficient"] * heating.energy_density(self.absorbed, self.depth_of_heat)
        velocity = contact.contact_velocity(pressure, metal, fluid)
        mach = contact.mach_ratio(velocity, fluid)
        drag = contact.drag_time(self.depth_of_heat, metal, fluid)
        return fragments.median_diameter(
            inputs["fragment_factor"],
            contact.deceleration(velocity, drag, mach),
            mach,
            metal,
            fluid,
            inputs["melt_surface_tension"],
            inputs["melt_viscosity"],
        )

    @cached_property
    def absorbed_share(self) -> Array:
        """Share of the arriving energy that is absorbed."""
        return self.absorbed / self.incident

    @staticmethod
    def radius_during(delay: float | Array, motion: Array) -> Array:
        """Radius [m] of bubbles of such a `motion` at a delay [s] after the pulse; 0 after the collapse."""
        return bubble.radius_at(delay, motion[0], motion[1], motion[2])


# What each kind expects, and the width of its stray readings: a floor that does not follow the prediction.
EXPECTED: dict[str, Callable[[Expected], Array]] = {
    "crater-depth": lambda state: state.crater_depth,
    "crater-diameter": lambda state: state.crater_diameter,
    "bubble-lifetime": lambda state: np.maximum(state.lifetime, TINY),
    "pressure-integral": lambda state: np.maximum(state.pressure_integral, TINY),
    "arrival-time": lambda state: state.pulse.arrival_time,
    "reflected-fraction": lambda state: 1.0 - state.absorbed_share,
    "median-diameter": lambda state: np.maximum(state.median_diameter, TINY),
}
STRAY_WIDTH: dict[str, Callable[[Expected], Array]] = {
    "crater-depth": lambda state: np.hypot(state.crater_depth, state.exposures.pulses * state.depth_of_heat),
    "crater-diameter": lambda state: np.hypot(state.crater_diameter, state.radius),
    "bubble-radius": lambda state: state.largest_radius,
    "bubble-lifetime": lambda state: np.ones(1),  # in the logarithm
    "pressure-integral": lambda state: np.ones(1),
    "median-diameter": lambda state: np.ones(1),
    "arrival-time": lambda state: np.full(1, 200e-9),  # [s]
    "reflected-fraction": lambda state: np.full(1, 0.3),
}

# Kinds whose scatter is a share of the expectation, among those with linear residuals.
RELATIVE_SCATTER = ("crater-depth", "crater-diameter", "bubble-radius", "reflected-fraction")


def expected_of(state: Expected, kind: str, delay: Array | None) -> Array:
    """Expected true value (n, draws) of a kind, at delays (n,) [s] where it is read at one."""
    if delay is not None:
        return state.radius_during(delay[:, None], state.motion)
    return EXPECTED[kind](state)


# Which inputs decide the expectation of a kind, beyond those that every kind shares.
TOUCHES: dict[str, tuple[str, ...]] = {
    "crater-depth": ("removal_factor", "threshold_depth", "incubation_exponent"),
    "crater-diameter": ("incubation_exponent",),
    "bubble-radius": ("incubation_exponent", "wall_prolongation", "bubble_gas"),
    "bubble-lifetime": ("incubation_exponent", "wall_prolongation", "bubble_gas"),
    "pressure-integral": (
        "incubation_exponent",
        "standoff",
        "probe_sensitivity",
        "probe_response",
        "probe_angle",
    ),
    "arrival-time": ("incubation_exponent", "standoff", "trigger_offset", "probe_angle"),
    "median-diameter": (
        "fragment_factor",
        "melt_surface_tension",
        "melt_viscosity",
        "removal_factor",
        "threshold_depth",
    ),
    "reflected-fraction": (),
}

# How a length or volume read in pixels follows the pixel pitch, by table kind and kind.
_PITCH_POWER: dict[tuple[str, str], int] = {
    ("shadowgraph", "bubble-radius"): 1,
    ("shadowgraph", "shock-radius"): 1,
    ("micrograph", "median-diameter"): 1,
    ("crater-map", "crater-diameter"): 1,
    ("crater-map", "crater-volume"): 2,  # depths do not follow the pitch
}
# How readings of sound follow the probe's sensitivity, and which are timed by the trigger.
_VOLTAGE_POWER = {"pressure-integral": 2}
_TIMED_BY_TRIGGER = ("arrival-time",)


def reading_factor(kind: str, table: Table, conditions: Conditions, inputs: Inputs) -> Array:
    """Reading over true value, shape (draws,): the instruments' errors that all readings of a table share."""
    factor: Array = np.asarray(inputs.get(f"scale.{table.name}", np.ones(1)))
    power = _PITCH_POWER.get((table.kind, kind), 0)
    if power and table.name in conditions.pixel_pitch:
        factor = factor * (conditions.pixel_pitch[table.name] / inputs[f"pixel_pitch.{table.name}"]) ** power
    if kind in _VOLTAGE_POWER and conditions.sensitivity is not None:
        factor = factor * (inputs["probe_sensitivity"] / conditions.sensitivity) ** _VOLTAGE_POWER[kind]
    return factor


def reading_offset(kind: str, conditions: Conditions, inputs: Inputs) -> Array:
    """Reading less true value [unit of the kind], shape (draws,): a late or early trigger."""
    if kind in _TIMED_BY_TRIGGER and "trigger_offset" in inputs:
        return np.asarray(inputs["trigger_offset"] - conditions.trigger_offset)
    return np.zeros(1)

"""What a shot does, with more physics than the reduced model holds.

The bubble grows and collapses by the integrated Keller-Miksis equation; the contact moves by gold's release into
Rice-Walsh water; particles come from the wavelength that the exact viscous theory amplifies most while water slows
the layer. Craters follow the removal law itself, and sound follows the reduced chain, started with the fuller contact
velocity: what single shots do beyond that is drawn as scatter where readings are made.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.optimize import brentq

from reconcile.invent.truth import Truth
from reconcile.physics import beam, bubble, contact, fragments, heating, removal, sound
from reconcile.physics.matter import Fluid, Metal
from reconcile.physics.solvers import bubble_motion, interface, layer_drag

PRESSURE = 101_325.0  # [Pa] ambient
HEIGHT = 6e-3  # [m] of the water above the target
WALL_DISTANCE = 15e-3  # [m]
SMALLEST_BUBBLE = 15e-6  # [m] below which there is none to speak of

# Gold: LASL Shock Hugoniot Data (Marsh 1980), CRC Handbook, all from memory; hot melt between 17 310 kg/m³ at the
# melting point and 7 700 at the critical point (Boboridis, Pottlacher & Jäger 1999).
GOLD = Metal(density=19_300.0, sound_speed=3060.0, hugoniot_slope=1.572, melt_density=15_000.0)

# Water at 20 °C and one atmosphere: IAPWS-95, IAPWS R12-08 and R1-76(2014); 1 + B/2A with B/A = 5.0 (Beyer, from
# memory); absorption of sound by Pinkerton 1949 (from memory); the shock line's slope fits Rice & Walsh below 1 km/s.
WATER = Fluid(
    density=998.207,
    sound_speed=1482.35,
    hugoniot_slope=2.0,
    nonlinearity=3.5,
    sound_absorption=25e-15,
    vapour_pressure=2339.3,
    surface_tension=0.072736,
    viscosity=1.0016e-3,
    contact_density=1200.0,
    contact_viscosity=0.5e-3,
)


@dataclass(frozen=True, slots=True)
class Shot:
    """What one pulse, or a burst of them, does to its place."""

    incident_fluence: float  # [J/m²]
    absorbed_fluence: float  # [J/m²]
    excess: float  # [1] ln(absorbed fluence / threshold of that many pulses)
    depth: float  # [m] of the crater, all pulses
    diameter: float  # [m]
    pulse_volume: float  # [m³] removed by one pulse
    bubble: Bubble | None  # None: next to none
    pressure_integral: float  # [Pa² s] as recorded within the probe's bandwidth
    arrival_time: float  # [s]
    pulse_duration: float  # [s] of the triangle that reaches the probe


@dataclass(frozen=True, slots=True)
class Bubble:
    """The bubble of the last pulse."""

    motion: bubble_motion.Motion  # of an ideal hemisphere in deep water
    stretch: float  # [1] of all its times by target, surface and wall

    @property
    def lifetime(self) -> float:
        """From the pulse to the first collapse [s]."""
        return self.stretch * (self.motion.growth_time + self.motion.collapse_time)

    def radius(self, delay: float) -> float:
        """Radius at a delay after the pulse [m]; not a number after the first collapse."""
        return float(self.motion.radius(np.array([delay / self.stretch]))[0])


def shoot(truth: Truth, energy: float, pulses: int) -> Shot:
    """Return what a shot does.

    Parameters
    ----------
    truth : the true inputs.
    energy : true energy of one pulse, at the meter [J].
    pulses : that the place receives.
    """
    radius = truth["spot_radius"]
    incident = float(beam.peak_fluence(truth["delivery"] * energy, radius))
    absorbed = float(beam.absorbed_fluence(incident, truth["absorbed_fraction"], truth["absorption_exponent"]))
    threshold = removal.incubated(truth["threshold_fluence"], pulses, truth["incubation_exponent"])
    excess = float(removal.log_excess(absorbed, threshold))
    layer, exponent = _heated_depth(truth, absorbed), truth["heated_depth_exponent"]
    law = (excess, layer, exponent, truth["removal_factor"], truth["threshold_depth"])
    pulse, integral = _sound(truth, absorbed, excess)
    return Shot(
        incident_fluence=incident,
        absorbed_fluence=absorbed,
        excess=excess,
        depth=pulses * float(removal.crater_depth(*law)),
        diameter=float(removal.crater_diameter(excess, radius)),
        pulse_volume=float(removal.crater_volume(*law, radius)),
        bubble=_bubble(truth, absorbed, excess),
        pressure_integral=integral,
        arrival_time=float(pulse.arrival_time),
        pulse_duration=float(pulse.duration),
    )


def particle_diameter(truth: Truth, absorbed: float) -> float:
    """Return the number median of the particles' diameters at an absorbed fluence [J/m²] above threshold, [m].

    The fragment factor times the wavelength that has grown most once water has slowed the layer.
    """
    layer = _heated_depth(truth, absorbed)
    velocity = layer_drag.released_velocity(_pressure(truth, absorbed, layer), GOLD)
    slowed = layer_drag.slowing(velocity, GOLD.density * layer)
    near = 2.5 * fragments.fastest_wavelength(
        slowed.deceleration[0], GOLD, WATER, truth["melt_surface_tension"], truth["melt_viscosity"]
    )
    return truth["fragment_factor"] * layer_drag.most_amplified_wavelength(slowed, _growth_rate(truth), float(near))


def energy_share(truth: Truth, absorbed: float) -> float:
    """Return bubble and shock energy over absorbed energy of one pulse at an absorbed fluence [J/m²], [1]."""
    excess = float(removal.log_excess(absorbed, truth["threshold_fluence"]))
    given = float(sound.shock_energy(_source(truth, absorbed, excess), GOLD, WATER))
    heat = 0.5 * np.pi * truth["spot_radius"] ** 2 * absorbed
    return truth["bubble_yield"] + given / float(heat)


def _heated_depth(truth: Truth, absorbed: float) -> float:
    return float(heating.heated_depth(absorbed, truth["heated_depth"], truth["heated_depth_exponent"]))


def _pressure(truth: Truth, absorbed: float, layer: float) -> float:
    return truth["pressure_coefficient"] * float(heating.energy_density(absorbed, layer))


def _bubble(truth: Truth, absorbed: float, excess: float) -> Bubble | None:
    energy = float(
        bubble.bubble_energy(
            absorbed, excess, truth["spot_radius"], truth["bubble_yield"], truth["bubble_yield_exponent"]
        )
    )
    liquid = bubble_motion.BubbleLiquid(
        WATER.density, WATER.sound_speed, PRESSURE, WATER.vapour_pressure, WATER.surface_tension, WATER.viscosity
    )
    if energy <= 0 or (largest := bubble_motion.largest_radius(energy, liquid)) < SMALLEST_BUBBLE:
        return None
    boundaries = float(bubble.boundary_factor(largest, HEIGHT, WALL_DISTANCE))
    motion = bubble_motion.motion(largest, liquid, truth["bubble_gas"], rtol=1e-8)
    return Bubble(motion, truth["wall_prolongation"] * boundaries)


def _source(truth: Truth, absorbed: float, excess: float) -> sound.Source:
    """Return the sound's source; its pressure coefficient is the one that gives the fuller contact velocity."""
    layer = _heated_depth(truth, absorbed)
    pressure = _pressure(truth, absorbed, layer)
    velocity = layer_drag.released_velocity(pressure, GOLD)

    def too_fast(factor: float) -> float:
        return float(contact.contact_velocity(factor * pressure, GOLD, WATER)) - velocity

    factor = float(brentq(too_fast, 0.5, 2.0))
    return sound.Source(
        fluence=absorbed,
        excess=excess,
        depth=layer,
        depth_exponent=truth["heated_depth_exponent"],
        pressure_coefficient=factor * truth["pressure_coefficient"],
        shock_factor=truth["shock_factor"],
        radius=truth["spot_radius"],
    )


def _sound(truth: Truth, absorbed: float, excess: float) -> tuple[sound.Pulse, float]:
    source, standoff = _source(truth, absorbed, excess), truth["standoff"]
    pulse = sound.pressure_pulse(source, standoff, truth["probe_angle"], GOLD, WATER)
    return pulse, float(sound.recorded_integral(pulse, truth["probe_response"], standoff, WATER))


def _growth_rate(truth: Truth) -> layer_drag.GrowthRate:
    """Return the growth rate of a ripple on the contact [1/s] by wavenumber [1/m] and deceleration [m/s²]."""
    contact_of = interface.Interface(
        heavy_density=GOLD.melt_density,
        light_density=WATER.contact_density,
        heavy_viscosity=truth["melt_viscosity"],
        light_viscosity=WATER.contact_viscosity,
        surface_tension=truth["melt_surface_tension"],
    )

    def rate(wavenumber: float, deceleration: float) -> float:
        return interface.growth_rate(wavenumber, deceleration, contact_of)

    return rate

"""The bubble on the target: energy, largest radius, growth and collapse, radius at a time.

A hemisphere on a flat target moves as half a sphere does in free liquid (mirror symmetry); the target's
no-slip wall and everything else that prolongs it is one factor, the wall prolongation.
"""

from __future__ import annotations

import numpy as np

from reconcile.physics.heating import REFERENCE_FLUENCE
from reconcile.physics.matter import Array, Fluid, Values

# √(3/2) B(5/6, 1/2)/3: collapse of an empty cavity (Lord Rayleigh, Phil. Mag. 34, 94, 1917).
RAYLEIGH = 0.9146813565019629
# Image sources: 1/2 ln 2 × B(7/6, 1/2)/B(5/6, 1/2) for all images of a free surface, 1/4 of that quotient for the one
# of a wall, and the second-order term of both, over the square of the first-order one.
SURFACE_IMAGES = 0.28175804426329465
WALL_IMAGE = 0.2032454665946196
SECOND_ORDER = 0.5303745930509779  # B(3/2, 1/2) B(5/6, 1/2)/(2 B(7/6, 1/2)²)
SHORTEST_HALF = 1e-30  # [s] floor on growth and collapse of a bubble that is none


def bubble_energy(
    fluence: Values, excess: Values, radius: Values, bubble_yield: Values, yield_exponent: Values
) -> Array:
    """Return the energy of the hemispherical bubble [J].

    Parameters
    ----------
    fluence : absorbed, on the axis [J/m²].
    excess : ln(fluence/threshold) there [1].
    radius : 1/e² radius of the beam [m].
    bubble_yield : bubble energy over absorbed energy above threshold, at 1 kJ/m² absorbed [1].
    yield_exponent : power of the absorbed fluence by which the yield changes [1].

    Notes
    -----
    The absorbed energy is fluence × π w²/2; the share 1 - exp(-excess) of it falls where metal leaves.

    """
    absorbed_energy = 0.5 * np.pi * radius**2 * fluence
    strength = bubble_yield * (fluence / REFERENCE_FLUENCE) ** yield_exponent
    energy: Array = -strength * absorbed_energy * np.expm1(-excess)
    return energy


def largest_radius(energy: Values, overpressure: Values, surface_tension: Values) -> Array:
    """Return the largest radius of a hemisphere of that energy [m].

    Parameters
    ----------
    energy : of the hemisphere [J].
    overpressure : ambient less vapour pressure [Pa].
    surface_tension : of the liquid [N/m].

    Notes
    -----
    energy = 2/3 π R³ overpressure, less the part that the surface holds, to first order.

    """
    free = np.cbrt(1.5 / np.pi * energy / overpressure)
    radius: Array = free**2 * overpressure / (free * overpressure + surface_tension)
    return radius


def boundary_factor(largest_radius: Values, height: float | None = None, wall_distance: float | None = None) -> Array:
    """Return the factor on growth and collapse times that the liquid's free surface and a side wall bring [1].

    Parameters
    ----------
    largest_radius : of the hemisphere on the target [m].
    height : of the liquid above the target, to its free surface [m]; None: deep.
    wall_distance : from the bubble to a rigid wall across the target [m]; None: far.

    Notes
    -----
    Sums over image sources, kept to second order of radius over distance and continued so that the factor stays
    above zero; to first order 1 - 0.282 R/height and 1 + 0.203 R/distance (for the wall: L. Rattray, thesis,
    California Institute of Technology 1951, gives 0.205; from memory). Within 0.1 % below R = 0.2 height and 0.2 % at
    R = distance of the integrals over the images.

    """
    factor: Array = np.ones(())
    if height is not None:
        shift = SURFACE_IMAGES / height * largest_radius
        factor = factor / (1.0 + shift * (1.0 + (1.0 + SECOND_ORDER) * shift))
    if wall_distance is not None:
        shift = WALL_IMAGE / wall_distance * largest_radius
        factor = factor * (1.0 + shift / (1.0 + SECOND_ORDER * shift))
    return factor


def collapse_time(
    largest_radius: Values, overpressure: Values, fluid: Fluid, gas: Values, prolongation: Values
) -> Array:
    """Return the time from the largest radius to the collapse [s], zero for a bubble that is none.

    Parameters
    ----------
    largest_radius : [m].
    overpressure : ambient less vapour pressure [Pa].
    gas : pressure of the gas in the bubble at its largest, over the overpressure [1].
    prolongation : factor on the time: wall prolongation × `boundary_factor` [1].

    Notes
    -----
    Rayleigh's time with corrections for sound, viscosity, gas and surface tension, fitted to Keller-Miksis
    collapses: within 0.063 % for radii of 25 µm to 2 mm, surface tensions of 0.03 to 0.075 N/m, viscosities of 0.5 to
    3 mPa s, gas up to 0.02; 0.08 % for gas up to 0.032.

    """
    speed = np.sqrt(overpressure / fluid.density)
    corrections = 1.0 + 0.7104 * speed / fluid.sound_speed + gas * (1.1988 + 1.056 * gas)
    viscous_length = 1.0793 * fluid.viscosity / (fluid.density * speed)
    capillary_length = 1.1221 * 2.0 * fluid.surface_tension / overpressure
    held = np.sqrt(largest_radius / (largest_radius + capillary_length))
    time: Array = prolongation * RAYLEIGH / speed * (largest_radius * corrections + viscous_length) * held
    return time


def growth_time(
    collapse_time: Values, largest_radius: Values, overpressure: Values, fluid: Fluid, gas: Values
) -> Array:
    """Return the time from the laser pulse to the largest radius [s]; parameters as in `collapse_time`.

    Notes
    -----
    Growth differs from collapse by gas and viscosity, hardly by surface tension. Fitted to Keller-Miksis motion: within
    0.1 % for radii of 25 µm to 1 mm, surface tensions of 0.02 to 0.073 N/m, viscosities of 0.3 to 3 mPa s, gas up to 0.01.

    """
    viscous_length = 2.0633 * fluid.viscosity / np.sqrt(fluid.density * overpressure)
    return np.asarray(collapse_time * (0.9905 - 0.15 * gas) * largest_radius / (largest_radius + viscous_length))


def lifetime(largest_radius: Values, overpressure: Values, fluid: Fluid, gas: Values, prolongation: Values) -> Array:
    """Return the time from the laser pulse to the first collapse [s]; parameters as in `collapse_time`."""
    collapse = collapse_time(largest_radius, overpressure, fluid, gas, prolongation)
    return collapse + growth_time(collapse, largest_radius, overpressure, fluid, gas)


def radius_at(time: Values, largest_radius: Values, growth: Values, collapse: Values) -> Array:
    """Return the radius at a time after the laser pulse [m]: zero before it and after the first collapse.

    Parameters
    ----------
    time : after the laser pulse [s].
    largest_radius : [m].
    growth, collapse : times from `growth_time` and `collapse_time` [s].

    Notes
    -----
    Obreschkow, Bruderer and Farhat, Phys. Rev. E 85, 066303 (2012): (1 - u)^(2/5) [1 - 0.01832099 Li_2.21(u)], with u
    the squared time from the largest radius over the half's duration; Li_2.21 by a polynomial, 3e-5 of the radius.
    Against Keller-Miksis motion while the radius exceeds half the largest: within 1.1 % of the largest for gas up to
    0.003, 1.7 % for 0.01, over the range of `growth_time`.

    """
    from_largest = time - growth
    half = np.maximum(np.where(from_largest < 0.0, growth, collapse), SHORTEST_HALF)
    u = np.minimum((from_largest / half) ** 2, 1.0)
    polylogarithm = u * (0.9719 + u * (0.3393 + 0.1638 * u**6))
    radius: Array = largest_radius * (1.0 - u) ** 0.4 * (1.0 - 0.01832099 * polylogarithm)
    return radius

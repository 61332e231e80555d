"""The decelerated melt breaks up: fastest wavelength, its gain, and the particles that come of it.

A heavy melt slowed by a light liquid is unstable (Rayleigh-Taylor). Surface tension and viscosity both choose the
fastest wavelength; the two limits are joined by powers fitted to exact roots of the viscous dispersion relation.
"""

from __future__ import annotations

import numpy as np

from reconcile.physics.matter import Array, Fluid, Metal, Values

WAVELENGTH_POWER = 1.397  # fitted: wavelength within 3.8 % of the exact root
RATE_POWER = 2.628  # fitted: growth rate within 2.2 % of the exact root
# Factors on the viscous limits, fitted together with the powers. Without surface tension and for a much denser melt
# the exact ones are 0.981 and 0.920 (S. Chandrasekhar, Hydrodynamic and Hydromagnetic Stability, 1961, ch. X).
VISCOUS_WAVENUMBER = 1.0 / 0.933
VISCOUS_RATE = 0.942


def _capillary_wavenumber(deceleration: Values, metal: Metal, fluid: Fluid, surface_tension: Values) -> Array:
    """Return the fastest wavenumber without viscosity [1/m] (Bellman and Pennington, Q. Appl. Math. 12, 151, 1954)."""
    wavenumber: Array = np.sqrt((metal.melt_density - fluid.contact_density) / 3.0 * deceleration / surface_tension)
    return wavenumber


def _atwood(metal: Metal, fluid: Fluid) -> float:
    return (metal.melt_density - fluid.contact_density) / (metal.melt_density + fluid.contact_density)


def _kinematic_viscosity(metal: Metal, fluid: Fluid, viscosity: Values) -> Array:
    """Return the viscosity that both sides share [m²/s]."""
    return np.asarray((viscosity + fluid.contact_viscosity) / (metal.melt_density + fluid.contact_density))


def fastest_wavelength(
    deceleration: Values, metal: Metal, fluid: Fluid, surface_tension: Values, viscosity: Values
) -> Array:
    """Return the wavelength that grows fastest [m].

    Parameters
    ----------
    deceleration : of the contact [m/s²], above zero.
    surface_tension, viscosity : of the hot liquid metal [N/m], [Pa s].

    Notes
    -----
    The metal's melt must be denser than the liquid at the contact.

    """
    capillary = _capillary_wavenumber(deceleration, metal, fluid, surface_tension)
    nu = _kinematic_viscosity(metal, fluid, viscosity)
    viscous = VISCOUS_WAVENUMBER * np.cbrt(_atwood(metal, fluid) / (8.0 * nu**2) * deceleration)
    joined = 1.0 + (capillary / viscous) ** WAVELENGTH_POWER
    return 2.0 * np.pi / capillary * joined ** (1.0 / WAVELENGTH_POWER)


def fastest_rate(deceleration: Values, metal: Metal, fluid: Fluid, surface_tension: Values, viscosity: Values) -> Array:
    """Return the growth rate of the fastest wavelength [1/s]; parameters as in `fastest_wavelength`."""
    drive = _atwood(metal, fluid) * deceleration
    nu = _kinematic_viscosity(metal, fluid, viscosity)
    inviscid = np.sqrt(2.0 / 3.0 * drive * _capillary_wavenumber(deceleration, metal, fluid, surface_tension))
    viscous = VISCOUS_RATE * 0.5 * np.cbrt(drive**2 / nu)
    rate: Array = inviscid * (1.0 + (inviscid / viscous) ** RATE_POWER) ** (-1.0 / RATE_POWER)
    return rate


def log_gain(
    deceleration: Values,
    drag_time: Values,
    mach_ratio: Values,
    metal: Metal,
    fluid: Fluid,
    surface_tension: Values,
    viscosity: Values,
) -> Array:
    """Return the logarithm of the largest growth while the layer slows down [1].

    Parameters
    ----------
    deceleration : as the layer starts [m/s²].
    drag_time, mach_ratio : of that layer [s], [1]; see `contact`.
    surface_tension, viscosity : of the hot liquid metal [N/m], [Pa s].

    Notes
    -----
    Within 12 % of exact roots integrated over the falling deceleration.

    """
    rate = fastest_rate(deceleration, metal, fluid, surface_tension, viscosity)
    return 1.13 * rate * drag_time * (1.0 + mach_ratio) ** -0.837


def median_diameter(
    fragment_factor: Values,
    deceleration: Values,
    mach_ratio: Values,
    metal: Metal,
    fluid: Fluid,
    surface_tension: Values,
    viscosity: Values,
) -> Array:
    """Return the number median of the particles' diameters [m].

    Parameters
    ----------
    fragment_factor : diameter over the wavelength with the largest integrated gain [1].
    deceleration, mach_ratio : as the layer starts [m/s²], [1].
    surface_tension, viscosity : of the hot liquid metal [N/m], [Pa s].

    Notes
    -----
    2.3 (1 + M)^0.3 × fastest wavelength is the mode with the largest integrated gain, within 8 % up to 2 km/s.

    """
    wavelength = fastest_wavelength(deceleration, metal, fluid, surface_tension, viscosity)
    return fragment_factor * 2.3 * (1.0 + mach_ratio) ** 0.3 * wavelength

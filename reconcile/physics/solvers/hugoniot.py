"""Shock adiabats: water by Rice and Walsh, and a metal's release into a liquid by reflected adiabat."""

from __future__ import annotations

import numpy as np
from scipy.optimize import brentq

from reconcile.physics.matter import Metal, Values

WATER_DENSITY = 998.2  # [kg/m³] initial density that belongs to the adiabat below


def us_from_up(velocity: Values) -> Values:
    """Return the shock velocity in water for a particle velocity.

    Parameters
    ----------
    velocity : particle velocity behind the shock [m/s], zero or more.

    Returns
    -------
    Shock velocity [m/s], 1483 at zero.

    Notes
    -----
    Us = 1.483 + 25.306 log10(1 + up/5.19) km/s: Rice and Walsh, J. Chem. Phys. 26, 824 (1957); from memory.

    """
    shock: Values = 1483.0 + 25306.0 / np.log(10.0) * np.log1p(np.divide(velocity, 5190.0))
    return shock


def up_from_us(shock_velocity: float) -> float:
    """Return the particle velocity in water [m/s] for a shock velocity [m/s] of at least 1483; inverts `us_from_up`."""
    return 5190.0 * float(np.expm1(np.log(10.0) * (shock_velocity - 1483.0) / 25306.0))


def water_pressure(velocity: Values) -> Values:
    """Return the pressure behind a shock in water [Pa] for a particle velocity [m/s]: density × Us × up."""
    return WATER_DENSITY * us_from_up(velocity) * velocity


def metal_pressure(velocity: Values, metal: Metal) -> Values:
    """Return the pressure behind a shock in the metal [Pa] for a particle velocity [m/s], by its straight line."""
    return metal.density * (metal.sound_speed + metal.hugoniot_slope * velocity) * velocity


def release_into_water(metal_velocity: float, metal: Metal) -> float:
    """Return the velocity of the contact [m/s] when a shock in the metal reaches water.

    Parameters
    ----------
    metal_velocity : particle velocity behind the shock in the metal [m/s].

    Notes
    -----
    The metal's release is its own adiabat mirrored at the shocked state, the usual impedance match
    (L. W. Davison, Fundamentals of Shock Wave Propagation in Solids, Springer 2008, ch. 3; from memory).

    """

    def imbalance(velocity: float) -> float:
        return float(water_pressure(velocity) - metal_pressure(2.0 * metal_velocity - velocity, metal))

    return float(brentq(imbalance, 0.0, 2.0 * metal_velocity, xtol=1e-12, rtol=1e-14))

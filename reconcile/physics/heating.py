"""The layer that holds the absorbed energy when the metal starts to move."""

from __future__ import annotations

import numpy as np

from reconcile.physics.matter import Array, Values

REFERENCE_FLUENCE = 1e3  # [J/m²] absorbed fluence at which the heated depth is stated


def heated_depth(fluence: Values, depth_at_1kJ: Values, exponent: Values) -> Array:
    """Return the energy depth of the heated layer [m]: absorbed fluence over energy density at the surface.

    Parameters
    ----------
    fluence : absorbed [J/m²], above zero.
    depth_at_1kJ : energy depth at 1 kJ/m² absorbed [m].
    exponent : power of the absorbed fluence by which it changes [1].

    Notes
    -----
    A power law fitted to two-temperature solutions, within 7 % from 0.5 to 5 kJ/m² for any one choice of
    electron transport (`solvers.heated_depths`). It is not the 1/e depth of the temperature profile, which is up to 1.45 times shallower.

    """
    return depth_at_1kJ * (fluence / REFERENCE_FLUENCE) ** exponent


def energy_density(fluence: Values, depth: Values) -> Array:
    """Return the energy density at the surface [J/m³] from absorbed fluence [J/m²] and heated depth there [m]."""
    return np.asarray(fluence / depth)

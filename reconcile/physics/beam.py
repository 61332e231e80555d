"""From pulse energy to the fluence that the target absorbs."""

from __future__ import annotations

import numpy as np

from reconcile.physics.matter import Array, Values

REFERENCE_INCIDENT = 1e4  # [J/m²] incident fluence at which the absorbed fraction is stated (1 J/cm²)


def peak_fluence(energy: Values, radius: Values) -> Array:
    """Return the fluence on the axis of a Gaussian beam [J/m²].

    Parameters
    ----------
    energy : of one pulse, where it arrives [J].
    radius : 1/e² intensity radius there [m].

    Notes
    -----
    2 E/(π w²), the integral of the Gaussian profile; ISO 11146-1 defines the radius.

    """
    return np.asarray(2.0 * energy / (np.pi * radius**2))


def absorbed_fluence(incident: Values, absorbed_fraction: Values, absorption_exponent: Values) -> Array:
    """Return the absorbed fluence on the axis [J/m²].

    Parameters
    ----------
    incident : fluence on the axis [J/m²], zero or more.
    absorbed_fraction : share absorbed at 10 kJ/m² incident [1].
    absorption_exponent : power of the incident fluence by which that share changes [1], above -1.

    Notes
    -----
    The share of the peak serves the whole spot, so the absorbed profile stays Gaussian. Whether the
    share exceeds 1 is the caller's to judge.

    """
    return absorbed_fraction * REFERENCE_INCIDENT * (incident / REFERENCE_INCIDENT) ** (1.0 + absorption_exponent)


def fresnel_absorptance(n: Values, k: Values, liquid_index: Values) -> Array:
    """Return the share of light that a cold, smooth, thick metal absorbs at normal incidence [1].

    Parameters
    ----------
    n, k : real and imaginary part of the metal's refractive index [1].
    liquid_index : refractive index of the medium the light comes from [1].

    Notes
    -----
    One minus the Fresnel reflectance |(n0 - n - ik)/(n0 + n + ik)|²; M. Born and E. Wolf, Principles of Optics,
    section 14.2 (from memory).

    """
    return np.asarray(4.0 * liquid_index * n / ((liquid_index + n) ** 2 + k**2))

"""From pulse energy to the fluence that the target absorbs."""

from __future__ import annotations

from typing import TypeAlias

import numpy as np

from reconcile.physics.matter import Array, Values

REFERENCE_INCIDENT = 1e4  # [J/m²] incident fluence at which the absorbed fraction is stated (1 J/cm²)


Radii: TypeAlias = tuple[Values, Values]


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


def peak_power(energy: Values, duration: Values) -> Values:
    """Return the peak power of a Gaussian pulse [W] from its energy [J] and full width at half maximum [s].

    2 √(ln 2/π) ≈ 0.94 times energy over duration: the integral of the Gaussian.
    """
    return 2.0 * np.sqrt(np.log(2.0) / np.pi) * energy / duration


def critical_power(wavelength: Values, index: Values, nonlinear_index: Values) -> Values:
    """Return the power above which a Gaussian beam collapses by self-focusing [W].

    Parameters
    ----------
    wavelength : in vacuum [m].
    index : refractive index of the liquid [1].
    nonlinear_index : its change per intensity [m²/W].

    Notes
    -----
    3.77 λ²/(8π n₀ n₂); J. H. Marburger, Progress in Quantum Electronics 4 (1975) 35.

    """
    return 3.77 * wavelength**2 / (8.0 * np.pi * index * nonlinear_index)


def collapse_distance(power_ratio: Values, radius: Values, wavelength: Values, index: Values) -> Values:
    """Return how far a collimated beam runs before it collapses [m]; infinite at or below the critical power.

    Parameters
    ----------
    power_ratio : power over critical power [1].
    radius : 1/e² radius of the collimated beam [m].
    wavelength : in vacuum [m].
    index : refractive index [1].

    Notes
    -----
    0.367 π n w²/λ / √((√ratio − 0.852)² − 0.0219); J. H. Marburger (1975), from memory.

    """
    rayleigh = np.pi * index * radius**2 / wavelength
    above = (np.sqrt(np.maximum(power_ratio, 1.0)) - 0.852) ** 2 - 0.0219
    with np.errstate(divide="ignore"):
        return np.where(np.asarray(power_ratio) > 1.0, 0.367 * rayleigh / np.sqrt(np.maximum(above, 0.0)), np.inf)


def nonlinear_phase(power: Values, nonlinear_index: Values, wavelength: Values, path: Values, radii: Radii) -> Values:
    """Return the phase that the liquid's nonlinear index adds on the axis of a focused beam [rad].

    Parameters
    ----------
    power : peak [W].
    nonlinear_index : [m²/W].
    wavelength : in vacuum [m].
    path : through the liquid [m].
    radii : 1/e² radius where the beam enters the liquid, and at the target [m]; the first the larger.

    Notes
    -----
    (2π/λ) n₂ ∫ 2P/(π w²) dz along a Gaussian beam, w² = w_target² + (w_entry² − w_target²)(z/path)².

    """
    entry, target = radii
    spread = np.sqrt(np.maximum(entry**2 - target**2, 1e-30))
    length = path / (target * spread) * np.arctan(spread / target)
    return 2.0 * np.pi / wavelength * nonlinear_index * 2.0 * power / np.pi * length

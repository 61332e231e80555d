"""Whether metal leaves, and the crater that stays: threshold, incubation, depth, diameter, volume.

The excess, ln(fluence/threshold), is softened below threshold so that nothing here has a kink:
it falls smoothly to zero within some 5 % of the threshold.
"""

from __future__ import annotations

import numpy as np

from reconcile.physics.heating import REFERENCE_FLUENCE
from reconcile.physics.matter import Array, Values

SOFTNESS = 0.05  # [1] width in ln(fluence) over which removal sets in
SPALL_RISE = 0.1  # [1] excess over which the depth just above threshold is reached


def threshold_fluence(removal_energy_density: Values, depth_at_1kJ: Values, exponent: Values) -> Array:
    """Return the absorbed fluence at which one pulse starts to remove metal [J/m²].

    Parameters
    ----------
    removal_energy_density : threshold fluence over heated depth there [J/m³].
    depth_at_1kJ, exponent : the heated depth's power law [m], [1]; exponent below 1.

    Notes
    -----
    Solves fluence = removal_energy_density × heated_depth(fluence).

    """
    at_reference = removal_energy_density * depth_at_1kJ / REFERENCE_FLUENCE
    return REFERENCE_FLUENCE * at_reference ** (1.0 / (1.0 - exponent))


def incubated(threshold: Values, pulses: Values, incubation_exponent: Values) -> Array:
    """Return the threshold fluence of N pulses on one place [J/m²]: threshold × N^(exponent - 1).

    Source: Jee, Becker and Walser, J. Opt. Soc. Am. B 5, 648 (1988). The law has no floor; real thresholds saturate.
    """
    return threshold * pulses ** (incubation_exponent - 1.0)


def log_excess(fluence: Values, threshold: Values) -> Array:
    """Return the excess [1]: ln(fluence/threshold) well above threshold, smoothly to zero below it."""
    excess: Array = SOFTNESS * np.logaddexp(0.0, np.log(fluence / threshold) / SOFTNESS)
    return excess


def crater_depth(
    excess: Values, depth: Values, exponent: Values, removal_factor: Values, threshold_depth: Values
) -> Array:
    """Return the depth that one pulse removes on the axis [m].

    Parameters
    ----------
    excess : ln(fluence/threshold) on the axis [1], from `log_excess`.
    depth : heated depth at the fluence on the axis [m].
    exponent : of the heated depth's power law [1].
    removal_factor : factor on the depth of the heated layer's law [1].
    threshold_depth : depth just above threshold [m].

    Notes
    -----
    An energy profile exp(-z/depth) with a fixed removal energy density gives (1 - exponent) × depth × excess;
    spallation takes a finite depth at once.

    """
    return removal_factor * (1.0 - exponent) * depth * excess - threshold_depth * np.expm1(-excess / SPALL_RISE)


def crater_diameter(excess: Values, radius: Values) -> Array:
    """Return the crater's diameter [m] for a beam of 1/e² radius `radius` [m].

    Source: J. M. Liu, Opt. Lett. 7, 196 (1982): D² = 2 w² ln(F/Fth).
    """
    diameter: Array = radius * np.sqrt(2.0 * excess)
    return diameter


def crater_volume(
    excess: Values, depth: Values, exponent: Values, removal_factor: Values, threshold_depth: Values, radius: Values
) -> Array:
    """Return the volume that one pulse removes [m³]: `crater_depth` integrated over the spot.

    Parameters are those of `crater_depth`, and the beam's 1/e² radius `radius` [m]. The integral takes the
    excess in the spot as falling by 2 r²/w² from that on the axis, to zero.
    """
    rise = excess / SPALL_RISE
    layer = removal_factor * (1.0 - exponent) * depth * excess**2 * _second_remainder(-exponent * excess)
    spall = threshold_depth * SPALL_RISE * rise**2 * _second_remainder(-rise)
    return 0.5 * np.pi * radius**2 * (layer + spall)


def _second_remainder(x: Values) -> Array:
    """Return (exp(x) - 1 - x)/x², 1/2 at zero; exact to rounding on both sides of the change to its series."""
    small = np.abs(x) < 0.1
    safe = np.where(small, 1.0, x)
    series = np.zeros_like(safe)
    near_zero = np.where(small, x, 0.0)
    for divisor in range(10, 2, -1):  # 1/2 (1 + x/3 (1 + x/4 (1 + …)))
        series = near_zero / divisor * (1.0 + series)
    remainder: Array = np.where(small, 0.5 * (1.0 + series), (np.expm1(safe) - safe) / safe**2)
    return remainder

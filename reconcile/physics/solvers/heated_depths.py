"""The power law of the heated depth, fitted to two-temperature solutions for the ways in which gold has been described."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import get_args

import numpy as np

from reconcile.physics.heating import REFERENCE_FLUENCE
from reconcile.physics.solvers.two_temperature import GOLD, Conductivity, ElectronMetal, Mesh, Pulse, heated

FLUENCES = (0.5e3, 1e3, 2e3, 5e3)  # [J/m²] absorbed, over which the law is fitted

# Coarser than `heated` takes by itself: energy depths of gold within 1 % of those on a mesh twice as fine.
COARSE = Mesh(first_cell=2e-9, ratio=1.08, depth=4e-6, steps_per_pulse=40, longest_step=0.4e-12)

_SKIN = 15e-9  # [m] optical, gold in the near infrared
_BALLISTIC = (
    _SKIN + 100e-9
)  # [m] with the range of hot electrons: S. D. Brorson et al. 1987; Hohlfeld 2000; from memory


@dataclass(frozen=True, slots=True)
class Variant:
    """One way to describe a metal and the pulse."""

    name: str
    metal: ElectronMetal
    source_depth: float  # [m]
    duration: float = 350e-15  # [s]


@dataclass(frozen=True, slots=True)
class PowerLaw:
    """Heated depth = depth × (absorbed fluence/1 kJ/m²)^exponent."""

    depth: float  # [m] at 1 kJ/m²
    exponent: float
    residual: float  # [1] largest deviation of a solution from the law


def gold_variants(duration: float = 350e-15) -> tuple[Variant, ...]:
    """Return published descriptions of gold: conductivity, coupling, depth of the source, for a pulse duration [s].

    Notes
    -----
    Every conductivity with either coupling and either source, and the ends of the published values of the coupling,
    2.0e16 and 3.0e16 W/m³/K, and of gamma, 62.9 and 71 J/m³/K² (from memory).

    """
    found = []
    for conduction in get_args(Conductivity):
        for rising in (False, True):
            metal = replace(GOLD, conduction=conduction, rising_coupling=rising)
            words = f"conductivity {conduction}, coupling {'rising' if rising else 'constant'}"
            found.append(Variant(f"{words}, optical source", metal, _SKIN, duration))
            found.append(Variant(f"{words}, ballistic source", metal, _BALLISTIC, duration))
    for coupling in (2.0e16, 3.0e16):
        metal = replace(GOLD, coupling=coupling)
        found.append(Variant(f"conductivity collisions, coupling {coupling:g}", metal, _SKIN, duration))
    for gamma in (62.9, 71.0):
        metal = replace(GOLD, heat_coefficient=gamma)
        found.append(Variant(f"conductivity collisions, gamma {gamma:g}", metal, _SKIN, duration))
    return tuple(found)


def fitted_power_law(variant: Variant, fluences: Sequence[float] = FLUENCES, mesh: Mesh = COARSE) -> PowerLaw:
    """Fit the power law of the heated depth to two-temperature solutions.

    Parameters
    ----------
    variant : the metal and pulse.
    fluences : absorbed [J/m²], two or more.
    mesh : of the solutions.

    Notes
    -----
    A straight line through the logarithms by least squares.

    """
    solved = [heated(variant.metal, Pulse(each, variant.duration, variant.source_depth), mesh) for each in fluences]
    depths = np.log([target.energy_depth for target in solved])
    excess = np.log(np.asarray(fluences) / REFERENCE_FLUENCE)
    exponent, depth = np.polyfit(excess, depths, 1)
    residual = np.expm1(np.abs(depths - depth - exponent * excess)).max()
    return PowerLaw(float(np.exp(depth)), float(exponent), float(residual))


@dataclass(frozen=True, slots=True)
class Spread:
    """What several power laws have in common."""

    depth: float  # [m] geometric mean at 1 kJ/m²
    depth_spread: float  # [1] standard deviation of its logarithm
    exponent: float  # mean
    exponent_spread: float  # standard deviation


def spread(laws: Sequence[PowerLaw]) -> Spread:
    """Return mean and standard deviation over two or more power laws, each counted alike."""
    depths = np.log([law.depth for law in laws])
    exponents = np.array([law.exponent for law in laws])
    return Spread(
        float(np.exp(depths.mean())), float(depths.std(ddof=1)), float(exponents.mean()), float(exponents.std(ddof=1))
    )

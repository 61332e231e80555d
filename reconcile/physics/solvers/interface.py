"""Growth of ripples where a heavy viscous fluid is slowed by a light one: the exact linear theory."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.optimize import brentq, minimize_scalar


@dataclass(frozen=True, slots=True)
class Interface:
    """Two deep fluids and what acts between them; the heavy one would fall into the light one."""

    heavy_density: float  # [kg/m³]
    light_density: float  # [kg/m³]
    heavy_viscosity: float  # [Pa s] above zero
    light_viscosity: float  # [Pa s] above zero
    surface_tension: float  # [N/m] zero or more


def growth_rate(wavenumber: float, deceleration: float, interface: Interface) -> float:
    """Return the growth rate of one wavenumber [1/s]; zero where surface tension holds it.

    Parameters
    ----------
    wavenumber : [1/m].
    deceleration : of the heavy fluid, towards which the light one pushes [m/s²].

    Notes
    -----
    Normal modes w = A e^(-kz) + B e^(-qz) on either side, q² = k² + n rho/mu, with continuous velocity and tangential
    stress; the root n of the normal stress. S. Chandrasekhar, Hydrodynamic and Hydromagnetic Stability, 1961, sections
    92 to 94. The four amplitudes are eliminated by hand, which takes the trivial root n = 0 away.

    """
    drive = _drive(wavenumber, deceleration, interface)
    if drive <= 0.0:
        return 0.0
    total = interface.heavy_density + interface.light_density
    viscosity = interface.heavy_viscosity + interface.light_viscosity
    inviscid = math.sqrt(wavenumber * drive / total)
    creeping = drive / (2.0 * wavenumber * viscosity)
    # Viscosity only slows, so the root lies below both limits, and not by orders of magnitude below the smaller.
    low, high = 1e-3 * min(inviscid, creeping), inviscid * (1.0 + 1e-9)
    return float(brentq(_stress, low, high, args=(wavenumber, drive, interface), rtol=1e-13, xtol=1e-300))


def fastest(deceleration: float, interface: Interface) -> tuple[float, float]:
    """Return the wavelength that grows fastest [m] and its growth rate [1/s], to 1e-7 and better in the rate."""
    viscosity = interface.heavy_viscosity + interface.light_viscosity
    nu = viscosity / (interface.heavy_density + interface.light_density)
    scale = (deceleration / nu**2) ** (1.0 / 3.0)
    if interface.surface_tension > 0.0:
        excess = interface.heavy_density - interface.light_density
        scale = min(scale, math.sqrt(excess * deceleration / interface.surface_tension))

    def slowness(log_wavenumber: float) -> float:
        return -growth_rate(math.exp(log_wavenumber), deceleration, interface)

    grid = math.log(scale) + np.linspace(math.log(0.01), 0.0, 24)
    best = int(np.argmin([slowness(float(point)) for point in grid]))
    if best in (0, grid.size - 1):
        raise ArithmeticError("the fastest wavelength lies outside the range searched")
    found = minimize_scalar(
        slowness, bounds=(grid[best - 1], grid[best + 1]), method="bounded", options={"xatol": 1e-9}
    )
    return 2.0 * math.pi / math.exp(found.x), -float(found.fun)


def _drive(wavenumber: float, deceleration: float, interface: Interface) -> float:
    """Return the normal stress that one metre of ripple raises, without motion [Pa/m]."""
    excess = interface.heavy_density - interface.light_density
    return excess * deceleration - interface.surface_tension * wavenumber**2


def _stress(rate: float, k: float, drive: float, interface: Interface) -> float:
    """Return rate times the normal stress left over for unit velocity of the interface; zero for a normal mode."""
    rho1, mu1 = interface.heavy_density, interface.heavy_viscosity
    rho2, mu2 = interface.light_density, interface.light_viscosity
    q1, q2 = math.sqrt(k**2 + rate * rho1 / mu1), math.sqrt(k**2 + rate * rho2 / mu2)
    # q - k without cancellation
    d1, d2 = rate * rho1 / mu1 / (q1 + k), rate * rho2 / mu2 / (q2 + k)
    # Continuous slope and tangential stress for the potential parts A1, A2 (B = 1 - A on either side):
    # d1 A1 + d2 A2 = q1 + q2,  -rho1 A1 + rho2 A2 = tangential
    tangential = 2.0 * k**2 * (mu2 - mu1) / rate + rho2 - rho1
    determinant = d1 * rho2 + d2 * rho1
    a1 = ((q1 + q2) * rho2 - d2 * tangential) / determinant
    a2 = (d1 * tangential + rho1 * (q1 + q2)) / determinant
    slope = d1 * a1 - q1
    return drive + rate * (2.0 * (mu1 - mu2) * slope - rate / k * (rho1 * a1 + rho2 * a2))

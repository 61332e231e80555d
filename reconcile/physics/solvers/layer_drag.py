"""The expelled layer in water, without the reduced model's straight lines: release of the metal, and drag on it."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.integrate import solve_ivp
from scipy.optimize import brentq, minimize_scalar

from reconcile.physics.matter import Metal
from reconcile.physics.solvers.hugoniot import WATER_DENSITY, us_from_up, water_pressure

GrowthRate = Callable[[float, float], float]


@dataclass(frozen=True, slots=True)
class Slowing:
    """A layer from its release on, slowed by water alone."""

    mass: float  # [kg/m²]
    time: NDArray[np.float64]  # (n,) [s] from 0
    velocity: NDArray[np.float64]  # (n,) [m/s]
    deceleration: NDArray[np.float64]  # (n,) [m/s²]


def released_velocity(pressure: float, metal: Metal) -> float:
    """Return the velocity of the contact when a resting layer's pressure is released into water [m/s].

    Parameters
    ----------
    pressure : in the layer before it moves [Pa].
    metal : its density, sound speed and shock line are used.

    Notes
    -----
    The metal gives u = ∫ dp/Z(p) from the contact's pressure to its own, Z = dp/du along its shock adiabat; this is
    u_H(p0) − u_H(p_c). The water takes p_c = rho Us(u) u with Us by Rice and Walsh 1957. Method: reflected adiabat,
    as in L. W. Davison, Fundamentals of Shock Wave Propagation in Solids, Springer 2008, ch. 3 (from memory).

    """
    start = _adiabat_velocity(pressure, metal)

    def imbalance(velocity: float) -> float:
        return start - _adiabat_velocity(float(water_pressure(velocity)), metal) - velocity

    return float(brentq(imbalance, 0.0, start, xtol=1e-9, rtol=1e-13))


def slowing(velocity: float, mass: float, *, spans: float = 12.0, points: int = 121) -> Slowing:
    """Follow a layer that water slows: mass × du/dt = −rho Us(u) u.

    Parameters
    ----------
    velocity : at the start [m/s], above 0.
    mass : of the layer over its area [kg/m²].
    spans : how long to follow it, in units of mass/(rho c), its acoustic drag time [1].
    points : number of times, crowded towards the start.

    Returns
    -------
    A `Slowing` with n = points rows.

    Notes
    -----
    Us by Rice and Walsh 1957, J. Chem. Phys. 26, 824 (from memory), instead of a straight line.

    """
    drag_time = mass / (WATER_DENSITY * float(us_from_up(0.0)))
    time = spans * drag_time * np.linspace(0.0, 1.0, points) ** 2

    def slope(_time: float, log_velocity: NDArray[np.float64]) -> NDArray[np.float64]:
        return np.asarray(-WATER_DENSITY / mass * us_from_up(np.exp(log_velocity)))

    done = solve_ivp(slope, (0.0, time[-1]), [np.log(velocity)], method="DOP853", t_eval=time, rtol=1e-10, atol=1e-12)
    followed = np.exp(done.y[0])
    return Slowing(mass, time, followed, np.asarray(water_pressure(followed)) / mass)


def most_amplified_wavelength(layer: Slowing, growth_rate: GrowthRate, near: float) -> float:
    """Return the wavelength that has grown most once the layer is slow [m].

    Parameters
    ----------
    layer : its deceleration drives the growth.
    growth_rate : of (wavenumber [1/m], deceleration [m/s²]), [1/s]; taken as 0 where it is negative.
    near : a wavelength of the same order to start from [m].

    Notes
    -----
    The gain of a wavelength is the integral of its growth rate over time; its largest value is found on a grid over
    a factor of 8 either way and refined to 0.1 %.

    """

    def gain(log_wavenumber: float) -> float:
        wavenumber = float(np.exp(log_wavenumber))
        rate = [max(0.0, growth_rate(wavenumber, float(g))) for g in layer.deceleration]
        return float(np.trapezoid(rate, layer.time))

    grid = np.log(2 * np.pi / near) + np.linspace(-np.log(8), np.log(8), 13)
    best = int(np.argmax([gain(point) for point in grid]))
    if best in (0, grid.size - 1):
        raise ArithmeticError("the most amplified wavelength lies beyond a factor of 8 from the one started from")
    found = minimize_scalar(
        lambda point: -gain(point), bounds=(grid[best - 1], grid[best + 1]), method="bounded", options={"xatol": 1e-3}
    )
    return float(2 * np.pi / np.exp(found.x))


def _adiabat_velocity(pressure: float, metal: Metal) -> float:
    """Return the particle velocity on the metal's shock adiabat [m/s] at a pressure [Pa]: p = rho (c + s u) u."""
    impedance = metal.impedance
    return (
        2 * pressure / (impedance + float(np.sqrt(impedance**2 + 4 * metal.density * metal.hugoniot_slope * pressure)))
    )

"""Motion of a bubble by integrating the Keller-Miksis equation: growth from a point, largest size, first collapse.

A hemisphere on a flat target moves as one half of the sphere of the same radius, so that everything here is
written for the sphere. This is the fuller calculation that the closed forms of `reconcile.physics.bubble` are
judged by, and that an invented campaign is simulated with.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.integrate import OdeSolution, solve_ivp
from scipy.optimize import brentq

Slope = Callable[[float, np.ndarray], tuple[float, float]]
Event = Callable[[float, np.ndarray], float]

START_SHARE = 0.06  # radius over largest radius at which growth is taken to go on as t^(2/5) back to a point
EMPTY_END = 0.01  # radius over largest radius at which an empty bubble's collapse is finished as t^(2/5)
GAS_END = 0.001  # the same where gas has not yet turned the motion
SELF_SIMILAR = 0.4  # exponent of a cavity that inertia alone drives: R ∝ t^(2/5) (Rayleigh 1917, small-R limit)


@dataclass(frozen=True, slots=True)
class BubbleLiquid:
    """The liquid round a bubble, SI."""

    density: float  # [kg/m³]
    sound_speed: float  # [m/s]
    ambient_pressure: float  # [Pa]
    vapour_pressure: float  # [Pa] constant during the motion
    surface_tension: float  # [N/m]
    viscosity: float  # [Pa s]

    @property
    def overpressure(self) -> float:
        """Ambient over vapour pressure [Pa]."""
        return self.ambient_pressure - self.vapour_pressure


@dataclass(frozen=True, slots=True)
class Gas:
    """Gas that is compressed and expands without heat exchange."""

    pressure: float  # [Pa] at the reference radius
    radius: float  # [m] reference
    exponent: float = 1.4


@dataclass(frozen=True, slots=True)
class Collapse:
    """From rest at the largest radius to the first collapse."""

    duration: float  # [s]
    smallest_radius: float  # [m] at its end; 0 for an empty bubble
    path: OdeSolution[Any]  # (radius, velocity) of time after the largest radius


@dataclass(frozen=True, slots=True)
class Motion:
    """A bubble from its start at a point, t = 0, to its first collapse."""

    largest_radius: float  # [m]
    growth_time: float  # [s] from the start to the largest radius
    growth: OdeSolution[Any]  # (radius, velocity) of time before the largest radius, negative
    collapse: Collapse

    @property
    def collapse_time(self) -> float:
        """From the largest radius to the first collapse [s]."""
        return self.collapse.duration

    @property
    def lifetime(self) -> float:
        """From the start to the first collapse [s]."""
        return self.growth_time + self.collapse_time

    def radius(self, time: np.ndarray) -> np.ndarray:
        """Radius at times after the start.

        Parameters
        ----------
        time : (n,) [s]

        Returns
        -------
        radius : (n,) [m]; not a number before the start and after the first collapse.
        """
        moments = np.atleast_1d(np.asarray(time, dtype=float))
        radius = np.full(moments.shape, np.nan)
        after = moments - self.growth_time
        first, last = float(self.growth.ts[-1]), float(self.collapse.path.ts[-1])
        early = (moments >= 0) & (after < first)
        started = self.growth_time + first
        radius[early] = self.growth(first)[0] * (moments[early] / started) ** SELF_SIMILAR
        growing = (after >= first) & (after < 0)
        falling = (after >= 0) & (after <= last)
        ending = (after > last) & (after <= self.collapse_time)
        if growing.any():
            radius[growing] = self.growth(after[growing])[0]
        if falling.any():
            radius[falling] = self.collapse.path(after[falling])[0]
        if ending.any():
            left = (self.collapse_time - after[ending]) / (self.collapse_time - last)
            radius[ending] = self.collapse.path(last)[0] * left**SELF_SIMILAR
        return radius


def acceleration(radius: float, velocity: float, liquid: BubbleLiquid, gas: Gas | None) -> float:
    """Acceleration of the wall of a spherical bubble [m/s²].

    (1 − M) R R'' + (3/2)(1 − M/3) R'² = (1 + M)(p_B − p_inf)/rho + R p_B'/(rho c), M = R'/c,
    p_B = p_v + p_g − 2 sigma/R − 4 mu R'/R. A velocity of sound of `inf` gives the Rayleigh-Plesset equation.

    Source: Keller & Miksis 1980, J Acoust Soc Am 68, 628; form as in Prosperetti & Lezzi 1986, J Fluid Mech 168, 457.
    Valid to first order in M.
    """
    mach = velocity / liquid.sound_speed
    rho, mu = liquid.density, liquid.viscosity
    pressure = gas.pressure * (gas.radius / radius) ** (3 * gas.exponent) if gas else 0.0
    exponent = gas.exponent if gas else 0.0
    inside = liquid.vapour_pressure + pressure - (2 * liquid.surface_tension + 4 * mu * velocity) / radius
    # p_B' without its term in R'', which goes to the left side
    change = (
        -3 * exponent * pressure * velocity / radius
        + (2 * liquid.surface_tension + 4 * mu * velocity) * velocity / radius**2
    )
    force = (1 + mach) * (inside - liquid.ambient_pressure) / rho
    force += radius * change / (rho * liquid.sound_speed) - 1.5 * (1 - mach / 3) * velocity**2
    return force / ((1 - mach) * radius + 4 * mu / (rho * liquid.sound_speed))


def oscillation(
    radius: float, velocity: float, times: np.ndarray, liquid: BubbleLiquid, gas: Gas, *, rtol: float = 1e-9
) -> np.ndarray:
    """Radius of a gas bubble at given times, from a given start.

    Parameters
    ----------
    radius, velocity : at times[0] [m, m/s]
    times : (n,) rising [s]
    rtol : relative tolerance of the integration.

    Returns
    -------
    radius : (n,) [m]
    """
    motion = solve_ivp(
        _slope(liquid, gas),
        (float(times[0]), float(times[-1])),
        (radius, velocity),
        method="DOP853",
        t_eval=times,
        rtol=rtol,
        atol=_absolute(radius, liquid, rtol),
    )
    return np.asarray(motion.y[0])


def motion(
    largest_radius: float,
    liquid: BubbleLiquid,
    gas_share: float = 0.0,
    *,
    exponent: float = 1.4,
    rtol: float = 1e-9,
) -> Motion:
    """Growth and first collapse of a bubble of a given largest radius.

    Both halves start from rest at the largest radius, the growth backwards in time: the equation has one solution
    through that state, so that no search for a starting velocity is needed.

    Parameters
    ----------
    largest_radius : [m]
    gas_share : gas pressure at the largest radius over ambient less vapour pressure [1]
    exponent : of the gas, compressed without heat exchange [1]
    rtol : relative tolerance of the integration.

    Returns
    -------
    motion : a `Motion`. The growth time counts from a point, beyond the integration's start at 0.06 of the largest
        radius by R ∝ t^(2/5); a collapse ends likewise from 0.01 without gas, from 0.001 with too little to turn it.

    Raises
    ------
    ArithmeticError : where so much gas is in it that the bubble does not come from a point (a share above some 0.05).
    """
    held = _gas(largest_radius, liquid, gas_share, exponent)
    start = _reaches(START_SHARE * largest_radius)
    growth, first, (radius, velocity), _ = _run(held, liquid, -largest_radius, [start], rtol)
    fall = collapse(largest_radius, liquid, gas_share, exponent=exponent, rtol=rtol)
    return Motion(largest_radius, SELF_SIMILAR * radius / velocity - first, growth, fall)


def collapse(
    largest_radius: float, liquid: BubbleLiquid, gas_share: float = 0.0, *, exponent: float = 1.4, rtol: float = 1e-9
) -> Collapse:
    """Return the first collapse from rest at a given radius; parameters and errors as in `motion`."""
    gas = _gas(largest_radius, liquid, gas_share, exponent)
    ends = [_reaches((GAS_END if gas else EMPTY_END) * largest_radius), _turns]
    path, last, (radius, velocity), ended_by = _run(gas, liquid, largest_radius, ends, rtol)
    if ended_by == 1:
        return Collapse(last, radius, path)
    return Collapse(last + SELF_SIMILAR * radius / abs(velocity), 0.0, path)


def largest_radius(energy: float, liquid: BubbleLiquid) -> float:
    """Largest radius of a hemisphere that holds a given energy at rest [m].

    E = (2 pi/3) R³ (p_inf − p_v) + 2 pi R² sigma, the work against the liquid and the surface.

    Parameters
    ----------
    energy : of the hemisphere, above 0 [J]
    """
    free = math.cbrt(3 * energy / (2 * math.pi * liquid.overpressure))

    def missing(share: float) -> float:
        radius = share * free
        held = 2 * math.pi / 3 * radius**3 * liquid.overpressure + 2 * math.pi * radius**2 * liquid.surface_tension
        return held / energy - 1

    return free * float(brentq(missing, 0.0, 1.0 + 1e-9, xtol=1e-13))


def _gas(radius: float, liquid: BubbleLiquid, share: float, exponent: float) -> Gas | None:
    return Gas(share * liquid.overpressure, radius, exponent) if share > 0 else None


def _run(
    gas: Gas | None, liquid: BubbleLiquid, signed_radius: float, ends: list[Event], rtol: float
) -> tuple[OdeSolution[Any], float, tuple[float, float], int]:
    """Integrate from rest, backwards where the radius is signed so, to the first of `ends`.

    Returns the solution, its last time and state, and which end it was.
    """
    until = 2 * signed_radius * math.sqrt(liquid.density / liquid.overpressure)  # over twice Rayleigh's time
    start = (abs(signed_radius), 0.0)
    atol = _absolute(start[0], liquid, rtol)
    slope = _slope(liquid, gas)
    done = solve_ivp(slope, (0.0, until), start, method="DOP853", dense_output=True, events=ends, rtol=rtol, atol=atol)
    if done.sol is None or done.t_events is None or done.status != 1:
        raise ArithmeticError(
            "the bubble neither starts from a point nor collapses: too much gas, or too little pressure"
        )
    ended_by = next(index for index, times in enumerate(done.t_events) if times.size)
    return done.sol, float(done.t[-1]), (float(done.y[0, -1]), float(done.y[1, -1])), ended_by


def _slope(liquid: BubbleLiquid, gas: Gas | None) -> Slope:
    def slope(_time: float, state: np.ndarray) -> tuple[float, float]:
        radius, velocity = float(state[0]), float(state[1])
        return velocity, acceleration(radius, velocity, liquid, gas)

    return slope


def _absolute(radius: float, liquid: BubbleLiquid, rtol: float) -> tuple[float, float]:
    """Tolerances that never stop the integration where velocity passes through zero."""
    speed = math.sqrt(liquid.overpressure / liquid.density)
    return 1e-2 * rtol * radius, 1e-2 * rtol * speed


def _reaches(radius: float) -> Event:
    def reached(_time: float, state: np.ndarray) -> float:
        return float(state[0]) - radius

    reached.terminal = True  # type: ignore[attr-defined]  # scipy reads this mark from the function
    return reached


def _turns(_time: float, state: np.ndarray) -> float:
    return float(state[1])


_turns.terminal = True  # type: ignore[attr-defined]
_turns.direction = 1  # type: ignore[attr-defined]

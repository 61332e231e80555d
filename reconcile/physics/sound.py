"""The shock that the layer sends into the liquid, its way to the probe, and what the probe records.

The spot is large against the shock's own length, so it starts as a plane pulse and only then spreads; weak-shock
theory for a triangular pulse takes it to the probe, and a fit to Burgers' equation adds absorption and the probe.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from reconcile.physics.contact import contact_velocity, drag_time
from reconcile.physics.heating import energy_density
from reconcile.physics.matter import Array, Fluid, Metal, Values

# Gauss-Legendre points over the part of the spot above threshold, as the share of the excess that is missing there.
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(6)
MISSING = 0.5 - 0.5 * _NODES
WEIGHTS = 0.5 * _WEIGHTS

# [1] Floor on the excess, reached at 1e-5 of the threshold. It keeps the pulse of an untouched surface above zero
# (its integral then is some 1e-100 Pa² s), so that its logarithm exists.
SMALLEST_EXCESS = 1e-100


@dataclass(frozen=True, slots=True)
class Source:
    """What drives the sound: one heated spot. Arrays broadcast with each other."""

    fluence: Values  # [J/m²] absorbed, on the axis
    excess: Values  # [1] ln(fluence/threshold) there, from `removal.log_excess`
    depth: Values  # [m] heated depth there
    depth_exponent: Values  # [1] of the heated depth's power law
    pressure_coefficient: Values  # [1] initial pressure over energy density
    shock_factor: Values  # [1] shock energy over kinetic energy of the layer
    radius: Values  # [m] 1/e² radius of the beam


@dataclass(frozen=True, slots=True)
class Pulse:
    """The triangular pulse at the probe's distance and angle, before absorption and probe."""

    pressure: Array  # [Pa] peak
    duration: Array  # [s] of the triangle
    advance: Array  # [m] by which the front leads a sound wave
    arrival_time: Array  # [s] of the front, after the laser pulse
    plane_stretch: Array  # [1] by which the pulse lengthened while it was plane
    spherical_stretch: Array  # [1] and while it spread

    @property
    def integral(self) -> Array:
        """Time integral of the squared pressure [Pa² s]."""
        return np.asarray(self.pressure**2 * self.duration / 3.0)


def _spot(source: Source, metal: Metal, fluid: Fluid) -> tuple[Values, Values]:
    """Return the contact's velocity on the axis [m/s], and the spot's mean of depth × velocity² over that there [1]."""
    pressure = source.pressure_coefficient * energy_density(source.fluence, source.depth)
    on_axis = contact_velocity(pressure, metal, fluid)
    axes = np.broadcast(pressure, source.excess, source.depth_exponent).ndim
    less = -MISSING.reshape((-1,) + (1,) * axes) * source.excess  # ln(local fluence / fluence on the axis)
    off_axis = contact_velocity(pressure * np.exp((1.0 - source.depth_exponent) * less), metal, fluid)
    shares = np.exp(source.depth_exponent * less) * (off_axis / on_axis) ** 2
    return on_axis, np.tensordot(WEIGHTS, shares, axes=1)


def shock_energy(source: Source, metal: Metal, fluid: Fluid) -> Array:
    """Return the energy of the shock that enters the liquid [J].

    Notes
    -----
    `shock_factor` times the kinetic energy of the layer, integrated over the spot above threshold (six Gauss points
    in the logarithm of the fluence: 1e-5 at an excess of 4.5). The layer has the solid's density and the heated depth.

    """
    velocity, mean_share = _spot(source, metal, fluid)
    area = 0.5 * np.pi * source.radius**2 * source.excess
    return np.asarray(source.shock_factor * 0.5 * metal.density * source.depth * velocity**2 * area * mean_share)


def stretch_on_spreading(
    mach: Values, duration: Values, source_radius: Values, distance: Values, fluid: Fluid
) -> Array:
    """Return the factor by which a triangular pulse lengthens as it spreads, and by which it falls below 1/r [1].

    Parameters
    ----------
    mach : peak particle velocity over sound speed at the source radius [1].
    duration : of the triangle there [s].
    source_radius, distance : where spreading starts, and to where [m].

    Notes
    -----
    √(1 + K/2 ln(1 + r²/r0²)) with K = nonlinearity × mach × r0/(c × duration): the weak shock at the head of a triangle
    eats it up (G. B. Whitham, Linear and Nonlinear Waves, 1974, ch. 9; from memory), from a source of finite size.

    """
    steepening = fluid.nonlinearity * mach * source_radius / (fluid.sound_speed * duration)
    stretch: Array = np.sqrt(1.0 + 0.5 * steepening * np.log1p((distance / source_radius) ** 2))
    return stretch


def pressure_pulse(source: Source, standoff: Values, angle: Values, metal: Metal, fluid: Fluid) -> Pulse:
    """Return the pulse at the probe.

    Parameters
    ----------
    source : the spot.
    standoff : distance from the spot to the probe [m], large against the spot.
    angle : of the probe from the surface normal [rad].

    Notes
    -----
    Weak-shock theory of a triangular pulse, first plane over √excess × radius/2, then spherical (L. D. Landau, 1945;
    G. B. Whitham, Linear and Nonlinear Waves, 1974, ch. 9; from memory). It starts with the contact's velocity, not
    its pressure, so that it starts with exactly the energy of `shock_energy`. The dependence on angle keeps that
    energy: the integral over the hemisphere is shock_energy/(plane_stretch × spherical_stretch).

    Levels are uncertain by 0.3 to 0.5 in the logarithm (the far field of an extended source is not one triangle);
    that lives in the width of the prior of `shock_factor`.

    """
    c = fluid.sound_speed
    excess = np.maximum(source.excess, SMALLEST_EXCESS)
    velocity, mean_share = _spot(source, metal, fluid)
    mach = velocity / c
    start_duration = 1.5 * drag_time(source.depth, metal, fluid)

    run = 0.5 * np.sqrt(excess) * source.radius
    plane_stretch = np.sqrt(1.0 + fluid.nonlinearity * mach * run / (c * start_duration))
    plane_duration = start_duration * plane_stretch

    source_radius = 0.5 * source.radius * np.sqrt(source.shock_factor * mean_share * excess)
    plane_mach = mach / plane_stretch
    spherical_stretch = stretch_on_spreading(plane_mach, plane_duration, source_radius, standoff, fluid)
    duration = plane_duration * spherical_stretch
    average = fluid.density * c**2 * plane_mach * (source_radius / standoff) / spherical_stretch

    # The run is above zero, so the width is too and the root needs no limit.
    width = 2.0 * run / (c * duration)
    lengthening = np.sqrt(1.0 + (width * np.sin(angle)) ** 2)
    pressure = average / lengthening * np.sqrt(width / np.arctan(width))

    half = 0.5 * fluid.nonlinearity * mach
    plane_gain = (plane_stretch - 1.0) - half * np.log((plane_stretch + half) / (1.0 + half))
    advance = c * (start_duration * plane_gain + plane_duration * (spherical_stretch - 1.0))
    arrival = (standoff - advance) / c
    return Pulse(pressure, duration * lengthening, advance, arrival, plane_stretch, spherical_stretch)


def _smear(
    pulse: Pulse, response_time: Values, distance: Values, fluid: Fluid, fit: tuple[float, float, float]
) -> Array:
    """Return the one response time over the pulse's duration that stands for probe and absorption together [1]."""
    factor, absorption_power, power = fit
    probe = response_time / pulse.duration
    absorption = np.sqrt(2.0 * fluid.sound_absorption * distance) / (2.0 * np.pi * pulse.duration)
    smear: Array = (probe**power + (factor * absorption**absorption_power) ** power) ** (1.0 / power)
    return smear


def recorded_peak(pulse: Pulse, response_time: Values, distance: Values, fluid: Fluid) -> Array:
    """Return the peak pressure that a probe records [Pa]; parameters and limits as in `recorded_integral`."""
    x = _smear(pulse, response_time, distance, fluid, (2.175, 1.731, 1.095))
    peak: Array = pulse.pressure * (1.0 - x * np.log1p(1.0 / x))
    return peak


def recorded_integral(pulse: Pulse, response_time: Values, distance: Values, fluid: Fluid) -> Array:
    """Return the time integral of the squared pressure that a probe records [Pa² s].

    Parameters
    ----------
    pulse : at the probe.
    response_time : of a one-pole probe, 1/(2π bandwidth) [s], above zero.
    distance : that the sound ran through the liquid [m].

    Notes
    -----
    A triangle through one pole, exactly, where the liquid does not absorb. Absorption adds to the response time by a
    fit to solutions of Burgers' equation, within 3.5 % for pulses of 4 to 200 µJ at 1 to 8 mm.

    """
    x = _smear(pulse, response_time, distance, fluid, (1.624, 1.361, 1.239))
    return pulse.integral * _triangle_share(x)


def _triangle_share(x: Values) -> Array:
    """Return the share of a triangle's ∫p²dt that one pole of response time x × duration leaves.

    1 - 1.5 x + 3 x³ - 3 (x² + x³) exp(-1/x); for a slow probe its leading terms cancel, so there its series in 1/x.
    """
    inverse = 1.0 / np.asarray(x, dtype=np.float64)
    slow = inverse < 0.5
    y = np.where(slow, inverse, 0.0)
    series = np.zeros_like(y)
    for coefficient in _SLOW_SERIES:
        series = y * (coefficient + series)
    fast_x = np.where(slow, 1.0, x)
    fast = 1.0 - 1.5 * fast_x + 3.0 * fast_x**3 - 3.0 * (fast_x**2 + fast_x**3) * np.exp(-1.0 / fast_x)
    share: Array = np.where(slow, series, fast)
    return share


def _slow_series(terms: int) -> tuple[float, ...]:
    """Return the coefficients of (1/x)^terms … (1/x)^1, last first: 3 (-1)^(j+1) (j + 2)/(j + 3)!."""
    coefficients = []
    factorial = 6.0
    for j in range(1, terms + 1):
        factorial *= j + 3
        coefficients.append(3.0 * (-1.0) ** (j + 1) * (j + 2) / factorial)
    return tuple(reversed(coefficients))


_SLOW_SERIES = _slow_series(13)

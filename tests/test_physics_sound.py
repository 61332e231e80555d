"""The shock and its recording: conservation, directions, and the probe's pole by a second way."""

from __future__ import annotations

import dataclasses
import math

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.signal import lfilter

from reconcile.physics import contact, sound
from reconcile.physics.matter import Fluid, Metal

GOLD = Metal(19300.0, 3060.0, 1.572, 15000.0)
WATER = Fluid(998.2, 1482.0, 2.0, 3.5, 25e-15, 2339.0, 0.0728, 1.002e-3, 1200.0, 0.5e-3)


def source(excess: float = 1.1, spot: float = 25e-6, exponent: float = -0.2) -> sound.Source:
    return sound.Source(2000.0, excess, 87e-9, exponent, 1.5, 0.5, spot)


@pytest.mark.parametrize(("excess", "spot"), [(0.02, 12e-6), (1.1, 25e-6), (3.5, 45e-6)])
def test_the_hemisphere_carries_what_dissipation_leaves_of_the_shock_energy(excess, spot):
    # E = 2 pi r²/(rho c) ∫∫p²dt sin(theta) dtheta over the half space, acoustic far field
    heated, r = source(excess, spot), 4e-3

    def flux(angle: float) -> float:
        return float(sound.pressure_pulse(heated, r, angle, GOLD, WATER).integral) * math.sin(angle)

    carried = 2 * math.pi * r**2 / (998.2 * 1482.0) * quad(flux, 0.0, math.pi / 2, epsrel=1e-10)[0]
    pulse = sound.pressure_pulse(heated, r, 0.0, GOLD, WATER)
    left = float(sound.shock_energy(heated, GOLD, WATER) / (pulse.plane_stretch * pulse.spherical_stretch))
    assert carried == pytest.approx(left, abs=0, rel=1e-6)


@pytest.mark.parametrize(("excess", "exponent", "error"), [(0.3, -0.2, 1e-10), (1.5, 0.0, 1e-7), (4.5, -0.4, 1e-5)])
def test_shock_energy_is_the_kinetic_energy_integrated_over_the_spot(excess, exponent, error):
    # radius by radius instead of six points in the logarithm of the fluence, which tell on a wide range of it
    spot, heated = 25e-6, source(excess, 25e-6, exponent)
    edge = spot * math.sqrt(excess / 2)

    def ring(radius: float) -> float:
        fluence = 2000.0 * math.exp(-2 * radius**2 / spot**2)
        depth = 87e-9 * (fluence / 2000.0) ** exponent
        velocity = float(contact.contact_velocity(1.5 * fluence / depth, GOLD, WATER))
        return 0.5 * 19300.0 * depth * velocity**2 * 2 * math.pi * radius

    expected = 0.5 * quad(ring, 0.0, edge, epsrel=1e-11)[0]
    assert float(sound.shock_energy(heated, GOLD, WATER)) == pytest.approx(expected, abs=0, rel=error)


def test_a_compact_source_sends_the_same_impulse_in_all_directions():
    # ∫p dt of a triangle is p T/2; the impulse is isotropic for a pulse long against its source:
    # Tagawa et al., J. Fluid Mech. 808, 5 (2016)
    pulses = [sound.pressure_pulse(source(), 5e-3, angle, GOLD, WATER) for angle in (0.0, 0.7, 1.4)]
    impulses = [float(pulse.pressure * pulse.duration) for pulse in pulses]
    assert impulses == pytest.approx([impulses[0]] * 3, abs=0, rel=1e-12)


def test_a_liquid_without_nonlinearity_passes_sound_on_unchanged():
    linear = dataclasses.replace(WATER, nonlinearity=0.0)
    near, far = (sound.pressure_pulse(source(), r, 0.3, GOLD, linear) for r in (1e-3, 10e-3))
    assert float(near.pressure / far.pressure) == pytest.approx(10.0, abs=0, rel=1e-12)
    assert float(near.duration) == pytest.approx(float(far.duration), abs=0, rel=1e-12)
    assert float(far.advance) == pytest.approx(0.0, abs=1e-18)
    assert float(far.arrival_time) == pytest.approx(10e-3 / 1482.0, abs=0, rel=1e-12)


def test_the_advance_is_the_way_gained_by_a_front_faster_than_sound():
    # A weak shock of Mach number m runs ahead at c beta m/2. Plane part: m = mach/N(x) along the plane run. Beyond it
    # m = p/(rho c²) of the hemisphere, from the spot outwards.
    heated, c, beta = source(), 1482.0, 3.5
    pulse = sound.pressure_pulse(heated, 5e-3, 0.0, GOLD, WATER)
    velocity = float(contact.contact_velocity(1.5 * 2000.0 / 87e-9, GOLD, WATER))
    duration = 1.5 * 19300.0 * 87e-9 / (998.2 * c)
    run, mach = 0.5 * math.sqrt(1.1) * 25e-6, velocity / c
    half = beta * mach / 2

    def plane_gain(x: float) -> float:
        # the front runs at c (1 + h/N), so that it gains (h/N)/(1 + h/N) of each metre on sound
        share = half / math.sqrt(1 + beta * mach * x / (c * duration))
        return share / (1 + share)

    plane = quad(plane_gain, 0.0, run)[0]
    stretch, plane_duration = float(pulse.plane_stretch), duration * float(pulse.plane_stretch)
    spherical = c * plane_duration * (float(pulse.spherical_stretch) - 1)
    assert float(pulse.advance) == pytest.approx(plane + spherical, abs=0, rel=1e-9)
    assert stretch == pytest.approx(math.sqrt(1 + beta * mach * run / (c * duration)), abs=0, rel=1e-12)


def one_pole(samples: np.ndarray, step: float, tau: float) -> np.ndarray:
    """Filter a sampled pressure, straight between samples, by one pole; exact for such a pressure."""
    decay = math.exp(-step / tau)
    first = 1 - tau / step * (1 - decay)
    last = (1 - decay) - first
    return np.asarray(lfilter([first, last], [1.0, -decay], samples))


@pytest.mark.parametrize(("x", "peak"), [(0.1, 0.7743), (0.5, 0.5), (1.0, math.exp(-1)), (2.0, 0.25)])
def test_the_filter_that_judges_the_probe_meets_the_exponential_pulse(x, peak):
    # p0 exp(-t/theta) through one pole, x = tau/theta: peak x^(x/(1-x)), ∫p² times 1/(1+x); closed forms
    step = 1e-4
    time = np.arange(0.0, 60.0, step)
    seen = one_pole(np.exp(-time), step, x)
    assert seen.max() == pytest.approx(peak, abs=1e-4)  # printed digits, and a start between two samples
    assert (seen**2).sum() * step / 0.5 == pytest.approx(1 / (1 + x), abs=0, rel=3e-4)
    assert seen.sum() * step == pytest.approx(1.0, abs=0, rel=3e-4)


@pytest.mark.parametrize("x", [0.02, 0.1, 0.45, 1.0, 1.9, 2.1, 5.0, 40.0])
def test_a_triangle_through_one_pole_is_what_the_filter_gives(x):
    # sampled triangle of 4 000 steps, the jump at the front to first order: 1/4000 of peak and integral
    steps = 4000
    duration, tau = 8e-9, x * 8e-9
    step = duration / steps
    time = np.arange(0.0, duration + 40 * tau, step)
    seen = one_pole(np.clip(1.0 - time / duration, 0.0, None), step, tau)
    still = dataclasses.replace(WATER, sound_absorption=0.0)
    pulse = sound.Pulse(np.float64(1.0), np.float64(duration), np.zeros(()), np.zeros(()), np.ones(()), np.ones(()))
    assert float(sound.recorded_peak(pulse, tau, 5e-3, still)) == pytest.approx(seen.max(), abs=0, rel=5e-4)
    assert float(sound.recorded_integral(pulse, tau, 5e-3, still)) == pytest.approx(
        (seen**2).sum() * step, abs=0, rel=5e-4
    )


def test_the_probes_share_is_smooth_where_its_series_takes_over():
    # to both sides of x = 2 the same function: neighbours differ by its slope, 0.17 per step of 1e-6 at most
    x = 2.0 + np.linspace(-1e-6, 1e-6, 21)
    share = sound._triangle_share(x)
    assert np.abs(np.diff(share, 2)).max() < 1e-13
    slow = sound._triangle_share(np.array([1e3, 1e6, 1e9]))
    assert slow * np.array([1e3, 1e6, 1e9]) == pytest.approx(
        0.375, abs=0, rel=1e-3
    )  # 3/8x: leading term of the expansion

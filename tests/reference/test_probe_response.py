"""What a probe makes of a pressure pulse, against closed forms.

An exponential pulse p₀·exp(−t/θ) through a one-pole probe of response time τ, x = τ/θ, is recorded as
p₀/(1 − x)·(exp(−t/θ) − exp(−t/τ)): peak p₀·x^(x/(1−x)), ∫p²dt = p₀²θ/2/(1 + x), ∫p dt unchanged (convolution of two
exponentials). Energy of a spherical pulse: 4πr²/(ρc)·∫p²dt (plane-wave intensity p²/ρc; L. E. Kinsler et al.,
Fundamentals of Acoustics, from memory).
"""

import math

import numpy as np
import pytest

from reconcile.campaign.quantity import parse_quantity
from reconcile.measure.trace import ProbeSetup, measure_trace

# Water at 20 °C and 101.325 kPa: IAPWS R6-95 (density, speed of sound).
DENSITY, SOUND = 998.207, 1482.35
STANDOFF = 5e-3
PRESSURE, DECAY = 1e6, 50e-9
SENSITIVITY = 0.45e-6


def recorded(x: float, interval: float):
    """The pulse as its closed form gives it, sampled; a little noise, for a record has some."""
    response = x * DECAY
    time = -1e-6 + interval * np.arange(int(8e-6 / interval))
    t = np.maximum(time - STANDOFF / SOUND, 0.0)
    pressure = PRESSURE / (1 - x) * (np.exp(-t / DECAY) - np.exp(-t / response))
    voltage = SENSITIVITY * pressure + np.random.default_rng(11).normal(0, 1e-4, time.size)
    setup = ProbeSetup(SENSITIVITY, STANDOFF, SOUND, 0.0, response)
    return {one.kind: one for one in measure_trace(time, voltage, setup).measured}


# x^(x/(1−x)), to four digits by hand: 0.7743, 0.5000, 0.2500 for x of 0.1, 0.5, 2; 1/e for x towards 1.
@pytest.mark.parametrize(("x", "peak"), [(0.1, 0.7743), (0.5, 0.5000), (0.999, 0.3679), (2.0, 0.2500)])
def test_peak_and_integral_are_those_of_the_closed_form(x, peak):
    found = recorded(x, 1e-9)
    assert found["peak-pressure"].value == pytest.approx(peak * PRESSURE, rel=2e-3, abs=0)
    exact = PRESSURE**2 * DECAY / 2 / (1 + x)
    assert found["pressure-integral"].value == pytest.approx(exact, rel=3e-3, abs=0)
    assert abs(found["pressure-integral"].value - exact) < 4 * found["pressure-integral"].u
    assert found["arrival-time"].value == pytest.approx(STANDOFF / SOUND, rel=0, abs=0.5e-9)


def test_a_fast_probe_gives_the_energy_of_the_pulse():
    # p₀ 1 MPa, θ 50 ns, r 5 mm: 4πr²·p₀²θ/(2ρc) = 5.3077 µJ over the sphere, half of it before a target.
    assert 4 * math.pi * STANDOFF**2 / (DENSITY * SOUND) * PRESSURE**2 * DECAY / 2 == pytest.approx(5.3077e-6, rel=1e-4)
    x = 0.02
    integral = recorded(x, 0.25e-9)["pressure-integral"].value * (1 + x)
    energy = 4 * math.pi * STANDOFF**2 / (DENSITY * SOUND) * integral
    assert energy == pytest.approx(5.3077e-6, rel=2e-3, abs=0)


def test_a_level_and_a_sensitivity_are_one_number():
    # 20 log₁₀(5e-8 V/Pa / 1 V/µPa) = 20 log₁₀(5e-14) = −266.02 dB
    level = parse_quantity("-266.0206 dB re 1 V/uPa", "V/Pa", "probe")
    assert level.value == pytest.approx(parse_quantity("50 mV/MPa", "V/Pa", "probe").value, rel=1e-6, abs=0)
    assert level.value == pytest.approx(5e-8, rel=1e-6, abs=0)

"""The integrated bubble motion against closed forms that others derived."""

from __future__ import annotations

import math
from itertools import pairwise

import numpy as np
import pytest

from reconcile.physics.solvers.bubble_motion import (
    BubbleLiquid,
    Gas,
    acceleration,
    collapse,
    largest_radius,
    motion,
    oscillation,
)

# Water at 20 °C: IAPWS-95, IAPWS R12-08 and R1-76(2014), 101 325 Pa
WATER = BubbleLiquid(998.207, 1482.35, 101_325.0, 2339.3, 0.072736, 1.0016e-3)
# No compressibility, viscosity, surface tension or vapour: the equation of Rayleigh and Plesset with gas alone
IDEAL = BubbleLiquid(998.207, math.inf, 101_325.0, 0.0, 0.0, 0.0)


def ideal(vapour_pressure: float) -> BubbleLiquid:
    return BubbleLiquid(998.207, math.inf, 101_325.0, vapour_pressure, 0.0, 0.0)


@pytest.mark.parametrize(("vapour_pressure", "expected"), [(2339.3, 91.853e-6), (0.0, 90.787e-6)])
def test_an_empty_bubble_collapses_in_rayleighs_time(vapour_pressure, expected):
    # Rayleigh 1917, Phil Mag 34, 94: T = sqrt(pi/6) Γ(5/6)/Γ(4/3) R sqrt(rho/dp), 1 mm; five digits worked out
    fallen = motion(1e-3, ideal(vapour_pressure))
    assert fallen.collapse_time == pytest.approx(expected, rel=1e-5)
    factor = math.sqrt(math.pi / 6) * math.gamma(5 / 6) / math.gamma(4 / 3)
    closed = factor * 1e-3 * math.sqrt(998.207 / (101_325.0 - vapour_pressure))
    assert fallen.collapse_time == pytest.approx(closed, rel=1e-6)  # the last 1 % of R is extrapolated
    assert fallen.growth_time == pytest.approx(closed, rel=2e-6)  # time reversal; the first 6 % extrapolated


def test_an_empty_bubble_follows_rayleighs_motion():
    # 1 − t = I_{r³}(5/6, 1/2), the regularised incomplete beta function: Obreschkow 2024, arXiv:2401.05445
    time = np.array([0.10, 0.25, 0.50, 0.75, 0.90, 0.95, 0.99])
    expected = [0.9958051, 0.9733835, 0.8869707, 0.7098297, 0.5048067, 0.3852535, 0.2032979]
    moved = motion(1e-3, IDEAL)
    fallen = moved.radius(moved.growth_time + time * moved.collapse_time) / 1e-3
    grown = moved.radius(moved.growth_time - time * moved.growth_time) / 1e-3
    assert fallen == pytest.approx(expected, abs=1e-6)
    assert grown == pytest.approx(expected, abs=2e-6)  # the same motion backwards


@pytest.mark.parametrize(
    ("gas", "exponent", "expected"),
    [(0.01, 4 / 3, 0.0291269), (0.01, 1.4, 0.0452946), (0.001, 4 / 3, 0.0029910), (0.1, 1.4, 0.264815)],
)
def test_gas_stops_the_collapse_where_its_energy_says(gas, exponent, expected):
    # Root of the energy integral (1 − r³)/3 = (p_g/p_inf)(r^(3−3g) − 1)/(3(g − 1)) of the Rayleigh-Plesset equation
    fallen = collapse(1e-3, IDEAL, gas, exponent=exponent, rtol=1e-11)
    assert fallen.smallest_radius / 1e-3 == pytest.approx(expected, rel=1e-4)


def test_a_small_oscillation_has_minnaerts_frequency_and_radiates():
    # Minnaert 1933, Phil Mag 16, 235: f R = sqrt(3 kappa p/rho)/(2 pi) = 3.2862 m/s for kappa 1.4; the logarithmic
    # decrement of radiation alone is pi omega R/c = 0.0438 (Devin 1959, J Acoust Soc Am 31, 1654 — from memory)
    radius, liquid = 1e-3, BubbleLiquid(998.207, 1482.35, 101_325.0, 0.0, 0.0, 0.0)
    times = np.linspace(0, 10 / 3286.2, 20_001)
    swing = oscillation(1.001 * radius, 0.0, times, liquid, Gas(101_325.0, radius), rtol=1e-11) / radius - 1
    rising = np.flatnonzero((swing[:-1] < 0) & (swing[1:] >= 0))
    crossings = times[rising] - swing[rising] * (times[1] - times[0]) / (swing[rising + 1] - swing[rising])
    assert 1 / np.diff(crossings).mean() == pytest.approx(3286.2, rel=1e-3)
    tops = [swing[begin:end].max() for begin, end in pairwise(rising)]
    decrement = np.log(tops[0] / tops[-1]) / (len(tops) - 1)
    assert decrement == pytest.approx(0.0438, rel=0.03)


def test_a_viscous_bubble_at_rest_in_balance_stays():
    # Young-Laplace: p_g = p_inf − p_v + 2 sigma/R leaves the wall without acceleration
    radius = 20e-6
    held = Gas(101_325.0 - 2339.3 + 2 * 0.072736 / radius, radius)
    assert abs(acceleration(radius, 0.0, WATER, held)) < 1e-9 * 101_325.0 / (998.207 * radius)


def test_a_hemisphere_of_a_millimetre_holds_a_fifth_of_a_millijoule():
    # (2 pi/3) R³ (p_inf − p_v) = 0.20732 mJ at 20 °C, without surface tension
    assert largest_radius(0.20732e-3, ideal(2339.3)) == pytest.approx(1e-3, rel=1e-5)
    # with it, 2 pi R² sigma more is needed: 2.187e-10 J on 2.5915e-8 J at 50 µm
    needed = 2 * math.pi / 3 * 50e-6**3 * 98_985.7 + 2 * math.pi * 50e-6**2 * 0.072736
    assert largest_radius(needed, WATER) == pytest.approx(50e-6, rel=1e-9)


def test_radius_is_unknown_outside_the_first_oscillation():
    moved = motion(100e-6, WATER, 3e-3)
    outside = moved.radius(np.array([-1e-9, 1.001 * moved.lifetime]))
    assert np.isnan(outside).all()
    inside = moved.radius(np.linspace(0, moved.lifetime, 501))
    assert np.isfinite(inside).all()
    assert inside.max() == pytest.approx(100e-6, rel=1e-4)


def test_a_bubble_full_of_gas_does_not_come_from_a_point():
    with pytest.raises(ArithmeticError, match="too much gas"):
        motion(1e-3, WATER, 0.1)

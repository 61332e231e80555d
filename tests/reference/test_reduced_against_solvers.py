"""The reduced model's closed forms against the fuller calculations, within the errors that go with them."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from reconcile.physics import bubble, contact
from reconcile.physics.matter import Fluid, Metal
from reconcile.physics.solvers.bubble_motion import BubbleLiquid, largest_radius, motion
from reconcile.physics.solvers.layer_drag import released_velocity, slowing

# Water at 20 °C: IAPWS-95, IAPWS R12-08, R1-76(2014); gold: LASL Shock Hugoniot Data (Marsh 1980; from memory)
WATER = Fluid(998.207, 1482.35, 2.0, 3.5, 25e-15, 2339.3, 0.072736, 1.0016e-3, 1200.0, 0.5e-3)
GOLD = Metal(19_300.0, 3060.0, 1.572, 15_000.0)
PRESSURE = 101_325.0


def liquid_of(fluid: Fluid) -> BubbleLiquid:
    return BubbleLiquid(
        fluid.density, fluid.sound_speed, PRESSURE, fluid.vapour_pressure, fluid.surface_tension, fluid.viscosity
    )


def bubbles(count: int):
    """Random bubbles over the range for which the closed forms are stated."""
    rng = np.random.default_rng(20)
    for _ in range(count):
        fluid = replace(WATER, surface_tension=rng.uniform(0.03, 0.075), viscosity=rng.uniform(0.5e-3, 3e-3))
        yield float(np.exp(rng.uniform(np.log(25e-6), np.log(2e-3)))), fluid, float(rng.uniform(0.0, 0.02))


def test_collapse_time():
    for radius, fluid, gas in bubbles(40):
        over = PRESSURE - fluid.vapour_pressure
        closed = bubble.collapse_time(radius, over, fluid, gas, 1.0)
        assert closed == pytest.approx(motion(radius, liquid_of(fluid), gas).collapse_time, rel=6.3e-4)


def test_growth_time_in_water():
    # for water alone: three times its viscosity makes the growth of a 25 µm bubble 2 % faster than the closed form
    over = PRESSURE - WATER.vapour_pressure
    for radius, _, gas in bubbles(25):
        moved = motion(radius, liquid_of(WATER), gas)
        closed = bubble.growth_time(moved.collapse_time, radius, over, WATER, gas)
        assert closed == pytest.approx(moved.growth_time, rel=1.0e-3)


@pytest.mark.parametrize("radius", [30e-6, 100e-6, 500e-6])
@pytest.mark.parametrize("gas", [0.0, 1e-3])
def test_radius_over_time_while_it_is_above_half(radius, gas):
    moved = motion(radius, liquid_of(WATER), gas)
    time = np.linspace(0, moved.lifetime, 401)[1:-1]
    exact = moved.radius(time)
    error = np.abs(bubble.radius_at(time, radius, moved.growth_time, moved.collapse_time) / exact - 1)
    wide, growing = exact > 0.5 * radius, time < moved.growth_time
    assert wide.sum() > 300
    assert error[wide & ~growing].max() < 0.01
    assert error[wide & growing].max() < 0.0135  # 0.0065 of the largest radius, where half of it is reached


def test_largest_radius_of_an_energy():
    # the surface's share to first order: second-order rest (sigma/(R dp))²/… is 1e-4 at 25 µm
    for radius in (25e-6, 100e-6, 1e-3):
        over = PRESSURE - WATER.vapour_pressure
        energy = 2 * np.pi * radius**2 * (radius * over / 3 + WATER.surface_tension)
        assert largest_radius(energy, liquid_of(WATER)) == pytest.approx(radius, rel=1e-9)
        assert bubble.largest_radius(energy, over, WATER.surface_tension) == pytest.approx(radius, rel=1e-3)


@pytest.mark.parametrize(
    ("pressure", "error"), [(3e9, 0.001), (10e9, 0.002), (30e9, 0.007), (60e9, 0.012), (100e9, 0.017), (300e9, 0.035)]
)
def test_contact_velocity_of_a_release(pressure, error):
    closed = contact.contact_velocity(pressure, GOLD, WATER)
    # each error is stated to 0.1 %
    assert closed / released_velocity(pressure, GOLD) - 1 == pytest.approx(error, abs=6e-4)


@pytest.mark.parametrize(("velocity", "error"), [(200.0, 0.003), (500.0, 0.003), (1000.0, 0.003), (2000.0, 0.014)])
def test_drag_on_the_layer(velocity, error):
    layer = slowing(velocity, GOLD.density * 90e-9)
    tau, mach = contact.drag_time(90e-9, GOLD, WATER), contact.mach_ratio(velocity, WATER)
    fall = np.exp(-layer.time / tau)
    closed = velocity * fall / (1 + mach * (1 - fall))
    assert np.abs(closed - layer.velocity).max() / velocity < error  # 0.26 % at 500 m/s
    assert contact.deceleration(velocity, tau, mach) == pytest.approx(layer.deceleration[0], rel=0.085)

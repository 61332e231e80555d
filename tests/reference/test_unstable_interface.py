"""Growth of ripples between two fluids against the textbook's limits and separately computed roots."""

from __future__ import annotations

import math

import numpy as np
import pytest

from reconcile.physics import fragments
from reconcile.physics.matter import Fluid, Metal
from reconcile.physics.solvers.interface import Interface, fastest, growth_rate

MOLTEN_GOLD = Interface(17310.0, 1000.0, 5e-3, 1e-3, 1.15)


def test_without_viscosity_it_is_bellman_and_penningtons():
    # Bellman and Pennington, Q. Appl. Math. 12, 151 (1954): liquid gold on water, g = 1e12: 91.38 nm and 6.390e9 /s,
    # nothing grows below 52.76 nm
    thin = Interface(17310.0, 1000.0, 5e-10, 1e-10, 1.15)
    length, rate = fastest(1e12, thin)
    assert length == pytest.approx(91.38e-9, abs=0, rel=2e-4)
    assert rate == pytest.approx(6.390e9, abs=0, rel=2e-4)
    assert growth_rate(2 * math.pi / 52.6e-9, 1e12, MOLTEN_GOLD) == 0.0
    assert growth_rate(2 * math.pi / 52.9e-9, 1e12, MOLTEN_GOLD) > 0.0


def test_water_over_air():
    # the same theory, 9.81 m/s²: 29.691 mm and 37.16 /s; viscosity shifts both by less than 1 %
    length, rate = fastest(9.81, Interface(998.2, 1.2, 1e-7, 1e-9, 0.0728))
    assert length == pytest.approx(29.691e-3, abs=0, rel=1e-3)
    assert rate == pytest.approx(37.16, abs=0, rel=1e-3)


def test_without_surface_tension_and_light_fluid_it_is_chandrasekhars():
    # Hydrodynamic and Hydromagnetic Stability (1961), ch. X: k = 0.490673 (g/nu²)^(1/3), n = 0.459863 (g²/nu)^(1/3)
    length, rate = fastest(1.0, Interface(1.0, 1e-12, 1.0, 1e-12, 0.0))
    assert 2 * math.pi / length == pytest.approx(0.490673, abs=0, rel=1e-5)
    assert rate == pytest.approx(0.459863, abs=0, rel=1e-5)


@pytest.mark.parametrize(
    ("deceleration", "length", "rate"),
    [(1e11, 354.0e-9, 9.492e8), (1e12, 124.4e-9, 4.921e9), (1e13, 45.69e-9, 2.486e10)],
)
def test_molten_gold_on_water_has_the_computed_fastest_ripple(deceleration, length, rate):
    # numerical maxima of the full normal modes, computed apart from this package; four digits
    found = fastest(deceleration, MOLTEN_GOLD)
    assert found[0] == pytest.approx(length, abs=0, rel=5e-4)
    assert found[1] == pytest.approx(rate, abs=0, rel=2e-4)


def test_one_ripple_has_the_computed_rate():
    assert growth_rate(4e7, 3e11, Interface(17300.0, 1000.0, 5e-3, 1e-3, 1.15)) == pytest.approx(
        1.942426e9, abs=0, rel=3e-7
    )


@pytest.mark.parametrize("wavenumber", [5e6, 4e7, 9e7])
def test_the_root_makes_the_determinant_of_the_four_amplitudes_vanish(wavenumber):
    # continuity of velocity, slope, tangential and normal stress for (A1, B1, A2, B2), nothing eliminated
    g, both = 1e12, MOLTEN_GOLD
    r1, r2, m1, m2, k = both.heavy_density, both.light_density, both.heavy_viscosity, both.light_viscosity, wavenumber

    def determinant(n: float) -> float:
        q1, q2 = math.sqrt(k**2 + n * r1 / m1), math.sqrt(k**2 + n * r2 / m2)
        weight = ((r1 - r2) * g - both.surface_tension * k**2) / n  # on w = A1 + B1 at the interface
        normal = [
            weight - n * r1 / k - 2 * m1 * k,
            weight - 2 * m1 * q1,
            -n * r2 / k - 2 * m2 * k,
            -2 * m2 * q2,
        ]
        rows = [
            [1, 1, -1, -1],
            [k, q1, k, q2],
            [m1 * 2 * k**2, m1 * (q1**2 + k**2), -m2 * 2 * k**2, -m2 * (q2**2 + k**2)],
            normal,
        ]
        scaled = [np.array(row) / np.abs(row).max() for row in rows]
        return float(np.linalg.det(np.array(scaled)))

    root = growth_rate(wavenumber, g, both)
    away = max(abs(determinant(0.99 * root)), abs(determinant(1.01 * root)))
    assert determinant(0.99 * root) * determinant(1.01 * root) < 0
    assert abs(determinant(root)) < 1e-8 * away


def test_the_common_approximation_is_always_high():
    # √(A g k - sigma k³/(r1 + r2) + nu² k⁴) - nu k²: Mikaelian, Phys. Rev. E 47, 375 (1993);
    # 1.4 to 10 % over 0.1 to 0.9 of the cut-off
    total, nu = 18310.0, 6e-3 / 18310.0
    cutoff = math.sqrt(16310.0 * 1e12 / 1.15)
    for share in np.linspace(0.1, 0.9, 9):
        k = float(share * cutoff)
        inviscid = (16310.0 * 1e12 * k - 1.15 * k**3) / total
        common = math.sqrt(inviscid + (nu * k**2) ** 2) - nu * k**2
        assert 1.01 < common / growth_rate(k, 1e12, MOLTEN_GOLD) < 1.11


@pytest.mark.parametrize("deceleration", [1e11, 1e12, 1e13])
def test_the_reduced_formulas_stay_within_their_stated_errors(deceleration):
    metal = Metal(19300.0, 3060.0, 1.572, melt_density=17310.0)
    water = Fluid(998.2, 1482.0, 2.0, 3.5, 25e-15, 2339.0, 0.0728, 1e-3, contact_density=1000.0, contact_viscosity=1e-3)
    length, rate = fastest(deceleration, MOLTEN_GOLD)
    assert float(fragments.fastest_wavelength(deceleration, metal, water, 1.15, 5e-3)) == pytest.approx(
        length, abs=0, rel=0.038
    )
    assert float(fragments.fastest_rate(deceleration, metal, water, 1.15, 5e-3)) == pytest.approx(
        rate, abs=0, rel=0.022
    )

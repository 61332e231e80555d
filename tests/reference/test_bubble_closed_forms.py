"""The bubble's closed forms against Rayleigh's exact motion and image sums."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.special import beta, gamma

from reconcile.physics import bubble
from reconcile.physics.matter import Fluid

# Water at 20 °C without sound radiation, viscosity and surface tension: Rayleigh's liquid
IDEAL = Fluid(998.207, 1e30, 2.0, 3.5, 0.0, 2339.3, 0.0, 0.0, 1200.0, 0.5e-3)


def test_rayleighs_factor_is_its_closed_form():
    # sqrt(pi/6) G(5/6)/G(4/3): Lord Rayleigh, Phil. Mag. 34, 94 (1917)
    assert pytest.approx(math.sqrt(math.pi / 6) * gamma(5 / 6) / gamma(4 / 3), abs=0, rel=1e-12) == bubble.RAYLEIGH


@pytest.mark.parametrize(("vapour_pressure", "expected"), [(2339.3, 91.853e-6), (0.0, 90.787e-6)])
def test_an_empty_cavity_of_a_millimetre_collapses_in_rayleighs_time(vapour_pressure, expected):
    # 101 325 Pa, 20 °C; five digits printed
    time = bubble.collapse_time(1e-3, 101325.0 - vapour_pressure, IDEAL, 0.0, 1.0)
    assert float(time) == pytest.approx(expected, abs=0, rel=1e-5)


# Exact motion 1 - t = I_(r³)(5/6, 1/2), time over collapse time and radius over the largest;
# form: D. Obreschkow, arXiv:2401.05445 (2024), figures from the regularised incomplete beta function
EXACT = {
    0.10: 0.9958051,
    0.25: 0.9733835,
    0.50: 0.8869707,
    0.75: 0.7098297,
    0.90: 0.5048067,
    0.95: 0.3852535,
    0.99: 0.2032979,
}


@pytest.mark.parametrize(("time", "radius"), EXACT.items())
def test_the_collapse_follows_rayleighs_motion(time, radius):
    # Obreschkow et al., Phys. Rev. E 85, 066303 (2012): refined form, 4e-5 at t = 0.99; the polynomial for the
    # polylogarithm adds 3e-5
    assert float(bubble.radius_at(1.0 + time, 1.0, 1.0, 1.0)) == pytest.approx(radius, abs=5e-5)
    # the growth half is its mirror image
    assert float(bubble.radius_at(1.0 - time, 1.0, 1.0, 1.0)) == pytest.approx(radius, abs=5e-5)


def test_there_is_no_bubble_before_the_pulse_or_after_the_collapse():
    radii = bubble.radius_at(np.array([-1e-7, 0.0, 20e-6, 1.0]), 1e-4, 9e-6, 1.1e-5)
    assert radii == pytest.approx(0.0, abs=1e-12)
    assert bubble.radius_at(np.array([9e-6]), 1e-4, 9e-6, 1.1e-5)[0] == 1e-4


def test_a_hemisphere_of_a_millimetre_holds_half_a_spheres_energy():
    # (2/3) pi R³ (p_inf - p_v), 20 °C: 0.20732 mJ; a sphere would hold 0.41463 mJ
    assert float(bubble.largest_radius(0.20732e-3, 101325.0 - 2339.3, 0.0)) == pytest.approx(1e-3, abs=0, rel=1e-5)
    assert float(bubble.largest_radius(0.41463e-3 / 2, 101325.0 - 2339.3, 0.0)) == pytest.approx(1e-3, abs=0, rel=2e-5)


def test_surface_tension_shrinks_a_bubble_to_first_order():
    # energy = 2/3 pi R³ dp + 2 pi R² sigma; second-order remainder (sigma/(R dp))² = 2e-6 relative to 5e-6
    energy, pressure, sigma = 1e-6, 98986.0, 0.0728
    radius = float(bubble.largest_radius(energy, pressure, sigma))
    held = 2 / 3 * math.pi * radius**3 * pressure + 2 * math.pi * radius**2 * sigma
    assert held == pytest.approx(energy, abs=0, rel=3 * (sigma / (radius * pressure)) ** 2)


def test_a_distant_wall_prolongs_by_the_image_sources_share():
    # c = B(7/6, 1/2)/(4 B(5/6, 1/2)) = 0.203245; Rattray 1951 gives 0.205 (from memory)
    far = 1e4
    share = (float(bubble.boundary_factor(1.0, wall_distance=far)) - 1) * far
    assert share == pytest.approx(0.203245, abs=0, rel=1e-4)
    assert share == pytest.approx(0.205, abs=0, rel=0.01)


@pytest.mark.parametrize(
    ("distance", "factor"),
    [(1, 1.18516), (1.25, 1.15062), (1.5, 1.12698), (2, 1.09668), (3, 1.06548), (5, 1.03981), (10, 1.02011)],
)
def test_a_wall_prolongs_as_the_integral_over_its_image_says(distance, factor):
    # ∫√((1 + x/2g) x³/(1 - x³)) dx over ∫√(x³/(1 - x³)) dx; our form drops the third order
    assert float(bubble.boundary_factor(1.0, wall_distance=distance)) == pytest.approx(
        factor, abs=0, rel=0.0015 / distance**2
    )


def test_a_free_surface_shortens_by_the_sum_over_its_images():
    # images of changing sign at 2h, 4h …: 1/2 ln 2 B(7/6, 1/2)/B(5/6, 1/2) = 0.2818
    height = 1e4
    share = (1 - float(bubble.boundary_factor(1.0, height=height))) * height
    assert share == pytest.approx(0.5 * math.log(2) * beta(7 / 6, 0.5) / beta(5 / 6, 0.5), abs=0, rel=1e-3)
    # the same integral as for the wall, with -ln 2 R/h in place of 1/2g
    x = np.linspace(0, 1, 200001)[:-1] + 2.5e-6  # s with x = 1 - s², midpoints
    weight = 2 * x * np.sqrt((1 - x**2) ** 3 / (1 - (1 - x**2) ** 3))
    exact = (weight * np.sqrt(1 - math.log(2) * 0.2 * (1 - x**2))).sum() / weight.sum()
    assert float(bubble.boundary_factor(0.2, height=1.0)) == pytest.approx(exact, abs=0, rel=1e-3)


def test_a_hemisphere_on_its_target_needs_no_factor():
    # mirror symmetry: an ideal hemisphere centred on a rigid wall collapses as its sphere does
    assert float(bubble.boundary_factor(1e-4)) == 1.0

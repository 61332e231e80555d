"""Threshold, depth, diameter and volume against the closed forms of the logarithmic law."""

from __future__ import annotations

import math

import numpy as np
import pytest

from reconcile.physics import beam, removal

THRESHOLD = 1e4  # [J/m²] 1 J/cm²
DEPTH, SPOT = 20e-9, 20e-6
FLUENCES = [1.5e4, math.e * 1e4, math.e**2 * 1e4, 10e4]
# The soft threshold lifts the excess by 0.05 exp(-excess/0.05), 1.5e-5 at the first of these fluences.
SOFT = 8e-5


@pytest.mark.parametrize(("fluence", "depth"), list(zip(FLUENCES, [8.1093, 20.0, 40.0, 46.0517], strict=True)))
def test_depth_is_the_heat_depth_times_the_logarithm(fluence, depth):
    # z = d ln(F0/Fth), d = 20 nm
    excess = removal.log_excess(fluence, THRESHOLD)
    assert float(removal.crater_depth(excess, DEPTH, 0.0, 1.0, 0.0)) == pytest.approx(depth * 1e-9, abs=0, rel=SOFT)


@pytest.mark.parametrize(
    ("fluence", "diameter", "energy"),
    list(zip(FLUENCES, [18.010, 28.284, 40.000, 42.919], [9.4248, 17.0795, 46.4268, 62.8319], strict=True)),
)
def test_diameter_and_energy_are_lius(fluence, diameter, energy):
    # J. M. Liu, Opt. Lett. 7, 196 (1982): D² = 2 w² ln(F0/Fth), F0 = 2E/(pi w²)
    excess = removal.log_excess(fluence, THRESHOLD)
    assert float(removal.crater_diameter(excess, SPOT)) == pytest.approx(diameter * 1e-6, abs=0, rel=SOFT)
    assert float(beam.peak_fluence(energy * 1e-6, SPOT)) == pytest.approx(fluence, abs=0, rel=1e-5)


@pytest.mark.parametrize(
    ("fluence", "volume"), list(zip(FLUENCES, [1.03297, 6.28319, 25.13274, 33.31281], strict=True))
)
def test_volume_is_that_of_a_paraboloid(fluence, volume):
    # V = (pi/4) w² d ln²(F0/Fth)
    excess = removal.log_excess(fluence, THRESHOLD)
    got = float(removal.crater_volume(excess, DEPTH, 0.0, 1.0, 0.0, SPOT))
    assert got == pytest.approx(volume * 1e-18, abs=0, rel=2 * SOFT)
    depth = float(removal.crater_depth(excess, DEPTH, 0.0, 1.0, 0.0))
    assert got == pytest.approx(
        math.pi / 8 * float(removal.crater_diameter(excess, SPOT)) ** 2 * depth, abs=0, rel=1e-12
    )


def test_most_volume_per_energy_is_removed_at_e_squared_times_threshold():
    # V/E is largest at F0 = e² Fth, there 2 d/(e² Fth) = 0.541341 µm³/µJ
    fluence = THRESHOLD * np.exp(np.linspace(0.5, 4.0, 3501))
    excess = removal.log_excess(fluence, THRESHOLD)
    energy = 0.5 * math.pi * SPOT**2 * fluence
    share = removal.crater_volume(excess, DEPTH, 0.0, 1.0, 0.0, SPOT) / energy
    best = int(np.argmax(share))
    assert math.log(fluence[best] / THRESHOLD) == pytest.approx(2.0, abs=1e-3)  # the grid's step
    assert share[best] == pytest.approx(0.541341e-12, abs=0, rel=1e-6)


@pytest.mark.parametrize(("exponent", "factors"), [(0.85, [0.7079, 0.5012, 0.3548]), (0.91, [0.8128, 0.6607, 0.5370])])
def test_thresholds_fall_with_pulses_as_jee_becker_and_walser_found(exponent, factors):
    # J. Opt. Soc. Am. B 5, 648 (1988): Fth(N) = Fth(1) N^(S-1), N = 10, 100, 1000; four digits
    got = removal.incubated(1.0, np.array([10.0, 100.0, 1000.0]), exponent)
    assert got == pytest.approx(np.array(factors), abs=5e-5)

"""Threshold and crater: the identities that tie depth, diameter and volume together."""

from __future__ import annotations

import math
from itertools import pairwise

import numpy as np
import pytest
from scipy.integrate import quad

from reconcile.physics import heating, removal


@pytest.mark.parametrize("exponent", [-0.6, -0.2, -1e-9, 0.0, 1e-5, 0.3, 0.8])
@pytest.mark.parametrize("excess", [1e-6, 0.01, 0.3, 1.1, 4.0, 9.0])
def test_volume_is_the_depth_integrated_over_the_spot(exponent, excess):
    # dA = pi w²/2 d(ln F) for a Gaussian spot; the heated depth follows the local fluence
    threshold, depth_at_1kJ, spot = 650.0, 90e-9, 21e-6

    def slice_of(local_excess):
        depth = heating.heated_depth(threshold * math.exp(local_excess), depth_at_1kJ, exponent)
        return float(removal.crater_depth(local_excess, depth, exponent, 1.3, 25e-9))

    expected = (
        0.5
        * math.pi
        * spot**2
        * sum(
            quad(slice_of, low, high, epsrel=1e-12)[0]
            for low, high in pairwise(sorted({0.0, min(0.4, excess), excess}))
        )
    )
    on_axis = heating.heated_depth(threshold * math.exp(excess), depth_at_1kJ, exponent)
    volume = removal.crater_volume(excess, on_axis, exponent, 1.3, 25e-9, spot)
    assert float(volume) == pytest.approx(expected, abs=0, rel=1e-9)  # the quadrature's own accuracy


def test_volume_runs_through_zero_exponent_without_a_step():
    # near exponent zero the closed form is 0/0; neighbours must differ by the slope alone
    exponents = np.linspace(-0.3, 0.3, 601)
    volume = removal.crater_volume(1.0, 1e-7, exponents, 1.0, 0.0, 2e-5)
    second = np.diff(volume, 2) / volume[1:-1]
    assert np.abs(np.diff(second)).max() < 1e-8  # step³ × third derivative (1e-9 × order 1), and rounding


def test_threshold_is_where_the_energy_density_reaches_the_removal_value():
    exponents = np.linspace(-0.8, 0.8, 9)
    threshold = removal.threshold_fluence(6e9, 120e-9, exponents)
    density = heating.energy_density(threshold, heating.heated_depth(threshold, 120e-9, exponents))
    assert density == pytest.approx(np.full(9, 6e9), abs=0, rel=1e-12)


def test_the_excess_is_the_logarithm_well_above_threshold_and_nothing_well_below():
    # softness 0.05: the correction is 0.05 exp(-excess/0.05)
    assert float(removal.log_excess(2000.0, 1000.0)) == pytest.approx(math.log(2.0), abs=1e-7)
    assert float(removal.log_excess(1000.0, 1000.0)) == pytest.approx(0.05 * math.log(2.0), abs=0, rel=1e-12)
    assert 0.0 < float(removal.log_excess(500.0, 1000.0)) < 1e-7


def test_a_crater_just_above_threshold_has_the_threshold_depth():
    # the layer's own part is 1e-12 m here
    assert float(removal.crater_depth(1.0, 1e-12, 0.0, 1.0, 20e-9)) == pytest.approx(20e-9, abs=0, rel=1e-3)
    assert float(removal.crater_depth(0.0, 1e-7, -0.2, 1.0, 20e-9)) == 0.0

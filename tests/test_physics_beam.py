"""From pulse energy to absorbed fluence."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import quad

from reconcile.physics import beam


def test_the_peak_fluence_belongs_to_a_beam_of_that_energy():
    # the Gaussian profile integrated over the plane gives the energy back; 1/e² of the peak at the radius
    peak, radius = float(beam.peak_fluence(20e-6, 25e-6)), 25e-6
    energy = quad(lambda r: peak * np.exp(-2 * (r / radius) ** 2) * 2 * np.pi * r, 0.0, 8 * radius)[0]
    assert energy == pytest.approx(20e-6, abs=0, rel=1e-10)


@pytest.mark.parametrize("exponent", [-0.5, 0.0, 0.2])
def test_the_absorbed_share_is_stated_at_ten_kilojoule_and_follows_its_exponent(exponent):
    # worked by hand: the share doubles in 2^(1/exponent) of fluence, so at twice 10 kJ/m² it is 0.2 × 2^exponent
    incident = np.array([0.0, 1e4, 2e4])
    absorbed = beam.absorbed_fluence(incident, 0.2, exponent)
    assert absorbed[0] == 0.0
    assert absorbed[1:] == pytest.approx(np.array([2e3, 4e3 * 2**exponent]), abs=0, rel=1e-12)


def test_draws_meet_energies_of_any_shape():
    energies, radii = np.full((60, 1), 1e-5), np.full(200, 2e-5)
    incident = beam.peak_fluence(energies, radii)
    assert beam.absorbed_fluence(incident, np.full(200, 0.1), 0.0).shape == (60, 200)

"""Self-focusing in the liquid, against Gaussian-beam integrals done here and Marburger's own limits."""

import numpy as np
import pytest
from scipy import integrate

from reconcile.physics.beam import collapse_distance, critical_power, nonlinear_phase, peak_power


def test_the_peak_power_of_a_gaussian_pulse_is_its_integral() -> None:
    duration = 350e-15
    shape, _ = integrate.quad(lambda t: np.exp(-4.0 * np.log(2.0) * (t / duration) ** 2), -2e-12, 2e-12)
    assert peak_power(10e-6, duration) == pytest.approx(10e-6 / shape, rel=1e-9)


def test_the_critical_power_of_water_is_some_megawatts() -> None:
    # n2 of water 1.9e-20 m²/W (Wilkes et al., Appl. Phys. Lett. 94, 211102 (2009), from memory); 3.77: Marburger 1975.
    # A Townes profile collapses at 3.72 in place of 3.77 (Fibich and Gaeta, Opt. Lett. 25, 335 (2000)).
    townes = 3.72 * (1030e-9) ** 2 / (8.0 * np.pi * 1.3244 * 1.9e-20)
    assert critical_power(1030e-9, 1.3244, 1.9e-20) == pytest.approx(townes, rel=0.015)
    assert critical_power(1030e-9, 1.3244, 1.9e-20) == pytest.approx(6.32e6, rel=1e-3)


def test_a_beam_at_the_critical_power_does_not_collapse_and_a_strong_one_soon_does() -> None:
    distance = collapse_distance(np.array([0.5, 1.0, 2.0, 10.0, 50.0]), 100e-6, 1030e-9, 1.3244)
    assert np.all(np.isinf(distance[:2]))
    assert np.all(np.diff(distance[2:]) < 0)
    # Far above it the distance falls as one over the root of the power.
    far = collapse_distance(np.array([1e4, 4e4]), 100e-6, 1030e-9, 1.3244)
    assert far[0] / far[1] == pytest.approx(2.0, rel=0.01)


def test_the_nonlinear_phase_is_the_integral_along_a_focused_beam() -> None:
    entry, target, path, power = 84e-6, 15e-6, 5e-3, 2.7e6
    rayleigh = path / np.sqrt((entry / target) ** 2 - 1.0)

    def intensity(z: float) -> float:
        return 2.0 * power / (np.pi * target**2 * (1.0 + (z / rayleigh) ** 2))

    expected = 2.0 * np.pi / 1030e-9 * 1.9e-20 * integrate.quad(intensity, 0.0, path)[0]
    assert nonlinear_phase(power, 1.9e-20, 1030e-9, path, (entry, target)) == pytest.approx(expected, rel=1e-9)

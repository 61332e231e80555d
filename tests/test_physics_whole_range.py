"""The model over all that its priors allow: finite, never negative, and without a kink at the threshold."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pytest
from numpy.typing import NDArray

from reconcile.physics import beam, bubble, contact, fragments, heating, removal, sound
from reconcile.physics.matter import Fluid, Metal

GOLD = Metal(19300.0, 3060.0, 1.572, 15000.0)
WATER = Fluid(998.2, 1482.0, 2.0, 3.5, 25e-15, 2339.0, 0.0728, 1.002e-3, 1200.0, 0.5e-3)
OVERPRESSURE = 98986.0
DRAWS = 2000


def drawn(rng: np.random.Generator) -> dict[str, NDArray[np.float64]]:
    """Draws of the default priors, (draws,) each."""

    def spread(median: float, sd: float) -> NDArray[np.float64]:
        return median * np.exp(sd * rng.normal(size=DRAWS))

    def normal(mean: float, sd: float, low: float, high: float) -> NDArray[np.float64]:
        return np.clip(mean + sd * rng.normal(size=DRAWS), low, high)

    return {
        "absorbed_fraction": np.minimum(spread(0.1, 0.6), 1.0),
        "absorption_exponent": normal(0.0, 0.15, -0.9, 2.0),
        "depth_at_1kJ": spread(100e-9, 0.45),
        "exponent": normal(-0.2, 0.12, -0.9, 0.89),
        "removal_energy_density": spread(6e9, 0.4),
        "removal_factor": spread(1.0, 0.3),
        "threshold_depth": spread(20e-9, 0.8),
        "pressure_coefficient": spread(1.5, 0.6),
        "bubble_yield": spread(0.1, 0.9),
        "bubble_yield_exponent": normal(0.0, 0.1, -2.0, 2.0),
        "shock_factor": spread(0.5, 0.7),
        "fragment_factor": spread(0.04, 0.7),
        "prolongation": spread(1.03, 0.04),
        "gas": spread(3e-3, 0.5),
        "sigma": spread(0.5, 0.3),
        "mu": spread(3e-3, 0.3),
        "spot": spread(20e-6, 0.3),
        "response_time": spread(3.2e-9, 1.0),
        "angle": rng.uniform(0.0, np.pi / 2, DRAWS),
        "standoff": spread(5e-3, 0.5),
        "pulses": rng.integers(1, 1000, DRAWS).astype(float),
        "incubation_exponent": normal(0.88, 0.05, 0.6, 1.0),
    }


def observables(
    p: Mapping[str, NDArray[np.float64]], over_threshold: NDArray[np.float64]
) -> dict[str, NDArray[np.float64]]:
    """Every observable [SI] at absorbed fluences that are those multiples of the threshold, (n, draws)."""
    single = removal.threshold_fluence(p["removal_energy_density"], p["depth_at_1kJ"], p["exponent"])
    threshold = removal.incubated(single, p["pulses"], p["incubation_exponent"])
    share = p["absorbed_fraction"] * beam.REFERENCE_INCIDENT
    incident = beam.REFERENCE_INCIDENT * (over_threshold * threshold / share) ** (1 / (1 + p["absorption_exponent"]))
    fluence = beam.absorbed_fluence(incident, p["absorbed_fraction"], p["absorption_exponent"])
    excess = removal.log_excess(fluence, threshold)
    heat = heating.heated_depth(fluence, p["depth_at_1kJ"], p["exponent"])
    crater = (excess, heat, p["exponent"], p["removal_factor"], p["threshold_depth"])
    velocity = contact.contact_velocity(p["pressure_coefficient"] * heating.energy_density(fluence, heat), GOLD, WATER)
    mach, drag = contact.mach_ratio(velocity, WATER), contact.drag_time(heat, GOLD, WATER)
    slowing = contact.deceleration(velocity, drag, mach)
    source = sound.Source(fluence, excess, heat, p["exponent"], p["pressure_coefficient"], p["shock_factor"], p["spot"])
    pulse = sound.pressure_pulse(source, p["standoff"], p["angle"], GOLD, WATER)
    energy = bubble.bubble_energy(fluence, excess, p["spot"], p["bubble_yield"], p["bubble_yield_exponent"])
    largest = bubble.largest_radius(energy, OVERPRESSURE, WATER.surface_tension)
    prolongation = p["prolongation"] * bubble.boundary_factor(largest, 3e-3, 8e-3)
    collapse = bubble.collapse_time(largest, OVERPRESSURE, WATER, p["gas"], prolongation)
    growth = bubble.growth_time(collapse, largest, OVERPRESSURE, WATER, p["gas"])
    return {
        "crater depth": removal.crater_depth(*crater),
        "crater diameter": removal.crater_diameter(excess, p["spot"]),
        "crater volume": removal.crater_volume(*crater, p["spot"]),
        "contact pressure": contact.contact_pressure(velocity, WATER),
        "median diameter": fragments.median_diameter(
            p["fragment_factor"], slowing, mach, GOLD, WATER, p["sigma"], p["mu"]
        ),
        "gain": np.exp(fragments.log_gain(slowing, drag, mach, GOLD, WATER, p["sigma"], p["mu"]) / 100),
        "shock energy": sound.shock_energy(source, GOLD, WATER),
        "pulse duration": pulse.duration,
        "arrival time": pulse.arrival_time,
        "recorded peak": sound.recorded_peak(pulse, p["response_time"], p["standoff"], WATER),
        "recorded integral": sound.recorded_integral(pulse, p["response_time"], p["standoff"], WATER),
        "largest radius": largest,
        "growth time": growth,
        "collapse time": collapse,
        "radius": bubble.radius_at(0.4 * (growth + collapse), largest, growth, collapse),
        "radius at a fixed time": bubble.radius_at(5e-6, largest, growth, collapse),
    }


def test_every_observable_is_finite_and_not_negative_for_all_that_the_priors_allow():
    # from a hundredth of the threshold to a hundred times it; warnings count as failures in this suite
    draws = drawn(np.random.default_rng(20260314))
    for name, value in observables(draws, np.geomspace(0.01, 100.0, 9)[:, None]).items():
        assert value.shape == (9, DRAWS), name
        assert np.isfinite(value).all(), name
        assert (value >= 0.0).all(), name


def test_the_logarithm_of_the_recorded_integral_exists_far_below_threshold():
    draws = drawn(np.random.default_rng(5))
    values = observables(draws, np.array([[1e-20], [1e-6], [1e-3]]))
    assert np.isfinite(np.log(values["recorded integral"])).all()


def test_nothing_has_a_kink_at_the_threshold():
    # Halving the step quarters a smooth function's second differences and only halves those of one with a kink.
    middle = {name: np.array([np.median(values)]) for name, values in drawn(np.random.default_rng(3)).items()}

    def largest_bend(intervals: int) -> dict[str, float]:
        grid = np.exp(np.linspace(-0.4, 0.4, intervals + 1))[:, None]
        return {
            name: float(np.abs(np.diff(value[:, 0], 2)).max() / np.abs(value).max())
            for name, value in observables(middle, grid).items()
            if name != "radius at a fixed time"  # a collapse is sharp in truth
        }

    coarse, fine = largest_bend(400), largest_bend(800)
    for name in coarse:
        assert coarse[name] / fine[name] == pytest.approx(4.0, abs=0, rel=0.05), name

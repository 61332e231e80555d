"""The coordinates that are sampled: the way there and back, the density on them, and what the readings cannot see."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from hand_campaign import INPUTS, SHOTS, gathered

from reconcile.campaign.campaign import Prior
from reconcile.inference.coordinates import Coordinates
from reconcile.inference.lattice import STEP, Lattice, full_points
from reconcile.inference.problem import Data, Problem


def fixed(value: float) -> Prior:
    return Prior("fixed", value, 0.0, f"fixed({value})")


TABLES_ONLY = ("bubble-radius", "pressure-integral", "arrival-time", "reflected-fraction", "median-diameter")
# Campaigns: stated priors, and kinds that were not read.
CAMPAIGNS = {
    "every kind": ({}, ()),
    "tables only": ({}, TABLES_ONLY),
    "depths alone": ({}, (*TABLES_ONLY, "crater-diameter", "bubble-lifetime")),
    "some inputs fixed": (
        {
            "absorption_exponent": fixed(0.05),
            "heated_depth": fixed(1.1e-7),
            "bubble_yield": fixed(0.11),
            "spot_radius": fixed(2.1e-5),
            "removal_factor": fixed(1.1),
            "stray_rate": fixed(0.05),
        },
        (),
    ),
    "the absorbed fraction and the threshold known": (
        {"absorbed_fraction": fixed(0.12), "removal_energy_density": fixed(6e9), "standoff": fixed(5e-3)},
        (),
    ),
    "priors that end sharply": (
        {
            "absorbed_fraction": Prior("uniform", 0.02, 0.5, "uniform(0.02, 0.5)"),
            "heated_depth": Prior("loguniform", 4e-8, 3e-7, "loguniform(40 nm, 300 nm)"),
            "shock_factor": Prior("uniform", 0.1, 1.0, "uniform(0.1, 1)"),
            "delivery": Prior("beta", 41.0, 9.0, "beta(41, 9)"),
            "absorption_exponent": Prior("uniform", -0.2, 0.3, "uniform(-0.2, 0.3)"),
        },
        (),
    ),
    "an absorbed fraction known to be small": (
        {"absorbed_fraction": Prior("lognormal", 0.05, 0.3, "lognormal(0.05, 30 %)")},
        (),
    ),
    "priors of other families": (
        {
            "absorbed_fraction": Prior("beta", 3.0, 17.0, "beta(3, 17)"),
            "removal_energy_density": Prior("normal", 6e9, 1e9, "normal(6e9 J/m3, 1e9 J/m3)"),
            "fragment_factor": Prior("normal", 0.04, 0.008, "normal(0.04, 0.008)"),
        },
        (),
    ),
}
campaigns = pytest.mark.parametrize(("priors", "without"), CAMPAIGNS.values(), ids=CAMPAIGNS)


def problem_of(priors=None, without=()) -> Problem:
    return Problem(Data.of(gathered(priors, without)))


def from_priors(problem: Problem, n: int) -> dict[str, np.ndarray]:
    """Draws of every sampled input from its prior."""
    rng = np.random.default_rng(11)
    return {name: problem.data.believed[name].density.sample(rng, n) for name in problem.names}


@campaigns
def test_inputs_lead_to_a_position_and_back(priors, without):
    problem = problem_of(priors, without)
    inputs = from_priors(problem, 200)
    position = problem.coordinates.position(inputs)
    assert position.shape == (200, len(problem.names))
    assert np.isfinite(position).all()
    back, log_prior = problem.coordinates.inputs(position)
    assert np.isfinite(log_prior).all()
    for name in problem.names:
        spread = inputs[name].std()
        # Levels are differences of logarithms, worked out twice: some 1e-13 of a number of order 20.
        assert back[name] == pytest.approx(inputs[name], rel=1e-9, abs=1e-9 * spread), name
    for name, known in problem.data.believed.items():
        if name not in problem.names:
            assert back[name].shape == (1,)
            assert back[name][0] == pytest.approx(known.density.quantile(np.array(0.5)), rel=1e-12, abs=0)


@campaigns
def test_a_position_leads_to_inputs_and_back(priors, without):
    problem = problem_of(priors, without)
    position = problem.coordinates.position(from_priors(problem, 50))
    moved = position + 0.1 * position.std(axis=0) * np.random.default_rng(2).standard_normal(position.shape)
    inputs, _ = problem.coordinates.inputs(moved)
    assert problem.coordinates.position(inputs) == pytest.approx(moved, rel=1e-9, abs=1e-8)


def numerical_jacobian(coordinates: Coordinates, position: np.ndarray, widths: np.ndarray) -> tuple[float, float]:
    """ln |det d inputs/d position| of the whole map, by central differences of fourth order; at two widths of step."""
    names = coordinates.names

    def slogdet(h: float) -> float:
        steps = h * np.diag(widths)
        shifts = np.concatenate([steps, -steps, 2.0 * steps, -2.0 * steps])
        values, _ = coordinates.inputs(position + shifts)
        k = len(names)
        columns = np.stack([values[name] for name in names], axis=-1).reshape(4, k, k)
        slope = (8.0 * (columns[0] - columns[1]) - (columns[2] - columns[3])) / (12.0 * h)  # (coordinate, input)
        size = np.abs(columns).mean(axis=(0, 1))  # of each input, so that no row of the matrix is tiny
        sign, value = np.linalg.slogdet(slope / size)
        assert sign != 0
        return float(value + np.log(size).sum() - np.log(widths).sum())

    return slogdet(1e-3), slogdet(5e-4)


@campaigns
def test_the_density_on_coordinates_holds_the_jacobian_of_the_whole_map(priors, without):
    problem = problem_of(priors, without)
    inputs = from_priors(problem, 6)
    position = problem.coordinates.position(inputs)
    widths = problem.coordinates.position(from_priors(problem, 300)).std(axis=0)
    _, log_prior = problem.coordinates.inputs(position)
    for n in range(6):
        own = sum(float(problem.data.believed[name].density.log_pdf(inputs[name][n])) for name in problem.names)
        coarse, fine = numerical_jacobian(problem.coordinates, position[n], widths)
        assert fine == pytest.approx(coarse, abs=1e-5)  # the differences themselves have settled
        assert log_prior[n] == pytest.approx(own + fine, abs=1e-5)


def test_outside_the_support_the_density_is_nil():
    problem = problem_of()
    inputs = {name: np.array([INPUTS[name]]) for name in problem.names}
    inside = problem.coordinates.inputs(problem.coordinates.position(inputs))[1]
    outside = problem.coordinates.position(inputs | {"absorption_exponent": np.array([-0.95])})
    assert np.isfinite(inside[0])
    assert problem.coordinates.inputs(outside)[1][0] == -math.inf
    assert problem.log_prob(outside)[0] == -math.inf


def test_an_absorbed_share_above_one_has_no_prior_weight():
    problem = problem_of({"absorption_exponent": Prior("normal", 0.0, 0.5, "normal(0, 0.5)")})
    inputs = {name: np.array([INPUTS[name]]) for name in problem.names}
    # 0.9 at 10 kJ/m²; the strongest shot has some 33 kJ/m², the weakest some 6: one exponent each way.
    for exponent, possible in ((0.0, True), (0.6, False), (-0.6, False)):
        tried = inputs | {"absorbed_fraction": np.array([0.9]), "absorption_exponent": np.array([exponent])}
        tried |= {"bubble_yield": np.array([0.01]), "shock_factor": np.array([0.01])}  # far from the bound on energy
        assert np.isfinite(problem.log_prior(problem.coordinates.position(tried))[0][0]) == possible


def with_likelihood(without: tuple[str, ...], priors=None) -> Problem:
    data = Data.of(gathered(priors, without))
    return Problem(data, Lattice.of(data.table, full_points(data.table, data.likelihood.read_shots, STEP), STEP))


def scaled(inputs: dict[str, np.ndarray], s: float) -> dict[str, np.ndarray]:
    """All energy densities times s: only absorbed fluence, threshold and energy density change, all alike."""
    return inputs | {
        "absorbed_fraction": s * inputs["absorbed_fraction"],
        "removal_energy_density": s * inputs["removal_energy_density"],
        "pressure_coefficient": inputs["pressure_coefficient"] / s,
        "bubble_yield": inputs["bubble_yield"] * s ** -(1.0 + inputs["bubble_yield_exponent"]),
        "heated_depth": inputs["heated_depth"] * s ** -inputs["heated_depth_exponent"],
    }


def test_no_crater_bubble_sound_or_size_sees_the_scale_of_absorbed_energy():
    problem = with_likelihood(without=("reflected-fraction",))
    inputs = {name: np.array([value]) for name, value in INPUTS.items()}
    before = problem.likelihood(inputs)[0]
    for s in (0.5, 1.3, 3.0):
        assert problem.likelihood(scaled(inputs, s))[0] == pytest.approx(before, abs=1e-6)  # rounding of 45 readings
    for name in ("absorbed_fraction", "removal_energy_density", "pressure_coefficient", "bubble_yield", "heated_depth"):
        alone = problem.likelihood(inputs | {name: scaled(inputs, 1.3)[name]})[0]
        assert abs(alone - before) > 0.1, name  # it is the five together that go unnoticed


def test_a_reading_of_reflected_light_sees_that_scale():
    problem = with_likelihood(without=())
    inputs = {name: np.array([value]) for name, value in INPUTS.items()}
    assert abs(problem.likelihood(scaled(inputs, 3.0))[0] - problem.likelihood(inputs)[0]) > 0.5


@pytest.mark.parametrize("prior", [None, CAMPAIGNS["an absorbed fraction known to be small"][0]["absorbed_fraction"]])
def test_one_coordinate_moves_along_what_the_readings_cannot_see(prior):
    stated = {} if prior is None else {"absorbed_fraction": prior}
    problem = with_likelihood(without=("reflected-fraction",), priors=stated)
    inputs = {name: np.array([INPUTS[name]]) for name in problem.names}
    position = np.repeat(problem.coordinates.position(inputs), 5, axis=0)
    position[:, problem.names.index("absorbed_fraction")] += [-1.0, -0.3, 0.0, 0.3, 1.0]
    there, _ = problem.coordinates.inputs(position)
    assert there["absorbed_fraction"].max() > 2.0 * 0.115
    assert there["absorbed_fraction"].min() < 0.5 * 0.115
    found = problem.likelihood(there)
    assert found == pytest.approx(np.full(5, found[2]), abs=1e-6)  # rounding of 45 readings


def test_inputs_that_nothing_touches_are_not_sampled():
    depths = problem_of(without=(*TABLES_ONLY, "crater-diameter", "bubble-lifetime"))
    assert "fragment_factor" not in depths.names
    assert "wall_prolongation" not in depths.names
    assert "scale.mirror" not in depths.names
    assert {"scale.profiler", "scale.afm", "removal_factor", "stray_rate"} <= set(depths.names)
    one_pulse = tuple(shot for shot in SHOTS if shot.pulses == 1)
    kept = tuple(r for r in gathered().readings if r.shot != "ten-pulses")
    single = Problem(Data.of(replace(gathered(), shots=one_pulse, readings=kept)))
    assert "incubation_exponent" in depths.names
    assert "incubation_exponent" not in single.names

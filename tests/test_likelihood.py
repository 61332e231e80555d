"""The likelihood of a campaign against one written for this test: one shot at a time, its deviation integrated finely."""

from __future__ import annotations

import itertools
import math
from dataclasses import replace

import numpy as np
import pytest
from hand_campaign import (
    INPUTS,
    NOMINAL_PITCH,
    NOMINAL_RADIUS,
    NOMINAL_SENSITIVITY,
    NOMINAL_STANDOFF,
    NOMINAL_TRIGGER,
    SHOTS,
    campaign,
    gathered,
)
from scipy import integrate, stats

from reconcile.campaign.materials import properties_of_liquid, properties_of_target
from reconcile.campaign.readings import Reading, Shot
from reconcile.inference.lattice import STEP, Lattice, full_points, kept_points
from reconcile.inference.likelihood import Likelihood
from reconcile.inference.problem import Data
from reconcile.physics import beam, bubble, contact, fragments, heating, removal, sound
from reconcile.physics.matter import Fluid, Metal

# Three draws: as it is, far less absorbed with a wide jitter, and threshold so high that weak shots lie below it.
DRAWS = (
    INPUTS,
    INPUTS | {"absorbed_fraction": 0.09, "energy_jitter": 0.08, "scatter.crater-depth": 0.15, "stray_rate": 0.2},
    INPUTS | {"removal_energy_density": 8.5e9, "scale.profiler": 0.96, "scale.afm": 1.06, "misread_rate": 0.005},
)

_target, _liquid = properties_of_target(campaign()), properties_of_liquid(campaign())
METAL = Metal(_target.density, _target.sound_speed, _target.hugoniot_slope, _target.melt_density)
FLUID = Fluid(
    **{name: getattr(_liquid, name) for name in Fluid.__dataclass_fields__}  # the same ten names
)
OVERPRESSURE = 101_325.0 - FLUID.vapour_pressure
HEIGHT = 6e-3
LOGARITHMIC = ("bubble-lifetime", "pressure-integral", "median-diameter")


class Shown:
    """What one shot shows at deviations x (n,), by the chain of formulas from energy to reading."""

    def __init__(self, p: dict[str, float], shot: Shot, x: np.ndarray) -> None:
        self.p, self.shot, self.n = p, shot, float(shot.pulses)
        self.w = p["spot_radius"] * (shot.spot_radius or NOMINAL_RADIUS) / NOMINAL_RADIUS
        energy = p["meter_calibration"] * shot.metered_energy * np.exp(x)
        self.incident = beam.peak_fluence(p["delivery"] * shot.transmission * energy, self.w)
        self.fa = beam.absorbed_fluence(self.incident, p["absorbed_fraction"], p["absorption_exponent"])
        a = p["heated_depth_exponent"]
        threshold = removal.threshold_fluence(p["removal_energy_density"], p["heated_depth"], a)
        self.excess = removal.log_excess(self.fa, threshold * self.n ** (p["incubation_exponent"] - 1.0))
        self.delta = heating.heated_depth(self.fa, p["heated_depth"], a)
        self.standoff = (shot.standoff or NOMINAL_STANDOFF) + p["standoff"] - NOMINAL_STANDOFF

    def depth(self) -> np.ndarray:
        p = self.p
        return self.n * removal.crater_depth(
            self.excess, self.delta, p["heated_depth_exponent"], p["removal_factor"], p["threshold_depth"]
        )

    def diameter(self) -> np.ndarray:
        return removal.crater_diameter(self.excess, self.w)

    def bubble(self) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Largest radius, growth time, collapse time."""
        p = self.p
        energy = bubble.bubble_energy(self.fa, self.excess, self.w, p["bubble_yield"], p["bubble_yield_exponent"])
        largest = bubble.largest_radius(energy, OVERPRESSURE, FLUID.surface_tension)
        longer = p["wall_prolongation"] * bubble.boundary_factor(largest, HEIGHT)
        collapse = bubble.collapse_time(largest, OVERPRESSURE, FLUID, p["bubble_gas"], longer)
        return largest, bubble.growth_time(collapse, largest, OVERPRESSURE, FLUID, p["bubble_gas"]), collapse

    def pulse(self) -> sound.Pulse:
        p = self.p
        source = sound.Source(
            self.fa,
            self.excess,
            self.delta,
            p["heated_depth_exponent"],
            p["pressure_coefficient"],
            p["shock_factor"],
            self.w,
        )
        return sound.pressure_pulse(source, self.standoff, p["probe_angle"], METAL, FLUID)

    def fragments(self) -> np.ndarray:
        """Median diameter of the particles."""
        p = self.p
        velocity = contact.contact_velocity(p["pressure_coefficient"] * self.fa / self.delta, METAL, FLUID)
        mach = contact.mach_ratio(velocity, FLUID)
        slowing = contact.deceleration(velocity, contact.drag_time(self.delta, METAL, FLUID), mach)
        tension, viscosity = p["melt_surface_tension"], p["melt_viscosity"]
        return fragments.median_diameter(p["fragment_factor"], slowing, mach, METAL, FLUID, tension, viscosity)

    def volume(self) -> np.ndarray:
        """Volume that one pulse removes."""
        p = self.p
        exponent, factor, spall = p["heated_depth_exponent"], p["removal_factor"], p["threshold_depth"]
        return removal.crater_volume(self.excess, self.delta, exponent, factor, spall, self.w)

    def of(self, reading: Reading) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Expected reading, standard deviation that its scatter gives, width of stray ones; logarithms where due."""
        p, kind = self.p, reading.kind
        scatter, scale = p[f"scatter.{kind}"], p.get(f"scale.{reading.table}", 1.0)
        one = np.ones_like(self.fa)
        if kind == "crater-depth":
            z = self.depth()
            return scale * z, scale * scatter * z, np.sqrt(z**2 + (self.n * self.delta) ** 2)
        if kind == "crater-diameter":
            d = self.diameter()
            return d, scatter * d, np.sqrt(d**2 + self.w**2)
        if kind == "reflected-fraction":
            reflected = 1.0 - self.fa / self.incident
            return scale * reflected, scale * scatter * reflected, 0.3 * one
        if kind == "arrival-time":
            return self.pulse().arrival_time + p["trigger_offset"] - NOMINAL_TRIGGER, scatter * one, 200e-9 * one
        if kind == "pressure-integral":
            true = sound.recorded_integral(self.pulse(), p["probe_response"], self.standoff, FLUID)
            return np.log(true * (p["probe_sensitivity"] / NOMINAL_SENSITIVITY) ** 2), scatter * one, one
        largest, growth, collapse = self.bubble()
        if kind == "bubble-lifetime":
            return np.log(growth + collapse), scatter * one, one
        # A frame is measured in pixels, and turned to metres with the nominal pitch.
        seen = NOMINAL_PITCH["camera"] / p["pixel_pitch.camera"]
        r = bubble.radius_at(reading.delay, largest, growth, collapse)
        return seen * r, seen * np.sqrt((scatter * r) ** 2 + (0.005 * largest) ** 2), largest


def in_peaks(readings: list[Reading], parts, rate: float) -> np.ndarray:
    """Probability density of repeats, over each one's own normal peak 1/(u √2π): every pattern of sound and stray.

    Sound repeats share their scatter: a multivariate normal density with its whole covariance matrix. Where the reading
    lies below a limit, the probability of lying there, of an uncertainty of a third of the limit.
    """
    logarithmic = readings[0].kind in LOGARITHMIC
    if readings[0].limit is not None:
        (reading,), ((expected, shared, width),) = readings, parts
        limit, u = (math.log(reading.limit), 1 / 3) if logarithmic else (reading.limit, reading.limit / 3)
        sound_below = stats.norm.cdf(limit, expected, np.sqrt(u**2 + shared**2))
        return (1 - rate) * sound_below + rate * stats.cauchy.cdf(limit, expected, np.hypot(width, u))
    value = [math.log(entry.value) if logarithmic else entry.value for entry in readings]
    u = [entry.u / entry.value if logarithmic else entry.u for entry in readings]
    off = np.stack([y - expected for y, (expected, _, _) in zip(value, parts, strict=True)])
    total = np.zeros(off.shape[1])
    for pattern in itertools.product((True, False), repeat=len(readings)):
        term = np.ones(off.shape[1])
        for n, is_sound in enumerate(pattern):
            if is_sound:
                term = term * (1 - rate)
            else:
                term = (
                    term
                    * rate
                    * stats.cauchy.pdf(off[n], 0.0, np.hypot(parts[n][2], u[n]))
                    * u[n]
                    * math.sqrt(2 * math.pi)
                )
        kept = [n for n, is_sound in enumerate(pattern) if is_sound]
        if kept:
            shared = np.stack([parts[n][1] for n in kept], axis=-1) / np.array([u[n] for n in kept])
            covariance = np.eye(len(kept)) + shared[:, :, None] * shared[:, None, :]
            z = np.stack([off[n] / u[n] for n in kept], axis=-1)
            exponent = np.einsum("ij,ij->i", z, np.linalg.solve(covariance, z[..., None])[..., 0])
            term = term * np.exp(-0.5 * exponent) / np.sqrt(np.linalg.det(covariance))
        total += term
    return total


def cells_of(readings) -> list[list[Reading]]:
    """Repeats together: one kind, one delay; readings below a limit alone."""
    cells: dict[tuple, list[Reading]] = {}
    for number, entry in enumerate(readings):
        alone = number if entry.limit is not None else None
        cells.setdefault((entry.kind, entry.delay, alone), []).append(entry)
    return list(cells.values())


def integrand(p: dict[str, float], shot: Shot, readings: list[Reading], x: np.ndarray) -> np.ndarray:
    """Prior of the deviation times the densities of all readings of a shot."""
    m = p["misread_rate"]
    product = (1 - m) * stats.norm.pdf(x, 0, p["energy_jitter"]) + m * stats.norm.pdf(x, 0, 0.7)
    shown = Shown(p, shot, x)
    for repeats in cells_of(readings):
        product = product * in_peaks(repeats, [shown.of(entry) for entry in repeats], p["stray_rate"])
    return product


_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(16)
_EDGES = np.linspace(-4.2, 4.2, 281)  # far beyond what the likelihood integrates over; panels of 0.03
X = (0.5 * (_EDGES[1:] + _EDGES[:-1])[:, None] + 0.5 * np.diff(_EDGES)[:, None] * _NODES).ravel()
W = (0.5 * np.diff(_EDGES)[:, None] * _WEIGHTS).ravel()


def by_panels(p: dict[str, float], shot: Shot, readings: list[Reading]) -> tuple[float, float]:
    """Logarithm of the integral over the deviation, and the mean deviation: Gauss-Legendre on narrow panels."""
    values = integrand(p, shot, readings, X)
    return math.log(W @ values), float(W @ (values * X) / (W @ values))


def stacked(draws) -> dict[str, np.ndarray]:
    return {name: np.array([p[name] for p in draws]) for name in INPUTS}


def on_every_point(data: Data, step: float = STEP) -> Likelihood:
    shots = data.likelihood.read_shots
    return data.likelihood.integrate_on(Lattice.of(data.table, full_points(data.table, shots, step), step))


def only(data: Data, name: str) -> Data:
    return data.keep(lambda _, entry: entry.shot == name)


def own(name: str) -> tuple[Shot, list[Reading]]:
    (shot,) = (shot for shot in SHOTS if shot.name == name)
    return shot, [entry for entry in gathered().readings if entry.shot == name]


READ = sorted({entry.shot for entry in gathered().readings if entry.shot is not None})
CLOSE = 1e-3  # [nat] a thousandth part of what one standard deviation costs, some fifty of which make up a campaign


def test_every_input_of_the_campaign_has_a_value_here():
    assert set(Data.of(gathered()).believed) == set(INPUTS)


@pytest.mark.parametrize("name", READ)
def test_a_shot_weighs_what_a_fine_integral_over_its_deviation_says(name):
    found = on_every_point(only(Data.of(gathered()), name))(stacked(DRAWS))
    expected = [by_panels(p, *own(name))[0] for p in DRAWS]
    assert found == pytest.approx(expected, abs=CLOSE, rel=0)


@pytest.mark.parametrize("name", ["misread", "near-threshold"])
def test_the_fine_integral_agrees_with_an_adaptive_one(name):
    shot, readings = own(name)
    edges = [-2.5, -0.6, -0.15, 0.0, 0.15, 0.5, 0.6, 0.7, 1.0, 2.5]
    area = sum(
        integrate.quad(
            lambda x: float(integrand(INPUTS, shot, readings, np.array([x]))[0]), a, b, epsrel=1e-6, epsabs=0
        )[0]
        for a, b in itertools.pairwise(edges)
    )
    assert by_panels(INPUTS, shot, readings)[0] == pytest.approx(math.log(area), abs=1e-4)  # |x| > 2.5 left out: < 3e-5


@pytest.mark.parametrize("name", READ)
def test_points_that_matter_give_what_all_points_give(name):
    data = only(Data.of(gathered()), name)
    table, shots, inputs = data.table, data.likelihood.read_shots, stacked(DRAWS)
    full = Lattice.of(table, full_points(table, shots, STEP), STEP)
    weights = data.likelihood.integrate_on(full).integrand(inputs)
    kept = Lattice.of(table, kept_points(full, weights, 1e-7, 4), STEP)
    assert len(kept.pair_node) <= len(full.pair_node)
    found = data.likelihood.integrate_on(kept)(inputs)
    assert found == pytest.approx([by_panels(p, *own(name))[0] for p in DRAWS], abs=CLOSE, rel=0)


def test_shots_add_up_and_a_sample_leans_on_their_mean_deviations():
    data = Data.of(gathered())
    found = on_every_point(data)(stacked(DRAWS))
    medians = [entry for entry in gathered().readings if entry.sample is not None]
    assert len(medians) == 2
    for p, total in zip(DRAWS, found, strict=True):
        by_shot = {name: by_panels(p, *own(name)) for name in READ}
        log_sizes, numbers = [], []
        for shot in SHOTS:
            if shot.sample == "vial":
                # One without readings is taken at its logged energy; one set aside gave its particles all the same.
                deviation = by_shot[shot.name][1] if shot.name in by_shot else 0.0
                shown = Shown(p, shot, np.array([deviation]))
                log_sizes.append(float(np.log(shown.fragments())[0]))
                numbers.append(float((shot.sites * shot.pulses * shown.volume() / shown.fragments() ** 3)[0]))
        seen = math.log(NOMINAL_PITCH["microscope"] / p["pixel_pitch.microscope"])
        expected = np.array([np.average(log_sizes, weights=numbers) + seen])
        shared = np.array(
            [math.hypot(p["scatter.median-diameter"], 0.5 * p["energy_jitter"] / math.sqrt(len(numbers)))]
        )
        term = in_peaks(medians, [(expected, shared, np.ones(1))] * 2, p["stray_rate"])
        whole = sum(log_area for log_area, _ in by_shot.values()) + math.log(term[0])
        assert total == pytest.approx(whole, abs=CLOSE * len(READ))  # errors of all shots, should they add up


def test_a_misread_energy_is_told_from_a_stray_reading():
    data = Data.of(gathered())
    likelihood = on_every_point(data)
    details = likelihood.details(stacked([INPUTS]))
    assert likelihood.lattice is not None
    names = [SHOTS[shot].name for shot in likelihood.lattice.shots]
    misread = dict(zip(names, details.misread[:, 0], strict=True))
    for name in READ:
        # The share of the misread part in the integral, on the fine points.
        shot, readings = own(name)
        values = integrand(INPUTS, shot, readings, X)
        m = INPUTS["misread_rate"]
        sound = (1 - m) * stats.norm.pdf(X, 0, INPUTS["energy_jitter"])
        wrong = m * stats.norm.pdf(X, 0, 0.7)
        assert misread[name] == pytest.approx(float(W @ (values * wrong / (sound + wrong)) / (W @ values)), abs=1e-3)
    assert misread["misread"] > 0.99
    assert misread["ordinary"] < 0.1
    slip = next(n for n, entry in enumerate(data.readings) if entry.value == 90_000.0)
    assert details.stray[slip, 0] > 0.999
    assert misread["ten-pulses"] < 0.1


def test_expected_readings_are_averaged_over_what_the_shot_may_have_had():
    data = Data.of(gathered())
    details = on_every_point(data).details(stacked([INPUTS]))
    for number, entry in enumerate(data.readings):
        if entry.shot is None:
            continue
        shot, readings = own(entry.shot)
        values = integrand(INPUTS, shot, readings, X)
        expected, shared, _ = Shown(INPUTS, shot, X).of(entry)
        if entry.kind in LOGARITHMIC:
            expected, shared = np.exp(expected), shared * np.exp(expected)
        mean = float(W @ (values * expected) / (W @ values))
        variance = float(W @ (values * (expected**2 + shared**2)) / (W @ values)) - mean**2
        # A thousandth part, as much as the error of the logarithm of the weight that is allowed above.
        assert details.mean[number, 0] == pytest.approx(mean, rel=1e-3, abs=0)
        assert details.variance[number, 0] == pytest.approx(variance, rel=5e-3, abs=0)


def test_one_scale_moves_every_reading_of_its_table_and_no_other():
    """Where no reading is stray, readings of a table, their uncertainties and its scale may grow together unnoticed."""
    inputs = stacked([INPUTS | {"stray_rate": 1e-12}])
    factor = 1.07
    both = gathered()
    moved = tuple(
        replace(entry, value=factor * entry.value, u=factor * entry.u) if entry.table == "afm" else entry
        for entry in both.readings
    )
    before = on_every_point(Data.of(both))(inputs)
    other = on_every_point(Data.of(replace(both, readings=moved)))
    after = other(inputs | {"scale.afm": factor * inputs["scale.afm"]})
    assert after == pytest.approx(before, abs=1e-6)  # stray parts, whose width stays, weigh 1e-12
    assert abs(other(inputs) - before) > 0.1

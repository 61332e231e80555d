"""Where sampling starts: a robust fit to the readings, the posterior's mode, its shape there, the lattice that holds it."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy import optimize, special

from reconcile.campaign.kinds import KINDS
from reconcile.inference.coordinates import Inputs
from reconcile.inference.lattice import STEP, Lattice, fine_step, full_points, kept_points
from reconcile.inference.model import (
    RELATIVE_SCATTER,
    TINY,
    Array,
    Expected,
    expected_of,
    reading_factor,
    reading_offset,
)
from reconcile.inference.problem import Data, Problem
from reconcile.inference.proposal import root_of

# How far a start may lie from the mode of the prior, in its standard deviations, when a start is perturbed.
_PERTURBED = 0.7
_PERTURBED_STARTS = 3
_CLIMBS = 2  # robust fits from which the posterior is climbed
_SAME_PLACE = 0.2  # distance of two fits, in the priors' standard deviations, below which they are one
_HOPELESS = 30.0  # cost above the best fit's at which another is forgotten
_IMPOSSIBLE = 1e9  # stands for minus the log of zero, so that a search turns back
_FLOOR, _NEIGHBOURS = 1e-7, 4  # share of a shot's peak below which a lattice point is dropped
_PRIOR_DRAWS = 4000
_PROBES = 16  # draws that decide which lattice points matter
_MOST_PASSES, _WHITE_ENOUGH = 8, 0.3  # of the curvature, and the departure from the identity at which it stops


@dataclass(frozen=True, slots=True)
class Start:
    """The mode, a normal approximation around it, and the problem on the lattice that it needs."""

    problem: Problem
    mode: Array  # (k,)
    covariance: Array  # (k, k)
    log_prob: float  # at the mode
    reach: tuple[Array, Array]  # mean and covariance of the coordinates under the priors
    others: tuple[tuple[float, Array], ...]  # log_prob and mode of starts that ended elsewhere


def find_start(data: Data, rng: np.random.Generator) -> Start:
    """Find the mode of a campaign's posterior from its readings.

    Several starts are tried; one that ends lower by much is forgotten, one that ends nearby but elsewhere is kept.
    """
    rough = Problem(data)
    begin = _prior_median(rough)
    reach = prior_reach(rough, rng)
    spread = np.sqrt(np.diag(reach[1]))
    fits = [_robust_fit(rough, begin, spread)]
    for _ in range(_PERTURBED_STARTS):
        shifted = begin + _PERTURBED * spread * rng.standard_normal(len(begin))
        if np.isfinite(rough.log_prior(shifted[None])[0][0]):
            fits.append(_robust_fit(rough, shifted, spread))
    fits = _different(sorted(fits, key=lambda fit: fit.cost), spread)[:_CLIMBS]
    # The robust fit knows the place better than the shape: its lattice holds that place, the next one the shape as well.
    problem = on_lattice_of(rough, np.stack([fit.position for fit in fits]), 0.2 * fits[0].root, rng)
    peaks = sorted((climb(problem.log_prob, fit.position, fit.root) for fit in fits), key=lambda peak: -peak.log_prob)
    best = peaks[0]
    covariance = curvature(problem.log_prob, best.position, best.covariance)
    for _ in range(2):
        problem = on_lattice_of(rough, best.position[None], root_of(covariance), rng)
        best = climb(problem.log_prob, best.position, root_of(covariance))
        covariance = curvature(problem.log_prob, best.position, covariance)
    white = np.linalg.inv(root_of(covariance))
    others = tuple(
        (peak.log_prob, peak.position)
        for peak in peaks[1:]
        if best.log_prob - peak.log_prob < 12.0 and np.abs(white @ (peak.position - best.position)).max() > 1.0
    )
    return Start(problem, best.position, covariance, best.log_prob, reach, others)


@dataclass(frozen=True, slots=True)
class _Fit:
    """A robust least-squares fit: cost, place, and a root of its covariance."""

    cost: float
    position: Array
    root: Array


def _different(fits: list[_Fit], spread: Array) -> list[_Fit]:
    """Fits that ended elsewhere than a better one, in their order; hopeless ones left out."""
    kept: list[_Fit] = []
    for fit in fits:
        near = any(np.abs((fit.position - other.position) / spread).max() < _SAME_PLACE for other in kept)
        if not near and fit.cost - fits[0].cost < _HOPELESS:
            kept.append(fit)
    return kept


def _prior_median(problem: Problem) -> Array:
    believed = problem.data.believed
    medians = {name: believed[name].density.quantile(np.array([0.5])) for name in problem.names}
    return problem.coordinates.position(medians)[0]


def prior_reach(problem: Problem, rng: np.random.Generator) -> tuple[Array, Array]:
    """Mean (k,) and covariance (k, k) of the coordinates under the priors, from draws."""
    believed = problem.data.believed
    draws = {name: believed[name].density.sample(rng, _PRIOR_DRAWS) for name in problem.names}
    position = problem.coordinates.position(draws)
    return position.mean(axis=0), np.atleast_2d(np.cov(position.T))


def _robust_fit(problem: Problem, begin: Array, spread: Array) -> _Fit:
    """Fit all readings at their logged energies, bad ones held back, the priors as further residuals."""
    residuals = _residuals(problem)

    def one(step: Array) -> Array:
        return residuals((begin + spread * step)[None])[:, 0]

    def jacobian(step: Array) -> Array:
        nudge = 1e-4 * np.eye(len(step))
        moved = residuals(begin + spread * np.concatenate([step + nudge, step - nudge]))
        return (moved[:, : len(step)] - moved[:, len(step) :]) / 2e-4

    found = optimize.least_squares(one, np.zeros(len(begin)), jac=jacobian, x_scale=1.0, max_nfev=60)
    slopes = np.asarray(found.jac, dtype=np.float64)
    information = slopes.T @ slopes + 1e-4 * np.eye(len(begin))
    inverse = np.asarray(np.linalg.inv(information), dtype=np.float64)
    root = spread[:, None] * root_of(inverse)
    return _Fit(float(found.cost), begin + spread * found.x, root)


def _residuals(problem: Problem) -> Callable[[Array], Array]:
    """Residuals (readings + inputs, draws) at coordinates (draws, k): robust ones, and normal scores of the priors."""
    data, believed = problem.data, problem.data.believed

    def of(position: Array) -> Array:
        inputs, _ = problem.coordinates.inputs(position)
        scores = [special.ndtri(np.clip(believed[n].density.cdf(inputs[n]), 1e-12, 1 - 1e-12)) for n in problem.names]
        rows = [np.broadcast_to(score, (len(position),))[None] for score in scores]
        rows += _reading_residuals(data, inputs)
        stacked = np.concatenate([np.broadcast_to(row, (len(row), len(position))) for row in rows])
        return np.nan_to_num(stacked, nan=1e3, posinf=1e3, neginf=-1e3)

    return of


def _reading_residuals(data: Data, inputs: Inputs) -> list[Array]:
    """Residuals of each slot at the logged energies, bent so that a bad reading pulls like a logarithm."""
    likelihood, parts = data.likelihood, []
    for slot in likelihood.slots:
        if slot.censored:
            continue
        state = Expected(data.conditions, inputs, data.table.exposures(slot.target, 0.0))
        expected = expected_of(state, slot.kind, slot.delay)
        scatter = inputs[f"scatter.{slot.kind}"]
        reach = expected if slot.kind in RELATIVE_SCATTER else 1.0
        for repeat in range(len(slot.rows)):
            table = data.likelihood.tables[slot.tables[repeat]]
            factor = reading_factor(slot.kind, table, data.conditions, inputs)
            seen = expected * factor + reading_offset(slot.kind, data.conditions, inputs)
            value, u = slot.value[repeat][:, None], slot.u[repeat][:, None]
            logarithmic = KINDS[slot.kind].logarithmic
            miss = value - (np.log(np.maximum(seen, TINY)) if logarithmic else seen)
            follows = logarithmic or slot.kind in RELATIVE_SCATTER  # an arrival hardly moves with the energy
            jitter = 2.0 * inputs["energy_jitter"] * (1.0 if logarithmic else np.abs(reach)) if follows else 0.0
            ratio = miss / np.sqrt(u**2 + (scatter * reach) ** 2 + jitter**2)
            parts.append(np.sign(ratio) * np.sqrt(2.0 * np.log1p(0.5 * ratio**2)))
    return parts


def on_lattice_of(problem: Problem, centres: Array, root: Array, rng: np.random.Generator) -> Problem:
    """Return the problem on the lattice points that matter to draws around some places (m, k), finely enough spaced."""
    shots = problem.data.likelihood.read_shots
    if not len(shots):
        return problem
    scattered = centres[rng.integers(len(centres), size=4 * _PROBES)]
    scattered = scattered + rng.standard_normal(scattered.shape) @ root.T
    usable = scattered[np.isfinite(problem.log_prior(scattered)[0])][: _PROBES - len(centres)]
    probes = np.concatenate([centres, usable])
    full, weights = _full_lattice(problem, probes, STEP)
    step = fine_step(full, weights)
    if step < STEP:
        full, weights = _full_lattice(problem, probes, step)
    points = kept_points(full, weights, _FLOOR, _NEIGHBOURS)
    return problem.on(Lattice.of(problem.data.table, points, step))


def _full_lattice(problem: Problem, probes: Array, step: float) -> tuple[Lattice, Array]:
    """Return the lattice of every point within reach, and the integrand there (pairs, probes)."""
    table, shots = problem.data.table, problem.data.likelihood.read_shots
    full = Lattice.of(table, full_points(table, shots, step), step)
    dense = problem.on(full)
    return full, dense.over_draws(probes, dense.likelihood.integrand)


@dataclass(frozen=True, slots=True)
class Peak:
    """A highest point, and the covariance that the way up suggests."""

    log_prob: float
    position: Array  # (k,)
    covariance: Array  # (k, k)


def climb(log_prob: Callable[[Array], Array], begin: Array, root: Array) -> Peak:
    """Climb to a mode by BFGS on coordinates whitened by `root`, gradients by central differences in one batch."""
    k, width = len(begin), 1e-3
    offsets = width * np.concatenate([np.zeros((1, k)), np.eye(k), -np.eye(k)])

    def value_and_slope(step: Array) -> tuple[float, Array]:
        values = -log_prob(begin + (step + offsets) @ root.T)
        values = np.where(np.isfinite(values), values, _IMPOSSIBLE)
        slope = (values[1 : k + 1] - values[k + 1 :]) / (2.0 * width)
        return float(values[0]), np.clip(slope, -1e4, 1e4)

    found = optimize.minimize(
        value_and_slope, np.zeros(k), jac=True, method="BFGS", options={"gtol": 0.02, "maxiter": 150}
    )
    return Peak(-float(found.fun), begin + root @ found.x, root @ found.hess_inv @ root.T)


def curvature(log_prob: Callable[[Array], Array], mode: Array, covariance: Array) -> Array:
    """Covariance (k, k) of the normal approximation at a mode.

    Second differences along axes that are whitened anew at each pass, until they show the identity: on narrow ridges a
    single pass is wrong by a factor of several.
    """
    k, width = len(mode), 0.5
    first, second = np.triu_indices(k, 1)
    axes = np.eye(k)
    steps = np.concatenate([axes, axes[first] + axes[second]])
    steps = width * np.concatenate([np.zeros((1, k)), steps, -steps])
    for _ in range(_MOST_PASSES):
        root = root_of(covariance)
        drop = -log_prob(mode + steps @ root.T)
        drop = np.minimum(np.where(np.isfinite(drop), drop, _IMPOSSIBLE) - drop[0], 60.0)
        half = (len(steps) - 1) // 2
        both = drop[1 : half + 1] + drop[half + 1 :]  # even part: twice the drop along each step
        hessian = np.diag(both[:k]) / width**2
        mixed = (both[k:] - both[first] - both[second]) / (2.0 * width**2)
        hessian[first, second] = hessian[second, first] = mixed
        values, vectors = np.linalg.eigh(hessian)
        inverse = (vectors / np.clip(values, 1e-2, 1e4)) @ vectors.T
        covariance = root @ inverse @ root.T
        covariance = 0.5 * (covariance + covariance.T)
        if np.abs(hessian - np.eye(k)).max() < _WHITE_ENOUGH:
            break
    return covariance

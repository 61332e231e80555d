"""From gathered readings to draws of every input: select, start, sample, check, and draw what was not sampled."""

from __future__ import annotations

import time
from dataclasses import dataclass

import numpy as np

from reconcile.campaign.progress import Progress
from reconcile.campaign.readings import Gathered
from reconcile.campaign.refusal import Refusal
from reconcile.inference.adapt import Begin
from reconcile.inference.checkpoint import Checkpoint, Stored
from reconcile.inference.coordinates import Inputs
from reconcile.inference.lattice import Lattice, full_points
from reconcile.inference.memory import keep_freed_memory
from reconcile.inference.model import Array, Expected
from reconcile.inference.problem import Data, Problem
from reconcile.inference.sampling import Draws, Memory, sample
from reconcile.inference.start import Start, find_start

EFFORTS = {"quick": 400, "normal": 1000, "long": 4000}  # smallest effective sample size aimed at
_CHECKED = 40  # draws on which the integration is checked
_LATE = 1.05  # delay over the expected lifetime beyond which a radius is one after the collapse
MOST_STORED = 6000  # draws kept for summaries and files


@dataclass(frozen=True, slots=True)
class Fitted:
    """A finished fit."""

    start: Start
    draws: Draws
    inputs: Inputs  # every input of the campaign, each (draws,); walkers × steps, thinned
    chains: int  # the draws are this many chains laid end to end
    log_prob: Array  # (draws,)
    integral_error: float  # [nat]
    seconds: float

    @property
    def problem(self) -> Problem:
        """The posterior that was sampled."""
        return self.start.problem


def fit(
    gathered: Gathered,
    *,
    seed: int,
    target: int,
    workers: int,
    without: tuple[str, ...],
    progress: Progress,
    checkpoint: Checkpoint,
) -> Fitted:
    """Fit a campaign.

    Parameters
    ----------
    gathered : its shots and readings
    seed : of every random number; the result does not depend on `workers`
    target : smallest effective sample size aimed at
    without : kinds, or table kinds, left out
    checkpoint : where an interrupted run is kept

    Raises
    ------
    Refusal : a material lacks a property or an input has no default prior.
    """
    keep_freed_memory()
    began = time.monotonic()
    root = np.random.SeedSequence(seed)
    for_start, for_sampling, for_priors, for_check = root.spawn(4)
    stored = checkpoint.load()
    if stored is None:
        progress("finding the start", 0, 0)
        start, late = _begin(Data.of(gathered, without), np.random.default_rng(for_start))
    else:
        start, late = _taken_up(Data.of(gathered, without), stored), stored.late
    lattice = start.problem.likelihood.lattice
    points, step = (None, 0.0) if lattice is None else (lattice.points(), lattice.step)
    draws = sample(
        start.problem,
        Begin(start.mode, start.covariance, start.reach),
        for_sampling,
        target=target,
        workers=workers,
        progress=progress,
        memory=Memory(
            None if stored is None else stored.ensembles,
            lambda now: checkpoint.save(
                Stored(start.mode, start.covariance, start.log_prob, start.reach, late, points, step, now)
            ),
        ),
    )
    thin = max(1, -(-draws.log_prob.size // MOST_STORED))
    position, log_prob = draws.position[::thin], draws.log_prob[::thin]
    # One chain after the other: walkers are chains, steps their draws.
    flat = position.transpose(1, 0, 2).reshape(-1, position.shape[-1])
    inputs = every_input(start.problem, flat, np.random.default_rng(for_priors))
    error = _integral_error(start.problem, flat, np.random.default_rng(for_check))
    seconds = time.monotonic() - began
    return Fitted(start, draws, inputs, position.shape[1], log_prob.T.ravel(), error, seconds)


def _begin(data: Data, rng: np.random.Generator) -> tuple[Start, tuple[int, ...]]:
    """Find the start, and once more where it shows radii that were read after the first collapse."""
    try:
        start = find_start(data, rng)
        late = _late_radii(start)
        return (find_start(data.leave_out(late), rng), late) if late else (start, late)
    except np.linalg.LinAlgError:
        # No curvature at what should be the mode: numbers so far apart that nothing fits anything.
        raise Refusal(
            "the readings and the manifest together",
            found="numbers so far from each other that no input lies between them",
            expected="readings that the model can show at the logged energies, within some powers of ten",
            remedy="Look for a wrong unit in the manifest, the log or a column: `reconcile measure` lists what was read.",
        ) from None


def _taken_up(data: Data, stored: Stored) -> Start:
    """Return the start of an interrupted fit."""
    data = data.leave_out(stored.late)
    problem = Problem(data, None if stored.points is None else Lattice.of(data.table, stored.points, stored.step))
    return Start(problem, stored.mode, stored.covariance, stored.log_prob, stored.reach, ())


def every_input(problem: Problem, position: Array, rng: np.random.Generator) -> Inputs:
    """Inputs at these coordinates (draws, k), those that were not sampled drawn from their priors, fixed ones repeated."""
    sampled, _ = problem.coordinates.inputs(position)
    inputs: Inputs = {}
    for name, known in problem.data.believed.items():
        if name in problem.names:
            inputs[name] = sampled[name]
        else:
            inputs[name] = known.density.sample(rng, len(position))
    return inputs


def _late_radii(start: Start) -> tuple[int, ...]:
    """Positions among the fitted readings of bubble radii read after the first collapse, as the start expects it."""
    problem = start.problem
    likelihood, lattice = problem.likelihood, problem.likelihood.lattice
    slots = [slot for slot in likelihood.slots if slot.delay is not None]
    if lattice is None or not slots:
        return ()
    inputs, _ = problem.coordinates.inputs(start.mode[None])
    weights = likelihood.details(inputs).weights
    deviation = np.zeros(len(problem.data.table.log_energy))
    deviation[lattice.shots] = np.add.reduceat(weights * lattice.deviation, lattice.first, axis=0)[:, 0]
    late: set[int] = set()
    for slot in slots:
        exposures = problem.data.table.exposures(slot.target, deviation[slot.target][:, None])
        lifetime = Expected(problem.data.conditions, inputs, exposures).lifetime[:, 0]
        assert slot.delay is not None
        for cell in np.flatnonzero(slot.delay > _LATE * lifetime):
            late |= {int(row) for row in slot.rows[:, cell]}
    return tuple(sorted(late))


def _integral_error(problem: Problem, position: Array, rng: np.random.Generator) -> float:
    """Largest error [nat] of the log-likelihood over some draws, against every point of a lattice of half the step.

    An error that all draws share changes no posterior, so their mean is taken off.
    """
    lattice = problem.likelihood.lattice
    if lattice is None:
        return 0.0
    table, half = problem.data.table, 0.5 * lattice.step
    dense = problem.on(Lattice.of(table, full_points(table, lattice.shots, half), half))
    chosen = position[rng.choice(len(position), size=min(_CHECKED, len(position)), replace=False)]
    missed = dense.over_draws(chosen, dense.likelihood) - problem.over_draws(chosen, problem.likelihood)
    return float(np.abs(missed - missed.mean()).max())

"""Do the kinds agree? Each kind alone against all the others, in what both know from readings.

Node splitting (A. M. Presanis et al., Statistical Science 28 (2013) 376): the same inputs are estimated twice, from one
kind and from the others, and the two answers compared.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy import special

from reconcile.campaign.kinds import KINDS
from reconcile.inference.model import Array
from reconcile.inference.outcome import KindResult
from reconcile.inference.proposal import root_of
from reconcile.inference.start import Start, climb, curvature, on_lattice_of
from reconcile.inference.workers import spread_over

# A direction counts as known from readings on both sides when the variances of both together are below this share of
# the prior's: a side that knows nothing brings 1 by itself.
_KNOWN = 0.5
SUSPECT = 0.01  # p-value, shared by the kinds that were tested
_OWN = ("scatter.", "energy_jitter", "stray_rate", "misread_rate")  # how far readings scatter: held at the whole fit's


@dataclass(frozen=True, slots=True)
class _Side:
    """One answer: mode (c,) and covariance (c, c) of the compared coordinates."""

    mode: Array
    covariance: Array


def agreement(
    start: Start, counts: dict[str, int], seed: np.random.SeedSequence, workers: int
) -> tuple[KindResult, ...]:
    """Compare every fitted kind with the others.

    Parameters
    ----------
    start : mode and shape of the whole posterior
    counts : fitted readings of each kind
    seed : for the lattices of the partial fits
    workers : processes; the result does not depend on it
    """
    kinds = start.problem.data.kinds
    if len(kinds) < 2:
        values: list[float | None] = [None for _ in kinds]
    else:
        with spread_over(workers, start) as run:
            values = run(_split, list(zip(kinds, seed.spawn(len(kinds)), strict=True)))
    tested = sum(value is not None for value in values)
    results = []
    for kind, value in zip(kinds, values, strict=True):
        agrees = None if value is None else value >= SUSPECT / tested
        results.append(KindResult(kind, counts[kind], value, agrees, _sentence(kind, value, agrees)))
    return tuple(results)


def _sentence(kind: str, value: float | None, agrees: bool | None) -> str:
    words = KINDS[kind].words
    if value is None:
        return f"The other kinds cannot predict what the {words} readings show, so they were not compared."
    if agrees:
        return f"The {words} readings agree with what the other kinds predict (p = {value:.2g})."
    return (
        f"The {words} readings contradict what the other kinds predict (p = {value:.2g}): either they share an error, or "
        "the model does not hold for them."
    )


def _split(start: Start, kind: str, seed: np.random.SeedSequence) -> float | None:
    """p-value of the difference between one kind and the others; None where no direction is known on both sides."""
    rng = np.random.default_rng(seed)
    compared = [n for n, name in enumerate(start.problem.names) if not name.startswith(_OWN)]
    alone = _side(start, kind, compared, rng, alone=True)
    others = _side(start, kind, compared, rng, alone=False)
    # In the prior's own metric a side that knows nothing has unit variance in every direction.
    metric = start.reach[1][np.ix_(compared, compared)]
    white = np.linalg.inv(root_of(metric))
    spread = white @ (alone.covariance + others.covariance) @ white.T
    values, vectors = np.linalg.eigh(0.5 * (spread + spread.T))
    known = values < _KNOWN
    if not known.any():
        return None
    difference = vectors[:, known].T @ (white @ (alone.mode - others.mode))
    distance = float(np.sum(difference**2 / values[known]))
    return float(special.chdtrc(int(known.sum()), distance))


def _side(start: Start, kind: str, compared: list[int], rng: np.random.Generator, *, alone: bool) -> _Side:
    """Mode and shape of the posterior of one kind, or of all but that one, on the compared coordinates."""
    problem = start.problem
    part = problem.with_data(problem.data.keep(lambda _, reading: (reading.kind == kind) == alone))
    part = on_lattice_of(part, start.mode[None], root_of(start.covariance), rng)
    log_prob = _along(part.log_prob, start.mode, compared)
    covariance = start.covariance[np.ix_(compared, compared)]
    peak = climb(log_prob, start.mode[compared], root_of(covariance))
    return _Side(peak.position, curvature(log_prob, peak.position, peak.covariance))


def _along(log_prob: Callable[[Array], Array], mode: Array, free: list[int]) -> Callable[[Array], Array]:
    """The same density as a function of some coordinates, the others held at the mode."""

    def of(position: Array) -> Array:
        whole = np.tile(mode, (len(position), 1))
        whole[:, free] = position
        return log_prob(whole)

    return of

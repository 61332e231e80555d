"""Do the kinds agree? Each kind alone against all the others, in what both know from readings.

Node splitting (A. M. Presanis et al., Statistical Science 28 (2013) 376): the same inputs are estimated twice, from one
kind and from the others, and the two answers compared.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import special

from reconcile.campaign.kinds import KINDS
from reconcile.inference.model import Array
from reconcile.inference.outcome import KindResult
from reconcile.inference.problem import Problem
from reconcile.inference.proposal import root_of
from reconcile.inference.start import Start, climb, curvature, on_lattice_of

# A direction counts as known from readings on both sides when the variances of both together are below this share of
# the prior's: a side that knows nothing brings 1 by itself.
_KNOWN = 0.5
SUSPECT = 0.01  # p-value, shared by the kinds that were tested


@dataclass(frozen=True, slots=True)
class _Side:
    """One answer: mode and covariance of the compared coordinates."""

    mode: Array
    covariance: Array


def agreement(start: Start, counts: dict[str, int], rng: np.random.Generator) -> tuple[KindResult, ...]:
    """Compare every fitted kind with the others.

    Parameters
    ----------
    start : mode and shape of the whole posterior
    counts : fitted readings of each kind
    """
    problem = start.problem
    kinds = problem.data.kinds
    compared = [
        n for n, name in enumerate(problem.names) if not name.startswith(("scatter.", "energy_", "stray_", "misread_"))
    ]
    metric = start.reach[1][np.ix_(compared, compared)]
    values = {kind: _split(start, kind, compared, metric, rng) if len(kinds) > 1 else None for kind in kinds}
    tested = sum(value is not None for value in values.values())
    results = []
    for kind in kinds:
        value = values[kind]
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


def _split(start: Start, kind: str, compared: list[int], metric: Array, rng: np.random.Generator) -> float | None:
    """p-value of the difference between one kind and the others; None where no direction is known on both sides."""
    alone = _side(start, kind, compared, rng, alone=True)
    others = _side(start, kind, compared, rng, alone=False)
    # In the prior's own metric a side that knows nothing has unit variance in every direction.
    white = np.linalg.inv(np.linalg.cholesky(metric))
    spread = white @ (alone.covariance + others.covariance) @ white.T
    values, vectors = np.linalg.eigh(0.5 * (spread + spread.T))
    known = values < _KNOWN
    if not known.any():
        return None
    difference = vectors[:, known].T @ (white @ (alone.mode - others.mode))
    distance = float(np.sum(difference**2 / values[known]))
    return float(special.chdtrc(int(known.sum()), distance))


def _side(start: Start, kind: str, compared: list[int], rng: np.random.Generator, *, alone: bool) -> _Side:
    """Mode and shape of the posterior of one kind, or of all but that one, on the whole posterior's coordinates."""
    problem = start.problem
    data = problem.data.keep(lambda _, reading: (reading.kind == kind) == alone)
    part = problem.with_data(data)
    # The whole posterior's scatter and rates hold on both sides: a single kind cannot tell its scatter from the jitter.
    root = root_of(start.covariance)
    part = on_lattice_of(part, start.mode[None], root, rng)
    peak = climb(part.log_prob, start.mode, root)
    covariance = curvature(part.log_prob, peak.position, peak.covariance)
    return _Side(peak.position[compared], covariance[np.ix_(compared, compared)])

"""Adaptive multiple importance sampling: a proposal fitted to the posterior, round by round.

J.-M. Cornuet, J.-M. Marin, A. Mira and C. P. Robert, Scandinavian Journal of Statistics 39 (2012) 798: every point
keeps its place in the pool, and all are weighed anew by the mixture of all proposals so far.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from reconcile.inference.model import Array
from reconcile.inference.proposal import Mixture, Proposal

ROUND = 1000  # points a round
MOST_ROUNDS = 14
_DEFENCE = 0.06  # share of each defensive component
_FREEDOM, _DEFENCE_FREEDOM = 12.0, 8.0
_CLIPPED = 10  # weights are clipped at the so-many-th largest
_ENOUGH_PER_DIMENSION = 6.0  # effective points below which weights are tempered
_STEADY = 1.15  # the pool's share of effective points rises by less than this: the proposal has settled


@dataclass(frozen=True, slots=True)
class Adapted:
    """A fitted proposal and the weighted pool that it came from."""

    proposal: Mixture
    points: Array  # (n, k)
    log_weights: Array  # (n,) normalised to a largest of 0
    log_prob: Array  # (n,)
    evaluations: int

    @property
    def effective(self) -> float:
        """Effective number of points of the pool (Kish)."""
        return _effective(self.log_weights)


@dataclass(frozen=True, slots=True)
class Begin:
    """What is known of a posterior before it is sampled: its mode with the shape there, and how far it can reach."""

    mode: Array  # (k,)
    covariance: Array  # (k, k)
    reach: tuple[Array, Array] | None = None  # mean and covariance of the priors; None: not known


def adapt(log_prob: Callable[[Array], Array], begin: Begin, rng: np.random.Generator) -> Adapted:
    """Fit a proposal to a posterior.

    Parameters
    ----------
    log_prob : (n, k) → (n,)
    begin : its normal approximation; where the readings say little, the priors show how far the posterior reaches
    """
    k = len(begin.mode)
    first = Proposal.normal_like(begin.mode, 1.2 * begin.covariance, _DEFENCE_FREEDOM)
    defences = [Proposal.normal_like(begin.mode, 1.3 * begin.covariance, _DEFENCE_FREEDOM)]
    if begin.reach is not None:
        defences.append(Proposal.normal_like(*begin.reach, _DEFENCE_FREEDOM))
    shares = (1.0 - _DEFENCE * len(defences), *(_DEFENCE for _ in defences))
    proposals = [Mixture((first, *defences), shares)]
    points = np.empty((0, k))
    values = np.empty(0)
    densities = np.empty((0, 0))
    worth: list[float] = []
    for _ in range(MOST_ROUNDS):
        fresh = proposals[-1].sample(rng, ROUND)
        points, values = np.concatenate([points, fresh]), np.concatenate([values, log_prob(fresh)])
        rows = [densities, *()] if len(densities) else []
        old = np.concatenate([*rows, [proposals[-1].log_pdf(points[: len(points) - ROUND])]]) if worth else None
        new = np.stack([proposal.log_pdf(fresh) for proposal in proposals])
        densities = new if old is None else np.concatenate([old, new], axis=1)
        log_mixture = np.logaddexp.reduce(densities, axis=0) - np.log(len(proposals))
        log_weights = values - log_mixture
        log_weights -= log_weights.max()
        worth.append(_effective(log_weights) / len(points))
        weights = _tempered(log_weights, _ENOUGH_PER_DIMENSION * k)
        earlier = proposals[-1].parts[0].sample(rng, 40 * k)
        main = Proposal.fit(points, weights, _FREEDOM, earlier)
        proposals.append(Mixture((main, *defences), shares))
        enough = _effective(log_weights) > 2 * _ENOUGH_PER_DIMENSION * k
        if len(worth) >= 4 and enough and max(worth[-1], worth[-2]) < _STEADY * worth[-3]:
            break
    return Adapted(proposals[-1], points, log_weights, values, len(points))


def _effective(log_weights: Array) -> float:
    weights = np.exp(log_weights - log_weights.max())
    return float(weights.sum() ** 2 / np.sum(weights**2))


def _tempered(log_weights: Array, enough: float) -> Array:
    """Normalised weights, clipped, and raised to a power below 1 while too few points carry them."""
    finite = np.where(np.isfinite(log_weights), log_weights, -1e6)
    clipped = np.minimum(finite, np.sort(finite)[-_CLIPPED])
    low, high = 0.0, 1.0
    if _effective(clipped) < enough:
        for _ in range(30):
            middle = 0.5 * (low + high)
            low, high = (middle, high) if _effective(middle * clipped) > enough else (low, middle)
    else:
        low = 1.0
    weights = np.exp(low * (clipped - clipped.max()))
    return np.asarray(weights / weights.sum())

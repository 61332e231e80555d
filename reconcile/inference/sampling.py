"""Sampling a posterior: independently adapted ensembles, run until the pooled draws are enough, judged across ensembles.

Every ensemble fits its own proposal from its own random numbers, so that agreement between ensembles means something; the
walkers of one ensemble are no independent chains.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any, Protocol

import numpy as np

from reconcile.campaign.progress import Progress
from reconcile.inference.adapt import Begin, adapt
from reconcile.inference.model import Array
from reconcile.inference.proposal import Mixture
from reconcile.inference.workers import spread_over

ENSEMBLES = 4
_BURN_IN = 20  # steps dropped: the walkers begin at weighted points of the adapted pool
_STEPS = 20  # in a round
MOST_ROUNDS = 40
GOOD_RHAT = 1.01  # rank-normalised split R-hat: Vehtari et al., Bayesian Analysis 16 (2021) 667
_INDEPENDENT = (
    0.85  # share of independence moves; the rest are differential-evolution moves, which need no good proposal
)


class Target(Protocol):
    """A posterior that can be sampled; it must survive the way to a worker process."""

    def log_prob(self, position: Array) -> Array:
        """Log density, (n,), at (n, k); −inf outside the support."""


@dataclass(frozen=True, slots=True)
class Ensemble:
    """One ensemble between two rounds."""

    proposal: Mixture
    position: Array  # (walkers, k)
    random_state: tuple[Any, ...]  # of emcee's generator
    chain: Array  # (steps, walkers, k) so far, burn-in left out
    log_prob: Array  # (steps, walkers)
    evaluations: int
    accepted: float  # share of accepted moves in the last round


@dataclass(frozen=True, slots=True)
class Memory:
    """How a run that may be interrupted is kept."""

    resumed: list[Ensemble] | None  # of an interrupted run; None: begin anew
    keep: Callable[[list[Ensemble]], None]  # handed the ensembles after each round


@dataclass(frozen=True, slots=True)
class Quality:
    """How far the pooled draws can be trusted."""

    min_ess: float  # smallest bulk or tail effective sample size over coordinates
    max_rhat: float

    def enough(self, target: int) -> bool:
        """Whether sampling may stop."""
        return self.min_ess >= target and self.max_rhat < GOOD_RHAT


@dataclass(frozen=True, slots=True)
class Draws:
    """The outcome of sampling, walkers of all ensembles side by side."""

    position: Array  # (steps, walkers, k)
    log_prob: Array  # (steps, walkers)
    quality: Quality
    converged: bool
    evaluations: int


def sample(
    posterior: Target,
    begin: Begin,
    seed: np.random.SeedSequence,
    *,
    target: int,
    workers: int,
    progress: Progress,
    memory: Memory | None = None,
) -> Draws:
    """Sample until the smallest effective sample size reaches `target` and the ensembles agree.

    Parameters
    ----------
    posterior : what to sample
    begin : its normal approximation
    seed : source of every random number here; the draws do not depend on `workers`
    target : smallest bulk and tail effective sample size
    progress : told what is being done
    memory : where the ensembles are kept between rounds; None: nowhere
    """
    seeds = seed.spawn(ENSEMBLES)
    with spread_over(min(workers, ENSEMBLES), posterior) as run:
        if memory is not None and memory.resumed is not None:
            ensembles = memory.resumed
        else:
            progress("adapting", 0, 0)
            ensembles = run(_begin, [(begin, own) for own in seeds])
        for _ in range(MOST_ROUNDS):
            quality = judge(ensembles)
            progress("sampling", int(min(quality.min_ess, target)), target)
            if memory is not None:
                memory.keep(ensembles)
            if quality.enough(target):
                break
            ensembles = run(_advance, [(ensemble, _STEPS) for ensemble in ensembles])
        quality = judge(ensembles)
    return Draws(
        np.concatenate([ensemble.chain for ensemble in ensembles], axis=1),
        np.concatenate([ensemble.log_prob for ensemble in ensembles], axis=1),
        quality,
        quality.enough(target),
        sum(ensemble.evaluations for ensemble in ensembles),
    )


def judge(ensembles: list[Ensemble]) -> Quality:
    """Effective sample size over all walkers, and R-hat across ensembles and halves of the run."""
    from arviz_stats.base import array_stats

    if not len(ensembles[0].chain):
        return Quality(0.0, float("inf"))
    walkers = np.concatenate([ensemble.chain for ensemble in ensembles], axis=1).transpose(1, 0, 2)
    whole = np.stack([ensemble.chain.reshape(-1, ensemble.chain.shape[-1]) for ensemble in ensembles])
    sizes, ratios = [], []
    for column in range(walkers.shape[-1]):
        own = walkers[:, :, column]
        sizes += [array_stats.ess(own), array_stats.ess(own, method="tail", prob=(0.05, 0.95))]
        ratios.append(array_stats.rhat(whole[:, :, column]))
    return Quality(float(np.min(sizes)), float(np.max(ratios)))


def _begin(posterior: Target, begin: Begin, seed: np.random.SeedSequence) -> Ensemble:
    """Adapt a proposal, set walkers on weighted points of its pool, and run the burn-in."""
    rng = np.random.default_rng(seed)
    adapted = adapt(posterior.log_prob, begin, rng)
    weights = np.exp(np.minimum(adapted.log_weights, np.sort(adapted.log_weights)[-10]))
    k = len(begin.mode)
    walkers = 2 * max(k + 1, 24)
    chosen = rng.choice(len(weights), size=walkers, replace=False, p=weights / weights.sum())
    generator = np.random.RandomState(np.random.MT19937(seed.spawn(1)[0]))
    ensemble = Ensemble(
        adapted.proposal,
        adapted.points[chosen],
        generator.get_state(legacy=True),  # type: ignore[arg-type]  # a tuple where legacy is true
        np.empty((0, walkers, k)),
        np.empty((0, walkers)),
        adapted.evaluations,
        0.0,
    )
    ensemble = _advance(posterior, ensemble, _BURN_IN)
    ensemble = replace(ensemble, chain=ensemble.chain[:0], log_prob=ensemble.log_prob[:0])
    return _advance(posterior, ensemble, _STEPS)


def _advance(posterior: Target, ensemble: Ensemble, steps: int) -> Ensemble:
    """Run an ensemble for some steps more."""
    import emcee

    walkers, k = ensemble.position.shape
    moves = [
        (independence_move(ensemble.proposal), _INDEPENDENT),
        (emcee.moves.DEMove(), 1.0 - _INDEPENDENT),
    ]
    sampler = emcee.EnsembleSampler(walkers, k, posterior.log_prob, moves=moves, vectorize=True)
    begin = emcee.State(ensemble.position, random_state=ensemble.random_state)
    end = sampler.run_mcmc(begin, steps, progress=False, skip_initial_state_check=True)
    return replace(
        ensemble,
        position=end.coords,
        random_state=end.random_state,
        chain=np.concatenate([ensemble.chain, sampler.get_chain()]),
        log_prob=np.concatenate([ensemble.log_prob, sampler.get_log_prob()]),
        evaluations=ensemble.evaluations + walkers * (steps + 1),
        accepted=float(np.mean(sampler.acceptance_fraction)),
    )


def independence_move(proposal: Mixture) -> Any:  # noqa: ANN401  # an emcee move; emcee carries no types
    """Return Metropolis-Hastings with a proposal that does not look at where a walker stands (Tierney 1994)."""
    import emcee

    def propose(position: Array, rng: Any) -> tuple[Array, Array]:  # noqa: ANN401  # numpy's legacy generator
        fresh = proposal.sample(rng, len(position))
        return fresh, proposal.log_pdf(position) - proposal.log_pdf(fresh)

    return emcee.moves.MHMove(propose)

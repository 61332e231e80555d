"""What the draws say of the inputs: summaries, derived inputs, what the readings told, what the answer leans on."""

from __future__ import annotations

import math

import numpy as np
from scipy import special

from reconcile.campaign.inputs import INPUTS, Input, describe
from reconcile.inference.coordinates import Inputs
from reconcile.inference.fit import Fitted
from reconcile.inference.model import Array
from reconcile.inference.outcome import InputResult, Posterior, Share, Strained, Summary
from reconcile.inference.priors import Believed
from reconcile.physics import beam, removal

_PRIOR_DRAWS = 20_000
_LITTLE, _SHIFTED = 0.1, 0.3  # drop of the variance, and shift in the prior's sd, below which an input was not told
STRAINED_TAIL = 0.003  # two-sided: what a prior holds beyond the posterior mean
_SPREADS = ("scatter.", "energy_jitter", "stray_rate", "misread_rate")  # smaller than believed is no fault
_LEANING = ("absorbed_fraction", "coupling")


def summary(draws: Array) -> Summary:
    """Seven numbers of draws (n,)."""
    if draws.min() == draws.max():  # fixed: sums of many equal numbers would round
        value = float(draws[0])
        return Summary(value, 0.0, value, value, value, value, value)
    q025, q16, median, q84, q975 = (float(q) for q in np.quantile(draws, [0.025, 0.16, 0.5, 0.84, 0.975]))
    return Summary(float(draws.mean()), float(draws.std()), q025, q16, median, q84, q975)


def derived(inputs: Inputs) -> Inputs:
    """Return the derived inputs, each (draws,), from the others."""
    coupling = inputs["absorbed_fraction"] * inputs["delivery"]
    threshold = removal.threshold_fluence(
        inputs["removal_energy_density"], inputs["heated_depth"], inputs["heated_depth_exponent"]
    )
    per_energy = beam.peak_fluence(inputs["delivery"] * inputs["meter_calibration"], inputs["spot_radius"])
    return {
        "coupling": coupling,
        "threshold_fluence": np.asarray(threshold),
        "coupling_over_threshold": coupling * inputs["meter_calibration"] / threshold,
        "incident_fluence_per_energy": np.asarray(per_energy),
        "absorbed_fluence_per_energy": inputs["absorbed_fraction"] * per_energy,
    }


def ordered(names: Inputs) -> list[str]:
    """Names in the fixed order: the table of inputs first, derived ones at their place, then families."""
    known = [name for name in INPUTS if name in names]
    return known + [name for name in names if name not in known]


def input_results(fitted: Fitted, rng: np.random.Generator) -> tuple[InputResult, ...]:
    """Every input before and after the fit, in the fixed order."""
    believed = fitted.problem.data.believed
    everything = fitted.inputs | derived(fitted.inputs)
    before = derived({name: known.density.sample(rng, _PRIOR_DRAWS) for name, known in believed.items()})
    results = []
    for name in ordered(everything):
        entry, draws = describe(name), everything[name]
        known = believed.get(name)
        mean, sd = known.density.moments() if known else (float(before[name].mean()), float(before[name].std()))
        on_scale = _on_scale(entry, draws)
        after = summary(draws)
        results.append(
            InputResult(
                entry=entry,
                summary=after,
                prior=known.prior if known else None,
                prior_mean=mean,
                prior_sd=sd,
                informed=_informed(name, after.sd, sd, fitted),
                fixed=known.density.fixed if known else sd == 0.0,
                scale_mean=float(on_scale.mean()),
                scale_sd=float(on_scale.std()),
                overruled=known.overruled if known else None,
            )
        )
    return tuple(results)


def _informed(name: str, after: float, before: float, fitted: Fitted) -> float | None:
    """1 − (posterior sd / prior sd)²; exactly 0 for an input that was only drawn from its prior."""
    if before == 0.0:
        return None
    if name in fitted.inputs and name not in fitted.problem.names:
        return 0.0
    return max(0.0, 1.0 - (after / before) ** 2)


def _on_scale(entry: Input, draws: Array) -> Array:
    if entry.scale == "log":
        return np.log(draws)
    return np.asarray(special.logit(draws)) if entry.scale == "logit" else draws


def correlations(fitted: Fitted) -> tuple[tuple[str, ...], Array, Array]:
    """Correlation of the free inputs, derived ones left out: names, on natural values, on each input's scale."""
    names = tuple(n for n in ordered(fitted.inputs) if not fitted.problem.data.believed[n].density.fixed)
    natural = np.stack([fitted.inputs[name] for name in names])
    scaled = np.stack([_on_scale(describe(name), fitted.inputs[name]) for name in names])
    return names, np.atleast_2d(np.corrcoef(natural)), np.atleast_2d(np.corrcoef(scaled))


def stored(fitted: Fitted) -> Posterior:
    """Return the draws as they are kept: free inputs, then derived ones."""
    believed = fitted.problem.data.believed
    free = [name for name in ordered(fitted.inputs) if not believed[name].density.fixed]
    everything = fitted.inputs | derived(fitted.inputs)
    names = (*free, *(name for name in ordered(everything) if name not in fitted.inputs))
    columns = np.stack([everything[name] for name in names], axis=-1)
    shape = (fitted.chains, -1)
    return Posterior(names, columns.reshape(*shape, len(names)), fitted.log_prob.reshape(shape))


def budgets(fitted: Fitted) -> dict[str, tuple[Share, ...]]:
    """Where the variance of ln(absorbed fraction) and ln(coupling) comes from; the shares of each add up to 1.

    A prior's share is the variance that its own uncertainty passes on to the posterior mean: for normal distributions
    (Cov(y, θ)/σ)², σ the prior's standard deviation on the input's scale. What the priors do not bring, the readings do.
    """
    everything = fitted.inputs | derived(fitted.inputs)
    return {name: _budget(np.log(everything[name]), fitted) for name in _LEANING if everything[name].std() > 0.0}


def _budget(target: Array, fitted: Fitted) -> tuple[Share, ...]:
    variance = target.var()
    shares = {}
    for name, known in fitted.problem.data.believed.items():
        if known.density.fixed or name not in fitted.problem.names:
            continue
        own = _on_scale(known.entry, fitted.inputs[name])
        covariance = float(np.mean((target - target.mean()) * (own - own.mean())))
        shares[name] = (covariance / _prior_spread(known)) ** 2 / variance
    total = sum(shares.values())
    if total > 1.0:  # by sampling noise, or where a posterior is far from normal
        shares = {name: share / total for name, share in shares.items()}
        total = 1.0
    rest = [Share("readings", float(1.0 - total))]
    return tuple(sorted([Share(n, float(s)) for n, s in shares.items()] + rest, key=lambda share: -share.share))


def told(fitted: Fitted, name: str) -> bool:
    """Whether the readings say something of an input: its spread or its place, on its scale, has changed."""
    known = fitted.problem.data.believed[name]
    if known.density.fixed or name not in fitted.problem.names:
        return False
    spread, own = _prior_spread(known), _on_scale(known.entry, fitted.inputs[name])
    middle = float(_on_scale(known.entry, known.density.quantile(np.array([0.5])))[0])
    return bool(1.0 - (own.std() / spread) ** 2 > _LITTLE or abs(np.median(own) - middle) > _SHIFTED * spread)


def _prior_spread(known: Believed) -> float:
    """Standard deviation of a prior on its input's scale, by quadrature over normal scores."""
    score = np.linspace(-6.0, 6.0, 601)
    weight = np.exp(-0.5 * score**2)
    weight /= weight.sum()
    x = _on_scale(known.entry, np.maximum(known.density.quantile(special.ndtr(score)), 1e-300))
    return math.sqrt(float(weight @ (x - weight @ x) ** 2))


def strained_inputs(fitted: Fitted) -> tuple[Strained, ...]:
    """Inputs whose posterior mean lies where their prior holds next to nothing."""
    strained = []
    for name, known in fitted.problem.data.believed.items():
        if known.density.fixed or name not in fitted.problem.names:
            continue
        mean = fitted.inputs[name].mean()
        below = float(known.density.cdf(np.array(mean)))
        tail = 2.0 * min(below, 1.0 - below)
        if tail < STRAINED_TAIL and not (below < 0.5 and name.startswith(_SPREADS)):
            side = "below" if below < 0.5 else "above"
            sentence = (
                f"The readings pull {name} far {side} what was believed of it: only {100 * tail:.2g} % of its prior lies "
                "so far out. Either that number is wrong, or the readings contradict the model."
            )
            strained.append(Strained(name, tail, sentence))
    return tuple(strained)

"""What the model expects of a shot not yet fired, from draws of the inputs: before a fit or after one."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from reconcile.campaign.campaign import Campaign
from reconcile.campaign.kinds import FITTED, KINDS
from reconcile.campaign.readings import Gathered, Shot
from reconcile.campaign.refusal import Refusal
from reconcile.inference.coordinates import Inputs
from reconcile.inference.density import Density
from reconcile.inference.model import EXPECTED, RELATIVE_SCATTER, Array, Conditions, Expected, Exposures
from reconcile.inference.priors import Believed, believed_inputs
from reconcile.inference.problem import Data, Problem, chosen_draws

QUANTILES = (0.025, 0.16, 0.5, 0.84, 0.975)  # the median, and the bounds of its 68 % and 95 % ranges
DRAWS = 4000
_LEAST_DRAWS = 200  # fewer say nothing of a 95 % range
_MOST_BATCHES = 50
_TOGETHER = 16  # energies worked at once: more would only fill the memory

# What of a bubble is predicted: no delay can be named for a shot that nobody fired.
_WORDS = {
    "bubble-radius": "largest bubble radius",
    "median-diameter": "median particle diameter of a sample of many such shots",
}
_HIGHEST = {"reflected-fraction": 1.0}  # no true value lies above it, whatever the scatter; none below 0
_NEEDS = {"pressure-integral": ("standoff", "probe_response"), "arrival-time": ("standoff",)}


@dataclass(frozen=True, slots=True)
class Range:
    """One quantity over the energies asked: median, 68 % and 95 % ranges, each (m,), SI."""

    name: str  # a kind, "absorbed-fluence" or "incident-fluence"
    words: str
    unit: str
    median: Array
    q16: Array
    q84: Array
    q025: Array
    q975: Array


@dataclass(frozen=True, slots=True)
class Prediction:
    """What is expected of shots not yet fired."""

    energies: Array  # (m,) [J] as the meter would log them
    pulses: int
    ranges: tuple[Range, ...]
    draws: int
    impossible: (
        float  # share of draws left out because more would be absorbed than arrives; the largest over the energies
    )

    def range_of(self, name: str) -> Range:
        """Return the range of one quantity; raises KeyError for one that was not predicted."""
        for one in self.ranges:
            if one.name == name:
                return one
        raise KeyError(name)


def predict(
    conditions: Conditions, inputs: Inputs, energies: Array, *, pulses: int, kinds: tuple[str, ...], seed: int
) -> Prediction:
    """Say what the next shots at these energies should show.

    The ranges are those of the true value that the next reading measures: the inputs vary as drawn, the shot's own energy
    about its log with `energy_jitter`, and the kind by its scatter. A reading's own uncertainty and the errors of its
    instrument come on top of them. A sample is that of many such shots, over which the deviations of single shots average.

    Parameters
    ----------
    conditions : of the campaign; nominal spot radius and standoff, no filter
    inputs : (draws,) arrays by name; fixed ones may be of shape (1,)
    energies : (m,) [J] as the meter would log them
    pulses : that one place receives; in a burst, bubble and sound are those of the last pulse
    kinds : what to predict; each needs its `scatter.<kind>` among the inputs
    seed : of the shots' deviations and the scatters; the same over all energies, so that curves are smooth
    """
    draws = max(value.size for value in inputs.values())
    rng = np.random.default_rng(seed)
    deviation = inputs["energy_jitter"] * rng.standard_normal(draws)
    score = {kind: rng.standard_normal(draws) for kind in KINDS}  # of every kind: one more changes no other
    blocks = [energies[start : start + _TOGETHER] for start in range(0, len(energies), _TOGETHER)]
    parts: dict[str, list[Array]] = {}
    impossible = 0.0
    for block in blocks:
        shot = Expected(conditions, inputs, _exposures(conditions, block[:, None] * np.exp(deviation), pulses))
        many = Expected(conditions, inputs, _exposures(conditions, np.tile(block[:, None], draws), pulses))
        values = {"absorbed-fluence": shot.absorbed, "incident-fluence": shot.incident}
        for kind in kinds:
            state = shot if KINDS[kind].target == "shot" else many
            values[kind] = _scattered(kind, _expected(state, kind), inputs[f"scatter.{kind}"] * score[kind])
        possible = shot.absorbed_share <= 1.0
        impossible = max(impossible, float(1.0 - possible.mean(axis=1).min()))
        for name, value in values.items():
            parts.setdefault(name, []).append(_quantiles(value, possible))
    ranges = tuple(_range(name, np.concatenate(quantiles, axis=1)) for name, quantiles in parts.items())
    return Prediction(np.asarray(energies), pulses, ranges, draws, impossible)


def _exposures(conditions: Conditions, energy: Array, pulses: int) -> Exposures:
    column = np.ones((len(energy), 1))
    standoff = np.nan if conditions.standoff is None else conditions.standoff
    return Exposures(energy, pulses * column, conditions.spot_radius * column, standoff * column)


def _expected(state: Expected, kind: str) -> Array:
    """Expected true value (m, draws) of a kind; of one with a delay, the largest."""
    return state.largest_radius if KINDS[kind].has_delay else EXPECTED[kind](state)


def _scattered(kind: str, expected: Array, scatter: Array) -> Array:
    if KINDS[kind].logarithmic:
        return expected * np.exp(scatter)
    value = expected + scatter * (expected if kind in RELATIVE_SCATTER else 1.0)
    return np.clip(value, 0.0, _HIGHEST.get(kind, np.inf))


def _quantiles(values: Array, possible: NDArray[np.bool_]) -> Array:
    """Quantiles (5, m) over the possible draws of each energy; NaN where too few are left."""
    quantiles = np.full((len(QUANTILES), len(values)), np.nan)
    for row, (value, kept) in enumerate(zip(np.broadcast_to(values, possible.shape), possible, strict=True)):
        if kept.sum() >= min(_LEAST_DRAWS, len(kept)):
            quantiles[:, row] = np.quantile(value[kept], QUANTILES)
    return quantiles


def _range(name: str, quantiles: Array) -> Range:
    q025, q16, median, q84, q975 = quantiles
    kind = KINDS.get(name)
    unit = kind.unit if kind else "J/m2"
    words = _WORDS.get(name) or (kind.words if kind else name.replace("-", " "))
    return Range(name, words, unit, median, q16, q84, q025, q975)


# ---------------------------------------------------------------------------------------------------------------------
# What is drawn, and from where


def predictable(campaign: Campaign) -> tuple[str, ...]:
    """Fitted kinds that this campaign's instruments allow a prediction of, whether it reads them or not."""
    names = believed_inputs(campaign, ())
    return tuple(kind for kind in FITTED if all(need in names for need in _NEEDS.get(kind, ())))


def believed_of(campaign: Campaign, kinds: tuple[str, ...]) -> dict[str, Believed]:
    """Every input that a prediction of these kinds needs, with its prior; raises Refusal where one has none."""
    return believed_inputs(campaign, kinds)


def completed(
    draws: Inputs, fixed: dict[str, float], believed: dict[str, Believed], seed: int
) -> tuple[Inputs, list[str]]:
    """Inputs of a fit, as a prediction needs them: at most `DRAWS` of its draws, and the priors of what it did not hold.

    Parameters
    ----------
    draws : (n,) arrays of the inputs that were free
    fixed : values of those that were held
    believed : every input that is needed

    Returns
    -------
    inputs : (m,) arrays, of shape (1,) where held
    missing : names that stand in neither; drawn from their priors
    """
    rng = np.random.default_rng(seed)
    total = max((value.size for value in draws.values()), default=DRAWS)
    chosen = rng.choice(total, size=min(DRAWS, total), replace=False)
    inputs: Inputs = chosen_draws(draws, chosen) | {name: np.array([value]) for name, value in fixed.items()}
    missing = [name for name in believed if name not in inputs]
    return inputs | {name: _drawn(believed[name].density, rng, len(chosen)) for name in missing}, missing


def prior_draws(campaign: Campaign, shots: tuple[Shot, ...], kinds: tuple[str, ...], *, seed: int) -> Inputs:
    """Draw every input from its prior, cut as in a fit of these shots.

    No shot absorbs more than arrives, and bubble and shock of the strongest leave room for heat.

    Parameters
    ----------
    shots : of the log; at least one
    kinds : whose scatter is wanted

    Returns
    -------
    (n,) arrays by input name, fixed ones of shape (1,)

    Raises
    ------
    Refusal : a material lacks a property, an input has no prior, or the priors contradict the physical bounds.
    """
    believed = believed_of(campaign, kinds)
    problem = Problem(Data.of(Gathered(campaign, shots, ())))
    rng = np.random.default_rng(seed)
    batches: list[Inputs] = []
    found = 0
    for _ in range(_MOST_BATCHES):
        batch = {name: _drawn(known.density, rng, DRAWS) for name, known in believed.items()}
        kept = np.flatnonzero(np.log(rng.uniform(size=DRAWS)) < _log_cuts(problem, batch))
        batches.append(chosen_draws(batch, kept))
        found += len(kept)
        if found >= DRAWS:
            break
    if found < _LEAST_DRAWS:
        raise Refusal(
            campaign.log.place.file,
            found=f"priors of which {found} draws in {DRAWS * _MOST_BATCHES} absorb no more energy than arrives",
            expected="priors that leave the strongest shot of the log possible",
            remedy="Look at absorbed_fraction, absorption_exponent, bubble_yield and shock_factor in [priors].",
        )
    return {
        name: batches[0][name] if known.density.fixed else np.concatenate([batch[name] for batch in batches])[:DRAWS]
        for name, known in believed.items()
    }


def _log_cuts(problem: Problem, inputs: Inputs) -> Array:
    """Logarithm of the share (n,) that the physical cuts leave of the prior at these draws."""
    position = problem.coordinates.position(inputs)
    cut, _ = problem.log_prior(position)
    _, uncut = problem.coordinates.inputs(position)
    finite = np.isfinite(cut) & np.isfinite(uncut)
    return np.where(finite, np.where(finite, cut, 0.0) - np.where(finite, uncut, 0.0), -np.inf)


def _drawn(density: Density, rng: np.random.Generator, n: int) -> Array:
    return density.quantile(np.array([0.5])) if density.fixed else density.sample(rng, n)

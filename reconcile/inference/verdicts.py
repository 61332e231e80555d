"""Which shots and readings cannot be trusted, and why: probabilities from the draws, reasons in words."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

from reconcile.campaign.kinds import KINDS
from reconcile.campaign.quantity import shown
from reconcile.campaign.readings import Gathered, Shot
from reconcile.inference.coordinates import Inputs
from reconcile.inference.fit import Fitted
from reconcile.inference.likelihood import MISREAD_SPREAD
from reconcile.inference.model import Array, Expected
from reconcile.inference.outcome import ReadingResult, ReadingVerdict, ShotResult, ShotVerdict
from reconcile.inference.posterior import summary
from reconcile.inference.problem import chosen_draws

DRAWS = 1000  # of the posterior, on which shots and readings are judged
SUSPECT = 0.5
_CHUNK = 25


@dataclass(frozen=True, slots=True)
class Judged:
    """Every shot and reading after the fit, in the order in which they were gathered."""

    shots: tuple[ShotResult, ...]
    readings: tuple[ReadingResult, ...]


@dataclass(frozen=True, slots=True)
class _Looked:
    """What draws say of shots and fitted readings."""

    inputs: Inputs  # (draws,)
    deviation: Array  # (shots, draws)
    misread: Array  # (shots,) probability
    stray: Array  # (fitted readings,)
    mean: Array  # (fitted readings,)
    sd: Array  # (fitted readings,)


def judge(fitted: Fitted, gathered: Gathered, rng: np.random.Generator) -> Judged:
    """Judge every shot and reading.

    Parameters
    ----------
    fitted : the fit
    gathered : what was read, in its order
    rng : for each shot's own deviation, drawn beside each draw of the inputs
    """
    looked = _look(fitted, rng)
    readings = _reading_results(fitted, gathered, looked)
    return Judged(_shot_results(fitted, gathered, looked, readings), readings)


def absorbed_draws(fitted: Fitted, rng: np.random.Generator) -> Array:
    """Draws of every shot's absorbed fluence [J/m²], (shots, draws), the shots of one column under one draw of inputs."""
    looked, data = _look(fitted, rng), fitted.problem.data
    shots = np.arange(len(data.table.log_energy))
    return Expected(data.conditions, looked.inputs, data.table.exposures(shots, looked.deviation)).absorbed


def _look(fitted: Fitted, rng: np.random.Generator) -> _Looked:
    """Work through some draws: deviations, probabilities, expectations."""
    problem = fitted.problem
    total = len(fitted.log_prob)
    chosen = rng.choice(total, size=min(DRAWS, total), replace=False)
    inputs = chosen_draws(fitted.inputs, chosen)
    n_shots, n_draws = len(problem.data.table.log_energy), len(chosen)
    deviation = _from_log_alone(inputs, (n_shots, n_draws), rng)
    misread = np.tile(inputs["misread_rate"].mean(), n_shots)
    likelihood, lattice = problem.likelihood, problem.likelihood.lattice
    sums = np.zeros((3, len(problem.data.readings)))
    square = np.zeros(len(problem.data.readings))
    found = np.zeros(n_shots)
    for start in range(0, n_draws, _CHUNK):
        part = np.arange(start, min(start + _CHUNK, n_draws))
        details = likelihood.details(chosen_draws(inputs, part))
        for row, values in zip(sums, (details.stray, details.mean, details.variance), strict=True):
            row += values.sum(axis=1)
        square += (details.mean**2).sum(axis=1)
        if lattice is not None:
            found[lattice.shots] += details.misread.sum(axis=1)
            for position, shot in enumerate(lattice.shots):
                own = lattice.pairs_of(position)
                points = lattice.deviation[own, 0]
                deviation[shot, part] = _drawn(points, details.weights[own], lattice.step, rng)
    if lattice is not None:
        misread[lattice.shots] = found[lattice.shots] / n_draws
    stray, mean, variance = sums / n_draws
    spread = np.sqrt(np.maximum(variance + square / n_draws - mean**2, 0.0))
    return _Looked(inputs, deviation, misread, stray, mean, spread)


def _from_log_alone(inputs: Inputs, shape: tuple[int, int], rng: np.random.Generator) -> Array:
    """Deviations of shots that no reading speaks of."""
    # The same draws for all of them: what is known alike must come out alike.
    wrong = rng.uniform(size=shape[1]) < inputs["misread_rate"]
    deviation = rng.standard_normal(shape[1]) * np.where(wrong, MISREAD_SPREAD, inputs["energy_jitter"])
    return np.tile(deviation, (shape[0], 1))


def _drawn(points: Array, weights: Array, step: float, rng: np.random.Generator) -> Array:
    """Draw one point a column by its weight (points, draws), spread evenly over the lattice's step."""
    ladder = np.cumsum(weights, axis=0)
    rung = (ladder < rng.uniform(size=weights.shape[1]) * ladder[-1]).sum(axis=0)
    return points[np.minimum(rung, len(points) - 1)] + step * (rng.uniform(size=weights.shape[1]) - 0.5)


def _reading_results(fitted: Fitted, gathered: Gathered, looked: _Looked) -> tuple[ReadingResult, ...]:
    position_of = {row: position for position, row in enumerate(fitted.problem.data.rows)}
    results = []
    for row, reading in enumerate(gathered.readings):
        position = position_of.get(row)
        if position is None:
            aside = reading.set_aside is not None
            results.append(ReadingResult(reading, None, None, None, "set-aside" if aside else "information"))
            continue
        p_stray = float(np.clip(looked.stray[position], 0.0, 1.0))
        sound: ReadingVerdict = "below-limit" if reading.limit is not None else "used"
        verdict: ReadingVerdict = "stray" if p_stray > SUSPECT else sound
        predicted, sd = float(looked.mean[position]), float(looked.sd[position])
        results.append(ReadingResult(reading, predicted, sd, p_stray, verdict))
    return tuple(results)


def _shot_results(
    fitted: Fitted, gathered: Gathered, looked: _Looked, readings: tuple[ReadingResult, ...]
) -> tuple[ShotResult, ...]:
    data = fitted.problem.data
    state = Expected(
        data.conditions, looked.inputs, data.table.exposures(np.arange(len(gathered.shots)), looked.deviation)
    )
    ratio = looked.inputs["meter_calibration"] * np.exp(looked.deviation)
    by_shot: dict[str, list[ReadingResult]] = {}
    for result in readings:
        if result.reading.shot is not None and result.p_stray is not None:
            by_shot.setdefault(result.reading.shot, []).append(result)
    results = []
    for number, shot in enumerate(gathered.shots):
        own = by_shot.get(shot.name, [])
        p_misread = float(np.clip(looked.misread[number], 0.0, 1.0))
        verdict, reasons = _verdict(shot, own, p_misread, ratio[number])
        results.append(
            ShotResult(
                shot=shot,
                absorbed_fluence=summary(state.absorbed[number]),
                incident_fluence=summary(state.incident[number]),
                energy_ratio=float(ratio[number].mean()),
                energy_ratio_sd=float(ratio[number].std()),
                p_misread=p_misread,
                verdict=verdict,
                reasons=reasons,
            )
        )
    return tuple(results)


def _verdict(
    shot: Shot, own: list[ReadingResult], p_misread: float, ratio: Array
) -> tuple[ShotVerdict, tuple[str, ...]]:
    """Return a shot's verdict and the reasons for it, the most telling first."""
    stray = [result for result in own if result.verdict == "stray"]
    reasons = []
    if p_misread > SUSPECT:
        reasons.append(_misread_reason(shot, own, p_misread, ratio))
    reasons += [_stray_reason(result, len(own)) for result in stray]
    if not reasons and len(own) == 1 and p_misread + (own[0].p_stray or 0.0) > SUSPECT:
        reasons.append(
            "Its only reading does not fit its logged energy; whether the energy is misread "
            f"(p = {p_misread:.2f}) or the reading stray (p = {own[0].p_stray or 0.0:.2f}) a single one cannot tell."
        )
    if shot.set_aside is not None:
        return "set-aside", (f"Set aside by a person: {shot.set_aside or 'no reason given'}", *reasons)
    if shot.kept is not None:
        return "kept", (f"Kept by a person: {shot.kept or 'no reason given'}", *reasons)
    if p_misread > SUSPECT:
        return "misread", tuple(reasons)
    return ("stray", tuple(reasons)) if stray else ("kept", tuple(reasons))


def _misread_reason(shot: Shot, own: list[ReadingResult], p_misread: float, ratio: Array) -> str:
    sound = [result.reading for result in own if result.verdict != "stray"]
    kinds = _listed(dict.fromkeys(KINDS[reading.kind].words for reading in sound))
    energy = shot.metered_energy * ratio
    who = f"Its {kinds} {'speaks' if len(sound) == 1 else 'speak together'}" if sound else "Its readings speak"
    return (
        f"{who} of a pulse of {shown(float(energy.mean()), float(energy.std()), 'J')}, "
        f"{ratio.mean():.2f} ± {ratio.std():.2f} times the logged {shown(shot.metered_energy, None, 'J')} "
        f"(p = {p_misread:.2f}). The meter may have missed it, or less of it may have arrived: dirt, a left-over bubble "
        "or a clipped beam looks the same."
    )


def _stray_reason(result: ReadingResult, count: int) -> str:
    reading, kind = result.reading, KINDS[result.reading.kind]
    assert result.predicted is not None
    assert result.predicted_sd is not None
    others = "its other readings and the model" if count > 1 else "its logged energy and the model"
    if reading.value is None or reading.u is None:
        seen = f"lies below {shown(reading.limit or 0.0, None, kind.unit)}"
        distance = ""
    else:
        seen = f"is {shown(reading.value, reading.u, kind.unit)}"
        sd = float(np.hypot(result.predicted_sd, reading.u))
        distance = f", {abs(reading.value - result.predicted) / sd:.1f} standard deviations away" if sd > 0 else ""
    return (
        f"Its {kind.words} ({reading.place}) {seen}; {others} expect "
        f"{shown(result.predicted, result.predicted_sd, kind.unit)}{distance} (p = {result.p_stray:.2f} of being stray)."
    )


def _listed(words: Iterable[str]) -> str:
    words = list(words)
    return words[0] if len(words) == 1 else f"{', '.join(words[:-1])} and {words[-1]}"

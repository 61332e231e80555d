"""From a finished fit to the close-out: judge, compare, decide whether it may be signed."""

from __future__ import annotations

from collections import Counter

import numpy as np

from reconcile.campaign.kinds import KINDS
from reconcile.campaign.readings import Gathered
from reconcile.inference.agreement import agreement
from reconcile.inference.fit import Fitted
from reconcile.inference.lattice import REACH
from reconcile.inference.model import RELATIVE_SCATTER, Expected, Exposures, expected_of
from reconcile.inference.outcome import (
    Band,
    CloseOut,
    InputResult,
    KindResult,
    ReadingResult,
    Sampling,
    Share,
    Strained,
)
from reconcile.inference.posterior import budgets, correlations, input_results, stored, strained_inputs, told
from reconcile.inference.problem import chosen_draws
from reconcile.inference.validity import warnings_of
from reconcile.inference.verdicts import Judged, judge

GOOD_INTEGRAL = 0.1  # [nat] error of the integration over shots above which the draws are not to be signed
_MOSTLY, _LEAST = 0.5, 4  # share of a kind's readings, of at least so many, that may be stray in a close-out to sign
_MOST_FLAGGED = 1.0 / 3.0  # share of shots with readings that may be flagged
_EDGE = 0.2  # distance of a shot's deviation from the end of what was considered, in the logarithm
_BAND_POINTS, _BAND_DRAWS = 40, 400


def conclude(fitted: Fitted, gathered: Gathered, *, seed: int, target: int, workers: int = 1) -> CloseOut:
    """Bring everything together that a report may know."""
    for_shots, for_kinds, for_priors, for_bands = np.random.SeedSequence(seed).spawn(8)[4:]
    judged = judge(fitted, gathered, np.random.default_rng(for_shots))
    counts = Counter(reading.kind for reading in fitted.problem.data.readings)
    kinds = agreement(fitted.start, counts, for_kinds, workers)
    inputs = input_results(fitted, np.random.default_rng(for_priors))
    strained, budget = strained_inputs(fitted), budgets(fitted)
    sampling = _sampling(fitted, target)
    reasons = (*_status_reasons(sampling, kinds, strained, fitted), *_reasons_of_flags(judged))
    names, natural, scaled = correlations(fitted)
    return CloseOut(
        gathered=gathered,
        seed=seed,
        status="provisional" if reasons else "final",
        status_reasons=reasons,
        inputs=inputs,
        correlation=(names, natural),
        scale_correlation=(names, scaled),
        budget=budget,
        shots=judged.shots,
        readings=judged.readings,
        kinds=kinds,
        strained=strained,
        warnings=warnings_of(fitted, gathered, judged.shots),
        could_not_tell=_could_not_tell(fitted, inputs, budget),
        sampling=sampling,
        posterior=stored(fitted),
        bands=tuple(_bands(fitted, np.random.default_rng(for_bands))),
    )


def _sampling(fitted: Fitted, target: int) -> Sampling:
    draws = fitted.draws
    return Sampling(
        min_ess=draws.quality.min_ess,
        max_rhat=draws.quality.max_rhat,
        draws=draws.log_prob.size,
        seconds=fitted.seconds,
        converged=draws.converged,
        target_ess=target,
        integral_error=fitted.integral_error,
        evaluations=draws.evaluations,
    )


def _status_reasons(
    sampling: Sampling, kinds: tuple[KindResult, ...], strained: tuple[Strained, ...], fitted: Fitted
) -> tuple[str, ...]:
    """Why the close-out must not be signed yet."""
    reasons = []
    if not fitted.problem.data.readings:
        reasons.append("No reading could be fitted: everything stated here is what was believed before.")
    if not sampling.converged:
        reasons.append(
            f"Sampling ended before it was good enough: smallest effective sample size {sampling.min_ess:.0f} "
            f"(wanted {sampling.target_ess}), largest R-hat {sampling.max_rhat:.3f} (wanted below 1.01). Run again with "
            "another --seed or --effort long."
        )
    if sampling.integral_error > GOOD_INTEGRAL:
        reasons.append(
            f"The integration over single shots is uncertain by {sampling.integral_error:.2g} in the logarithm of the "
            "likelihood: some shot is read far more precisely than usual."
        )
    if fitted.start.others:
        reasons.append("The readings allow a second explanation that the draws may not hold in its due share.")
    reasons += [kind.sentence for kind in kinds if kind.agrees is False]
    reasons += [entry.sentence for entry in strained]
    return tuple(reasons)


def _reasons_of_flags(judged: Judged) -> tuple[str, ...]:
    """Why verdicts alone forbid signing: what was flagged is too much to be chance, or cannot be judged."""
    reasons = []
    fitted = [result for result in judged.readings if result.p_stray is not None]
    for kind in dict.fromkeys(result.reading.kind for result in fitted):
        own = [result for result in fitted if result.reading.kind == kind]
        stray = sum(result.verdict == "stray" for result in own)
        if len(own) >= _LEAST and stray > _MOSTLY * len(own):
            reasons.append(
                f"{stray} of {len(own)} {KINDS[kind].words} readings are stray: not single readings but the whole kind, "
                "or a number in the manifest, contradicts the rest."
            )
    by_shot: dict[str, list[ReadingResult]] = {}
    for result in fitted:
        if result.reading.shot is not None:
            by_shot.setdefault(result.reading.shot, []).append(result)
    flagged = [shot for shot in judged.shots if shot.verdict in ("misread", "stray")]
    if len(by_shot) >= _LEAST and len(flagged) > _MOST_FLAGGED * len(by_shot):
        reasons.append(
            f"{len(flagged)} of {len(by_shot)} shots with readings are flagged: look for a wrong unit or instrument number "
            "in the manifest before believing any of it."
        )
    for shot in judged.shots:
        own = by_shot.get(shot.shot.name, [])
        strays = sum(result.verdict == "stray" for result in own)
        most_stray = strays > 1 and strays > _MOSTLY * len(own)
        at_edge = shot.verdict == "misread" and abs(np.log(shot.energy_ratio)) > REACH - _EDGE
        if most_stray or at_edge:
            reasons.append(
                f"What was read of shot {shot.shot.name} does not fit its logged energy within a factor of "
                f"{np.exp(REACH):.0f}, the most that is considered: look for a slip of unit or decimal in its log; correct it, "
                "or set the shot aside. Its fluence here is not to be used."
            )
    return tuple(reasons)


def _could_not_tell(
    fitted: Fitted, inputs: tuple[InputResult, ...], budget: dict[str, tuple[Share, ...]]
) -> tuple[str, ...]:
    """Sentences on what these data do not know."""
    untold = [
        result.entry.name
        for result in inputs
        if result.entry.belongs_to == "m"
        and not result.entry.derived
        and not result.fixed
        and not told(fitted, result.entry.name)
    ]
    sentences = []
    if untold:
        sentences.append(f"These readings say next to nothing about {', '.join(untold)}: they stay as believed before.")
    fixed = [result.entry.name for result in inputs if result.fixed and result.entry.belongs_to == "m"]
    if fixed:
        sentences.append(f"Held fixed, because each nearly repeats another input: {', '.join(fixed)}.")
    shares = [share for share in budget.get("absorbed_fraction", ()) if share.source != "readings"][:3]
    if shares and "reflected-fraction" not in fitted.problem.data.kinds:
        listed = ", ".join(f"{share.source} ({100 * share.share:.0f} %)" for share in shares)
        sentences.append(
            "Craters, bubbles, sound and sizes see only ratios of energies: scaling the absorbed fraction up and the "
            "removal energy density with it changes none of them. The absolute absorbed fraction therefore leans on what "
            f"was believed before, most of all on {listed}; a reflected-fraction reading would anchor it."
        )
    kinds = fitted.problem.data.kinds
    if len([kind for kind in kinds if KINDS[kind].target == "shot"]) < 2:
        sentences.append("With fewer than two kinds on a shot, a misread energy cannot be told from a stray reading.")
    if fitted.problem.likelihood.lattice is None:
        sentences.append(
            "No reading belongs to a single shot: each shot's deviation from its log stays as believed before."
        )
    sentences.append(
        f"A pulse energy wrong by more than a factor of {np.exp(REACH):.0f} lies outside what was considered."
    )
    return tuple(sentences)


def _bands(fitted: Fitted, rng: np.random.Generator) -> list[Band]:
    """What each fitted kind should show over the campaign's energies, one pulse, nominal spot."""
    data = fitted.problem.data
    total = len(fitted.log_prob)
    inputs = chosen_draws(fitted.inputs, rng.choice(total, size=min(_BAND_DRAWS, total), replace=False))
    energies = np.exp(data.table.log_energy)
    grid = np.geomspace(0.9 * energies.min(), 1.1 * energies.max(), _BAND_POINTS)
    standoff = np.nan if data.conditions.standoff is None else data.conditions.standoff
    column = np.ones((_BAND_POINTS, 1))
    exposures = Exposures(grid[:, None], column, data.conditions.spot_radius * column, standoff * column)
    state = Expected(data.conditions, inputs, exposures)
    absorbed = np.median(state.absorbed, axis=1)
    bands = []
    for kind in data.kinds:
        delays = [r.delay for r in data.readings if r.kind == kind and r.delay is not None]
        delay = float(np.median(delays)) if delays else None
        expected = expected_of(state, kind, None if delay is None else np.full(1, delay))
        scatter = inputs[f"scatter.{kind}"] * rng.standard_normal(expected.shape)
        if KINDS[kind].logarithmic:
            spread = expected * np.exp(scatter)
        else:
            spread = expected + scatter * (expected if kind in RELATIVE_SCATTER else 1.0)
        low, median, high = np.quantile(spread, [0.025, 0.5, 0.975], axis=1)
        bands.append(Band(kind, delay, grid, absorbed, low, median, high))
    return bands

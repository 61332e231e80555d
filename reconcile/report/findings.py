"""The sections that say what the readings told: inputs, kinds, shots, budget, and what they could not tell."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence

from reconcile.campaign.kinds import KINDS
from reconcile.inference.outcome import CloseOut, InputResult, ReadingResult, ShotResult
from reconcile.report.blocks import Block, Column, Drawing, Heading, Listing, Section, Statement, Table
from reconcile.report.lines import (
    ABSENT,
    Scale,
    alone,
    count,
    estimate,
    interval,
    pair,
    probability,
    scale_for,
    share,
)

BELONGS = {"m": "material and liquid", "i": "instrument", "c": "this campaign", "-": "derived"}
VERDICTS = {"set-aside": "set aside", "below-limit": "below the limit", "information": "for information"}
PER_CM2 = Scale("J/cm²", 1e4)
KINDS_WORDS = {True: "agrees", False: "contradicts", None: "cannot be told"}


def inputs(close_out: CloseOut, drawings: Sequence[Drawing]) -> Section:
    """Return prior and posterior of every input."""
    columns = (
        Column("Input", "text"),
        Column("What it is", "wide"),
        Column("Unit"),
        Column("Prior", "number"),
        Column("Posterior", "number"),
        Column("95 % interval", "number"),
        Column("Informed", "number"),
    )
    stated = (Column("Input"), Column("Prior as written", "wide"), Column("From"), Column("Belongs to"))
    strained = {item.input for item in close_out.strained}
    flagged = frozenset(i for i, result in enumerate(close_out.inputs) if result.entry.name in strained)
    blocks: list[Block] = [
        Statement(
            "Informed: 1 − (posterior standard deviation over prior standard deviation)². At 0 % the readings say nothing about an input and "
            "its prior stands; near 100 % the readings alone fix it. Values as on the first page.",
        ),
        Table("Inputs before and after the fit", columns, tuple(_input_row(result) for result in close_out.inputs), flagged),
        *drawings,
        Table("Where each prior comes from", stated, tuple(_prior_row(result) for result in close_out.inputs if result.prior is not None)),
    ]
    overruled = [f"{result.entry.name}: [priors] goes before {result.overruled}." for result in close_out.inputs if result.overruled]
    if overruled:
        blocks.append(Listing(tuple(overruled)))
    return Section("inputs", "Inputs", tuple(blocks))


def _input_row(result: InputResult) -> tuple[str, ...]:
    name, summary = result.entry.name, result.summary
    scale = scale_for(result.entry.unit, [summary.median], name)
    prior = ABSENT if result.prior is None else pair(result.prior_mean, result.prior_sd, scale)
    posterior = "fixed" if result.fixed else estimate(summary, scale)
    return (name, result.entry.meaning, scale.label or "1", prior, posterior, interval(summary, scale), share(result.informed))


def _prior_row(result: InputResult) -> tuple[str, ...]:
    assert result.prior is not None
    place = "the package's default" if result.prior.place is None else str(result.prior.place)
    return (result.entry.name, result.prior.text, place, BELONGS[result.entry.belongs_to])


def kinds(close_out: CloseOut, drawings: Sequence[Drawing]) -> Section:
    """Return whether each kind agrees with what the others predict, and the figures of the readings."""
    columns = (Column("Kind"), Column("Readings", "number"), Column("p", "number"), Column("With the others"), Column("In words", "wide"))
    rows = [
        (KINDS[result.kind].words, str(result.n), probability(result.p_value), KINDS_WORDS[result.agrees], result.sentence)
        for result in close_out.kinds
    ]
    flagged = frozenset(i for i, result in enumerate(close_out.kinds) if result.agrees is False)
    blocks: list[Block] = [
        Statement(
            "Each kind is compared with what the other kinds predict for it. A kind contradicts where p is below 0.01 over the number of kinds "
            "tested: chance alone would rarely bring such a difference."
        ),
        Table("Do the kinds agree?", columns, tuple(rows), flagged) if rows else Statement("No kind was fitted."),
        *drawings,
    ]
    return Section("kinds", "Kinds of reading", tuple(blocks))


def strained(close_out: CloseOut) -> Section:
    """Return the inputs whose posterior mean lies where their prior holds next to nothing."""
    if not close_out.strained:
        return Section("strained", "Strained inputs", (Statement("None: no input was pulled to where its prior holds less than 0.3 %."),))
    columns = (Column("Input"), Column("Prior beyond it", "number"), Column("In words", "wide"))
    rows = tuple((item.input, f"{alone(100 * item.prior_tail, digits=2)} %", item.sentence) for item in close_out.strained)
    words = Statement("The readings pull these inputs to where their priors hold less than 0.3 %. Check the instrument or the stated number.", "alert")
    return Section("strained", "Strained inputs", (words, Table("Strained inputs", columns, rows)))


def flagged_shots(close_out: CloseOut) -> Section:
    """Return every flagged shot with its readings, and what else than the meter it may mean."""
    readings: dict[str, list[ReadingResult]] = {}
    for result in close_out.readings:
        if result.reading.shot is not None:
            readings.setdefault(result.reading.shot, []).append(result)
    blocks: list[Block] = []
    for shot in close_out.shots:
        if shot.verdict != "kept" or shot.shot.kept is not None:
            blocks += _flagged_shot(shot, readings.get(shot.shot.name, []))
    if not blocks:
        return Section("flagged-shots", "Flagged shots", (Statement("None: every shot was kept, and nobody had to vouch for one."),))
    caution = Statement(
        "An energy ratio far from 1 says that the readings of a shot show another energy than was logged. Lost delivery (dirt, a left-over "
        "bubble, a clipped beam) cannot be told from a misread meter."
    )
    return Section("flagged-shots", "Flagged shots", (caution, *blocks))


_SHOT_WORDS = {"misread": "misread energy", "stray": "a stray reading", "set-aside": "set aside by a person", "kept": "kept on a person's word"}


def _flagged_shot(result: ShotResult, readings: Sequence[ReadingResult]) -> Iterable[Block]:
    shot = result.shot
    yield Heading(f"{shot.name}: {_SHOT_WORDS[result.verdict]}")
    energy = scale_for("J", [shot.metered_energy])
    ratio = pair(result.energy_ratio, result.energy_ratio_sd, Scale("", 1.0))
    yield Statement(
        f"Logged {energy.with_unit(alone(shot.metered_energy, energy))} ({shot.place}); energy ratio {ratio}; "
        f"probability of a misread energy {probability(result.p_misread)}."
    )
    reasons = list(result.reasons)
    if shot.set_aside is not None and not any(shot.set_aside in reason for reason in reasons):
        reasons.append(f"Set aside: {shot.set_aside}.")
    if result.verdict == "set-aside":
        reasons.append("Its fluence follows from the log alone.")
    if shot.kept is not None and not any(shot.kept in reason for reason in reasons):
        reasons.append(f"Kept on a person's word: {shot.kept}.")
    if reasons:
        yield Listing(tuple(reasons))
    if readings:
        yield readings_table(f"Readings of {shot.name}", readings, with_shot=False)
    else:
        yield Statement("No reading of this shot.", "quiet")


def readings_table(caption: str, readings: Sequence[ReadingResult], *, with_shot: bool) -> Table:
    """Return readings beside what the fit expects of them."""
    columns = (
        *((Column("Shot or sample"),) if with_shot else ()),
        Column("Kind"),
        Column("Delay", "number"),
        Column("Reading", "number"),
        Column("Expected", "number"),
        Column("Difference / sd", "number"),
        Column("p stray", "number"),
        Column("Verdict"),
        Column("Source", "wide"),
    )
    rows = [((*((_target(result),) if with_shot else ()), *_reading_cells(result))) for result in readings]
    flagged = frozenset(i for i, result in enumerate(readings) if result.verdict == "stray") if not with_shot else frozenset()
    return Table(caption, columns, tuple(rows), flagged)


def _target(result: ReadingResult) -> str:
    return result.reading.shot or result.reading.sample or ABSENT


def _reading_cells(result: ReadingResult) -> tuple[str, ...]:
    reading = result.reading
    kind = KINDS[reading.kind]
    scale = scale_for(kind.unit, [reading.value if reading.value is not None else reading.limit])
    delay = scale_for("s", [reading.delay])
    if reading.limit is not None:
        measured = f"< {scale.with_unit(alone(reading.limit, scale, 3))}"
    else:
        measured = scale.with_unit(pair(reading.value, reading.u, scale))
    expected, difference = ABSENT, ABSENT
    if result.predicted is not None and result.predicted_sd is not None:
        expected = scale.with_unit(pair(result.predicted, result.predicted_sd, scale))
        if reading.value is not None and reading.u is not None:
            apart = math.hypot(reading.u, result.predicted_sd)
            difference = f"{(reading.value - result.predicted) / apart:+.1f}".replace("-", "−") if apart > 0 else ABSENT
    return (
        kind.words,
        ABSENT if reading.delay is None else delay.with_unit(alone(reading.delay, delay)),
        measured,
        expected,
        difference,
        probability(result.p_stray),
        VERDICTS.get(result.verdict, result.verdict),
        str(reading.place),
    )


def energies(drawings: Sequence[Drawing]) -> Section:
    """Return the energy ratio against the order of firing."""
    words = Statement("Energy ratio: energy that a shot's readings show over the logged one. A drift or a warm-up shows as a slope, a changed window or mirror as a step.")
    return Section("energies", "Logged energies", (words, *drawings))


def levels(close_out: CloseOut) -> Section:
    """Return one line a level: the shots in the fit at one nominal energy."""
    groups: dict[str, list[ShotResult]] = {}
    for result in close_out.shots:
        if result.verdict in ("kept", "stray"):
            groups.setdefault(result.shot.level or "(no level)", []).append(result)
    if not groups:
        return Section("levels", "Levels", (Statement("No shot to sum up."),))
    every = [result for group in groups.values() for result in group]
    energy = scale_for("J", [result.shot.metered_energy for result in every])
    incident = scale_for("J/m2", [result.incident_fluence.median for result in every])
    absorbed = scale_for("J/m2", [result.absorbed_fluence.median for result in every])
    columns = (
        Column("Level", "wide"),
        Column("Shots", "number"),
        Column(energy.heading("Logged energy"), "number"),
        Column(incident.heading("Incident fluence"), "number"),
        Column(absorbed.heading("Absorbed fluence"), "number"),
        Column("Spread of the shots", "number"),
    )
    rows = []
    for level, group in groups.items():
        size = len(group)
        logged = sum(result.shot.metered_energy for result in group) / size
        first = sum(result.incident_fluence.mean for result in group) / size
        first_sd = sum(result.incident_fluence.sd for result in group) / size
        second = sum(result.absorbed_fluence.mean for result in group) / size
        second_sd = sum(result.absorbed_fluence.sd for result in group) / size
        spread = math.sqrt(sum((result.absorbed_fluence.mean - second) ** 2 for result in group) / (size - 1)) if size > 1 else math.nan
        cells = (alone(logged, energy), pair(first, first_sd, incident), pair(second, second_sd, absorbed))
        rows.append((level, str(size), *cells, f"{alone(100 * spread / second, digits=2)} %" if size > 1 and second > 0 else ABSENT))
    note = Statement(
        "Means over the shots of a level, without misread and set-aside ones. ± is the mean standard uncertainty of a single shot: its largest part is "
        "common to all shots and does not average out. Spread: relative standard deviation of the shots' absorbed fluences.",
        "quiet",
    )
    return Section("levels", "Levels", (Table("One line a level", columns, tuple(rows)), note))


def fluences(close_out: CloseOut) -> Section:
    """Return the fluences of all shots in the order of firing, in kJ/m² and J/cm²."""
    energy = scale_for("J", [result.shot.metered_energy for result in close_out.shots])
    fluence = scale_for("J/m2", [result.absorbed_fluence.median for result in close_out.shots])
    columns = (
        Column("Shot", "wide"),
        Column("Level"),
        Column(energy.heading("Logged"), "number"),
        Column("N", "number"),
        Column(fluence.heading("Incident"), "number"),
        Column(fluence.heading("Absorbed"), "number"),
        Column(fluence.heading("Absorbed, 95 %"), "number"),
        Column(PER_CM2.heading("Absorbed"), "number"),
        Column("Energy ratio", "number"),
        Column("Verdict"),
    )
    rows = [
        (
            result.shot.name,
            result.shot.level or ABSENT,
            alone(result.shot.metered_energy, energy),
            str(result.shot.pulses),
            pair(result.incident_fluence.mean, result.incident_fluence.sd, fluence),
            pair(result.absorbed_fluence.mean, result.absorbed_fluence.sd, fluence),
            interval(result.absorbed_fluence, fluence),
            pair(result.absorbed_fluence.mean, result.absorbed_fluence.sd, PER_CM2),
            pair(result.energy_ratio, result.energy_ratio_sd, Scale("", 1.0)),
            VERDICTS.get(result.verdict, result.verdict),
        )
        for result in close_out.shots
    ]
    flagged = frozenset(i for i, result in enumerate(close_out.shots) if result.verdict != "kept")
    note = Statement(
        "Peak values on the axis of the beam at the target, mean ± one standard uncertainty. N: pulses at one place. A misread shot's "
        "fluences follow from its readings, a set-aside one's from its log alone.",
        "quiet",
    )
    return Section("fluences", "Fluences of all shots", (note, Table("Fluences of all shots", columns, tuple(rows), flagged)))


def flagged_readings(close_out: CloseOut) -> Section:
    """Return stray readings, those that a person decided on, and how many lie below a limit."""
    shots_aside = {result.shot.name for result in close_out.shots if result.verdict == "set-aside"}
    listed = [
        result
        for result in close_out.readings
        if result.verdict == "stray" or result.reading.kept is not None or (result.verdict == "set-aside" and result.reading.shot not in shots_aside)
    ]
    blocks: list[Block] = [readings_table("Stray readings and those that a person decided on", listed, with_shot=True)] if listed else []
    reasons = [f"{result.reading.place}: set aside: {result.reading.set_aside}" for result in listed if result.reading.set_aside is not None]
    reasons += [f"{result.reading.place}: kept on a person's word: {result.reading.kept}" for result in listed if result.reading.kept is not None]
    if reasons:
        blocks.append(Listing(tuple(reasons)))
    if not listed:
        blocks.append(Statement("No reading is stray, and nobody set a single one aside."))
    below: dict[str, int] = {}
    for result in close_out.readings:
        if result.verdict == "below-limit":
            below[result.reading.kind] = below.get(result.reading.kind, 0) + 1
    if below:
        words = ", ".join(f"{KINDS[kind].words} {number}" for kind, number in below.items())
        blocks.append(Statement(f"Below the detection limit, and used as such: {words}. results.xlsx and readings.csv list every reading."))
    return Section("flagged-readings", "Flagged readings", tuple(blocks))


def budget(close_out: CloseOut) -> Section:
    """Return where the variance of each answer comes from."""
    if not close_out.budget:
        return Section("budget", "Uncertainty budget", (Statement("No budget: no answer has a spread."),))
    sources: dict[str, float] = {}
    for parts in close_out.budget.values():
        for part in parts:
            sources[part.source] = max(sources.get(part.source, 0.0), part.share)
    ordered = sorted(sources, key=lambda source: -sources[source])
    columns = (Column("Answer", "wide"), Column("Standard uncertainty", "number"), Column("Source"), Column("Share of the variance", "number"))
    known = {result.entry.name: result for result in close_out.inputs}
    rows = []
    for name, parts in close_out.budget.items():
        by_source = {part.source: part.share for part in parts}
        uncertainty = ABSENT
        if name in known:
            scale = scale_for(known[name].entry.unit, [known[name].summary.median], name)
            uncertainty = scale.with_unit(alone(known[name].summary.sd, scale, 2))
        first = True
        for source in ordered:
            if by_source.get(source, 0.0) >= 0.005:
                words = "spread of the readings" if source == "readings" else f"prior of {source}"
                rows.append((name if first else "", uncertainty if first else "", words, share(by_source[source])))
                first = False
    note = Statement(
        "Share of an answer's variance that goes with what was known of each input before; the rest is the spread of the readings. "
        "Shares below half a per cent are left out here and stand in results.json. Inputs are correlated after the fit: "
        "inputs.toml holds the correlations.",
        "quiet",
    )
    return Section("budget", "Uncertainty budget", (Table("Uncertainty budget", columns, tuple(rows)), note))


def warnings(close_out: CloseOut) -> Section:
    """Return limits of validity that were passed or could not be checked, and ± that went nowhere."""
    columns = (Column("Where"), Column("What", "wide"), Column("Value", "number"), Column("Limit", "number"), Column("Advice", "wide"))
    rows = []
    for item in close_out.warnings:
        scale = scale_for(item.unit or "1", [item.value, item.limit])
        value, limit = (ABSENT if number is None else scale.with_unit(alone(number, scale, 3)) for number in (item.value, item.limit))
        rows.append((item.where, item.what, value, limit, item.advice))
    blocks: list[Block] = [Table("Warnings", columns, tuple(rows))] if rows else [Statement("None.")]
    unused = close_out.gathered.campaign.unused_uncertainties
    if unused:
        blocks.append(Statement(f"Stated with a ± that is not propagated, as it is no input: {', '.join(unused)}."))
    return Section("warnings", "Warnings", tuple(blocks))


def could_not_tell(close_out: CloseOut) -> Section:
    """Return what these data do not know."""
    uninformed = [
        result.entry.name for result in close_out.inputs if result.informed is not None and result.informed < 0.05 and not result.entry.derived
    ]
    blocks: list[Block] = [Listing(close_out.could_not_tell)] if close_out.could_not_tell else []
    if uninformed:
        words = f"{count(len(uninformed), 'input')} stayed where the prior put them (informed below 5 %): {', '.join(uninformed)}."
        blocks.append(Statement(words))
    return Section("could-not-tell", "What the data could not tell", tuple(blocks) or (Statement("Every input was informed by the readings."),))

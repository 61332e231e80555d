"""The sections that go shot by shot: flagged ones with their evidence, levels, fluences, flagged readings."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence

from reconcile.campaign.kinds import KINDS
from reconcile.inference.outcome import CloseOut, ReadingResult, ShotResult
from reconcile.report.blocks import Block, Column, Drawing, Heading, Listing, Section, Statement, Table
from reconcile.report.lines import ABSENT, Scale, alone, interval, pair, probability, scale_for

VERDICTS = {"set-aside": "set aside", "below-limit": "below the limit", "information": "for information"}
PER_CM2 = Scale("J/cm²", 1e4)


def flagged_shots(close_out: CloseOut) -> Section:
    """Return every flagged shot with its readings, and what else than the meter it may mean."""
    readings: dict[str, list[ReadingResult]] = {}
    for result in close_out.readings:
        if result.reading.shot is not None:
            readings.setdefault(result.reading.shot, []).append(result)
    blocks: list[Block] = []
    for shot in close_out.shots:
        if shot.verdict in ("misread", "stray") or shot.shot.kept is not None:
            blocks += _flagged_shot(shot, readings.get(shot.shot.name, []))
    aside = [shot for shot in close_out.shots if shot.verdict == "set-aside"]
    if aside:
        blocks += _set_aside(aside, {name: len(found) for name, found in readings.items()})
    if not blocks:
        none = Statement("None: every shot was kept, and nobody had to vouch for one.")
        return Section("flagged-shots", "Flagged shots", (none,))
    caution = Statement(
        "An energy ratio far from 1 says that the readings of a shot show another energy than was logged. Lost "
        "delivery (dirt, a left-over bubble, a clipped beam) cannot be told from a misread meter."
    )
    return Section("flagged-shots", "Flagged shots", (caution, *blocks))


def _set_aside(aside: Sequence[ShotResult], readings: Mapping[str, int]) -> Iterable[Block]:
    energy = scale_for("J", [result.shot.metered_energy for result in aside])
    columns = (
        Column("Shot"),
        Column(energy.heading("Logged"), "number"),
        Column("Readings", "number"),
        Column("Why", "wide"),
        Column("In the log", "text"),
    )
    rows = []
    for result in aside:
        shot = result.shot
        reasons = list(result.reasons)
        if shot.set_aside is not None and not any(shot.set_aside in reason for reason in reasons):
            reasons.insert(0, shot.set_aside)
        logged = alone(shot.metered_energy, energy)
        rows.append((shot.name, logged, str(readings.get(shot.name, 0)), "; ".join(reasons), str(shot.place)))
    yield Heading("Set aside by a person")
    yield Statement("These shots and their readings are not in the fit; their fluences follow from the log alone.")
    yield Table("Shots set aside", columns, tuple(rows))


_SHOT_WORDS = {
    "misread": "misread energy",
    "stray": "a stray reading",
    "kept": "kept on a person's word",
}


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
    flagged = (
        frozenset(i for i, result in enumerate(readings) if result.verdict == "stray") if not with_shot else frozenset()
    )
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
    words = Statement(
        "Energy ratio: energy that a shot's readings show over the logged one. A drift or a warm-up shows as "
        "a slope, a changed window or mirror as a step."
    )
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
        spread = (
            math.sqrt(sum((result.absorbed_fluence.mean - second) ** 2 for result in group) / (size - 1))
            if size > 1
            else math.nan
        )
        cells = (alone(logged, energy), pair(first, first_sd, incident), pair(second, second_sd, absorbed))
        rows.append(
            (
                level,
                str(size),
                *cells,
                f"{alone(100 * spread / second, digits=2)} %" if size > 1 and second > 0 else ABSENT,
            )
        )
    note = Statement(
        "Means over the shots of a level, without misread and set-aside ones. ± is the mean standard uncertainty of a "
        "single shot: its largest part is common to all shots and does not average out. Spread: relative standard "
        "deviation of the shots' absorbed fluences.",
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
        "Peak values on the axis of the beam at the target, mean ± one standard uncertainty. N: pulses at "
        "one place. A misread shot's "
        "fluences follow from its readings, a set-aside one's from its log alone.",
        "quiet",
    )
    return Section(
        "fluences", "Fluences of all shots", (note, Table("Fluences of all shots", columns, tuple(rows), flagged))
    )


def flagged_readings(close_out: CloseOut) -> Section:
    """Return stray readings, those that a person decided on, and how many lie below a limit."""
    shots_aside = {result.shot.name for result in close_out.shots if result.verdict == "set-aside"}
    listed = [
        result
        for result in close_out.readings
        if result.verdict == "stray"
        or result.reading.kept is not None
        or (result.verdict == "set-aside" and result.reading.shot not in shots_aside)
    ]
    blocks: list[Block] = (
        [readings_table("Stray readings and those that a person decided on", listed, with_shot=True)] if listed else []
    )
    reasons = [
        f"{result.reading.place}: set aside: {result.reading.set_aside}"
        for result in listed
        if result.reading.set_aside is not None
    ]
    reasons += [
        f"{result.reading.place}: kept on a person's word: {result.reading.kept}"
        for result in listed
        if result.reading.kept is not None
    ]
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
        blocks.append(
            Statement(
                f"Below the detection limit, and used as such: {words}. results.xlsx and readings.csv list "
                "every reading."
            )
        )
    return Section("flagged-readings", "Flagged readings", tuple(blocks))

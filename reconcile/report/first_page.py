"""The first page: what was measured, the answer, whether it can be trusted, what it leans on."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable

from reconcile.campaign.kinds import KINDS
from reconcile.inference.outcome import CloseOut, Share
from reconcile.report.blocks import Block, Column, Section, Statement, Table
from reconcile.report.lines import alone, count, estimate, interval, scale_for, scale_of, share, skewed

# What the answer is, in the words of a reader who has not seen the inputs' names.
ANSWERS = {
    "absorbed_fraction": "Absorbed fraction, at 10 kJ/m² incident fluence",
    "coupling": "Coupling: absorbed energy over true energy at the meter",
    "coupling_over_threshold": "Coupling over threshold fluence",
    "absorbed_fluence_per_energy": "Peak absorbed fluence per logged energy",
    "incident_fluence_per_energy": "Peak incident fluence per logged energy",
}

# A prior that holds less of the variance than this is not worth a measurement for its own sake.
LEAST_WORTH_NAMING = 0.05


def first_page(close_out: CloseOut) -> Section:
    """Return the section that answers at one glance."""
    blocks: list[Block] = [Statement(sentence) for sentence in _measured(close_out)]
    blocks += _answer(close_out)
    blocks += [_verdict_counts(close_out), Statement(_reading_counts(close_out))]
    blocks += [Statement(sentence) for sentence in _leaning(close_out)]
    return Section("result", "Result", tuple(blocks))


def _measured(close_out: CloseOut) -> Iterable[str]:
    gathered = close_out.gathered
    campaign, shots = gathered.campaign, gathered.shots
    thickness = f", {campaign.target.thickness.text} thick" if campaign.target.thickness else ""
    path = f", {campaign.liquid.path.text} of it along the beam" if campaign.liquid.path else ""
    beam = campaign.beam
    yield (
        f"What was measured: {campaign.target.material}{thickness} under {campaign.liquid.material}{path}; "
        "laser pulses of "
        f"{beam.wavelength.text}, {beam.pulse_duration.text}, spot radius {beam.spot_radius.text} (1/e² "
        f"intensity), delivery {beam.delivery.text}."
    )
    if not shots:
        return
    energies = [shot.metered_energy for shot in shots]
    scale = scale_for("J", energies)
    pulses = sorted({shot.pulses for shot in shots})
    places = count(pulses[0], "pulse") if len(pulses) == 1 else f"{pulses[0]} to {pulses[-1]} pulses"
    range_words = alone(min(energies), scale, 3)
    if max(energies) > min(energies):
        range_words += f" to {alone(max(energies), scale, 3)}"
    by_kind = Counter(result.reading.kind for result in close_out.readings)
    kinds = ", ".join(f"{KINDS[kind].words} ({by_kind[kind]})" for kind in KINDS if by_kind[kind])
    yield (
        f"{count(len(shots), 'shot')}, {scale.with_unit(range_words)} logged energy a pulse, "
        f"{places} at a place. "
        f"Readings: {kinds or 'none'}."
    )


def _answer(close_out: CloseOut) -> Iterable[Block]:
    rows = []
    known = {result.entry.name: result for result in close_out.inputs}
    any_skewed = False
    for name, words in ANSWERS.items():
        if name not in known:
            continue
        summary = known[name].summary
        scale = scale_of(summary, known[name].entry.unit)
        any_skewed = any_skewed or skewed(summary)
        rows.append((words, estimate(summary, scale), interval(summary, scale), scale.label or "1"))
    columns = (Column("Quantity", "wide"), Column("Value", "number"), Column("95 % interval", "number"), Column("Unit"))
    yield Table("The answer", columns, tuple(rows), prominent=True)
    skewed_words = (
        " Where the distribution is skewed, its median with the 68 % interval in brackets." if any_skewed else ""
    )
    yield Statement(f"Value: mean ± one standard uncertainty (k = 1).{skewed_words} {_range(close_out)}", "quiet")


def _range(close_out: CloseOut) -> str:
    fitted = [result for result in close_out.shots if result.verdict != "set-aside"]
    if not fitted:
        return "No shot is in the fit."
    words = []
    for name, values in (
        ("incident", [result.incident_fluence.median for result in fitted]),
        ("absorbed", [result.absorbed_fluence.median for result in fitted]),
    ):
        scale = scale_for("J/m2", values)
        words.append(f"{scale.with_unit(f'{alone(min(values), scale, 2)} to {alone(max(values), scale, 2)}')} {name}")
    return f"The shots in the fit span {' and '.join(words)} fluence; outside this range the values are extrapolated."


def _verdict_counts(close_out: CloseOut) -> Table:
    found = Counter(result.verdict for result in close_out.shots)
    columns = (
        Column("Shots", "number"),
        Column("Kept", "number"),
        Column("Misread energy", "number"),
        Column("With a stray reading", "number"),
        Column("Set aside by a person", "number"),
    )
    row = [len(close_out.shots), *(found[verdict] for verdict in ("kept", "misread", "stray", "set-aside"))]
    return Table("Shots by verdict", columns, (tuple(str(number) for number in row),))


def _reading_counts(close_out: CloseOut) -> str:
    found = Counter(result.verdict for result in close_out.readings)
    parts = [
        f"{found['used']} used",
        f"{found['below-limit']} below the detection limit",
        f"{found['stray']} stray",
        f"{found['set-aside']} set aside",
        f"{found['information']} for information only",
    ]
    readings = count(len(close_out.readings), "reading")
    refused = count(len(close_out.gathered.refused), "entry", "entries")
    return f"{readings}: {', '.join(parts)}. {refused} refused on reading."


def _leaning(close_out: CloseOut) -> Iterable[str]:
    for name in ("absorbed_fraction", "absorbed_fluence_per_energy"):
        parts = sorted(close_out.budget.get(name, ()), key=lambda part: -part.share)
        if not parts:
            continue
        largest = ", ".join(_part(part) for part in parts[:4] if part.share >= 0.005)
        yield f"What the {name.replace('_', ' ')} leans on, by share of its variance: {largest}."
    priors = [
        part
        for part in close_out.budget.get("absorbed_fraction", ())
        if part.source not in ("readings", "absorbed_fraction")
    ]
    most = max(priors, key=lambda part: part.share, default=None)
    if most is not None and most.share >= LEAST_WORTH_NAMING:
        yield (
            f"A better value of {most.source} from elsewhere would narrow the absorbed fraction most "
            f"({share(most.share)} of its variance)."
        )


def _part(part: Share) -> str:
    source = "the spread of the readings" if part.source == "readings" else f"prior of {part.source}"
    return f"{source} {share(part.share)}"

"""The sections that say what the readings told as a whole: inputs, kinds, budget, and what they could not tell."""

from __future__ import annotations

from collections.abc import Sequence

from reconcile.campaign.kinds import KINDS
from reconcile.inference.outcome import CloseOut, InputResult
from reconcile.report.blocks import Block, Column, Drawing, Listing, Section, Statement, Table
from reconcile.report.lines import (
    ABSENT,
    alone,
    count,
    estimate,
    interval,
    pair,
    probability,
    scale_for,
    scale_of,
    share,
)

BELONGS = {"m": "material and liquid", "i": "instrument", "c": "this campaign", "-": "derived"}
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
            "Informed: 1 − (posterior standard deviation over prior standard deviation)². At 0 % the "
            "readings say nothing about an input and "
            "its prior stands; near 100 % the readings alone fix it. Values as on the first page.",
        ),
        Table(
            "Inputs before and after the fit",
            columns,
            tuple(_input_row(result) for result in close_out.inputs),
            flagged,
        ),
        *drawings,
        Table(
            "Where each prior comes from",
            stated,
            tuple(_prior_row(result) for result in close_out.inputs if result.prior is not None),
        ),
    ]
    overruled = [
        f"{result.entry.name}: [priors] goes before {result.overruled}."
        for result in close_out.inputs
        if result.overruled
    ]
    if overruled:
        blocks.append(Listing(tuple(overruled)))
    return Section("inputs", "Inputs", tuple(blocks))


def _input_row(result: InputResult) -> tuple[str, ...]:
    name, summary = result.entry.name, result.summary
    scale = scale_of(summary, result.entry.unit, name)
    prior = ABSENT if result.prior is None else pair(result.prior_mean, result.prior_sd, scale)
    posterior = "fixed" if result.fixed else estimate(summary, scale)
    return (
        name,
        result.entry.meaning,
        scale.label or "1",
        prior,
        posterior,
        interval(summary, scale),
        share(result.informed),
    )


def _prior_row(result: InputResult) -> tuple[str, ...]:
    assert result.prior is not None
    place = "the package's default" if result.prior.place is None else str(result.prior.place)
    if result.prior.place is None and "(" not in result.prior.text.partition(" (k")[0]:
        place = "the manifest's instrument"  # a quantity with its ±, not a family of distributions
    return (result.entry.name, result.prior.text, place, BELONGS[result.entry.belongs_to])


def kinds(close_out: CloseOut, drawings: Sequence[Drawing]) -> Section:
    """Return whether each kind agrees with what the others predict, and the figures of the readings."""
    columns = (
        Column("Kind"),
        Column("Readings", "number"),
        Column("p", "number"),
        Column("With the others"),
        Column("In words", "wide"),
    )
    rows = [
        (
            KINDS[result.kind].words,
            str(result.n),
            probability(result.p_value),
            KINDS_WORDS[result.agrees],
            result.sentence,
        )
        for result in close_out.kinds
    ]
    flagged = frozenset(i for i, result in enumerate(close_out.kinds) if result.agrees is False)
    blocks: list[Block] = [
        Statement(
            "Each kind is compared with what the other kinds predict for it. A kind contradicts where p is "
            "below 0.01 over the number of kinds "
            "tested: chance alone would rarely bring such a difference."
        ),
        Table("Do the kinds agree?", columns, tuple(rows), flagged) if rows else Statement("No kind was fitted."),
        *drawings,
    ]
    return Section("kinds", "Kinds of reading", tuple(blocks))


def strained(close_out: CloseOut) -> Section:
    """Return the inputs whose posterior mean lies where their prior holds next to nothing."""
    if not close_out.strained:
        return Section(
            "strained",
            "Strained inputs",
            (Statement("None: no input was pulled to where its prior holds less than 0.3 %."),),
        )
    columns = (Column("Input"), Column("Prior beyond it", "number"), Column("In words", "wide"))
    rows = tuple(
        (item.input, f"{alone(100 * item.prior_tail, digits=2)} %", item.sentence) for item in close_out.strained
    )
    words = Statement(
        (
            "The readings pull these inputs to where their priors hold less than 0.3 %. Check the instrument or "
            "the stated number."
        ),
        "alert",
    )
    return Section("strained", "Strained inputs", (words, Table("Strained inputs", columns, rows)))


def budget(close_out: CloseOut) -> Section:
    """Return where the variance of each answer comes from."""
    if not close_out.budget:
        return Section("budget", "Uncertainty budget", (Statement("No budget: no answer has a spread."),))
    sources: dict[str, float] = {}
    for parts in close_out.budget.values():
        for part in parts:
            sources[part.source] = max(sources.get(part.source, 0.0), part.share)
    ordered = sorted(sources, key=lambda source: -sources[source])
    columns = (
        Column("Answer", "wide"),
        Column("Standard uncertainty", "number"),
        Column("Source"),
        Column("Share of the variance", "number"),
    )
    known = {result.entry.name: result for result in close_out.inputs}
    rows = []
    for name, parts in close_out.budget.items():
        by_source = {part.source: part.share for part in parts}
        uncertainty = ABSENT
        if name in known:
            scale = scale_of(known[name].summary, known[name].entry.unit, name)
            uncertainty = scale.with_unit(alone(known[name].summary.sd, scale, 2))
        first = True
        for source in ordered:
            if by_source.get(source, 0.0) >= 0.005:
                words = "spread of the readings" if source == "readings" else f"prior of {source}"
                rows.append((name if first else "", uncertainty if first else "", words, share(by_source[source])))
                first = False
    note = Statement(
        "Share of an answer's variance that goes with what was known of each input before; the rest is the "
        "spread of the readings. "
        "Shares below half a per cent are left out here and stand in results.json. Inputs are correlated "
        "after the fit: "
        "inputs.toml holds the correlations.",
        "quiet",
    )
    return Section("budget", "Uncertainty budget", (Table("Uncertainty budget", columns, tuple(rows)), note))


def warnings(close_out: CloseOut) -> Section:
    """Return limits of validity that were passed or could not be checked, and ± that went nowhere."""
    columns = (
        Column("Where"),
        Column("What", "wide"),
        Column("Value", "number"),
        Column("Limit", "number"),
        Column("Advice", "wide"),
    )
    rows = []
    for item in close_out.warnings:
        scale = scale_for(item.unit or "1", [item.value, item.limit])
        value, limit = (
            ABSENT if number is None else scale.with_unit(alone(number, scale, 3))
            for number in (item.value, item.limit)
        )
        rows.append((item.where, item.what, value, limit, item.advice))
    blocks: list[Block] = [Table("Warnings", columns, tuple(rows))] if rows else [Statement("None.")]
    unused = close_out.gathered.campaign.unused_uncertainties
    if unused:
        blocks.append(Statement(f"Stated with a ± that is not propagated, as it is no input: {', '.join(unused)}."))
    return Section("warnings", "Warnings", tuple(blocks))


def could_not_tell(close_out: CloseOut) -> Section:
    """Return what these data do not know."""
    uninformed = [
        result.entry.name
        for result in close_out.inputs
        if result.informed is not None and result.informed < 0.05 and not result.entry.derived
    ]
    blocks: list[Block] = [Listing(close_out.could_not_tell)] if close_out.could_not_tell else []
    if uninformed:
        words = f"{count(len(uninformed), 'input')} stayed where the prior put them (informed below 5 %): {', '.join(uninformed)}."
        blocks.append(Statement(words))
    return Section(
        "could-not-tell",
        "What the data could not tell",
        tuple(blocks) or (Statement("Every input was informed by the readings."),),
    )

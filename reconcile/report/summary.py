"""What the command line prints: the answer of a close-out, or what was read, in a few lines."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable
from pathlib import Path

from reconcile.campaign.kinds import KINDS
from reconcile.campaign.readings import Gathered
from reconcile.campaign.refusal import Refused
from reconcile.inference.outcome import CloseOut
from reconcile.report import lines

# What the laboratory takes home, in the order of reading; derived ones may be missing where nothing speaks of them.
ANSWERS = (
    "absorbed_fraction",
    "absorbed_fluence_per_energy",
    "coupling",
    "coupling_over_threshold",
    "threshold_fluence",
    "heated_depth",
)
MOST_NAMED = 12  # shots or refusals named one by one; the report has all


def close_out_lines(close_out: CloseOut, folder: Path, message: str) -> list[str]:
    """Return the answer with its uncertainty, the status and its reasons, the shots by verdict, and where the report is."""
    campaign = close_out.gathered.campaign
    text = [lines.plain(campaign.title or campaign.name), f"status: {close_out.status}"]
    text += [f"  because {lines.plain(reason)}" for reason in close_out.status_reasons]
    text += ["", *_answers(close_out), "", *_shots(close_out), *_readings(close_out)]
    text += _refused(close_out.gathered.refused)
    text += [f"note: {lines.plain(sentence)}" for sentence in close_out.could_not_tell]
    return [*text, "", *([message] if message else []), f"report: {(folder / 'report.html').as_posix()}"]


def _answers(close_out: CloseOut) -> list[str]:
    results = {result.entry.name: result for result in close_out.inputs}
    rows = []
    for name in ANSWERS:
        if name not in results:
            continue
        summary = results[name].summary
        scale = lines.scale_for(results[name].entry.unit, [summary.median], name)
        value, interval = lines.estimate(summary, scale), lines.interval(summary, scale)
        rows.append((name.replace("_", " "), scale.with_unit(value), scale.with_unit(interval)))
    if not rows:
        return []
    names, values = (max(len(row[column]) for row in rows) for column in (0, 1))
    return [f"  {name:<{names}}  {value:<{values}}  95 %: {interval}" for name, value, interval in rows]


def _shots(close_out: CloseOut) -> list[str]:
    counted: Counter[str] = Counter(shot.verdict for shot in close_out.shots)
    words = {
        "kept": "kept",
        "misread": "with a misread energy",
        "stray": "with a stray reading",
        "set-aside": "set aside",
    }
    parts = [f"{counted[verdict]} {word}" for verdict, word in words.items() if counted[verdict]]
    text = [f"{lines.count(len(close_out.shots), 'shot')}: {', '.join(parts)}"]
    doubtful = [shot for shot in close_out.shots if shot.verdict in ("misread", "stray")]
    for result in doubtful[:MOST_NAMED]:
        text.append(f"  {lines.plain(result.shot.name)}: {result.verdict}")
        text += [f"    {lines.plain(reason)}" for reason in result.reasons]
    if len(doubtful) > MOST_NAMED:
        text.append(f"  and {len(doubtful) - MOST_NAMED} more")
    return text


def _readings(close_out: CloseOut) -> list[str]:
    counted = Counter(result.verdict for result in close_out.readings)
    parts = ", ".join(f"{number} {verdict}" for verdict, number in sorted(counted.items()))
    return [f"{lines.count(len(close_out.readings), 'reading')}: {parts}"] if parts else []


def _refused(refused: Iterable[Refused]) -> list[str]:
    left_out = list(refused)
    text = [f"  {lines.plain(entry.source)}: {lines.plain(entry.reason)}" for entry in left_out[:MOST_NAMED]]
    if len(left_out) > MOST_NAMED:
        text.append(f"  and {len(left_out) - MOST_NAMED} more: see refused.csv")
    return [f"{len(left_out)} refused:", *text] if left_out else []


def gathered_lines(gathered: Gathered, folder: Path) -> list[str]:
    """Return how many shots and readings were read, by kind; what was refused and why; what was noted; where it stands."""
    campaign = gathered.campaign
    text = [lines.plain(campaign.title or campaign.name), lines.count(len(gathered.shots), "shot")]
    counted = Counter(reading.kind for reading in gathered.readings)
    below = Counter(reading.kind for reading in gathered.readings if reading.limit is not None)
    for kind in KINDS:
        if counted[kind]:
            limit = f", {below[kind]} below the limit" if below[kind] else ""
            text.append(f"  {KINDS[kind].words}: {lines.count(counted[kind], 'reading')}{limit}")
    if gathered.overlays:
        text.append(f"  {lines.count(len(gathered.overlays), 'drawing')} of what was found, in overlays/")
    text += [f"  refused {lines.plain(entry.source)}: {lines.plain(entry.reason)}" for entry in gathered.refused]
    text += [f"  note {lines.plain(entry.source)}: {lines.plain(entry.note)}" for entry in gathered.notes]
    if gathered.unasked:
        text.append(f"  no table asks for {', '.join(lines.plain(name) for name in gathered.unasked[:MOST_NAMED])}")
    return [*text, f"written: {folder.as_posix()}"]

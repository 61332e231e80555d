"""The report as content: sections of statements, tables and figures from one close-out, whatever they are rendered to."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import datetime

from reconcile.inference.outcome import CloseOut
from reconcile.report import findings, record, shots
from reconcile.report.blocks import Drawing, Report
from reconcile.report.first_page import first_page


def build(close_out: CloseOut, drawings: Sequence[Drawing], results_sha256: str, now: datetime) -> Report:
    """Return the whole report; its number is the campaign's name and the first eight digits of the checksum of results.json."""
    campaign = close_out.gathered.campaign

    def group(name: str) -> tuple[Drawing, ...]:
        return tuple(drawing for drawing in drawings if drawing.group == name)

    sections = (
        first_page(close_out),
        findings.inputs(close_out, group("inputs")),
        findings.kinds(close_out, group("kinds")),
        findings.strained(close_out),
        shots.flagged_shots(close_out),
        shots.energies(group("energies")),
        shots.levels(close_out),
        shots.flagged_readings(close_out),
        findings.budget(close_out),
        findings.warnings(close_out),
        findings.could_not_tell(close_out),
        record.refused(close_out),
        record.decisions(close_out),
        record.instruments(close_out),
        record.method(close_out),
        shots.fluences(close_out),
        record.provenance(close_out, results_sha256),
        record.cautions(),
        record.not_said(),
        record.signatures(),
    )
    final = close_out.status == "final"
    return Report(
        number=f"{campaign.name}-{results_sha256[:8]}",
        title=campaign.title or campaign.name,
        lines=tuple(_who(close_out, now)),
        status=close_out.status,
        status_words="Final." if final else "Provisional: finished, but not to be signed yet.",
        status_reasons=close_out.status_reasons,
        sections=sections,
        issued=now.date().isoformat(),
    )


def _who(close_out: CloseOut, now: datetime) -> list[str]:
    campaign = close_out.gathered.campaign
    lines = [f"Close-out of campaign {campaign.name}"]
    lines += [
        f"{name.capitalize()}: {campaign.about[name]}"
        for name in ("laboratory", "operator", "place")
        if campaign.about.get(name)
    ]
    if campaign.date:
        lines.append(f"Measured: {campaign.date}")
    lines.append(f"Issued: {now.date().isoformat()}")
    if campaign.about.get("note"):
        lines.append(f"Note: {campaign.about['note']}")
    return lines

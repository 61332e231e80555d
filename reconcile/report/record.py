"""The sections that an auditor reads: what came in, who decided what, with which instruments, and what the report does not say."""

from __future__ import annotations

import platform
from collections.abc import Iterable, Mapping
from importlib.metadata import PackageNotFoundError, version

from reconcile import __version__
from reconcile.campaign.campaign import Campaign, Quantity
from reconcile.inference.outcome import CloseOut
from reconcile.report.blocks import Blanks, Block, Column, Listing, Section, Statement, Table
from reconcile.report.lines import ABSENT, alone, count

LIBRARIES = ("numpy", "scipy", "emcee", "pandas", "openpyxl", "scikit-image", "matplotlib", "h5py")


def refused(close_out: CloseOut) -> Section:
    """Return what was left out on reading, and what was noted."""
    gathered = close_out.gathered
    blocks: list[Block] = []
    if gathered.refused:
        columns = (Column("Source"), Column("Why it was refused", "wide"))
        blocks.append(Table("Refused", columns, tuple((item.source, item.reason) for item in gathered.refused)))
    else:
        blocks.append(Statement("Nothing was refused."))
    if gathered.notes:
        columns = (Column("Source"), Column("Note", "wide"))
        blocks.append(
            Table("Notes taken on reading", columns, tuple((item.source, item.note) for item in gathered.notes))
        )
    if gathered.unasked:
        blocks += [Statement("Files in the campaign folder that no table asked for:"), Listing(gathered.unasked)]
    else:
        blocks.append(Statement("Every file in the campaign folder was asked for by a table."))
    return Section("refused", "Refused files and notes", tuple(blocks))


def decisions(close_out: CloseOut) -> Section:
    """Return each decision of a person that holds, and the remarks in the log."""
    rows = [
        (
            item.shot or item.sample or ABSENT,
            item.kind or "all",
            item.source or "all",
            item.decision,
            item.reason,
            item.by,
            item.on,
        )
        for item in close_out.gathered.decisions
    ]
    columns = (
        Column("Shot or sample"),
        Column("Kind"),
        Column("Source"),
        Column("Decision"),
        Column("Reason", "wide"),
        Column("By"),
        Column("On"),
    )
    blocks: list[Block] = [
        Table("Decisions", columns, tuple(rows))
        if rows
        else Statement("No person decided anything about a shot or a reading.")
    ]
    remarks = [(shot.name, shot.note) for shot in close_out.gathered.shots if shot.note]
    if remarks:
        blocks.append(Table("Remarks in the log", (Column("Shot"), Column("Remark", "wide")), tuple(remarks)))
    return Section("decisions", "Decisions and remarks", tuple(blocks))


def instruments(close_out: CloseOut) -> Section:
    """Return the instruments with identity and certificate, and the conditions, as the manifest states them."""
    campaign = close_out.gathered.campaign
    columns = (Column("Of"), Column("Quantity"), Column("As stated", "wide"))
    tables = (Column("Table"), Column("Kind"), Column("File", "wide"), Column("Shared by its readings", "wide"))
    rows = tuple((of, name, text) for of, name, text in _stated(campaign))
    read = tuple(
        (
            table.name,
            table.kind,
            table.file or table.files or "a list",
            "; ".join(_shared(table.scale, table.pixel_pitch, table.about)) or ABSENT,
        )
        for table in campaign.tables
    )
    return Section(
        "instruments",
        "Instruments and conditions",
        (Table("As the manifest states", columns, rows), Table("Tables of readings", tables, read)),
    )


def _stated(campaign: Campaign) -> Iterable[tuple[str, str, str]]:
    beam, meter, probe = campaign.beam, campaign.meter, campaign.probe
    parts: list[tuple[str, str, Quantity | None]] = [
        ("surroundings", "ambient pressure", campaign.ambient_pressure),
        ("surroundings", "liquid temperature", campaign.liquid_temperature),
        ("target", "thickness", campaign.target.thickness),
        *(("target", name, value) for name, value in campaign.target.properties.items()),
        ("liquid", "path along the beam", campaign.liquid.path),
        ("liquid", "height to the free surface", campaign.liquid.height),
        ("liquid", "wall distance", campaign.liquid.wall_distance),
        *(("liquid", name, value) for name, value in campaign.liquid.properties.items()),
        ("beam", "wavelength", beam.wavelength),
        ("beam", "pulse duration (FWHM)", beam.pulse_duration),
        ("beam", "spot radius (1/e² intensity)", beam.spot_radius),
        ("beam", "delivery", beam.delivery),
        ("beam", "repetition rate", beam.repetition_rate),
        ("beam", "entry radius", beam.entry_radius),
        ("energy meter", "calibration", meter.calibration),
        ("energy meter", "shot jitter", meter.shot_jitter),
    ]
    if probe is not None:
        names = (
            "standoff",
            "angle",
            "aperture",
            "sensitivity",
            "sensitivity_uncertainty",
            "bandwidth",
            "trigger_offset",
        )
        parts += [("probe", name.replace("_", " "), getattr(probe, name)) for name in names]
    yield "target", "material", campaign.target.material
    yield "liquid", "material", campaign.liquid.material
    for of, name, value in parts:
        if value is not None:
            yield of, name, value.text
    yield from (("energy meter", name, text) for name, text in meter.about.items())
    if probe is not None:
        if probe.sensitivity_file is not None:
            yield "probe", "sensitivity file", str(probe.sensitivity_file.get("file", ""))
        yield from (("probe", name, text) for name, text in probe.about.items())


def _shared(scale: Quantity | None, pitch: Quantity | None, about: Mapping[str, str]) -> Iterable[str]:
    if scale is not None:
        yield f"scale {scale.text}"
    if pitch is not None:
        yield f"pixel pitch {pitch.text}"
    yield from (f"{name}: {text}" for name, text in about.items())


def method(close_out: CloseOut) -> Section:
    """Return how the numbers were found, in short."""
    sampling = close_out.sampling
    state = "reached" if sampling.converged else "did not reach"
    return Section(
        "method",
        "Method",
        (
            Statement(
                "A reduced model of ablation in liquids gives the expected value of every reading from the "
                "inputs and the shot's energy. Each shot has one deviation of its "
                "delivered energy from its log, common to all its readings and integrated out; a shot's "
                "logged energy may be misread and a single "
                "reading may be stray, each with a probability of its own (mixture of sound and stray "
                "readings: Hogg, Bovy and Lang 2010, "
                "arXiv:1008.4686). Readings below a detection limit enter as such. Numbers that readings "
                "share (calibrations, scales, pixel "
                "pitches) are inputs with priors. Uncertainties are stated as standard uncertainties (JCGM "
                "100:2008) and as probability intervals "
                "of the sampled distribution (JCGM 101:2008)."
            ),
            Statement(
                f"Sampling {state} its aim: {count(sampling.draws, 'draw')}, smallest effective sample size "
                f"{alone(sampling.min_ess, digits=3)} "
                f"(aimed at {sampling.target_ess}), largest R-hat {alone(sampling.max_rhat, digits=4)}, "
                f"{sampling.evaluations} evaluations in "
                f"{alone(sampling.seconds, digits=3)} s; largest error of the integration over a shot's "
                f"energy {alone(sampling.integral_error, digits=2)} nat."
            ),
        ),
    )


def cautions() -> Section:
    """Return the usual cautions; local rules and licensed practice go first."""
    return Section(
        "cautions",
        "Cautions",
        (
            Statement(
                "This report is no instruction for work. Local rules, the laboratory's own risk assessment, "
                "and licensed or appointed persons (laser safety officer, "
                "electrical safety, chemical safety) go before anything written here."
            ),
            Listing(
                (
                    (
                        "Pulsed lasers of this kind are class 4: direct and scattered light injures eyes and "
                        "skin and may start fires; liquid surfaces reflect."
                    ),
                    (
                        "Colloids and dried residues hold nanoparticles: keep them from air, skin and drains by "
                        "the local rules."
                    ),
                    (
                        "Laser pulses in closed liquid cells raise pressure and may burst windows; ablation in "
                        "organic liquids makes flammable gas."
                    ),
                    (
                        "Laser heads, pulse drivers and probe amplifiers may hold high voltage after they are "
                        "switched off."
                    ),
                )
            ),
        ),
    )


def not_said() -> Section:
    """Return what the report does not say."""
    return Section(
        "not-said",
        "What this report does not say",
        (
            Listing(
                (
                    (
                        "It holds only for the shots, the target, the liquid and the instruments named here, and "
                        "for the range of fluence on the first page."
                    ),
                    "It claims no conformity with a standard and no accreditation.",
                    (
                        "Peak fluences are those of a Gaussian beam of the stated radius at the surface; hot "
                        "spots and a changed beam are not seen."
                    ),
                    (
                        "Uncertainties are those of the inputs and readings as stated. An error that the "
                        "manifest does not state, and that pulls all kinds the same way, stays unseen."
                    ),
                    (
                        "The reduced model is a summary; where a warning above names a limit that was passed, "
                        "its numbers hold less than they seem to."
                    ),
                    "A flagged shot is a finding about that shot's numbers, not about its cause.",
                )
            ),
        ),
    )


def provenance(close_out: CloseOut, results_sha256: str) -> Section:
    """Return checksums, versions and seed."""
    columns = (Column("File read"), Column("SHA-256", "wide"))
    facts = [
        ("reconcile", __version__),
        ("Python", platform.python_version()),
        *((name, _version(name)) for name in LIBRARIES),
        ("seed", str(close_out.seed)),
        ("SHA-256 of results.json", results_sha256),
    ]
    blocks: list[Block] = [Table("Versions and seed", (Column("What"), Column("Is", "wide")), tuple(facts))]
    if close_out.gathered.files:
        blocks.append(
            Table("Files read", columns, tuple((file.path, file.sha256) for file in close_out.gathered.files))
        )
    blocks.append(
        Statement(
            (
                "checksums.sha256 beside this report lists every file of the close-out; `reconcile verify` "
                "recomputes them."
            ),
            "quiet",
        )
    )
    return Section("provenance", "Checksums, versions, seed", tuple(blocks))


def _version(name: str) -> str:
    try:
        return version(name)
    except PackageNotFoundError:
        return "not installed"


def signatures() -> Section:
    """Return room for names and signatures."""
    words = Statement("Copy in full only. A change after signing makes a new report with a number of its own.", "quiet")
    return Section(
        "signatures",
        "Names and signatures",
        (Blanks(("Carried out by", "Checked by", "Approved by")), words, Statement("End of the report.", "quiet")),
    )

"""campaign.toml → Campaign: every key known, every quantity in SI, every input with its ±."""

from __future__ import annotations

import re
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from reconcile.campaign.campaign import Beam, Campaign, EnergyMeter, Liquid, Prior, Probe, Quantity, Table, Target
from reconcile.campaign.document import Document, Section, described, refuse_open_questions
from reconcile.campaign.inputs import FAMILIES, INPUTS, describe
from reconcile.campaign.kinds import FITTED, KINDS, yields
from reconcile.campaign.manifest_tables import log_table, readings_tables
from reconcile.campaign.materials import PROPERTY_NAMES, optical_constants, properties_of_liquid, properties_of_target
from reconcile.campaign.patterns import relative_path
from reconcile.campaign.prior_text import parse_prior
from reconcile.campaign.quantity import shown
from reconcile.campaign.refusal import Refusal, nearest
from reconcile.campaign.schema import ABOUT, QUANTITIES, TEXTS, TOP, Key, questions

MANIFEST = "campaign.toml"
CONTRACT = 1

# What the probe must say for each kind that it reads.
_PROBE_NEEDS: dict[str, tuple[str, ...]] = {
    "pressure-integral": ("standoff", "sensitivity", "bandwidth"),
    "peak-pressure": ("standoff", "sensitivity", "bandwidth"),
    "arrival-time": ("standoff", "trigger_offset"),
}


def load(path: Path | str) -> Campaign:
    """Read a campaign's manifest.

    Parameters
    ----------
    path : the campaign folder, or its campaign.toml

    Returns
    -------
    Campaign
        Quantities in SI; materials' properties as stated, not as the package knows them.

    Raises
    ------
    Refusal
        The manifest is missing, no TOML, incomplete, or says what cannot be used.
    """
    file = Path(path)
    file = file / MANIFEST if file.is_dir() else file
    document = Document(file)
    unused: list[str] = []
    root = Section(document, "", document.content, unused)
    _check_contract(root)
    root.refuse_unknown(TOP)
    refuse_open_questions(document, questions())
    for name in ("campaign", "target", "liquid", "beam", "energy_meter", "shots"):
        root.require(name, f"the table [{name}]")
    log = log_table(root.section("shots"))
    tables = readings_tables(root, unused)
    head = _Reader(root.section("campaign"))
    campaign = Campaign(
        name=_campaign_name(head.section),
        folder=file.parent,
        target=_target(root.section("target")),
        liquid=_liquid(root.section("liquid")),
        beam=_beam(root.section("beam")),
        meter=_meter(root.section("energy_meter")),
        log=log,
        tables=tables,
        ambient_pressure=head.quantity("ambient_pressure") or Quantity(101325.0, None, "Pa", "101.325 kPa"),
        liquid_temperature=head.quantity("liquid_temperature") or Quantity(293.15, None, "K", "20 degC"),
        probe=_probe(root, tables),
        priors=_priors(root, tables),
        title=head.section.text("title", TEXTS["campaign"]["title"]),
        date=head.section.text("date", TEXTS["campaign"]["date"]),
        about=_campaign_about(root, head),
        unused_uncertainties=tuple(unused),
    )
    _check_together(campaign, root)
    return campaign


class _Reader:
    """A section read by the schema: unknown keys refused, quantities by name."""

    def __init__(self, section: Section, *more: str) -> None:
        self.section = section
        self.keys = QUANTITIES.get(section.path, {})
        about = ABOUT if section.path in {"beam", "energy_meter", "probe"} else {}
        section.refuse_unknown([*TEXTS.get(section.path, {}), *self.keys, *more, *about])

    def quantity(self, name: str) -> Quantity | None:
        return self.section.quantity(name, self.keys[name])

    def needed(self, name: str) -> Quantity:
        found = self.quantity(name)
        if found is None:  # its key is marked as required, so this is a mistake in the schema
            message = f"{name} is not required by the schema"
            raise AssertionError(message)
        return found

    def texts(self, names: Mapping[str, str]) -> dict[str, str]:
        found = {name: self.section.text(name, meaning) for name, meaning in names.items()}
        return {name: text for name, text in found.items() if text is not None}


def _check_contract(root: Section) -> None:
    found = root.require("contract", "the number of this format, 1")
    if found != CONTRACT or isinstance(found, (bool, float)):
        raise Refusal(
            root.place("contract"),
            found=f"contract = {described(found)}",
            expected=f"contract = {CONTRACT}",
            remedy="A higher number needs a newer version of reconcile.",
        )


def _campaign_name(section: Section) -> str:
    name = section.text("name", TEXTS["campaign"]["name"], required=True)
    if name is None or not re.fullmatch(r"[A-Za-z0-9_-]{1,80}", name):
        raise Refusal(
            section.place("name"),
            found=f"'{name}'",
            expected="letters without accents, digits, - and _, at most 80",
            remedy="Give the campaign a name of these; `title` holds any text.",
        )
    return name


def _campaign_about(root: Section, head: _Reader) -> dict[str, str]:
    texts = {key: meaning for key, meaning in TEXTS["campaign"].items() if key not in {"name", "title", "date"}}
    beam = {f"beam.{key}": text for key, text in _Reader(root.section("beam")).texts(ABOUT).items()}
    return head.texts(texts) | beam


def _properties(section: Section, table: str) -> dict[str, Quantity]:
    names = PROPERTY_NAMES["target" if table == "target" else "liquid"]
    found = {name: section.quantity(name, Key(f"the {table}'s {name}", unit)) for name, unit in names.items()}
    return {name: quantity for name, quantity in found.items() if quantity is not None}


def _target(section: Section) -> Target:
    reader = _Reader(section, *PROPERTY_NAMES["target"])
    material = section.text("material", TEXTS["target"]["material"], required=True) or ""
    return Target(material, reader.quantity("thickness"), _properties(section, "target"))


def _liquid(section: Section) -> Liquid:
    reader = _Reader(section, *PROPERTY_NAMES["liquid"])
    material = section.text("material", TEXTS["liquid"]["material"], required=True) or ""
    path = reader.quantity("path")
    return Liquid(
        material,
        path,
        reader.quantity("height") or path,
        reader.quantity("wall_distance"),
        _properties(section, "liquid"),
    )


# What no laboratory has: numbers beyond these are slips of a unit. [m], [m], [s]
_BELIEVABLE = {"wavelength": (1e-7, 2e-5), "spot_radius": (2e-7, 1e-2), "pulse_duration": (1e-15, 1e-6)}


def _beam(section: Section) -> Beam:
    reader = _Reader(section)
    beam = _read_beam(reader)
    for name, (least, most) in _BELIEVABLE.items():
        quantity: Quantity = getattr(beam, name)
        if not least <= quantity.value <= most:
            raise Refusal(
                section.place(name),
                found=f"'{quantity.text}'",
                expected=f"something from {shown(least, None, quantity.unit)} to {shown(most, None, quantity.unit)}",
                remedy="Correct the number or its unit.",
            )
    return beam


def _read_beam(reader: _Reader) -> Beam:
    return Beam(
        wavelength=reader.needed("wavelength"),
        pulse_duration=reader.needed("pulse_duration"),
        spot_radius=reader.needed("spot_radius"),
        delivery=reader.needed("delivery"),
        repetition_rate=reader.quantity("repetition_rate"),
        entry_radius=reader.quantity("entry_radius"),
    )


def _meter(section: Section) -> EnergyMeter:
    reader = _Reader(section)
    return EnergyMeter(reader.needed("calibration"), reader.quantity("shot_jitter"), reader.texts(ABOUT))


def _probe(root: Section, tables: tuple[Table, ...]) -> Probe | None:
    """Read [probe], and refuse one without what the kinds present need."""
    section = None
    probe = None
    if "probe" in root.content:
        section = root.section("probe")
        reader = _Reader(section, "sensitivity_file")
        probe = Probe(
            **{name: reader.quantity(name) for name in QUANTITIES["probe"]},
            sensitivity_file=_sensitivity_file(section),
            about=reader.texts(ABOUT),
        )
        _check_sensitivity(probe, section)
    for table in tables:
        for kind in yields(table.kind):
            for need in _PROBE_NEEDS.get(kind, ()):
                given = probe is not None and (
                    getattr(probe, need) is not None or (need == "sensitivity" and probe.sensitivity_file is not None)
                )
                if not given:
                    spec = QUANTITIES["probe"][need]
                    raise Refusal(
                        root.document.place(f"probe.{need}"),
                        found=f"no '{need}' in [probe]",
                        expected=f"{spec.meaning}, which the readings of {kind} need ([[readings]] table '{table.name}')",
                        remedy=f"Add it to [probe], or take the table at line {table.place.line} out.",
                    )
    return probe


def _check_sensitivity(probe: Probe, section: Section) -> None:
    if probe.sensitivity is not None and probe.sensitivity_file is not None:
        raise Refusal(
            section.place("sensitivity_file"),
            found="both sensitivity and sensitivity_file",
            expected="one of them",
            remedy="Keep the one that holds.",
        )
    if probe.sensitivity_file is not None and probe.sensitivity_uncertainty is None:
        raise Refusal(
            section.place("sensitivity_file"),
            found="sensitivity_file without sensitivity_uncertainty",
            expected='the relative standard uncertainty of its numbers, as in "10 %"',
            remedy="Add sensitivity_uncertainty.",
        )


def _sensitivity_file(section: Section) -> Mapping[str, Any] | None:
    if "sensitivity_file" not in section.content:
        return None
    entry = section.section("sensitivity_file")
    entry.refuse_unknown(("file", "sheet", "columns", "units", "decimal", "delimiter", "encoding"))
    file = entry.text("file", "the file of the probe's sensitivity", required=True) or ""
    columns = entry.words("columns", "a column's header")
    for name in ("frequency", "magnitude"):
        if name not in columns:
            raise Refusal(
                entry.place("columns"),
                found=f"no column '{name}'",
                expected="columns = { frequency = …, magnitude = …, phase = … }",
                remedy=f"Name the column that holds the {name}.",
            )
    return {**entry.content, "file": relative_path(file, entry.place("file")), "columns": columns}


def _priors(root: Section, tables: tuple[Table, ...]) -> dict[str, Prior]:
    if "priors" not in root.content:
        return {}
    section = root.section("priors")
    stated: dict[str, Any] = {}
    for name, entry in section.content.items():
        if isinstance(entry, dict):  # scatter.crater-depth = "…" without quotes is a table to TOML
            stated |= {f"{name}.{member}": text for member, text in entry.items()}
        else:
            stated[name] = entry
    priors = {}
    for name, text in stated.items():
        _check_input(name, section, tables)
        if not isinstance(text, (str, int, float)):
            raise Refusal(
                section.place(name),
                found=described(text),
                expected="a distribution in quotes",
                remedy="Write it as text.",
            )
        priors[name] = parse_prior(name, text, section.place(name))
    return priors


def _check_input(name: str, section: Section, tables: tuple[Table, ...]) -> None:
    """Refuse a prior on what is no input of this campaign, or follows from others."""
    family, dot, member = name.partition(".")
    names = {table.name for table in tables}
    members = {
        "scale": names,
        "pixel_pitch": {table.name for table in tables if table.pixel_pitch or "graticule" in table.options},
        "scatter": set(FITTED),
    }
    if dot and family in FAMILIES:
        if member in members[family]:
            return
        known = [f"{family}.{one}" for one in sorted(members[family])]
    else:
        known = [one for one, entry in INPUTS.items() if not entry.derived]
        if name in known:
            return
        known += [f"{one}.{each}" for one in FAMILIES for each in sorted(members[one])]
    if name in INPUTS and describe(name).derived:
        raise Refusal(
            section.place(name),
            found=f"a prior on '{name}', which is derived from other inputs",
            expected="a prior on one of the inputs that it follows from",
            remedy="Take it out; state the prior of those inputs.",
        )
    near = nearest(name, known)
    raise Refusal(
        section.place(name),
        found=f"a prior on the unknown input '{name}'",
        expected=f"one of {', '.join(known) or 'none (no table of that kind is here)'}",
        remedy=f"Write '{near}' if that is meant." if near else "Take it out.",
    )


def _check_together(campaign: Campaign, root: Section) -> None:
    """Refuse what each key alone does not show: a power without its rate, samples without a log of them, materials."""
    columns = campaign.log.columns
    if "power" in columns and campaign.beam.repetition_rate is None:
        raise Refusal(
            root.document.place("beam.repetition_rate"),
            found="a log of powers, but no repetition_rate in [beam]",
            expected="the rate that turns a power into the energy of one pulse",
            remedy='Add repetition_rate = "… kHz" to [beam].',
        )
    for table in campaign.tables:
        kinds = [KINDS[kind] for kind in yields(table.kind)]
        if kinds[0].target == "sample" and "sample" not in columns:
            raise Refusal(
                root.document.place("shots.columns"),
                found=f"no column 'sample' in the log, but readings of {table.kind} ('{table.name}')",
                expected="a column of the log that says which sample each shot went to",
                remedy='Add sample = "…" to the columns of [shots].',
            )
        if kinds[0].has_delay and table.kind in KINDS and not {"delay"} & {*table.columns, *columns}:
            raise Refusal(
                table.place,
                found=f"no column 'delay' for readings of {table.kind}",
                expected="the delay after the pulse, in this table or in the log",
                remedy='Add delay = "…" to its columns.',
            )
    properties_of_target(campaign)
    properties_of_liquid(campaign)
    if "absorbed_fraction" not in campaign.priors:
        optical_constants(campaign.target.material, campaign.beam.wavelength.value)

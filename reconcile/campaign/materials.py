"""What the package knows of metals and liquids, and what a manifest states in its place. SI.

The numbers stand in `materials.toml` and `melting.toml`, one row for each material and property, with its source.
"""

from __future__ import annotations

import math
import tomllib
from bisect import bisect_right
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from difflib import get_close_matches
from functools import cache
from importlib import resources
from typing import Any, Literal, NoReturn

from reconcile.campaign.campaign import Campaign, Quantity
from reconcile.campaign.refusal import Place, Refusal

Table = Literal["target", "liquid"]
Rows = Literal["target", "liquid", "melting"]

# What a manifest may state under [target] and [liquid], with the SI unit of each.
PROPERTY_NAMES: Mapping[Table, Mapping[str, str]] = {
    "target": {
        "density": "kg/m3",
        "sound_speed": "m/s",
        "hugoniot_slope": "1",
        "melt_density": "kg/m3",
    },
    "liquid": {
        "density": "kg/m3",
        "sound_speed": "m/s",
        "hugoniot_slope": "1",
        "nonlinearity": "1",
        "sound_absorption": "s2/m",
        "vapour_pressure": "Pa",
        "surface_tension": "N/m",
        "viscosity": "Pa s",
        "contact_density": "kg/m3",
        "contact_viscosity": "Pa s",
        "refractive_index": "1",
    },
}

# Inputs that depend so much on the metal that an unknown one has no default prior.
PRIORS_OF_METAL = (
    "absorbed_fraction",
    "heated_depth",
    "removal_energy_density",
    "melt_surface_tension",
    "melt_viscosity",
)

_HOT = 0.9  # of the critical temperature: where a superheated melt falls apart by itself (phase explosion)
_SHARE_TO_HOT = 1.0 / 3.0  # of the way, in the logarithm, from fully molten to there

# Gold's own default priors, to which those of other metals are scaled.
_GOLD_REMOVAL = 6e9  # [J/m³]
_GOLD_TENSION, _GOLD_VISCOSITY = 0.5, 3e-3  # [N/m], [Pa s] of the hot melt: 0.43 and 0.6 of the values at melting
_REMOVAL_SPREAD = {"gold": 40}  # [%] standard deviation of the logarithm
_SCALED_SPREAD = 50  # [%] of any other metal: gold's 40 % and 30 % for the scaling

_ALIKE = 0.7  # names less alike are another material, not a slip of the pen: zinc is not iron


@dataclass(frozen=True, slots=True)
class MetalProperties:
    """The target's properties that the reduced model needs."""

    density: float  # [kg/m³] solid, at rest
    sound_speed: float  # [m/s] bulk, intercept of the shock-velocity line
    hugoniot_slope: float  # [1]
    melt_density: float  # [kg/m³] of the hot liquid metal


@dataclass(frozen=True, slots=True)
class LiquidProperties:
    """The liquid's properties that the reduced model needs, at the campaign's temperature."""

    density: float  # [kg/m³]
    sound_speed: float  # [m/s]
    hugoniot_slope: float  # [1]
    nonlinearity: float  # [1] 1 + B/2A
    sound_absorption: float  # [s²/m] of the amplitude, over frequency squared
    vapour_pressure: float  # [Pa]
    surface_tension: float  # [N/m]
    viscosity: float  # [Pa s]
    contact_density: float  # [kg/m³] next to the hot metal
    contact_viscosity: float  # [Pa s] next to the hot metal
    refractive_index: float  # [1] at the beam's wavelength


@dataclass(frozen=True, slots=True)
class PropertyRow:
    """One row of `materials.toml` or `melting.toml`."""

    material: str
    name: str
    value: float | tuple[float, ...]  # [SI]; several: at the temperatures
    u: float | None  # None: the source states none
    unit: str
    source: str
    temperature: tuple[float, ...] = ()  # [K]; empty: taken as constant


def known_materials() -> tuple[str, ...]:
    """Return the targets that the package knows."""
    return _known("target")


def known_liquids() -> tuple[str, ...]:
    """Return the liquids that the package knows."""
    return _known("liquid")


def property_rows(table: Rows) -> tuple[PropertyRow, ...]:
    """Return everything that the package knows of targets, of liquids or of melting, each row with its source."""
    return tuple(_rows(table).values())


def properties_of_target(campaign: Campaign) -> MetalProperties:
    """Return the target's properties: as the manifest states them, else as the package knows them.

    Raises
    ------
    Refusal
        Where the package does not know the material and the manifest does not state all its properties and the priors
        `PRIORS_OF_METAL`, where a stated property is not above zero, or where the melt would not be denser than the
        liquid that slows it.

    """
    if campaign.target.material not in known_materials():
        missing = [f"priors.{name}" for name in PRIORS_OF_METAL if name not in campaign.priors]
        if missing:
            _refuse_unknown("target", campaign.target.material, campaign.target.properties, missing)
    found = _collect("target", campaign.target.material, campaign.target.properties, campaign.liquid_temperature.value)
    melt, contact = found["melt_density"], _liquid_contact_density(campaign)
    if contact is not None and melt <= contact:
        raise Refusal(
            Place("campaign.toml", key="target.melt_density"),
            found=f"{melt:g} kg/m3, no more than the liquid's {contact:g} kg/m3 at the contact",
            expected="a melt denser than the liquid that slows it, as the model of break-up supposes",
            remedy="Check target.melt_density and liquid.contact_density.",
        )
    return MetalProperties(**found)


def properties_of_liquid(campaign: Campaign) -> LiquidProperties:
    """Return the liquid's properties at the campaign's temperature and wavelength: as stated, else as known.

    Raises
    ------
    Refusal
        Where the package does not know the liquid and the manifest does not state all its properties, where a stated
        one is not above zero, or where temperature or wavelength lie outside what is known.

    """
    liquid = campaign.liquid
    stated = dict(liquid.properties)
    index = stated.pop("refractive_index", None)
    known = liquid.material in _entries("index")
    if index is None and not known:
        _refuse_unknown("liquid", liquid.material, liquid.properties)
    found = _collect("liquid", liquid.material, stated, campaign.liquid_temperature.value)
    if index is None:
        refractive_index = _liquid_index(liquid.material, campaign.beam.wavelength.value)
    else:
        refractive_index = _positive("liquid", "refractive_index", index)
    return LiquidProperties(**found, refractive_index=refractive_index)


def default_prior_texts(material: str) -> dict[str, str]:
    """Return the default priors that depend on the metal, by input, as a manifest would write them.

    Parameters
    ----------
    material : as the manifest names it; one that the package does not know has none.

    Returns
    -------
    dict
        `removal_energy_density`, `melt_surface_tension` and `melt_viscosity`.

    Notes
    -----
    Gold has its own. Another metal's removal energy density is gold's times the ratio of their `landmark_energy`;
    surface tension and viscosity are the same share of the value at melting as gold's (corresponding states).

    """
    if material not in known_materials():
        return {}

    def scaled(name: str) -> float:
        return _melting(material, name) / _melting("gold", name)

    removal = _GOLD_REMOVAL * landmark_energy(material) / landmark_energy("gold")
    spread = _REMOVAL_SPREAD.get(material, _SCALED_SPREAD)
    return {
        "removal_energy_density": f"lognormal({_two_digits(removal)} J/m3, {spread} %)",
        "melt_surface_tension": f"fixed({_GOLD_TENSION * scaled('surface_tension'):.2g} N/m)",
        "melt_viscosity": f"fixed({1e3 * _GOLD_VISCOSITY * scaled('viscosity'):.2g} mPa s)",
    }


def landmark_energy(material: str) -> float:
    """Return the energy density at which a known metal is expected to break up [J/m³ of cold solid].

    Notes
    -----
    A third of the way, in the logarithm, from fully molten to 0.9 of the critical temperature: the hot melt is torn
    apart under tension (spallation) well before it boils. Own choice; gold's default prior lies within 40 % of it.

    """
    molten, hot = melting_energies(material)
    return molten * (hot / molten) ** _SHARE_TO_HOT


def melting_energies(material: str) -> tuple[float, float]:
    """Return the energy densities of a known metal fully molten and at 0.9 of the critical temperature.

    Returns
    -------
    molten, hot : over the solid at 298.15 K [J/m³ of cold solid].

    Notes
    -----
    Heat to the melting point plus latent heat; from there the liquid's heat capacity, taken as constant.

    """
    per_mole = _melting(material, "heat_to_melting") + _melting(material, "heat_of_fusion")
    climb = _HOT * _melting(material, "critical_temperature") - _melting(material, "melting_temperature")
    amount = _single(_rows("target")[material, "density"]) / _melting(material, "molar_mass")  # [mol/m³]
    return amount * per_mole, amount * (per_mole + climb * _melting(material, "liquid_heat_capacity"))


def optical_constants(material: str, wavelength: float) -> tuple[float, float]:
    """Return real and imaginary part of a cold metal's refractive index [1], linear between tabulated wavelengths.

    Parameters
    ----------
    material : as the manifest names it.
    wavelength : in vacuum [m].

    Raises
    ------
    Refusal
        Where the package does not know the material's optical constants at that wavelength.

    """
    entry = _entries("optical").get(material)
    if entry is None or not entry["range"][0] <= wavelength <= entry["range"][1]:
        known = "; ".join(f"{name} from {_nm(row['range'])}" for name, row in _entries("optical").items())
        raise Refusal(
            Place("campaign.toml", key="target.material" if entry is None else "beam.wavelength"),
            found=f"{material!r} at {wavelength * 1e9:.5g} nm",
            expected=f"a target and wavelength whose cold absorptance the package knows ({known})",
            remedy="State priors.absorbed_fraction in the manifest.",
        )
    wavelengths = entry["wavelength"]
    after = min(bisect_right(wavelengths, wavelength), len(wavelengths) - 1)
    share = (wavelength - wavelengths[after - 1]) / (wavelengths[after] - wavelengths[after - 1])
    n, k = (entry[name][after - 1] + share * (entry[name][after] - entry[name][after - 1]) for name in ("n", "k"))
    return n, k


@cache
def _tables() -> dict[str, list[dict[str, Any]]]:
    folder = resources.files("reconcile.campaign")
    texts = (folder.joinpath(name).read_text(encoding="utf-8") for name in ("materials.toml", "melting.toml"))
    return {name: entries for text in texts for name, entries in tomllib.loads(text).items()}


@cache
def _rows(table: Rows) -> dict[tuple[str, str], PropertyRow]:
    rows = {}
    for entry in _tables()[table]:
        value = entry["value"]
        rows[entry["material"], entry["property"]] = PropertyRow(
            material=entry["material"],
            name=entry["property"],
            value=tuple(map(float, value)) if isinstance(value, list) else float(value),
            u=entry.get("u"),
            unit=entry["unit"],
            source=entry["source"],
            temperature=tuple(entry.get("temperature", ())),
        )
    return rows


@cache
def _entries(table: Literal["optical", "index"]) -> dict[str, dict[str, Any]]:
    return {entry["material"]: entry for entry in _tables()[table]}


@cache
def _known(table: Table) -> tuple[str, ...]:
    return tuple(dict.fromkeys(material for material, _ in _rows(table)))


def _melting(material: str, name: str) -> float:
    return _single(_rows("melting")[material, name])


def _single(row: PropertyRow) -> float:
    if isinstance(row.value, tuple):
        message = f"{row.name} of {row.material} depends on temperature"
        raise AssertionError(message)  # a mistake in the table, not in anybody's file
    return row.value


def _two_digits(value: float) -> str:
    """Return 6e9 for 6 000 000 000."""
    mantissa, exponent = f"{value:.1e}".split("e")
    return f"{float(mantissa):g}e{int(exponent)}"


def _tabled_properties(table: Table) -> list[str]:
    """Return the names of the properties that have rows; a liquid's index comes from its own formula."""
    return [name for name in PROPERTY_NAMES[table] if name != "refractive_index"]


def _collect(table: Table, material: str, stated: Mapping[str, Quantity], temperature: float) -> dict[str, float]:
    """Return every tabled property by name [SI]."""
    if any((material, name) not in _rows(table) and name not in stated for name in _tabled_properties(table)):
        _refuse_unknown(table, material, stated)
    return {
        name: _positive(table, name, stated[name])
        if name in stated
        else _at_temperature(_rows(table)[material, name], temperature)
        for name in _tabled_properties(table)
    }


def _refuse_unknown(
    table: Table, material: str, stated: Mapping[str, Quantity], priors: Sequence[str] = ()
) -> NoReturn:
    """Refuse a material, naming each missing property and, in `priors`, each missing prior."""
    known = _known(table)
    missing = [
        f"{table}.{name}"
        for name in PROPERTY_NAMES[table]
        if (material, name) not in _rows(table) and name not in stated
    ]
    meant = next(iter(get_close_matches(material, known, n=1, cutoff=_ALIKE)), None)
    raise Refusal(
        Place("campaign.toml", key=f"{table}.material"),
        found=repr(material),
        expected=f"one that the package knows ({', '.join(known)}), or every property "
        + ("of it in the manifest" if table == "liquid" else "of it and prior of its melt in the manifest"),
        remedy=(f'Did you mean "{meant}"? Otherwise state ' if meant else "State ")
        + ", ".join([*missing, *priors])
        + ".",
    )


def _positive(table: Table, name: str, quantity: Quantity) -> float:
    if not (math.isfinite(quantity.value) and quantity.value > 0.0):
        raise Refusal(
            Place("campaign.toml", key=f"{table}.{name}"),
            found=f'"{quantity.text}"',
            expected="a value above zero",
            remedy="Correct it, or leave it out where the package knows the material.",
        )
    return quantity.value


def _at_temperature(row: PropertyRow, temperature: float) -> float:
    if isinstance(row.value, float):
        return row.value
    if not row.temperature[0] <= temperature <= row.temperature[-1]:
        low, high = (f"{limit - 273.15:g} degC" for limit in (row.temperature[0], row.temperature[-1]))
        raise Refusal(
            Place("campaign.toml", key="campaign.liquid_temperature"),
            found=f"{temperature - 273.15:g} degC",
            expected=f"{low} to {high}, for which the {row.name} of {row.material} is known",
            remedy=f"Correct the temperature, or state liquid.{row.name} in the manifest.",
        )
    return math.exp(_polynomial(row.temperature, [math.log(value) for value in row.value], temperature))


def _polynomial(xs: Sequence[float], ys: Sequence[float], x: float) -> float:
    """Return at `x` the polynomial through all points (Lagrange): smooth, and within 1e-4 of IAPWS between the rows."""
    return sum(
        y * math.prod((x - other) / (here - other) for other in xs if other != here)
        for here, y in zip(xs, ys, strict=True)
    )


def _liquid_index(material: str, wavelength: float) -> float:
    entry = _entries("index")[material]
    if not entry["range"][0] <= wavelength <= entry["range"][1]:
        raise Refusal(
            Place("campaign.toml", key="beam.wavelength"),
            found=f"{wavelength * 1e9:.5g} nm",
            expected=f"{_nm(entry['range'])}, for which the refractive index of {material} is known",
            remedy="State liquid.refractive_index in the manifest.",
        )
    terms = zip(entry["strength"], entry["resonance"], strict=True)
    return math.sqrt(1.0 + sum(strength * wavelength**2 / (wavelength**2 - pole) for strength, pole in terms))


def _liquid_contact_density(campaign: Campaign) -> float | None:
    """Return the liquid's density at the contact [kg/m³]; None where neither manifest nor package tells it."""
    stated = campaign.liquid.properties.get("contact_density")
    if stated is not None:
        return stated.value
    row = _rows("liquid").get((campaign.liquid.material, "contact_density"))
    return None if row is None else _at_temperature(row, campaign.liquid_temperature.value)


def _nm(limits: Sequence[float]) -> str:
    return f"{limits[0] * 1e9:.5g} to {limits[1] * 1e9:.5g} nm"

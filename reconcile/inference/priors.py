"""Which uncertain inputs a campaign has, and what is believed of each before the fit."""

from __future__ import annotations

import math
from dataclasses import dataclass

from reconcile.campaign.campaign import Campaign, Prior, Quantity
from reconcile.campaign.inputs import INPUTS, Input, describe
from reconcile.campaign.kinds import KINDS
from reconcile.campaign.materials import default_prior_texts, optical_constants, properties_of_liquid
from reconcile.campaign.prior_text import parse_prior
from reconcile.inference.density import Density
from reconcile.physics.beam import fresnel_absorptance

# Hot and rough metal absorbs more than cold polished metal: several times as much where that reflects nearly all, hardly
# more where it absorbs half. Own judgement over calorimetry with femtosecond pulses; linear in ln(cold) in between.
_COLD = (0.04, 0.45)  # share absorbed by cold, smooth metal under the liquid
_HOT_FACTOR = (3.5, 1.0)
_HOT_SPREAD = (0.6, 0.2)  # standard deviation of the logarithm

_RESPONSE_SPREAD = 0.15  # of a bandwidth stated without ±
_JITTER_SPREAD = 0.5  # of the logarithm of energy_jitter about the manifest's shot_jitter


@dataclass(frozen=True, slots=True)
class Believed:
    """One input of a campaign before the fit."""

    entry: Input
    prior: Prior
    density: Density
    overruled: str | None = None  # what the instrument table says, where [priors] went before it


def believed_inputs(campaign: Campaign, kinds: tuple[str, ...]) -> dict[str, Believed]:
    """Return every input that the campaign has, in the fixed order, with its prior cut to the physical range.

    Parameters
    ----------
    campaign : the manifest
    kinds : fitted kinds that have readings: each brings its scatter

    Raises
    ------
    Refusal : the material or wavelength has no default prior and none is stated.
    """
    instruments = _instruments(campaign)
    names = [name for name, entry in INPUTS.items() if not entry.derived and not _absent(name, campaign)]
    names += [name for name in instruments if name not in names]
    scatters = [f"scatter.{kind}" for kind in KINDS if kind in kinds or f"scatter.{kind}" in campaign.priors]
    names += [name for name in scatters if KINDS[name.partition(".")[2]].fitted]
    believed = {}
    for name in names:
        entry = describe(name)
        stated, measured = campaign.priors.get(name), instruments.get(name)
        prior = stated or measured or _default(entry, campaign)
        overruled = measured.text if stated is not None and measured is not None else None
        believed[name] = Believed(entry, prior, Density(prior, entry.low, entry.high), overruled)
    return believed


def _absent(name: str, campaign: Campaign) -> bool:
    """Whether an instrument input has no instrument in this campaign and no stated prior."""
    entry = INPUTS[name]
    optional = ("probe_sensitivity", "probe_response", "standoff", "trigger_offset")
    return name in optional and name not in _instruments(campaign) and entry.name not in campaign.priors


def _instruments(campaign: Campaign) -> dict[str, Prior]:
    """Return the priors that the instrument tables state, by input name."""
    beam, meter, probe = campaign.beam, campaign.meter, campaign.probe
    stated: dict[str, Quantity | None] = {
        "delivery": beam.delivery,
        "spot_radius": beam.spot_radius,
        "meter_calibration": meter.calibration,
    }
    if probe is not None:
        stated |= {"probe_sensitivity": probe.sensitivity, "standoff": probe.standoff}
        stated |= {"trigger_offset": probe.trigger_offset, "probe_angle": probe.angle}
    for table in campaign.tables:
        stated[f"pixel_pitch.{table.name}"] = stated.get(f"pixel_pitch.{table.name}") or table.pixel_pitch
        stated[f"scale.{table.name}"] = stated.get(f"scale.{table.name}") or table.scale
    priors = {name: _normal(quantity) for name, quantity in stated.items() if quantity is not None}
    if meter.shot_jitter is not None:
        priors["energy_jitter"] = _lognormal(meter.shot_jitter, meter.shot_jitter.value, _JITTER_SPREAD)
    if probe is not None and probe.bandwidth is not None:
        bandwidth = probe.bandwidth
        spread = _RESPONSE_SPREAD if bandwidth.u is None else bandwidth.u / bandwidth.value
        priors["probe_response"] = _lognormal(bandwidth, 1.0 / (2.0 * math.pi * bandwidth.value), spread)
    return priors


def _normal(quantity: Quantity) -> Prior:
    if not quantity.u:
        return Prior("fixed", quantity.value, 0.0, quantity.text)
    return Prior("normal", quantity.value, quantity.u, quantity.text)


def _lognormal(quantity: Quantity, median: float, spread: float) -> Prior:
    if spread == 0.0:
        return Prior("fixed", median, 0.0, quantity.text)
    return Prior("lognormal", median, spread, quantity.text)


def _default(entry: Input, campaign: Campaign) -> Prior:
    """Return the package's prior of an input that neither [priors] nor an instrument table states."""
    family, _, member = entry.name.partition(".")
    if entry.name == "absorbed_fraction":
        return _absorbed_fraction(campaign)
    if entry.name == "probe_angle":
        return Prior("fixed", 0.0, 0.0, "fixed(0 deg)")
    of_material = default_prior_texts(campaign.target.material).get(entry.name)
    text = KINDS[member].scatter if family == "scatter" else of_material or entry.default
    if text is None:
        message = f"{entry.name} has neither a default prior nor an instrument"
        raise AssertionError(message)  # a mistake in the table of inputs, not in anybody's file
    return parse_prior(entry.name, text)


def _absorbed_fraction(campaign: Campaign) -> Prior:
    """Cold metal's absorptance into the liquid by Fresnel's relation, raised and widened for hot and rough metal."""
    n, k = optical_constants(campaign.target.material, campaign.beam.wavelength.value)
    cold = float(fresnel_absorptance(n, k, properties_of_liquid(campaign).refractive_index))
    share = math.log(cold / _COLD[0]) / math.log(_COLD[1] / _COLD[0])
    share = min(max(share, 0.0), 1.0)
    factor = _HOT_FACTOR[0] + share * (_HOT_FACTOR[1] - _HOT_FACTOR[0])
    spread = _HOT_SPREAD[0] + share * (_HOT_SPREAD[1] - _HOT_SPREAD[0])
    median = cold * factor
    return Prior("lognormal", median, spread, f"lognormal({median:.3g}, {100 * spread:.0f} %)")

"""Limits of validity that a campaign or a shot passed, what could not be checked, and what was accepted but not used.

The limits are those to which the reduced formulas were held against fuller calculations, and rules of thumb of the trade
(marked common practice); none of them is data: a warning changes no number.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from reconcile.campaign.campaign import Campaign, Quantity
from reconcile.campaign.materials import properties_of_liquid
from reconcile.campaign.quantity import shown
from reconcile.campaign.readings import Gathered
from reconcile.inference.fit import Fitted
from reconcile.inference.model import Array, Expected
from reconcile.inference.outcome import ShotResult, Warned
from reconcile.physics import beam, contact, heating

HIGHEST_ABSORBED = 1e4  # [J/m²] to which the chain was checked
HIGHEST_PRESSURE = 3e11  # [Pa] to which the metal's shock relation holds
FASTEST_CONTACT = 2e3  # [m/s] to which the liquid's straight shock relation holds within 8 %
LONGEST_PULSE, TOO_LONG_PULSE = 1e-12, 1e-11  # [s] heated depth grows by some percent; confinement is lost
LEAST_SPOTS, LEAST_DISTANCES = 3.0, 10.0  # bubble over spot radius; surface and wall over bubble: common practice
LEAST_DEPTHS = 5.0  # target thickness over heated depth
LARGEST_ANGLE = np.radians(10.0)  # standard uncertainty of the viewing angle
LARGEST_SPOT_ERROR = 0.1  # relative standard uncertainty of the spot radius
NONLINEAR_INDEX = 1.9e-20  # [m²/W] of water, published from 1.6e-20 to 5.7e-20 (from memory)
UNCERTAIN_PHASE, STRONG_PHASE = 1.0, 3.0  # [rad]: common practice
IONISING, BREAKING = 5e16, 1e17  # [W/m²] in the liquid, within a factor of some (from memory)
MOST_LOSS = 0.02  # share of the energy lost to the liquid that delivery must hold
# Absorption of water [1/m] at laser wavelengths [m]: M. Kedenburg et al., Opt. Mater. Express 2 (2012) 1588.
WATER_ABSORPTION = {515e-9: 0.060, 800e-9: 2.16, 1030e-9: 24.0, 1064e-9: 14.4}
_NEAR = 10e-9  # [m] from a tabulated wavelength


@dataclass(frozen=True, slots=True)
class _Typical:
    """What the model expects of each shot at the posterior's medians, shape (shots,)."""

    absorbed: Array
    pressure: Array
    velocity: Array
    largest_radius: Array
    depth_of_heat: Array
    power: Array  # peak power at the target
    spot: Array
    excess: Array


def warnings_of(fitted: Fitted, gathered: Gathered, shots: tuple[ShotResult, ...]) -> tuple[Warned, ...]:
    """Collect the warnings: the campaign's first, then each shot's in the order of the log."""
    campaign = gathered.campaign
    typical = _typical(fitted, campaign, shots)
    warnings = [
        *_unused(campaign),
        *_of_pulse(campaign),
        *_of_path(campaign, typical),
        *_of_geometry(campaign, typical),
    ]
    warnings += _of_probe(fitted, campaign, typical)
    for number, result in enumerate(shots):
        warnings += _of_shot(result, number, typical, fitted)
    return tuple(warnings)


def _typical(fitted: Fitted, campaign: Campaign, shots: tuple[ShotResult, ...]) -> _Typical:
    data = fitted.problem.data
    inputs = {name: np.array([np.median(draws)]) for name, draws in fitted.inputs.items()}
    ratio = np.array([result.energy_ratio for result in shots])[:, None]
    deviation = np.log(ratio / inputs["meter_calibration"])
    state = Expected(data.conditions, inputs, data.table.exposures(np.arange(len(shots)), deviation))
    pressure = inputs["pressure_coefficient"] * heating.energy_density(state.absorbed, state.depth_of_heat)
    velocity = contact.contact_velocity(pressure, data.conditions.metal, data.conditions.fluid)
    arriving = inputs["delivery"] * inputs["meter_calibration"] * state.exposures.energy
    parts = (state.absorbed, pressure, velocity, state.largest_radius, state.depth_of_heat)
    power = beam.peak_power(arriving, campaign.beam.pulse_duration.value)
    rest = (power, np.broadcast_to(state.radius, ratio.shape), state.excess)
    return _Typical(*(np.asarray(part)[:, 0] for part in (*parts, *rest)))


def _not_checked(what: str, key: str, advice: str) -> Warned:
    return Warned("campaign", f"not checked: {what}", None, None, "1", f"Give {key} in campaign.toml. {advice}".strip())


def _unused(campaign: Campaign) -> Iterator[Warned]:
    for key in campaign.unused_uncertainties:
        yield Warned(
            "campaign", f"the ± of {key} is accepted, but goes into nothing", None, None, "1", "Nothing to do."
        )


def _of_pulse(campaign: Campaign) -> Iterator[Warned]:
    duration = campaign.beam.pulse_duration.value
    if duration > LONGEST_PULSE:
        much = duration > TOO_LONG_PULSE
        limit = TOO_LONG_PULSE if much else LONGEST_PULSE
        advice = (
            "The layer cools and unloads while it is heated: the model does not hold."
            if much
            else "Widen the prior of heated_depth: beyond a picosecond it grows by 5 to 17 %."
        )
        yield Warned("campaign", "the pulse is long", duration, limit, "s", advice)
    spot = campaign.beam.spot_radius
    if spot.u is not None and spot.u / spot.value > LARGEST_SPOT_ERROR:
        advice = "Fluence goes with its square: measure the spot at the target, by other means than these craters."
        yield Warned("campaign", "the spot radius is uncertain", spot.u / spot.value, LARGEST_SPOT_ERROR, "1", advice)


def _of_path(campaign: Campaign, typical: _Typical) -> Iterator[Warned]:
    """What the light does on its way through the liquid."""
    strongest = int(typical.power.argmax())
    power, target = float(typical.power[strongest]), float(typical.spot[strongest])
    wavelength, path, entry = campaign.beam.wavelength.value, campaign.liquid.path, campaign.beam.entry_radius
    intensity = float(beam.peak_fluence(power, target))
    if intensity > IONISING:
        word = "breakdown of the liquid is likely" if intensity > BREAKING else "ionisation of the liquid is possible"
        advice = "What breaks down takes energy that delivery does not know of: compare shots at a larger spot."
        yield Warned("campaign", word, intensity, IONISING, "W/m2", advice)
    if campaign.liquid.material != "water":
        yield Warned("campaign", "not checked: self-focusing and loss, tabulated for water only", None, None, "1", "")
        return
    critical = float(beam.critical_power(wavelength, properties_of_liquid(campaign).refractive_index, NONLINEAR_INDEX))
    if power > critical:
        advice = (
            f"At {power / critical:.1f} times the critical power (n2 is known to a factor of two) the spot may differ "
            "from the one measured at low power. Check it with craters far apart in energy, or shorten the path."
        )
        yield Warned("campaign", "self-focusing: power above critical", power, critical, "W", advice)
    if path is None or entry is None:
        key = "liquid.path" if path is None else "beam.entry_radius"
        yield _not_checked("the nonlinear phase along the liquid", key, "")
    else:
        yield from _of_phase(power, wavelength, path.value, (entry.value, target))
    if path is not None:
        yield from _of_loss(wavelength, path.value)


def _of_phase(power: float, wavelength: float, path: float, radii: tuple[float, float]) -> Iterator[Warned]:
    if radii[0] <= radii[1]:
        return
    phase = float(beam.nonlinear_phase(power, NONLINEAR_INDEX, wavelength, path, radii))
    if phase > UNCERTAIN_PHASE:
        strong = phase > STRONG_PHASE
        what = "nonlinear phase: expect self-focusing" if strong else "nonlinear phase: spot uncertain"
        advice = "Enter the liquid with a larger beam, shorten the path, or widen spot_radius."
        yield Warned("campaign", what, phase, STRONG_PHASE if strong else UNCERTAIN_PHASE, "rad", advice)


def _of_loss(wavelength: float, path: float) -> Iterator[Warned]:
    nearest = min(WATER_ABSORPTION, key=lambda known: abs(known - wavelength))
    if abs(nearest - wavelength) > _NEAR:
        yield Warned("campaign", "not checked: water's absorption at this wavelength", None, None, "1", "Measure it.")
        return
    loss = float(-np.expm1(-WATER_ABSORPTION[nearest] * path))
    if loss > MOST_LOSS:
        advice = "Make sure that delivery contains it: the liquid's loss is not applied again."
        yield Warned("campaign", "the water absorbs along the path", loss, MOST_LOSS, "1", advice)


def _of_geometry(campaign: Campaign, typical: _Typical) -> Iterator[Warned]:
    largest = float(typical.largest_radius.max())
    liquid = campaign.liquid
    bounds: tuple[tuple[str, Quantity | None, str], ...] = (
        ("the free surface", liquid.height or liquid.path, "liquid.height"),
        ("a side wall", liquid.wall_distance, "liquid.wall_distance"),
    )
    for what, distance, key in bounds:
        if distance is None:
            yield _not_checked(f"whether {what} is near the bubble", key, "")
        elif distance.value < LEAST_DISTANCES * largest:
            advice = f"The largest bubble has {shown(largest, None, 'm')}: its lifetime feels the boundary."
            found = distance.value / largest
            yield Warned("campaign", f"{what} is near the bubble", found, LEAST_DISTANCES, "1", advice)
    thickness = campaign.target.thickness
    if thickness is None:
        yield _not_checked("whether the target is thick", "target.thickness", "")
    elif thickness.value < LEAST_DEPTHS * float(typical.depth_of_heat.max()):
        found = thickness.value / float(typical.depth_of_heat.max())
        yield Warned(
            "campaign", "the target is thin", found, LEAST_DEPTHS, "1", "Heat is kept in a film: widen heated_depth."
        )


def _of_probe(fitted: Fitted, campaign: Campaign, typical: _Typical) -> Iterator[Warned]:
    sounding = {"pressure-integral", "arrival-time"} & set(fitted.problem.data.kinds)
    probe = campaign.probe
    if probe is None or not sounding or probe.standoff is None:
        return
    angle = probe.angle
    if angle is None:
        yield _not_checked(
            "the viewing angle", "probe.angle", "Off the normal, a large spot sounds fainter by factors."
        )
    elif angle.u is not None and angle.u > LARGEST_ANGLE:
        advice = "Off the normal, a large spot sounds fainter by factors: measure it."
        yield Warned("campaign", "the viewing angle is uncertain", angle.u, LARGEST_ANGLE, "rad", advice)
    nearest = 5.0 * float(typical.largest_radius.max())
    if probe.standoff.value < nearest:
        advice = "The probe may disturb the bubble, and sits in its near field."
        yield Warned("campaign", "the probe is near the bubble", probe.standoff.value, nearest, "m", advice)
    if probe.aperture is None:
        yield _not_checked("averaging over the probe's face", "probe.aperture", "")
        return
    speed = fitted.problem.data.conditions.fluid.sound_speed
    averaging = probe.aperture.value**2 / (8.0 * probe.standoff.value * speed)
    response = float(np.median(fitted.inputs["probe_response"])) if "probe_response" in fitted.inputs else averaging
    if averaging > response:
        advice = "The probe's face smears the pulse by more than its bandwidth does: state a smaller bandwidth."
        yield Warned("campaign", "the probe is large", averaging, response, "s", advice)


def _of_shot(result: ShotResult, number: int, typical: _Typical, fitted: Fitted) -> Iterator[Warned]:
    """What one shot passed, the most telling limit only of those that go together."""
    where = result.shot.name
    ladder = (
        ("the initial pressure is high", typical.pressure, HIGHEST_PRESSURE, "Pa"),
        ("the contact is fast", typical.velocity, FASTEST_CONTACT, "m/s"),
        ("the absorbed fluence is high", typical.absorbed, HIGHEST_ABSORBED, "J/m2"),
    )
    for what, values, limit, unit in ladder:
        if values[number] > limit:
            advice = "Take this shot as an extrapolation: the shock relations were not checked so far up."
            yield Warned(where, what, float(values[number]), limit, unit, advice)
            break
    bubbling = {"bubble-radius", "bubble-lifetime"} & set(fitted.problem.data.kinds)
    spots = float(typical.largest_radius[number] / typical.spot[number])
    if bubbling and typical.excess[number] > 0.3 and spots < LEAST_SPOTS:
        advice = "A bubble that is little larger than the spot is no hemisphere: give its readings less weight."
        yield Warned(where, "the bubble is small against the spot", spots, LEAST_SPOTS, "1", advice)

"""Limits of validity that a campaign or a shot passed, and what was accepted but not used."""

from __future__ import annotations

from reconcile.campaign.readings import Gathered
from reconcile.inference.fit import Fitted
from reconcile.inference.outcome import ShotResult, Warned

# Limits of the reduced model: own judgement over where its formulas were checked against fuller calculations.
HIGHEST_ABSORBED = 1e4  # [J/m²]
LONGEST_PULSE = 1e-12  # [s] beyond it the layer is heated while it already cools
WATER_LOSS_BAND = (900e-9, 1100e-9)  # [m] where water absorbs percents in millimetres (Kedenburg et al. 2012)


def warnings_of(fitted: Fitted, gathered: Gathered, shots: tuple[ShotResult, ...]) -> tuple[Warned, ...]:
    """Collect the warnings, those of the campaign first."""
    campaign = gathered.campaign
    warnings = [
        Warned("campaign", f"the ± of {key} is accepted, but goes into nothing", None, None, "1", "Nothing to do.")
        for key in campaign.unused_uncertainties
    ]
    pulse = campaign.beam.pulse_duration.value
    if pulse > LONGEST_PULSE:
        advice = "Widen the prior of heated_depth: it holds for pulses below a picosecond."
        warnings.append(Warned("campaign", "the pulse is long", pulse, LONGEST_PULSE, "s", advice))
    wavelength = campaign.beam.wavelength.value
    if campaign.liquid.material == "water" and WATER_LOSS_BAND[0] < wavelength < WATER_LOSS_BAND[1]:
        advice = "Make sure that delivery contains the water's own absorption along the path; it is not applied again."
        warnings.append(Warned("campaign", "water absorbs at this wavelength", wavelength, None, "m", advice))
    for result in shots:
        fluence = result.absorbed_fluence.median
        if fluence > HIGHEST_ABSORBED:
            advice = "Take its fluence as an extrapolation: the shock relations were not checked so far up."
            where = result.shot.name
            warnings.append(Warned(where, "the absorbed fluence is high", fluence, HIGHEST_ABSORBED, "J/m2", advice))
    return tuple(warnings)

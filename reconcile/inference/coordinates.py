"""Coordinates in which the posterior is easy to sample: what the readings fix stands on axes of its own.

Absorbed fluence, threshold, heated depth, pressure and bubble yield trade against each other exactly (scale the absorbed
fraction and the others follow); the readings see only ratios. So the sampler moves in one absolute level and the ratios.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from reconcile.inference.density import Density
from reconcile.inference.model import (
    REFERENCE_ABSORBED,
    REFERENCE_INCIDENT,
    TINY,
    Array,
    Conditions,
    Expected,
    Exposures,
)
from reconcile.inference.priors import Believed

Inputs = dict[str, Array]

# Inputs whose coordinate leans on others, in the order in which they must be worked out.
_BLOCK = ("absorbed_fraction", "heated_depth", "removal_energy_density", "pressure_coefficient", "bubble_yield")
_LEVELS = ("removal_factor", "fragment_factor", "shock_factor", "standoff")


@dataclass(frozen=True, slots=True)
class Axis:
    """One input's own scale: unbounded, on which its prior is smooth."""

    density: Density
    form: str  # "linear", "log" or "interval"

    @classmethod
    def of(cls, believed: Believed) -> Axis:
        """Choose the scale of an input by its prior and range."""
        density = believed.density
        if believed.entry.name == "absorbed_fraction" and density.prior.family not in ("uniform", "loguniform"):
            return cls(density, "log")  # as the level of the absorbed fluence; what is cut at 1 is cut there
        if density.bounded or believed.entry.scale == "logit":
            return cls(density, "interval")
        return cls(density, believed.entry.scale)

    def inward(self, x: Array) -> Array:
        """From the input to its scale."""
        if self.form == "interval":
            low, high = self.density.support
            return np.log(x - low) - np.log(high - x)
        return np.log(x) if self.form == "log" else x

    def outward(self, position: Array) -> tuple[Array, Array]:
        """From the scale to the input, and ln |d input / d position|."""
        if self.form == "linear":
            return position, np.zeros_like(position)
        if self.form == "log":
            return np.exp(np.clip(position, -700.0, 700.0)), position
        low, high = self.density.support
        share = 1.0 / (1.0 + np.exp(-np.clip(position, -36.0, 36.0)))
        return low + (high - low) * share, math.log(high - low) + np.log(share) + np.log1p(-share)


@dataclass(frozen=True, slots=True)
class Anchor:
    """The energies at which levels are taken. [J] logged, times filter transmission."""

    middle: float  # geometric mean of the log
    upper: float  # 70 % quantile of the log: above threshold in an ordinary campaign


# Far outside the support, where a search or a proposal may look, slopes are held off zero; the prior is nil there.
_FLATTEST, _STEEPEST = 0.05, 0.95


# Added to levels, so that one whose energy lies below threshold leaves its input alone: [m] and [Pa² s].
_FAINT_CRATER, _FAINT_SOUND = 5e-9, 0.1


def _rise(known: Inputs) -> Array:
    """How absorbed fluence rises with energy, as a power."""
    return np.maximum(1.0 + known["absorption_exponent"], _FLATTEST)


class Coordinates:
    """The way between sampled coordinates and inputs.

    Parameters
    ----------
    believed : every input of the campaign with its prior
    names : the ones that are sampled; the others are held at `held`
    held : value of each input that is not sampled here
    conditions, anchor : constants of the campaign
    kinds : fitted kinds with readings, which levels are worth an axis of their own
    """

    def __init__(
        self,
        believed: dict[str, Believed],
        names: tuple[str, ...],
        held: dict[str, float],
        conditions: Conditions,
        anchor: Anchor,
        kinds: tuple[str, ...],
    ) -> None:
        last = [name for name in (*_BLOCK, *_LEVELS) if name in names]
        self.names = tuple([name for name in names if name not in last] + last)
        self.axes = {name: Axis.of(believed[name]) for name in self.names}
        self._held = {name: np.array([value]) for name, value in held.items()}
        self._conditions, self._anchor = conditions, anchor
        self._reference = {name: believed[name].density.quantile(np.array([0.5])) for name in _LEVELS if name in names}
        kind_of = {
            "removal_factor": "crater-depth",
            "fragment_factor": "median-diameter",
            "shock_factor": "pressure-integral",
            "standoff": "arrival-time",
        }
        self._levels = {name for name, kind in kind_of.items() if kind in kinds}

    def inputs(self, position: Array) -> tuple[Inputs, Array]:
        """Inputs at these coordinates, and the log density of the prior there.

        Parameters
        ----------
        position : (draws, k) in the order of `names`

        Returns
        -------
        inputs : (draws,) arrays by name, held ones of shape (1,)
        log_prior : (draws,) on the sampled coordinates, Jacobian included; −inf outside the support
        """
        inputs: Inputs = dict(self._held)
        log_prior = np.zeros(len(position))
        for column, name in enumerate(self.names):
            slope, shift = self._lean(name, inputs)
            own, log_slope = self.axes[name].outward((position[:, column] - shift) / slope)
            inputs[name] = own
            log_prior += self.axes[name].density.log_pdf(own) + log_slope - np.log(np.abs(slope))
        return inputs, np.where(np.isfinite(log_prior), log_prior, -np.inf)

    def position(self, inputs: Inputs) -> Array:
        """Coordinates (draws, k) of inputs given by name, each (draws,)."""
        known: Inputs = dict(self._held)
        columns = []
        for name in self.names:
            slope, shift = self._lean(name, known)
            columns.append(slope * self.axes[name].inward(inputs[name]) + shift)
            known[name] = inputs[name]
        return np.stack(np.broadcast_arrays(*columns), axis=-1)

    def _lean(self, name: str, known: Inputs) -> tuple[Array, Array]:
        """Slope and shift of an input's coordinate: slope × own scale + shift, from inputs that are already known."""
        axis = self.axes[name]
        if name in _BLOCK and axis.form == "log":
            return self._lean_of_block(name, known)
        if name in self._levels and axis.form == "log":
            return np.ones(1), self._shift_of_level(name, known)
        return self._lean_of_slope(name, known)

    def _lean_of_slope(self, name: str, known: Inputs) -> tuple[Array, Array]:
        """What the readings see against the logarithm of energy: slopes, each a product with that of the absorption."""
        straight = np.ones(1), np.zeros(1)
        if "absorption_exponent" not in known:
            return straight
        slope = _rise(known)
        leaning = {
            "spot_radius": (np.ones(1), 0.5 * np.log(slope)),  # D² rises by 2 w² (1 + p)
            "heated_depth_exponent": (slope, np.zeros(1)),
            "bubble_yield_exponent": (slope, slope),  # bubble energy rises by (1 + y)(1 + p)
        }
        return leaning.get(name, straight)

    def _lean_of_block(self, name: str, known: Inputs) -> tuple[Array, Array]:
        log_absorbed = self._log_absorbed(known)
        if name == "absorbed_fraction":
            return np.ones(1), log_absorbed
        exponent = np.minimum(known["heated_depth_exponent"], _STEEPEST)
        relative = log_absorbed - math.log(REFERENCE_ABSORBED)
        if name == "heated_depth":
            return np.ones(1), exponent * relative
        if name == "bubble_yield":
            area = 2.0 * np.log(known["spot_radius"])
            return np.ones(1), known["bubble_yield_exponent"] * relative + log_absorbed + area
        if name == "pressure_coefficient":
            return np.ones(1), log_absorbed - np.log(known["heated_depth"]) - exponent * relative
        # ln(energy/threshold energy), with threshold^(1 − a) = energy density × depth × reference^(−a)
        scale = 1.0 / (1.0 - exponent)
        rest = np.log(known["heated_depth"]) - exponent * math.log(REFERENCE_ABSORBED)
        rise = _rise(known)
        return -scale / rise, (log_absorbed - scale * rest) / rise

    def _log_absorbed(self, known: Inputs) -> Array:
        """ln of the absorbed fluence at the middle energy; less ln(absorbed fraction) while that is not known yet."""
        arriving = known["delivery"] * known["meter_calibration"] * self._anchor.middle
        log_incident = np.log(2.0 * arriving / (np.pi * known["spot_radius"] ** 2))
        exponent = known["absorption_exponent"]
        level = (1.0 + exponent) * log_incident - exponent * math.log(REFERENCE_INCIDENT)
        return level + np.log(known["absorbed_fraction"]) if "absorbed_fraction" in known else level

    def _shift_of_level(self, name: str, known: Inputs) -> Array:
        """What a kind shows at the upper energy with this input at its reference value, in the logarithm."""
        conditions, reference = self._conditions, self._reference[name]
        if name != "standoff" and conditions.standoff is not None:
            known = {"standoff": np.array([conditions.standoff]), **known}
        upper = np.array([[self._anchor.upper]])
        standoff = np.nan if conditions.standoff is None else conditions.standoff
        exposures = Exposures(upper, np.ones((1, 1)), np.array([[conditions.spot_radius]]), np.array([[standoff]]))
        state = Expected(conditions, {**known, name: reference}, exposures)
        level: Callable[[], Array] = {
            "removal_factor": lambda: np.log(np.maximum(state.crater_depth, 0.0) + _FAINT_CRATER),
            "fragment_factor": lambda: np.log(np.maximum(state.median_diameter, TINY)),
            "shock_factor": lambda: np.log(state.pressure_integral + _FAINT_SOUND) + self._log_gain(known),
            "standoff": lambda: self._arrival(state, known) * conditions.fluid.sound_speed / reference,
        }[name]
        return np.asarray(level()[0] - (0.0 if name == "standoff" else np.log(reference)))

    def _log_gain(self, known: Inputs) -> Array:
        """Where the probe's sensitivity is uncertain, a level as read holds its error squared."""
        if self._conditions.sensitivity is None:
            return np.zeros(1)
        return 2.0 * np.log(known["probe_sensitivity"] / self._conditions.sensitivity)

    @staticmethod
    def _arrival(state: Expected, known: Inputs) -> Array:
        return state.pulse.arrival_time + known.get("trigger_offset", np.zeros(1))

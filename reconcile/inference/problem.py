"""One campaign's posterior as a function of sampled coordinates: priors, physical cuts, likelihood."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from reconcile.campaign.kinds import KINDS
from reconcile.campaign.readings import Gathered, Reading
from reconcile.inference.coordinates import Anchor, Coordinates, Inputs
from reconcile.inference.lattice import Index, Lattice, ShotTable
from reconcile.inference.likelihood import Likelihood
from reconcile.inference.model import REFERENCE_ABSORBED, TOUCHES, Array, Conditions, Expected, Exposures
from reconcile.inference.priors import Believed, believed_inputs

# Inputs that share in the physical cuts, so that they are sampled whatever the kinds.
_SHARED = (
    "absorbed_fraction",
    "absorption_exponent",
    "delivery",
    "meter_calibration",
    "spot_radius",
    "heated_depth",
    "heated_depth_exponent",
    "removal_energy_density",
    "pressure_coefficient",
    "bubble_yield",
    "bubble_yield_exponent",
    "shock_factor",
)
_RATES = ("energy_jitter", "stray_rate", "misread_rate")

# Bubble and shock together hold little more than half of what was absorbed: the rest stays in the metal as heat.
# Own judgement over published energy balances; a soft bound, so that no draw is lost to a hard one.
CLOSURE, CLOSURE_SPREAD = 0.5, 0.05
_CHUNK = 32  # draws worked at once: their arrays then stay in the cache


@dataclass(frozen=True, slots=True)
class Data:
    """The readings that are fitted, with what the model needs to know around them."""

    conditions: Conditions
    table: ShotTable
    readings: tuple[Reading, ...]
    rows: tuple[int, ...]  # of each fitted reading among all gathered ones
    kinds: tuple[str, ...]
    believed: dict[str, Believed]
    likelihood: Likelihood  # not yet on a lattice
    anchor: Anchor
    shots: dict[str, int]  # index of each fitted shot
    samples: dict[str, Index]  # indices of each sample's shots

    @classmethod
    def of(cls, gathered: Gathered, without: tuple[str, ...] = ()) -> Data:
        """Select what is fitted: kinds of `without` and what a person set aside are not.

        Raises
        ------
        Refusal : a material lacks a property, or an input has no default prior.
        """
        campaign = gathered.campaign
        conditions = Conditions.of(campaign)
        table = ShotTable.of(gathered.shots, conditions)
        shots = {shot.name: number for number, shot in enumerate(gathered.shots) if shot.set_aside is None}
        samples: dict[str, list[int]] = {}
        for number, shot in enumerate(gathered.shots):
            if shot.sample is not None:
                samples.setdefault(shot.sample, []).append(number)
        rows = tuple(
            row
            for row, reading in enumerate(gathered.readings)
            if reading.set_aside is None
            and KINDS[reading.kind].fitted
            and reading.kind not in without
            and (reading.table_kind or reading.kind) not in without
            and (reading.shot in shots or reading.sample in samples)
        )
        readings = tuple(gathered.readings[row] for row in rows)
        indices = {name: np.array(members, dtype=np.intp) for name, members in samples.items()}
        likelihood = Likelihood(conditions, table, readings, campaign.tables, shots, indices)
        energies = np.exp(table.log_energy)
        anchor = Anchor(float(np.exp(table.log_energy.mean())), float(np.quantile(energies, 0.7)))
        kinds = _kinds_of(readings)
        believed = believed_inputs(campaign, kinds)
        return cls(conditions, table, readings, rows, kinds, believed, likelihood, anchor, shots, indices)

    def keep(self, wanted: Callable[[int, Reading], bool]) -> Data:
        """Return the same campaign with only the fitted readings that are wanted, told by their position and content."""
        kept = [n for n, reading in enumerate(self.readings) if wanted(n, reading)]
        readings = tuple(self.readings[n] for n in kept)
        tables = self.likelihood.tables
        likelihood = Likelihood(self.conditions, self.table, readings, tables, self.shots, self.samples)
        rows, kinds = tuple(self.rows[n] for n in kept), _kinds_of(readings)
        return replace(self, readings=readings, rows=rows, kinds=kinds, likelihood=likelihood)

    def leave_out(self, positions: tuple[int, ...]) -> Data:
        """Return the same campaign without some of its fitted readings."""
        return self.keep(lambda position, _: position not in positions)

    def sampled(self) -> tuple[str, ...]:
        """Names of the inputs that the readings or the cuts touch, fixed ones left out."""
        touched = {name for kind in self.kinds for name in TOUCHES[kind]}
        if not np.any(self.table.pulses > 1):
            touched.discard("incubation_exponent")
        names = {*_SHARED, *(_RATES if self.readings else ()), *touched}
        names |= {f"scatter.{kind}" for kind in self.kinds}
        names |= {f"{family}.{reading.table}" for reading in self.readings for family in ("scale", "pixel_pitch")}
        return tuple(name for name, known in self.believed.items() if name in names and not known.density.fixed)


def _kinds_of(readings: tuple[Reading, ...]) -> tuple[str, ...]:
    return tuple(kind for kind in KINDS if any(reading.kind == kind for reading in readings))


class Problem:
    """The log-posterior of a campaign on sampled coordinates.

    Parameters
    ----------
    data : what is fitted
    lattice : points on which shots are integrated; None where no reading belongs to a shot
    """

    def __init__(self, data: Data, lattice: Lattice | None = None) -> None:
        self.data = data
        names = data.sampled()
        held = {
            name: float(known.density.quantile(np.array(0.5)))
            for name, known in data.believed.items()
            if name not in names
        }
        self.coordinates = Coordinates(data.believed, names, held, data.conditions, data.anchor, data.kinds)
        self.names = self.coordinates.names
        self.likelihood = data.likelihood if lattice is None else data.likelihood.integrate_on(lattice)
        self._cuts = _cut_exposures(data.table, data.conditions)

    def on(self, lattice: Lattice) -> Problem:
        """Return the same problem on another lattice."""
        twin = object.__new__(Problem)
        twin.__dict__.update(self.__dict__)
        twin.likelihood = self.data.likelihood.integrate_on(lattice)
        return twin

    def with_data(self, data: Data) -> Problem:
        """Return a problem on the same coordinates and priors with some of the readings; not yet on a lattice."""
        twin = object.__new__(Problem)
        twin.__dict__.update(self.__dict__)
        twin.data, twin.likelihood = data, data.likelihood
        return twin

    def log_prior(self, position: Array) -> tuple[Array, Inputs]:
        """Log prior with its physical cuts, (draws,), on the coordinates (draws, k); and the inputs there."""
        inputs, log_prior = self.coordinates.inputs(position)
        possible = np.flatnonzero(np.isfinite(log_prior))
        if len(possible):
            log_prior[possible] += self._log_cuts(chosen_draws(inputs, possible))
        return log_prior, inputs

    def log_prob(self, position: Array) -> Array:
        """Log posterior, (draws,), of coordinates (draws, k); −inf outside the support."""
        log_prob, inputs = self.log_prior(position)
        possible = np.flatnonzero(np.isfinite(log_prob))
        for start in range(0, len(possible), _CHUNK):
            chosen = possible[start : start + _CHUNK]
            log_prob[chosen] += self.likelihood(chosen_draws(inputs, chosen))
        return np.where(np.isnan(log_prob), -np.inf, log_prob)

    def over_draws(self, position: Array, work: Callable[[Inputs], Array]) -> Array:
        """Apply `work` to the inputs at these coordinates, a few draws at a time; draws are its last axis."""
        inputs, _ = self.coordinates.inputs(position)
        parts = [
            work(chosen_draws(inputs, np.arange(start, min(start + _CHUNK, len(position)))))
            for start in range(0, len(position), _CHUNK)
        ]
        return np.concatenate(parts, axis=-1)

    def _log_cuts(self, inputs: Inputs) -> Array:
        """No shot absorbs more than arrives; bubble and shock of the strongest leave room for heat."""
        state = Expected(self.data.conditions, inputs, self._cuts)
        share = state.absorbed_share.max(axis=0)
        strongest = Expected(self.data.conditions, inputs, _last(self._cuts))
        relative = strongest.absorbed / REFERENCE_ABSORBED
        bubble = inputs["bubble_yield"] * relative ** inputs["bubble_yield_exponent"] * -np.expm1(-strongest.excess)
        over = np.maximum((bubble + strongest.shock_yield)[0] - CLOSURE, 0.0) / CLOSURE_SPREAD
        return np.where(share <= 1.0, -0.5 * over**2, -np.inf)


def chosen_draws(inputs: Inputs, chosen: Index) -> Inputs:
    """Return the inputs of some draws; held ones stay as they are."""
    return {name: value[chosen] if value.size > 1 else value for name, value in inputs.items()}


def _cut_exposures(table: ShotTable, conditions: Conditions) -> Exposures:
    """Weakest and strongest shot by fluence, then the one of highest energy at one pulse: (3, 1)."""
    strength = table.log_energy - 2.0 * np.log(table.spot_radius)
    index = np.array([strength.argmin(), strength.argmax(), table.log_energy.argmax()])
    column = index[:, None]
    standoff = np.full((3, 1), np.nan if conditions.standoff is None else conditions.standoff)
    return Exposures(np.exp(table.log_energy[column]), np.ones((3, 1)), table.spot_radius[column], standoff)


def _last(exposures: Exposures) -> Exposures:
    return Exposures(exposures.energy[-1:], exposures.pulses[-1:], exposures.spot_radius[-1:], exposures.standoff[-1:])

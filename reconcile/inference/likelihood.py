"""The likelihood of a campaign: every shot's own deviation integrated out, misread energies told from stray readings.

The mixture on the deviation that all readings of a shot share is our own extension of the one on single readings
(see `mixture`): readings that agree with each other and not with the log speak of a misread energy.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from reconcile.campaign.campaign import Table
from reconcile.campaign.kinds import KINDS, yields
from reconcile.campaign.readings import Reading
from reconcile.inference import mixture
from reconcile.inference.lattice import Index, Lattice, ShotTable
from reconcile.inference.mixture import Cell
from reconcile.inference.model import (
    EXPECTED,
    MOTION_ERROR,
    RELATIVE_SCATTER,
    STRAY_WIDTH,
    TINY,
    Array,
    Conditions,
    Expected,
    Inputs,
    reading_factor,
    reading_offset,
)
from reconcile.inference.slots import Slot, arrange

MISREAD_SPREAD = 0.7  # standard deviation of the logarithm of a misread energy over the logged one
_RESCALE_EVERY = 12  # slots multiplied before the logarithm is taken, so that no product underflows
_ROOT_2PI = math.sqrt(2.0 * math.pi)


@dataclass(frozen=True, slots=True)
class Details:
    """What the likelihood says of shots and readings, for a batch of draws."""

    log_likelihood: Array  # (draws,)
    weights: Array  # (pairs, draws) normalised over each shot's pairs
    misread: Array  # (lattice shots, draws) probability
    stray: Array  # (readings, draws) probability; NaN where not fitted
    mean: Array  # (readings, draws) expected reading; NaN where not fitted
    variance: Array  # (readings, draws) of what such a reading should be, scatter included, its own u left out


@dataclass(frozen=True, slots=True)
class _Asked:
    """What the model expects at the pairs (or samples) of one slot, each (m, draws)."""

    expected: Array  # on the scale of the residual
    width: Array  # of stray readings
    error: Array  # standard deviation that the closed form itself adds


class Likelihood:
    """Log-likelihood of a campaign's readings for batches of inputs.

    Parameters
    ----------
    conditions : constants of the campaign
    table : its shots
    readings : those to fit, each of a fitted kind
    tables : the manifest's reading tables
    shots : index of each shot by name
    samples : indices of each sample's shots by name
    """

    def __init__(
        self,
        conditions: Conditions,
        table: ShotTable,
        readings: tuple[Reading, ...],
        tables: tuple[Table, ...],
        shots: dict[str, int],
        samples: dict[str, Index],
    ) -> None:
        self.conditions, self.table, self.readings, self.tables = conditions, table, readings, tables
        table_of = {(t.name, kind): n for n, t in reversed(list(enumerate(tables))) for kind in yields(t.kind)}
        self.slots = arrange(readings, shots, table_of)
        used = [name for name in samples if any(reading.sample == name for reading in readings)]
        self.samples = [samples[name] for name in used]
        self.sample_slots = arrange(readings, {name: number for number, name in enumerate(used)}, table_of)
        self.read_shots = np.unique(np.concatenate([slot.target for slot in self.slots] or [np.empty(0, np.intp)]))
        self.lattice: Lattice | None = None
        self._pairs: list[tuple[Index, Index]] = []

    def integrate_on(self, lattice: Lattice) -> Likelihood:
        """Return the same likelihood, integrated on this lattice of every shot in `read_shots`."""
        twin = object.__new__(Likelihood)
        twin.__dict__.update(self.__dict__)
        twin.lattice = lattice
        twin._pairs = []
        for slot in self.slots:
            slices = [lattice.pairs_of(int(np.searchsorted(lattice.shots, shot))) for shot in slot.target]
            pairs = np.concatenate([np.arange(part.start, part.stop) for part in slices])
            cell = np.repeat(np.arange(len(slices)), [part.stop - part.start for part in slices])
            twin._pairs.append((pairs, cell))
        return twin

    def __call__(self, inputs: Inputs) -> Array:
        """Return the log-likelihood, shape (draws,)."""
        total, product = self._shot_terms(inputs)
        return total + self._sample_terms(inputs, product) if self.sample_slots else total

    def integrand(self, inputs: Inputs) -> Array:
        """Integrand of each pair, (pairs, draws), on a scale of each shot's own."""
        _, product = self._shot_terms(inputs)
        return np.zeros((0, 1)) if product is None else product

    def details(self, inputs: Inputs) -> Details:
        """Return what each shot and reading looks like under these inputs."""
        shape = (len(self.readings), _draws(inputs))
        stray, mean, variance = np.full(shape, np.nan), np.full(shape, np.nan), np.full(shape, np.nan)
        weights = misread = np.zeros((0, shape[1]))
        total, product = self._shot_terms(inputs)
        if self.lattice is not None and product is not None:
            lattice = self.lattice
            weights = product / np.add.reduceat(product, lattice.first, axis=0)[lattice.pair_shot]
            sound, wrong = self._deviation_prior(inputs, lattice)
            misread = np.add.reduceat(weights * wrong / (sound + wrong), lattice.first, axis=0)
            for slot, (pairs, cell), asked in self._asked_of_shots(inputs, lattice):
                parts = self._collect(slot, cell, asked, weights[pairs], inputs)
                stray[slot.rows], mean[slot.rows], variance[slot.rows] = parts
        if self.sample_slots:
            total = total + self._sample_terms(inputs, product)
            for slot, asked in self._asked_of_samples(inputs, product):
                cell = np.arange(len(slot.target))
                parts = self._collect(slot, cell, asked, np.ones((len(cell), shape[1])), inputs)
                stray[slot.rows], mean[slot.rows], variance[slot.rows] = parts
        return Details(total, weights, misread, stray, mean, variance)

    # -- shots ---------------------------------------------------------------------------------------------------

    def _deviation_prior(self, inputs: Inputs, lattice: Lattice) -> tuple[Array, Array]:
        """Densities of a sound and of a misread shot's deviation, weighted by the rate; (pairs, draws) each."""
        jitter, rate = inputs["energy_jitter"], inputs["misread_rate"]
        sound = (1.0 - rate) / (jitter * _ROOT_2PI) * np.exp(-0.5 * (lattice.deviation / jitter) ** 2)
        wrong = rate / (MISREAD_SPREAD * _ROOT_2PI) * np.exp(-0.5 * (lattice.deviation / MISREAD_SPREAD) ** 2)
        return sound, wrong

    def _shot_terms(self, inputs: Inputs) -> tuple[Array, Array | None]:
        """Log-likelihood of the shots' readings, and the integrand that it came from."""
        if self.lattice is None:
            return np.zeros(_draws(inputs)), None
        lattice = self.lattice
        sound, wrong = self._deviation_prior(inputs, lattice)
        product = sound + wrong
        taken = np.zeros((len(lattice.shots), product.shape[-1]))
        for number, (slot, (pairs, cell), asked) in enumerate(self._asked_of_shots(inputs, lattice), start=1):
            part = mixture.density(self._cell(slot, cell, asked, inputs), inputs["stray_rate"], censored=slot.censored)
            if len(pairs) == len(product):
                product *= part
            else:
                product[pairs] *= part
            if number % _RESCALE_EVERY == 0:
                peak = np.maximum(np.maximum.reduceat(product, lattice.first, axis=0), 1e-290)
                product /= peak[lattice.pair_shot]
                taken += np.log(peak)
        total = np.add.reduceat(product, lattice.first, axis=0)
        return (np.log(np.maximum(total, 1e-300)) + taken + math.log(lattice.step)).sum(axis=0), product

    def _asked_of_shots(self, inputs: Inputs, lattice: Lattice) -> list[tuple[Slot, tuple[Index, Index], _Asked]]:
        """Ask the model once at every node, then hand each slot what it expects at its pairs."""
        state = Expected(self.conditions, inputs, lattice.nodes)
        at_nodes: dict[str, Array] = {}

        def once(key: str, make: Callable[[Expected], Array]) -> Array:
            if key not in at_nodes:
                at_nodes[key] = make(state)
            return at_nodes[key]

        asked = []
        for slot, (pairs, cell) in zip(self.slots, self._pairs, strict=True):
            node = lattice.pair_node[pairs]
            width = once(f"width {slot.kind}", STRAY_WIDTH[slot.kind])
            width = width if width.ndim == 1 else width[node]
            if slot.delay is not None:
                motion = once("motion", lambda state: state.motion)[:, node]
                expected, error = state.radius_during(slot.delay[cell][:, None], motion), MOTION_ERROR * motion[0]
            else:
                expected, error = once(slot.kind, _scaled(slot.kind))[node], np.zeros(1)
            asked.append((slot, (pairs, cell), _Asked(expected, width, error)))
        return asked

    def _cell(self, slot: Slot, cell: Index, asked: _Asked, inputs: Inputs) -> Cell:
        """Put readings beside what is expected of them, instruments' shared errors included."""
        numbers = np.unique(slot.table)
        factors = {n: reading_factor(slot.kind, self.tables[n], self.conditions, inputs) for n in numbers}
        if len(numbers) == 1:
            factor = factors[numbers[0]][None, None]
        else:
            factor = np.stack([np.broadcast_to(factors[n], (_draws(inputs),)) for n in numbers])
            factor = factor[np.searchsorted(numbers, slot.table[:, cell])]
        value, u = slot.value[:, cell, None], slot.u[:, cell, None]
        scatter = inputs[f"scatter.{slot.kind}"]
        if KINDS[slot.kind].logarithmic:
            variance = scatter**2 + asked.error**2
            return Cell(value, u, asked.expected + np.log(factor), np.ones((1, 1, 1)), variance, asked.width)
        reach = asked.expected if slot.kind in RELATIVE_SCATTER else np.ones(1)
        variance = (scatter * reach) ** 2 + asked.error**2
        expected = asked.expected * factor + reading_offset(slot.kind, self.conditions, inputs)
        return Cell(value, u, expected, factor, variance, asked.width)

    def _collect(self, slot: Slot, cell: Index, asked: _Asked, weights: Array, inputs: Inputs) -> tuple[Array, ...]:
        """Average over each cell's pairs: stray probability, expected reading, its variance; (r, c, draws) each."""
        parts = self._cell(slot, cell, asked, inputs)
        stray = mixture.stray_probability(parts, inputs["stray_rate"], censored=slot.censored)
        expected = np.broadcast_to(parts.expected, stray.shape)
        variance = parts.gain**2 * parts.variance
        if KINDS[slot.kind].logarithmic:
            expected = np.exp(expected)
            variance = variance * expected**2
        first = np.searchsorted(cell, np.arange(len(slot.target)))

        def average(part: Array) -> Array:
            return np.add.reduceat(weights * part, first, axis=1)

        mean = average(expected)
        return average(stray), mean, average(expected**2 + variance) - mean**2

    # -- samples -------------------------------------------------------------------------------------------------

    def _asked_of_samples(self, inputs: Inputs, product: Array | None) -> list[tuple[Slot, _Asked]]:
        """Expect each sample's median: the mean of ln d50 over its shots, weighted with their numbers of particles.

        Each shot is taken at the mean deviation that its own readings leave it, so that a misread one does not mislead.
        """
        deviation = np.zeros((len(self.table.log_energy), _draws(inputs)))
        if self.lattice is not None and product is not None:
            total = np.add.reduceat(product, self.lattice.first, axis=0)
            moment = np.add.reduceat(product * self.lattice.deviation, self.lattice.first, axis=0)
            deviation[self.lattice.shots] = moment / np.maximum(total, 1e-300)
        members = np.concatenate(self.samples)
        state = Expected(self.conditions, inputs, self.table.exposures(members, deviation[members]))
        diameter = np.maximum(state.median_diameter, TINY)
        number = self.table.sites[members][:, None] * self.table.pulses[members][:, None]
        weight = number * np.maximum(state.volume_of_one_pulse, TINY) / diameter**3
        first = np.concatenate([[0], np.cumsum([len(sample) for sample in self.samples])[:-1]]).astype(np.intp)
        log_median = np.add.reduceat(weight * np.log(diameter), first, axis=0) / np.add.reduceat(weight, first, axis=0)
        count = np.array([len(sample) for sample in self.samples], dtype=float)[:, None]
        # Half the jitter moves ln d50 of one shot; what its readings did not settle averages over the sample.
        error = 0.5 * inputs["energy_jitter"] / np.sqrt(count)
        return [
            (slot, _Asked(log_median[slot.target], np.ones(1), error[slot.target])) for slot in self.sample_slots
        ]

    def _sample_terms(self, inputs: Inputs, product: Array | None) -> Array:
        """Log-likelihood of the samples' readings, (draws,)."""
        total = np.zeros(_draws(inputs))
        for slot, asked in self._asked_of_samples(inputs, product):
            cell = self._cell(slot, np.arange(len(slot.target)), asked, inputs)
            part = mixture.density(cell, inputs["stray_rate"], censored=slot.censored)
            total = total + np.log(np.maximum(part, 1e-300)).sum(axis=0)
        return total


def _draws(inputs: Inputs) -> int:
    """Return the number of draws: the length of any input that is sampled."""
    return max(np.size(value) for value in inputs.values())


def _scaled(kind: str) -> Callable[[Expected], Array]:
    """Return the expectation of a kind on the scale of its residuals."""
    if KINDS[kind].logarithmic:
        return lambda state: np.log(np.maximum(EXPECTED[kind](state), TINY))
    return EXPECTED[kind]

"""The likelihood of a campaign: every shot's own deviation integrated out, misread energies told from stray readings.

The mixture on the deviation that all readings of a shot share is our own extension of the one on single readings
(see `mixture`): readings that agree with each other and not with the log speak of a misread energy.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np

from reconcile.campaign.campaign import Table
from reconcile.campaign.kinds import KINDS
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
        table_of = {(t.name, t.kind): n for n, t in reversed(list(enumerate(tables)))}
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
            for number, (slot, cell) in enumerate(self._cells_of_shots(inputs, lattice)):
                pairs, owner = self._pairs[number]
                parts = _average(slot, cell, owner, weights[pairs], inputs["stray_rate"])
                stray[slot.rows], mean[slot.rows], variance[slot.rows] = parts
        if self.sample_slots:
            total = total + self._sample_terms(inputs, product)
            for slot, cell in self._cells_of_samples(inputs, product):
                owner, even = np.arange(len(slot.target)), np.ones((len(slot.target), shape[1]))
                parts = _average(slot, cell, owner, even, inputs["stray_rate"])
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
        for number, (slot, cell) in enumerate(self._cells_of_shots(inputs, lattice), start=1):
            pairs, _ = self._pairs[number - 1]
            part = mixture.density(cell, inputs["stray_rate"], censored=slot.censored)
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

    def _cells_of_shots(self, inputs: Inputs, lattice: Lattice) -> Iterator[tuple[Slot, Cell]]:
        """Ask the model once at every node, then hand each slot what it expects at its pairs."""
        state = Expected(self.conditions, inputs, lattice.nodes)
        at_nodes: dict[str, Array] = {}

        def once(key: str, make: Callable[[Expected], Array]) -> Array:
            if key not in at_nodes:
                at_nodes[key] = make(state)
            return at_nodes[key]

        for slot, (pairs, owner) in zip(self.slots, self._pairs, strict=True):
            node = lattice.pair_node[pairs]
            width = once(f"width {slot.kind}", STRAY_WIDTH[slot.kind])
            width = width if width.ndim == 1 else width[node]
            if slot.delay is None:
                expected, shared = self._as_read(slot, once(slot.kind, EXPECTED[slot.kind]), inputs)
                expected, shared = _taken(expected, node), _taken(shared, node)
            else:
                motion = once("motion", lambda state: state.motion)[:, node]
                radius = state.radius_during(slot.delay[owner][:, None], motion)
                expected, shared = self._as_read(slot, radius, inputs, MOTION_ERROR * motion[0])
            yield slot, Cell(slot.value[:, owner, None], slot.u[:, owner, None], expected, shared, width)

    def _as_read(self, slot: Slot, expected: Array, inputs: Inputs, error: Array | float = 0.0) -> tuple[Array, Array]:
        """What the instruments make of true values (m, draws): expected readings and their shared scatter, (r, m, draws).

        `error` is the standard deviation that the closed form itself adds.
        """
        factors = [reading_factor(slot.kind, self.tables[n], self.conditions, inputs) for n in slot.tables]
        scatter = inputs[f"scatter.{slot.kind}"]
        if KINDS[slot.kind].logarithmic:
            level = np.log(np.maximum(expected, TINY))
            shared = np.atleast_2d(np.hypot(scatter, error))[None]
            return np.stack([level + np.log(factor) for factor in factors]), shared
        spread = scatter * expected if slot.kind in RELATIVE_SCATTER else np.atleast_2d(scatter)
        if np.ndim(error):
            spread = np.hypot(spread, error)
        offset = reading_offset(slot.kind, self.conditions, inputs)
        return np.stack([expected * factor + offset for factor in factors]), np.stack(
            [spread * factor for factor in factors]
        )

    # -- samples -------------------------------------------------------------------------------------------------

    def _cells_of_samples(self, inputs: Inputs, product: Array | None) -> Iterator[tuple[Slot, Cell]]:
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
        for slot in self.sample_slots:
            expected, shared = self._as_read(slot, np.exp(log_median[slot.target]), inputs, error[slot.target])
            yield slot, Cell(slot.value[..., None], slot.u[..., None], expected, shared, np.ones(1))

    def _sample_terms(self, inputs: Inputs, product: Array | None) -> Array:
        """Log-likelihood of the samples' readings, (draws,)."""
        total = np.zeros(_draws(inputs))
        for slot, cell in self._cells_of_samples(inputs, product):
            part = mixture.density(cell, inputs["stray_rate"], censored=slot.censored)
            total = total + np.log(np.maximum(part, 1e-300)).sum(axis=0)
        return total


def _draws(inputs: Inputs) -> int:
    """Return the number of draws: the length of any input that is sampled."""
    return max(np.size(value) for value in inputs.values())


def _taken(values: Array, node: Index) -> Array:
    """Values (r, nodes, draws) at some nodes; what does not differ between nodes stays as it is."""
    return values if values.ndim < 3 or values.shape[1] == 1 else values[:, node]


def _average(slot: Slot, cell: Cell, owner: Index, weights: Array, rate: Array) -> tuple[Array, Array, Array]:
    """Average over each cell's pairs: stray probability, expected reading, its variance; (r, c, draws) each."""
    stray = mixture.stray_probability(cell, rate, censored=slot.censored)
    expected = np.broadcast_to(cell.expected, stray.shape)
    spread = np.broadcast_to(cell.shared, stray.shape)
    if KINDS[slot.kind].logarithmic:
        expected = np.exp(expected)
        spread = spread * expected
    first = np.searchsorted(owner, np.arange(len(slot.target)))

    def average(part: Array) -> Array:
        return np.asarray(np.add.reduceat(weights * part, first, axis=1))

    mean = average(expected)
    return average(stray), mean, average(expected**2 + spread**2) - mean**2

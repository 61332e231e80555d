"""One lattice of energies shared by all shots, on which each shot's own deviation is integrated out."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from reconcile.campaign.readings import Shot
from reconcile.inference.model import Array, Conditions, Exposures

Index = NDArray[np.intp]

STEP = 0.0125  # in the logarithm of energy: below 1.2 standard deviations of an ordinary shot
_STEP_OF_NARROWEST = 1.4  # step over a shot's standard deviation: the trapezoid rule is then right to 1e-4
_MOST_HALVINGS = 4
REACH = 2.1  # largest deviation considered, a factor of 8; a misread beyond that lies outside


@dataclass(frozen=True, slots=True)
class ShotTable:
    """What the model needs of each shot, as columns of length n in the log's order."""

    log_energy: Array  # ln(logged energy × filter transmission / 1 J)
    pulses: Array
    spot_radius: Array  # [m] nominal
    standoff: Array  # [m] nominal; NaN without a probe
    sites: Array
    fitted: NDArray[np.bool_]  # not set aside

    @classmethod
    def of(cls, shots: tuple[Shot, ...], conditions: Conditions) -> ShotTable:
        """Turn shots into columns."""
        standoff = np.nan if conditions.standoff is None else conditions.standoff
        return cls(
            log_energy=np.log([shot.metered_energy * shot.transmission for shot in shots]),
            pulses=np.array([float(shot.pulses) for shot in shots]),
            spot_radius=np.array([shot.spot_radius or conditions.spot_radius for shot in shots]),
            standoff=np.array([shot.standoff or standoff for shot in shots]),
            sites=np.array([float(shot.sites) for shot in shots]),
            fitted=np.array([shot.set_aside is None for shot in shots]),
        )

    def exposures(self, index: Index, deviation: Array | float) -> Exposures:
        """Exposures of some shots, shape (len(index), draws) as `deviation` broadcasts."""
        column = np.asarray(index)[:, None]
        return Exposures(
            np.exp(self.log_energy[column] + deviation),
            self.pulses[column],
            self.spot_radius[column],
            self.standoff[column],
        )


@dataclass(frozen=True, slots=True)
class Lattice:
    """Points of integration: nodes, at which the model is asked once, and the (shot, node) pairs that use them.

    Pairs of one shot stand together, in order of energy; `first` gives where each shot's begin.
    """

    step: float
    shots: Index  # (s,) index of each shot that has pairs, in order
    first: Index  # (s,) its first pair
    pair_shot: Index  # (q,) position in `shots`
    pair_node: Index  # (q,)
    deviation: Array  # (q, 1) ln of the pair's energy over the logged one
    nodes: Exposures  # (nodes, 1)

    @classmethod
    def of(cls, table: ShotTable, points: dict[int, Index], step: float) -> Lattice:
        """Build the lattice from the points of each shot: whole multiples of `step` in ln energy."""
        shots = np.array(sorted(points), dtype=np.intp)
        counts = np.array([len(points[shot]) for shot in shots], dtype=np.intp)
        pair_shot = np.repeat(np.arange(len(shots)), counts)
        pair_point = np.concatenate([points[shot] for shot in shots])
        owner = shots[pair_shot]
        keys = np.stack(
            [
                pair_point.astype(float),
                table.pulses[owner],
                table.spot_radius[owner],
                np.nan_to_num(table.standoff[owner]),
            ]
        )
        unique, pair_node = np.unique(keys, axis=1, return_inverse=True)
        nodes = Exposures(np.exp(unique[0] * step)[:, None], unique[1][:, None], unique[2][:, None], unique[3][:, None])
        deviation = (pair_point * step - table.log_energy[owner])[:, None]
        first = np.concatenate([[0], np.cumsum(counts)[:-1]]).astype(np.intp)
        return cls(step, shots, first, pair_shot, pair_node.ravel().astype(np.intp), deviation, nodes)

    def pairs_of(self, position: int) -> slice:
        """Return where the pairs of one shot stand, by its position in `shots`."""
        end = self.first[position + 1] if position + 1 < len(self.first) else len(self.pair_shot)
        return slice(int(self.first[position]), int(end))

    def points(self) -> dict[int, Index]:
        """Return the points of each shot, as `of` takes them."""
        point = np.rint(np.log(self.nodes.energy[self.pair_node, 0]) / self.step).astype(np.intp)
        return {int(shot): point[self.pairs_of(position)] for position, shot in enumerate(self.shots)}


def full_points(table: ShotTable, shots: Index, step: float) -> dict[int, Index]:
    """Every point within reach of each shot's logged energy."""
    lowest = np.ceil((table.log_energy[shots] - REACH) / step).astype(np.intp)
    highest = np.floor((table.log_energy[shots] + REACH) / step).astype(np.intp)
    return {int(shot): np.arange(a, b + 1) for shot, a, b in zip(shots, lowest, highest, strict=True)}


def fine_step(lattice: Lattice, weights: Array) -> float:
    """Return the lattice's step, halved until it resolves the most precisely read shot.

    Parameters
    ----------
    lattice : on which `weights` stand
    weights : (q, draws) integrand of each pair
    """
    share = weights / np.add.reduceat(weights, lattice.first, axis=0)[lattice.pair_shot]
    mean = np.add.reduceat(share * lattice.deviation, lattice.first, axis=0)
    square = np.add.reduceat(share * (lattice.deviation - mean[lattice.pair_shot]) ** 2, lattice.first, axis=0)
    # A shot far narrower than the step shows one point only, and so the smallest step.
    narrowest = float(np.sqrt(square.min()))
    step = lattice.step
    for _ in range(_MOST_HALVINGS):
        if step > _STEP_OF_NARROWEST * narrowest:
            step *= 0.5
    return step


def kept_points(lattice: Lattice, weights: Array, floor: float, neighbours: int) -> dict[int, Index]:
    """Drop points whose integrand never exceeds `floor` of its peak.

    Parameters
    ----------
    lattice : with the points to choose from
    weights : (q, draws) integrand of each pair, in any unit of its own per shot
    floor : share of the peak
    neighbours : points kept on either side of a kept one
    """
    kept = {}
    for shot, points in lattice.points().items():
        position = int(np.searchsorted(lattice.shots, shot))
        own = weights[lattice.pairs_of(position)]
        above = (own > floor * own.max(axis=0)).any(axis=1)
        if not above.any():  # nowhere to be seen: every point is as good
            above[:] = True
        widened = np.convolve(above, np.ones(2 * neighbours + 1), mode="same") > 0
        kept[shot] = points[widened]
    return kept

"""Particles that touch in a micrograph told apart: one seed for each, from how deep inside the dark it lies."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from reconcile.measure.film import Flattened, Mask
from reconcile.measure.measured import Array

SHALLOWEST = 0.1  # of a seed's own depth: a neck less deep than this below it parts no two particles
LEAST_DENT = 0.5  # px
LEAST_DEPTH = 1.0  # px
DEEPER = 0.65  # of a particle's darkness: where the distance from the film is taken
FINER = 2
CORE_FROM = 3.0  # px from the film: where the blur of the rim has ended
SPOTTED = 0.02  # of a core lighter than that level: a spotted particle
_ALONG = 24  # places looked at between two seeds


@dataclass(frozen=True, slots=True)
class Seeds:
    """One rough circle for each particle."""

    row: Array  # (n,) [px]
    column: Array  # (n,)
    radius: Array  # (n,)
    group: NDArray[np.integer]  # (n,) which connected dark part it lies in, from 1
    labels: NDArray[np.integer]  # (rows, columns) those parts

    def without(self, dropped: Mask) -> Seeds:
        """Return the others."""
        kept = ~dropped
        return Seeds(self.row[kept], self.column[kept], self.radius[kept], self.group[kept], self.labels)


def find_seeds(picture: Flattened) -> Seeds:
    """Return a seed for every particle of a picture.

    A seed is a place deeper inside the dark than all around it, as in a watershed of the distance from the film; of two
    seeds the shallower one stands only where the way between them is a neck (h-maxima: Soille, Morphological Image
    Analysis, 2003, ch. 6, from memory). The distance is taken inside a level darker than half, where blur bridges less,
    and on a finer raster.
    """
    labels, number = ndimage.label(picture.dark, structure=np.ones((3, 3)))
    if not number:
        none = np.zeros(0)
        return Seeds(none, none, none, np.zeros(0, dtype=np.intp), labels)
    index = np.arange(1, number + 1)
    own = np.concatenate([[np.inf], np.atleast_1d(ndimage.maximum(picture.smooth, labels, index))])
    level = DEEPER * np.minimum(own, picture.usual)
    # Light spots inside a particle (twins, Bragg contrast) are no dents of its outline: there half of the level must do.
    core = ndimage.distance_transform_edt(np.pad(picture.dark, 1))[1:-1, 1:-1] > CORE_FROM
    light = np.bincount(labels[core & (picture.smooth < level[labels])], minlength=number + 1)
    level[light > SPOTTED * np.bincount(labels[core], minlength=number + 1)] *= 0
    fine_labels = np.kron(labels, np.ones((FINER, FINER), dtype=labels.dtype))
    fine = ndimage.zoom(picture.smooth, FINER, order=1, grid_mode=True, mode="nearest")
    inside = (fine > level[fine_labels]) & (fine_labels > 0)
    inside = np.pad(ndimage.binary_fill_holes(inside), 1)  # particles cut by the border end there
    depth = np.asarray(ndimage.distance_transform_edt(inside))[1:-1, 1:-1] / FINER
    peaks = (depth == ndimage.maximum_filter(depth, size=3)) & (depth >= LEAST_DEPTH)
    rows, columns = np.nonzero(peaks)
    order = np.argsort(-depth[rows, columns], kind="stable")
    rows, columns = rows[order], columns[order]
    kept: dict[int, list[int]] = {}
    for one in range(rows.size):
        others = kept.setdefault(int(fine_labels[rows[one], columns[one]]), [])
        if all(_parted(depth, (rows, columns), one, other) for other in others):
            others.append(one)
    chosen = np.array(sorted(one for group in kept.values() for one in group), dtype=np.intp)
    row, column = rows[chosen], columns[chosen]
    middle = 0.5 * (FINER - 1)
    return Seeds(
        (row - middle) / FINER, (column - middle) / FINER, depth[row, column], fine_labels[row, column], labels
    )


def _parted(depth: Array, places: tuple[NDArray[np.intp], NDArray[np.intp]], index: int, other: int) -> bool:
    """Return whether a neck lies between a seed and a deeper one: on the straight way, as two round particles have it."""
    rows, columns = places
    share = np.linspace(0, 1, _ALONG)
    way = [line[index] + share * (line[other] - line[index]) for line in (rows, columns)]
    lowest = float(np.min(ndimage.map_coordinates(depth, way, order=1)))
    own = float(depth[rows[index], columns[index]])
    return own - lowest > max(LEAST_DENT, SHALLOWEST * own)

"""Particles that touch in a micrograph told apart: one seed for each, from how deep inside the dark it lies."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from reconcile.measure.film import Mask
from reconcile.measure.measured import Array

SHALLOWEST = 0.1  # of a seed's own depth: a neck less deep than this below it parts no two particles
LEAST_DENT = 0.75  # px
LEAST_DEPTH = 1.0  # px
_ALONG = 24  # places looked at between two seeds


@dataclass(frozen=True, slots=True)
class Seeds:
    """One rough circle for each particle."""

    row: Array  # (n,) [px]
    column: Array  # (n,)
    radius: Array  # (n,)
    group: NDArray[np.integer]  # (n,) which connected dark part it lies in, from 1
    labels: NDArray[np.integer]  # (rows, columns) those parts


def find_seeds(dark: Mask) -> Seeds:
    """Return a seed for every particle of a picture.

    A seed is a place deeper inside the dark than all around it, as in a watershed of the distance from the film; of two
    seeds the shallower one stands only where the way between them is a neck (h-maxima: Soille, Morphological Image
    Analysis, 2003, ch. 6, from memory).
    """
    padded = np.pad(dark, 1)  # particles cut by the border end there
    depth = ndimage.distance_transform_edt(padded)[1:-1, 1:-1] - 0.5
    labels, _ = ndimage.label(dark, structure=np.ones((3, 3)))
    eased = ndimage.gaussian_filter(depth, 0.7)
    peaks = (eased == ndimage.maximum_filter(eased, size=3)) & (depth >= LEAST_DEPTH) & dark
    rows, columns = np.nonzero(peaks)
    order = np.argsort(-eased[rows, columns], kind="stable")
    rows, columns = rows[order], columns[order]
    kept: dict[int, list[int]] = {}
    for index in range(rows.size):
        others = kept.setdefault(int(labels[rows[index], columns[index]]), [])
        if all(_parted(eased, (rows, columns), index, other) for other in others):
            others.append(index)
    chosen = np.array(sorted(index for group in kept.values() for index in group), dtype=np.intp)
    row, column = rows[chosen], columns[chosen]
    return Seeds(row.astype(float), column.astype(float), depth[row, column], labels[row, column], labels)


def _parted(depth: Array, places: tuple[NDArray[np.intp], NDArray[np.intp]], index: int, other: int) -> bool:
    """Return whether a neck lies between a seed and a deeper one: on the straight way, as two round particles have it."""
    rows, columns = places
    share = np.linspace(0, 1, _ALONG)
    way = [line[index] + share * (line[other] - line[index]) for line in (rows, columns)]
    lowest = float(np.min(ndimage.map_coordinates(depth, way, order=1)))
    own = float(depth[rows[index], columns[index]])
    return own - lowest > max(LEAST_DENT, SHALLOWEST * own)

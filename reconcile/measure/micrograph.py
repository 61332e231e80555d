"""A bright-field electron micrograph → the diameters of the particles that lie whole within it.

Area-equivalent diameters √(4A/π) inside the half level between particle and film, as ISO 13322-1 has it (from memory).
A large particle is cut by the border more often than a small one; each whole particle therefore counts with the inverse of
the chance that one of its size lies whole within the frame (Miles 1974, Lantuéjoul 1980; ISO 13322-1; from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import ndimage

from reconcile.measure.film import Flattened, Mask, flatten
from reconcile.measure.measured import Array, Outline, Stroke, Unmeasurable
from reconcile.measure.rims import RAYS, Rims, blur_of, find_rims, flat_shoulder, unblurred
from reconcile.measure.touching import Seeds, find_seeds

LEAST_DIAMETER = 5.0  # px: some twenty pixels (common practice); smaller ones are counted, not measured
LEAST_SEEN = 0.3  # of a rim
ROUGHEST = 0.12  # relative scatter of a rim about an ellipse
UNEXPLAINED = 0.12  # of a cluster's area outside all rims found in it
DOMED = 0.04  # of a particle's darkness: by how much a disc of the same blur would be darker towards its rim
NESTED = 0.8  # of the larger one's radius
SMALL_SHARE = 0.02  # of the particles; more small ones than this are told


@dataclass(frozen=True, slots=True)
class Particles:
    """The whole particles of one micrograph."""

    diameters: Array  # (n,) area-equivalent [m]
    weights: Array  # (n,) at least 1: the inverse of the chance that such a particle lies whole within the frame
    outline: Outline
    remarks: tuple[str, ...] = ()


def measure_micrograph(frame: Array, pixel_pitch: float) -> Particles:
    """Measure the particles in a micrograph.

    Parameters
    ----------
    frame : Array
        (rows, columns) Brightness, any unit; the film bright, particles dark.
    pixel_pitch : float
        Width of a pixel, nominal [m].

    Returns
    -------
    Particles
        Those that lie whole within the frame, each with its weight; touching ones told apart.

    Raises
    ------
    Unmeasurable
        The frame is no picture, nothing dark lies on it, the contrast is lost in the noise, or no particle is whole.
    """
    if frame.ndim != 2 or min(frame.shape) < 32 or not np.all(np.isfinite(frame)):
        raise Unmeasurable(
            f"an array of shape {frame.shape}", "a grey picture of at least 32 by 32 pixels", "Check the file."
        )
    picture = flatten(np.asarray(frame, dtype=np.float64))
    seeds = find_seeds(picture)
    if seeds.row.size == 0:
        raise _no_particle("nothing but specks")
    rims = find_rims(picture, seeds)
    nested = _nested(rims, seeds)
    if nested.any():
        seeds = seeds.without(nested)
        rims = find_rims(picture, seeds)
    blur = blur_of(rims.slope, rims.radius)
    radius = unblurred(rims.radius, blur)
    whole = _whole(rims, frame.shape)
    cluster = _unsplit(picture, seeds, rims)
    small = 2 * radius < LEAST_DIAMETER
    kept = whole & ~cluster & ~small
    if not kept.any():
        raise _no_particle(
            f"{whole.size} dark spots: {np.count_nonzero(~whole)} at the border, {np.count_nonzero(small)} too small, "
            f"{np.count_nonzero(cluster)} in clusters that cannot be told apart"
        )
    diameters = 2 * radius[kept] * pixel_pitch
    strokes = tuple(
        Stroke(rims.line(index), "found" if kept[index] else "left-out")
        for index in range(whole.size)
        if kept[index] or rims.free[index].any()
    )
    caption = f"{diameters.size} whole particles, median {_median(diameters)}"
    remarks = _remarks(whole & cluster, whole & small & ~cluster, int(kept.sum()))
    remarks += _domed(rims.shoulder[kept] - flat_shoulder(radius[kept], blur))
    return Particles(diameters, _weights(rims, frame.shape)[kept], Outline(strokes, caption), remarks)


def _no_particle(found: str) -> Unmeasurable:
    return Unmeasurable(
        found, "at least one particle that lies whole within the frame", "Take the picture at another magnification."
    )


def _whole(rims: Rims, shape: tuple[int, ...]) -> Mask:
    """Return which particles lie whole within the frame, a pixel's margin included."""
    top, bottom, left, right = _extent(rims)
    return np.asarray((top >= 1) & (left >= 1) & (bottom <= shape[0] - 2) & (right <= shape[1] - 2))


def _extent(rims: Rims) -> tuple[Array, Array, Array, Array]:
    angle = np.arange(RAYS) * 2 * np.pi / RAYS
    down, across = rims.rim * np.sin(angle), rims.rim * np.cos(angle)
    return (
        rims.row + down.min(axis=1),
        rims.row + down.max(axis=1),
        rims.column + across.min(axis=1),
        rims.column + across.max(axis=1),
    )


def _median(diameters: Array) -> str:
    """Return the median with the standard uncertainty that the number of particles leaves it.

    That of a lognormal population's: √(π/2) of the mean's of the logarithm.
    """
    spread = 1.4826 * float(np.median(np.abs(np.log(diameters / np.median(diameters)))))
    median = 1e9 * float(np.median(diameters))
    u = median * spread * float(np.sqrt(0.5 * np.pi / diameters.size))
    if u == 0:
        return f"{median:.3g} nm"
    decimals = max(1 - int(np.floor(np.log10(u))), 0)
    return f"{median:.{decimals}f} nm ± {u:.{decimals}f} nm"


def _weights(rims: Rims, shape: tuple[int, ...]) -> Array:
    """Return the inverse of the chance that each particle, put down anywhere, lies whole within the frame."""
    top, bottom, left, right = _extent(rims)
    rows, columns = shape[0] - 3.0, shape[1] - 3.0
    # Against the frame's whole area: the number of particles a frame would hold were none lost at its border.
    free_rows = np.maximum(rows - (bottom - top), 1)
    free_columns = np.maximum(columns - (right - left), 1)
    return np.asarray(rows * columns / (free_rows * free_columns))


def _nested(rims: Rims, seeds: Seeds) -> Mask:
    """Return which seeds have their middle well inside a larger rim of the same dark part: one particle seen twice."""
    nested = np.zeros(seeds.row.size, dtype=bool)
    radius = rims.radius
    for index in np.argsort(radius, kind="stable"):
        others = (seeds.group == seeds.group[index]) & ~nested & (radius >= radius[index])
        others[index] = False
        distance = np.hypot(rims.row[others] - rims.row[index], rims.column[others] - rims.column[index])
        nested[index] = bool(np.any(distance < NESTED * radius[others]))
    return nested


def _unsplit(picture: Flattened, seeds: Seeds, rims: Rims) -> Mask:
    """Return which seeds belong to something that the rims found do not explain: a cluster, a fold, a ragged particle."""
    seen = rims.free.mean(axis=1)
    poor = (seen < LEAST_SEEN) | (rims.rough > ROUGHEST)
    explained = _painted(rims, picture.dark.shape)
    index = np.arange(1, int(seeds.labels.max()) + 1)
    area = np.atleast_1d(ndimage.sum_labels(picture.dark, seeds.labels, index))
    outside = np.atleast_1d(ndimage.sum_labels(picture.dark & ~explained, seeds.labels, index))
    unexplained = outside > UNEXPLAINED * area
    return np.asarray(poor | unexplained[seeds.group - 1])


def _painted(rims: Rims, shape: tuple[int, ...]) -> Mask:
    """Return the pixels within a pixel of the inside of any rim."""
    inside = np.zeros(shape, dtype=bool)
    for index in range(rims.row.size):
        reach = float(rims.rim[index].max()) + 2
        top, bottom = max(int(rims.row[index] - reach), 0), min(int(rims.row[index] + reach) + 2, shape[0])
        left, right = max(int(rims.column[index] - reach), 0), min(int(rims.column[index] + reach) + 2, shape[1])
        down = np.arange(top, bottom)[:, None] - rims.row[index]
        across = np.arange(left, right)[None, :] - rims.column[index]
        ray = np.round(np.arctan2(down, across) * RAYS / (2 * np.pi)).astype(int) % RAYS
        inside[top:bottom, left:right] |= np.hypot(down, across) <= rims.rim[index][ray] + 1
    return inside


def _domed(missing: Array) -> tuple[str, ...]:
    """Say where particles are darker in their middle, as thin spheres are: their half level lies inside their rim."""
    told = missing[np.isfinite(missing)]
    if told.size < 3 or float(np.median(told)) > -DOMED:
        return ()
    return (
        "the particles are darker in the middle than towards their rims, as where the contrast is that of their thickness: "
        "diameters at the half level are several per cent too small",
    )


def _remarks(clusters: Mask, small: Mask, kept: int) -> tuple[str, ...]:
    remarks = []
    if clusters.any():
        remarks.append(f"{np.count_nonzero(clusters)} particles in clusters that cannot be told apart were left out")
    if np.count_nonzero(small) > SMALL_SHARE * kept:
        remarks.append(
            f"{np.count_nonzero(small)} particles below {LEAST_DIAMETER:.0f} pixels across were left out: "
            "the median is that of the larger ones"
        )
    return tuple(remarks)

"""A first look at a frame, in blocks: its light, the target along its lower side, and what stands on it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from reconcile.measure.circle import fit_circle
from reconcile.measure.measured import Array, Unmeasurable

NDArrayBool = NDArray[np.bool_]

BLOCKS = 128  # along the shorter side, of the first look; a noisy frame gets fewer
FEWEST = 24
_MOST_THINGS = 6  # on the target that are looked at, the largest first
_QUIET = 0.06  # of the frame's contrast: noise of a block that the search for edges bears
STEEPEST = np.tan(np.radians(4.0))  # of the target's edge; tilts up to 3° are promised
_ORDER = 2  # of the polynomial in columns and rows that describes the light


@dataclass(frozen=True, slots=True)
class Scene:
    """A frame with its light taken out, the target at its lower side."""

    flat: Array  # (rows, columns), 1 where only light falls
    noise: float  # of one pixel of `flat`, where light falls
    band: float  # level of the target
    intercept: float  # of the target's edge: row = intercept + slope * column [px]
    slope: float
    block: int  # pixels along one side of a block

    def row_of_edge(self, columns: NDArray[Any]) -> Array:
        """Return the rows of the target's edge."""
        return self.intercept + self.slope * np.asarray(columns, dtype=float)

    def above(self, columns: NDArray[Any], rows: NDArray[Any]) -> Array:
        """Return how far points lie above the target's edge [px]."""
        return (self.row_of_edge(columns) - rows) / float(np.hypot(1.0, self.slope))


@dataclass(frozen=True, slots=True)
class Cap:
    """A dark thing on the target, as blocks show it."""

    column: float  # of the centre [px]
    row: float
    radius: float  # [px]
    ragged: float  # scatter of the outline's points about the circle [px]


def look(frame: Array, background: Array | None = None) -> Scene:
    """Take a frame's light out and find the target.

    Parameters
    ----------
    frame : array (rows, columns), any scale, the target at the lower side
    background : a frame of the same light without a bubble

    Raises
    ------
    Unmeasurable
        There is no structure, or no dark band along the lower side.
    """
    block = max(2, min(frame.shape) // BLOCKS)
    if background is not None:
        frame = _divided(frame, background, block)
    noise = pixel_noise(frame)
    coarse, spread = _coarse(frame, block)
    while noise / block > _QUIET * spread and 2 * block <= min(frame.shape) // FEWEST:
        block *= 2
        coarse, spread = _coarse(frame, block)
    if not spread > max(5.0 * noise / block, 0.02 * float(np.abs(coarse).max())):
        raise Unmeasurable(
            "a frame without structure",
            "a dark target under a bright background",
            "Look whether light, shutter and trigger worked for this shot.",
        )
    light, bright = _light(coarse)
    ratio = coarse / light
    band = float(np.median(ratio[-1]))
    dark = ratio < 0.5 * (1.0 + band)
    if band > 0.75 or np.mean(dark[-1]) < 0.6:
        raise Unmeasurable(
            "no dark band along the side on which the target should lie",
            "the target's edge in the frame",
            "Check target_edge in the manifest, or whether the frame was cut.",
        )
    intercept, slope = _edge_of_band(dark)
    flat = frame / _spread_out(light, frame.shape, block)
    lit = float(np.median(light[bright]))
    return Scene(flat, noise / lit, band, (intercept + 0.5) * block - 0.5, slope, block)


def _coarse(frame: Array, block: int) -> tuple[Array, float]:
    """Return the blocks' means, and how far apart the darkest and the brightest of them lie."""
    coarse = averaged(frame, block)
    return coarse, float(np.ptp(np.quantile(coarse, [0.02, 0.98])))


def averaged(frame: Array, block: int) -> Array:
    """Return means of square blocks; what does not fill a block at the lower and right sides is left out."""
    rows, columns = frame.shape[0] // block, frame.shape[1] // block
    cut = frame[: rows * block, : columns * block].reshape(rows, block, columns, block)
    return np.asarray(cut.mean(axis=(1, 3)), dtype=float)


def pixel_noise(frame: Array) -> float:
    """Return the standard deviation of the noise of one pixel, from differences of neighbours in the brighter half."""
    middle = frame[:, 1:-1]
    curved = middle - 0.5 * (frame[:, :-2] + frame[:, 2:])  # no slope of the light is left in it
    chosen = curved[middle >= np.median(middle)]
    return float(1.4826 * np.median(np.abs(chosen)) / np.sqrt(1.5))


def _divided(frame: Array, background: Array, block: int) -> Array:
    """Divide by the background's own unevenness, but for the target that may be in it too."""
    if background.shape != frame.shape:
        raise Unmeasurable(
            f"a frame of {frame.shape[1]} x {frame.shape[0]} pixels",
            f"the background's {background.shape[1]} x {background.shape[0]}",
            "Take the background out of the manifest, or give one of the same size.",
        )
    coarse = averaged(background, block)
    light, bright = _light(coarse)
    ratio = background / _spread_out(light, background.shape, block)
    labels, _ = ndimage.label(~bright)
    below = np.isin(labels, np.setdiff1d(labels[-1], 0))
    below = ndimage.binary_dilation(below, iterations=max(2, 8 // block))
    kept = _spread_out(below.astype(float), background.shape, block) < 0.25
    return np.asarray(frame / np.where(kept & (ratio > 0.5), ratio, 1.0))


def _terms(rows: int, columns: int) -> Array:
    down, along = np.meshgrid(np.linspace(-1, 1, rows), np.linspace(-1, 1, columns), indexing="ij")
    powers = [(i, j) for i in range(_ORDER + 1) for j in range(_ORDER + 1 - i)]
    return np.stack([along.ravel() ** i * down.ravel() ** j for i, j in powers], axis=1)


def _light(coarse: Array) -> tuple[Array, NDArrayBool]:
    """Return the light as a smooth surface through the bright blocks, and which blocks these are."""
    terms = _terms(*coarse.shape)
    values = coarse.ravel()
    bright = values > _between(values)
    floor = 0.2 * float(np.median(values[bright]))
    surface = np.full(values.shape, float(np.median(values[bright])))
    for _ in range(12):
        found = np.linalg.lstsq(terms[bright], values[bright], rcond=None)[0]
        surface = np.maximum(terms @ found, floor)
        ratio = values / surface
        dark = float(np.median(ratio[~bright])) if (~bright).any() else 0.0
        # What is clearly darker or brighter than its surroundings is no light: edges, rings, dust.
        spread = 1.4826 * float(np.median(np.abs(ratio[bright] - 1.0)))
        again = np.abs(ratio - 1.0) < min(max(4.0 * spread, 0.02), 0.5 * (1.0 - min(dark, 0.8)))
        if np.array_equal(again, bright) or again.sum() < 3 * terms.shape[1]:
            break
        bright = again
    return surface.reshape(coarse.shape), bright.reshape(coarse.shape)


def _between(values: Array) -> float:
    """Return the level that parts values into two classes of least spread (Otsu 1979)."""
    ordered = np.sort(values)
    count = np.arange(1, len(ordered))
    low = np.cumsum(ordered)[:-1] / count
    high = (ordered.sum() - np.cumsum(ordered)[:-1]) / (len(ordered) - count)
    at = int(np.argmax(count * (len(ordered) - count) * (high - low) ** 2))
    return float(0.5 * (ordered[at] + ordered[at + 1]))


def _spread_out(coarse: Array, shape: tuple[int, ...], block: int) -> Array:
    """Return block values at every pixel, interpolated between the blocks' centres."""
    rows = (np.arange(shape[0]) + 0.5) / block - 0.5
    columns = (np.arange(shape[1]) + 0.5) / block - 0.5
    return _at(_at(coarse, rows, 0), columns, 1)


def _at(values: Array, where: Array, axis: int) -> Array:
    last = values.shape[axis] - 2
    before = np.clip(np.floor(where).astype(int), 0, max(last, 0))
    part = np.expand_dims(where - before, 1 - axis)
    after = np.minimum(before + 1, values.shape[axis] - 1)
    return np.take(values, before, axis) * (1.0 - part) + np.take(values, after, axis) * part


def _edge_of_band(dark: NDArrayBool) -> tuple[float, float]:
    """Return the straight upper edge of the band, in blocks: row = intercept + slope * column.

    Of the lines through two columns' edges, the one on which most columns' edges lie and that few fall short of: where
    a bubble stands the dark reaches higher, but nothing makes it end lower.
    """
    rows, columns = dark.shape
    upward = dark[::-1]
    height = np.where(upward.all(axis=0), rows, np.argmin(upward, axis=0))
    top = rows - height - 0.5  # the boundary above the last dark block
    along = np.arange(columns, dtype=float)
    chosen = np.unique(np.linspace(0, columns - 1, 28).astype(int))
    best, answer = -np.inf, (float(np.median(top)), 0.0)
    for i, first in enumerate(chosen):
        for second in chosen[i + 3 :]:
            slope = (top[second] - top[first]) / (second - first)
            if abs(slope) > STEEPEST + 1.0 / (second - first):
                continue
            miss = top - (top[first] + slope * (along - first))
            score = float(np.sum(np.abs(miss) <= 1.0) - 2.0 * np.sum(miss > 2.0) - 5.0 * abs(slope))
            if score > best:
                best, answer = score, (float(top[first] - slope * first), float(slope))
    near = np.abs(top - (answer[0] + answer[1] * along)) <= 1.5
    if near.sum() < max(4, 0.1 * columns):
        raise Unmeasurable(
            "no straight edge of the target",
            "the target's edge beside the bubble, straight and tilted by less than 3°",
            "Turn or cut the frame so that the target lies along one side, or measure it by hand.",
        )
    slope, intercept = np.polyfit(along[near], top[near], 1)
    return float(intercept), float(slope)


def standing(scene: Scene, block: int, depth: float, margin: float = 0.0) -> tuple[list[Cap], float]:
    """Return what stands on the target and is darker than the light by `depth`, the largest first.

    Parameters
    ----------
    scene : the frame
    block : pixels along one side of the blocks in which it is looked for
    depth : how much darker than the light, 0 to 1
    margin : how far above the target's edge its blur reaches [px]

    Returns
    -------
    list of Cap, float
        Those of a circular outline, and the area of the largest of all [px²].
    """
    margin = max(1.2 * block, margin)
    ratio = averaged(scene.flat, block)
    rows = (np.arange(ratio.shape[0]) + 0.5) * block - 0.5
    columns = (np.arange(ratio.shape[1]) + 0.5) * block - 0.5
    height = scene.above(columns[None, :], rows[:, None])
    mask = (ratio < 1.0 - depth) & (height > margin)
    labels, _ = ndimage.label(mask)
    low = np.setdiff1d(np.unique(labels[(height < margin + 2.0 * block) & mask]), 0)
    if not len(low):
        return [], 0.0
    sizes = np.atleast_1d(ndimage.sum_labels(mask, labels, low))
    caps = []
    for at in np.argsort(-sizes)[:_MOST_THINGS]:
        points = _outline(labels == low[at], block) if sizes[at] >= 8 else np.empty((0, 2))
        cap = _cap(points, scene, block) if len(points) >= 5 else None
        caps += [cap] if cap is not None else []
    return caps, float(sizes.max()) * block**2


def _outline(mask: NDArrayBool, block: int) -> Array:
    """Return points (column, row) [px] of the outer boundary: the highest of each column, the outermost of each row."""
    rows, columns = mask.shape
    points: list[tuple[float, float]] = []
    for row in np.flatnonzero(mask.any(axis=1)):
        across = np.flatnonzero(mask[row]).astype(float)
        at = float(row)
        points += [(across[0] - 0.5, at)] if across[0] > 0 else []
        points += [(across[-1] + 0.5, at)] if across[-1] < columns - 1 else []
    for column in np.flatnonzero(mask.any(axis=0)):
        highest = int(np.argmax(mask[:, column]))
        points += [(float(column), highest - 0.5)] if highest > 0 else []
    return (np.array(points, dtype=float).reshape(-1, 2) + 0.5) * block - 0.5


def _cap(points: Array, scene: Scene, block: int) -> Cap | None:
    high = float(scene.above(points[:, 0], points[:, 1]).max())
    across = float(np.ptp(points[:, 0]))
    column = 0.5 * float(points[:, 0].min() + points[:, 0].max())
    level = float(scene.row_of_edge(np.array(column)))
    start = np.array([column, level, max(0.5 * across, high, 1.0)])
    fit = fit_circle(points, start, (level, max(0.2 * float(start[2]), 2.0 * block)))
    column, row, radius = (float(value) for value in fit.values)
    if not 0.0 < radius < 4.0 * max(scene.flat.shape):
        return None
    return Cap(column, row, radius, fit.scatter)

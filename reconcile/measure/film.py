"""A micrograph's bright film: flattened, its noise, and where something darker lies on it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from reconcile.measure.measured import Array, Unmeasurable

Mask = NDArray[np.bool_]

SMOOTH = 1.0  # px; Gaussian through which outlines are looked for
SEEN = 6.0  # noise of the smoothed picture
LEAST_CONTRAST = 3.0  # noise of a pixel
FAINT = 0.2  # of the usual darkness: what is fainter is no particle
_BLOCK = 8  # px
_QUADRATIC = 6  # terms of a surface of second order
_MAD = 1.4826  # median absolute deviation of a normal distribution → standard deviation


@dataclass(frozen=True, slots=True)
class Flattened:
    """A micrograph as darkness: 0 on the film, 1 where no light comes through."""

    darkness: Array  # (rows, columns)
    smooth: Array  # (rows, columns) the same through a Gaussian of SMOOTH
    noise: float  # of a pixel's darkness
    usual: float  # darkness of the particles
    dark: Mask  # (rows, columns) inside the half level of each particle, holes filled


def flatten(frame: Array) -> Flattened:
    """Divide a bright-field micrograph by its film and find what is darker.

    Parameters
    ----------
    frame : Array
        (rows, columns) Brightness, any unit; particles dark.

    Raises
    ------
    Unmeasurable
        Nothing dark lies on the film, or it is hardly darker than the noise.
    """
    film = _smooth_surface(frame)
    darkness = 1 - frame / film
    for width in (max(min(frame.shape) / 6, 12.0), max(min(frame.shape) / 12, 12.0)):
        level = _level(darkness)
        free = ~ndimage.binary_dilation(ndimage.gaussian_filter(darkness, SMOOTH) > 0.3 * level, iterations=4)
        if np.count_nonzero(free) > 0.1 * free.size:
            film = film * (1 - _local_mean(darkness, free, width))
            darkness = 1 - frame / film
    level = _level(darkness)
    smooth = ndimage.gaussian_filter(darkness, SMOOTH)
    free = ~ndimage.binary_dilation(smooth > 0.3 * level, iterations=4)
    if np.count_nonzero(free) < 100:
        raise _nothing("a picture without free film", "particles that leave most of the film free")
    noise = _MAD * float(np.median(np.abs(darkness[free] - np.median(darkness[free]))))
    smooth_noise = _MAD * float(np.median(np.abs(smooth[free])))
    threshold, usual = _threshold(smooth, smooth_noise)
    if usual < LEAST_CONTRAST * noise:
        raise _nothing(f"spots {usual / noise:.1f} times as dark as the noise", "a contrast of at least 3 noise")
    dark = _with_faint(smooth, threshold, max(SEEN * smooth_noise, FAINT * usual))
    return Flattened(darkness, smooth, noise, usual, np.asarray(ndimage.binary_fill_holes(dark)))


def _nothing(found: str, expected: str) -> Unmeasurable:
    return Unmeasurable(found, expected, "Take the picture again, in focus and with more contrast.")


def _smooth_surface(frame: Array) -> Array:
    """Return a curved surface through the bright part of small blocks, blocks under particles left out step by step."""
    rows, columns = (size // _BLOCK for size in frame.shape)
    blocks = frame[: rows * _BLOCK, : columns * _BLOCK].reshape(rows, _BLOCK, columns, _BLOCK)
    bright = np.percentile(blocks, 60, axis=(1, 3))
    y, x = np.meshgrid(np.linspace(-1, 1, rows), np.linspace(-1, 1, columns), indexing="ij")
    design, values = _terms(y.ravel(), x.ravel()), bright.ravel()
    used = (bright >= ndimage.percentile_filter(bright, 70, size=max(min(rows, columns) // 4, 3))).ravel()
    solution = np.zeros(design.shape[1])
    for step in range(14):
        terms = design.shape[1] if step > 7 and np.count_nonzero(used) > 0.4 * used.size else _QUADRATIC
        found = np.linalg.lstsq(design[used, :terms], values[used], rcond=None)[0]
        solution = np.concatenate([found, np.zeros(design.shape[1] - terms)])
        away = values - design @ solution
        spread = _MAD * float(np.median(away[away > 0])) if (away > 0).any() else 0.0
        bounds = away > -2 * spread - 1e-12
        if np.count_nonzero(bounds) < max(3 * design.shape[1], 0.1 * used.size):
            break
        used = bounds
    y, x = np.meshgrid(np.linspace(-1, 1, frame.shape[0]), np.linspace(-1, 1, frame.shape[1]), indexing="ij")
    film = (_terms(y.ravel(), x.ravel()) @ solution).reshape(frame.shape)
    usual = float(np.median(values[used]))
    if usual <= 0:
        raise _nothing("a picture without brightness", "dark particles on a bright film")
    return np.asarray(np.clip(film, 0.3 * usual, 3 * usual))  # no film is more uneven than that


def _terms(y: Array, x: Array) -> Array:
    return np.stack([np.ones_like(x), x, y, x * x, x * y, y * y, x**3, x * x * y, x * y * y, y**3], axis=1)


def _local_mean(values: Array, used: Mask, width: float) -> Array:
    weight = ndimage.gaussian_filter(used.astype(float), width)
    total = ndimage.gaussian_filter(np.where(used, values, 0.0), width)
    return np.asarray(np.where(weight > 1e-3, total / np.maximum(weight, 1e-3), 0.0))


def _level(darkness: Array) -> float:
    """Return the usual darkness of what is dark, without knowing the noise well yet."""
    smooth = ndimage.gaussian_filter(darkness, SMOOTH)
    low, high = np.percentile(smooth, [0.5, 99.5])
    film = smooth[smooth <= 0.5 * (low + high)]  # on the bright side of half-way, however much is covered
    centre = float(np.median(film))
    noise = _MAD * float(np.median(centre - film[film <= centre]))
    return _threshold(smooth, noise)[1]


def _threshold(smooth: Array, noise: float) -> tuple[float, float]:
    """Return the half level and the usual darkness (Ridler and Calvard 1978, IEEE SMC 8, 630, from memory).

    The mean of what is darker than half the mean of what is darker, until it stays.
    """
    threshold = max(SEEN * noise, 1e-9)
    usual = 0.0
    for _ in range(50):
        above = smooth[smooth > threshold]
        if above.size < 12:
            raise _nothing("a picture without anything dark on its film", "dark particles on a bright film")
        usual = float(np.median(above))
        if abs(0.5 * usual - threshold) < 1e-3 * usual or 0.5 * usual < threshold:
            break
        threshold = 0.5 * usual
    return threshold, usual


def _with_faint(smooth: Array, threshold: float, least: float) -> Mask:
    """Return what is darker than the threshold, and each fainter spot inside half of its own darkness."""
    dark = smooth > threshold
    labels, number = ndimage.label(smooth > min(least, threshold))
    if not number:
        return np.asarray(dark)
    index = np.arange(1, number + 1)
    peak = np.concatenate([[0.0], np.atleast_1d(ndimage.maximum(smooth, labels, index))])
    own = np.where(peak > threshold, threshold, 0.5 * peak)
    return np.asarray((labels > 0) & (smooth > own[labels]))

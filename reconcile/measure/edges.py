"""Where dark turns to bright along a profile, to a small part of a pixel."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.ndimage import median_filter
from scipy.special import ndtr

from reconcile.measure.measured import Array

_CLEAR = 2.2  # widths from the edge beyond which 1.4 % or less of the step is left
_ROUNDS = 8


@dataclass(frozen=True, slots=True)
class Edges:
    """The edge in each of several profiles."""

    position: Array  # (profiles,) at half the step between the two levels, in the unit of the profiles' positions
    dark: Array  # (profiles,) level before the edge
    bright: Array  # (profiles,) level behind it
    width: float  # standard deviation of the blur, common to all
    shape: (
        float  # how far the mean profile's half level lies from the fitted edge: what the shape of the blur leaves open
    )


def find_edges(profiles: Array, along: Array, guess: Array, width: float, reach: float, free: bool = True) -> Edges:
    """Fit a blurred step to each profile.

    The step is the cumulative normal distribution about the half level; its levels are medians of the profile on either
    side, clear of the blur, and of the neighbouring profiles. Samples count the less the farther they are from the half
    level, since diffraction fringes and reflections lie farther out.

    Parameters
    ----------
    profiles : array (profiles, samples), dark first; neighbours side by side
    along : array (samples,), positions, evenly ascending
    guess : array (profiles,), first positions
    width : standard deviation of the blur, or a first guess of it
    reach : how far beyond the blur the levels are taken from
    free : whether the width is to be found too

    Returns
    -------
    Edges
        With NaN positions where a profile has no step upwards.
    """
    position = np.clip(guess, along[0], along[-1])
    bend = 0.0
    widest = 0.25 * float(along[-1] - along[0])
    for _ in range(_ROUNDS):
        offset = along[None, :] - position[:, None]
        dark = _level(profiles, along, position - _CLEAR * width - reach, reach)
        bright = _level(profiles, along, position + _CLEAR * width, reach)
        step = np.where(bright > dark, bright - dark, np.nan)
        part = (profiles - dark[:, None]) / step[:, None]
        z = offset / width
        slope = np.exp(-0.5 * z * z) / np.sqrt(2.0 * np.pi)
        miss = (part - ndtr(z)) * slope  # weights: the slope once more, so that the tails count little
        move = -width * np.sum(miss * slope, axis=1) / np.sum(slope**3, axis=1)
        position = np.clip(position + np.clip(move, -width, width), along[0], along[-1])
        if free:
            used = np.isfinite(part).all(axis=1)
            bend = np.sum((miss * z * slope)[used]) / max(float(np.sum((z * z * slope**3)[used])), 1e-12)
            width = float(np.clip(width * (1.0 - np.clip(bend, -0.3, 0.3)), 0.35, widest))
        if np.abs(np.nan_to_num(move)).max() < 2e-3 * width and (not free or abs(bend) < 2e-3):
            break
    position = np.where(np.isfinite(step), position, np.nan)
    return Edges(position, dark, bright, width, _shape(part, along, position, width))


def _level(profiles: Array, along: Array, start: Array, reach: float) -> Array:
    """Return the median of each profile over `reach` from `start` on, steadied by its neighbours."""
    step = float(along[1] - along[0])
    number = min(max(2, round(reach / step)), len(along))
    first = np.clip(np.ceil(np.nan_to_num((start - along[0]) / step)).astype(int), 0, len(along) - number)
    level = np.median(np.take_along_axis(profiles, first[:, None] + np.arange(number), axis=1), axis=1)
    return median_filter(level, size=min(5, len(level)), mode="nearest")


def _shape(part: Array, along: Array, position: Array, width: float) -> float:
    """Return the distance between the half level of the mean profile and the fitted edges."""
    z = np.linspace(-1.5, 1.5, 31)
    used = np.isfinite(position)
    if not used.any():
        return 0.0
    aligned = [np.interp(edge + width * z, along, row) for edge, row in zip(position[used], part[used], strict=True)]
    mean = np.median(np.stack(aligned), axis=0)
    above = np.flatnonzero(mean >= 0.5)
    if not len(above) or above[0] == 0:
        return width
    last = above[0]
    low, high = mean[last - 1], mean[last]
    return float(abs(width * (z[last - 1] + (0.5 - low) / (high - low) * (z[last] - z[last - 1]))))

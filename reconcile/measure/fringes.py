"""Diffraction fringes beside an edge, and by how much they move its half level."""

from __future__ import annotations

import numpy as np
from scipy.optimize import least_squares
from scipy.special import ndtr

from reconcile.measure.measured import Array

_SEEN = 0.002  # of the step: departure from a plain edge below which nobody need speak of fringes
_FINE = 0.1  # of the blur: step of the convolution
_PERIODS = (3.0, 5.0, 8.0)  # of the blur: where the search for the ripple starts; finer ones are blurred away


def mean_profile(profiles: Array, along: Array, edges: Array) -> tuple[Array, Array]:
    """Return positions relative to the edge and the median profile about it.

    Parameters
    ----------
    profiles : array (profiles, samples), 0 before the edge and 1 behind it
    along : array (samples,), positions
    edges : array (profiles,), position of the edge in each
    """
    before, behind = float(np.max(along[0] - edges)), float(np.min(along[-1] - edges))
    offset = np.arange(before, behind, float(along[1] - along[0]))
    rows = [np.interp(edge + offset, along, row) for edge, row in zip(edges, profiles, strict=True)]
    return offset, np.median(np.stack(rows), axis=0)


def fringe_shift(offset: Array, mean: Array, width: float, noise: float) -> tuple[float, float]:
    """Return by how much the edge lies behind the half level because of fringes, and their amplitude.

    The light behind the edge is taken as a decaying ripple on its own level, and the whole as blurred. Both are 0
    where no fringes are seen.

    Parameters
    ----------
    offset : array (samples,), position relative to the half level
    mean : array (samples,), mean profile, 0 before the edge and 1 far behind it
    width : standard deviation of the blur, a first guess
    noise : standard deviation of a sample of `mean`
    """
    plain = float(np.std(_left(np.column_stack([np.ones(len(offset)), ndtr(offset / width)]), mean)))
    if plain < max(_SEEN, 0.9 * noise):
        return 0.0, 0.0
    low = np.array([-width, 0.8 * width, max(2.0 * width, 3.0), max(width, 1.5)])
    high = np.array([2.0 * width, 1.3 * width, 12.0 * width + 5.0, 12.0 * width + 5.0])
    best = None
    for period in _PERIODS:
        start = np.clip([0.05 * width, width, period * width, period * width], low, high)
        fit = least_squares(_miss, start, bounds=(low, high), max_nfev=40, args=(offset, mean))
        best = fit if best is None or fit.cost < best.cost else best
    if best is None or np.std(best.fun) > 0.5 * plain:  # a ripple does not describe it
        return 0.0, 0.0
    base, step, ripple = np.linalg.lstsq(_rippled(offset, best.x), mean, rcond=None)[0]
    return (float(best.x[0]), float(ripple / step)) if 0.0 < ripple < step else (0.0, 0.0)


def _miss(parameters: Array, offset: Array, mean: Array) -> Array:
    return _left(_rippled(offset, parameters), mean)


def _left(terms: Array, mean: Array) -> Array:
    """Return what the best sum of the terms leaves of the profile."""
    return np.asarray(mean - terms @ np.linalg.lstsq(terms, mean, rcond=None)[0])


def _rippled(offset: Array, parameters: Array) -> Array:
    """Return a blurred edge and its decaying ripple: parameters are edge, blur, period, decay length.

    As three columns: a constant, the edge, the ripple.
    """
    edge, blur, period, decay = parameters
    step = _FINE * blur
    reach = np.arange(-4.0 * blur, 4.0 * blur + step, step)
    kernel = np.exp(-0.5 * (reach / blur) ** 2)
    behind = offset[:, None] - edge - reach[None, :]
    out = np.maximum(behind, 0.0)
    ripple = np.sin(2.0 * np.pi * out / period) * np.exp(-out / decay)
    return np.column_stack([np.ones(len(offset)), ndtr((offset - edge) / blur), ripple @ kernel / kernel.sum()])

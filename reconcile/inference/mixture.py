"""Sound or stray: how likely a cell of readings is, where repeats share one scatter.

Mixture of sound and stray readings: Hogg, Bovy and Lang (2010), arXiv:1008.4686, section 3. The stray part is a Cauchy
density, heavy-tailed enough for a unit slip; its width is given, so that the two parts cannot change places.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from scipy import special

from reconcile.inference.model import Array

MOST_PATTERNS = 300  # of stray repeats in a cell that are weighed: every one of up to eight repeats
LIMIT_SPREAD = 1.0 / 3.0  # uncertainty near a detection limit over that limit, taken as three of them: common practice
_ROOT_2_OVER_PI = math.sqrt(2.0 / math.pi)


@dataclass(frozen=True, slots=True)
class Cell:
    """Cells of r repeats, and what is expected of each; arrays broadcast to (r, m, draws) or (m, draws)."""

    value: Array  # (r, m, 1) reading, or its limit where censored
    u: Array  # (r, m, 1)
    expected: Array  # (r, m, draws)
    shared: Array  # (r, m, draws) standard deviation that the scatter which all repeats share gives each
    width: Array  # (m, draws) of stray readings


def density(cell: Cell, rate: Array, *, censored: bool) -> Array:
    """Probability density of the cells, (m, draws), in units of each repeat's own normal peak.

    `rate` (draws,) is the share of stray readings. Where `censored`, the probability of lying below the limit.
    """
    if censored:
        sound, stray = _below(cell)
        return (1.0 - rate) * sound[0] + rate * stray[0]
    if len(cell.value) == 1:
        return _single(cell, rate)
    total = np.zeros(1)
    for _, term in _patterns(cell, rate):
        total = total + term
    return total


def _single(cell: Cell, rate: Array) -> Array:
    """Return the sum over both patterns of a single reading, written out.

    Nearly every cell is single, and this is the innermost loop: worked in place it takes half the time.
    """
    u = cell.u[0]
    deviation = cell.value[0] - cell.expected[0]
    width = np.hypot(cell.width, u)
    stray = deviation / width
    stray *= stray
    stray += 1.0
    stray *= width
    np.divide(rate * (_ROOT_2_OVER_PI * u), stray, out=stray)
    inflation = cell.shared[0] / u
    inflation = inflation * inflation
    inflation += 1.0
    deviation /= u
    deviation *= deviation
    deviation /= -2.0 * inflation
    sound = np.exp(deviation, out=deviation)
    sound /= np.sqrt(inflation)
    sound *= 1.0 - rate
    sound += stray
    return sound


def stray_probability(cell: Cell, rate: Array, *, censored: bool) -> Array:
    """Probability (r, m, draws) that each repeat is stray, given what is expected."""
    if censored:
        sound, stray = _below(cell)
        return rate * stray / ((1.0 - rate) * sound + rate * stray)
    total, by_repeat = np.zeros(1), [np.zeros(1) for _ in cell.value]
    for strays, term in _patterns(cell, rate):
        total = total + term
        for number in strays:
            by_repeat[number] = by_repeat[number] + term
    return np.stack([part / total for part in by_repeat])


def _stray_sets(repeats: int) -> Iterator[tuple[int, ...]]:
    """Sets of repeats that may be stray: every set of few repeats; of many, sets of few strays, and all of them."""
    taken = 0
    for strays in range(repeats):
        taken += math.comb(repeats, strays)
        if strays > 1 and taken > MOST_PATTERNS:
            break
        yield from itertools.combinations(range(repeats), strays)
    yield tuple(range(repeats))


def _patterns(cell: Cell, rate: Array) -> Iterator[tuple[tuple[int, ...], Array]]:
    """Each set of stray repeats, with the weighted density (m, draws) of the cells under it."""
    repeats = len(cell.value)
    deviation = cell.value - cell.expected
    relative = (deviation / cell.u) ** 2
    pull, hold = cell.shared * deviation / cell.u**2, (cell.shared / cell.u) ** 2
    stray = _stray(deviation, cell.u, cell.width)
    for strays in _stray_sets(repeats):
        sound = [number for number in range(repeats) if number not in strays]
        weight = (1.0 - rate) ** len(sound) * rate ** len(strays)
        for number in strays:
            weight = weight * stray[number]
        if sound:
            # Normal readings with one shared normal offset, integrated in closed form (Sherman and Morrison 1950).
            inflation = 1.0 + hold[sound].sum(axis=0)
            exponent = relative[sound].sum(axis=0) - pull[sound].sum(axis=0) ** 2 / inflation
            weight = weight * np.exp(-0.5 * exponent) / np.sqrt(inflation)
        yield strays, weight


def _stray(deviation: Array, u: Array, width: Array) -> Array:
    """Cauchy density in units of a normal density's peak, 1/(u √2π); never narrower than the reading is uncertain."""
    width = np.hypot(width, u)
    return _ROOT_2_OVER_PI * u / (width * (1.0 + (deviation / width) ** 2))


def _below(cell: Cell) -> tuple[Array, Array]:
    """Probabilities (r, m, draws) of lying below the limit, for a sound and for a stray reading."""
    deviation = cell.value - cell.expected
    spread = np.hypot(cell.u, cell.shared)
    return special.ndtr(deviation / spread), 0.5 + np.arctan(deviation / np.hypot(cell.width, cell.u)) / np.pi

"""Sound or stray: how likely a cell of readings is, where repeats share one scatter.

Mixture of sound and stray readings: Hogg, Bovy and Lang (2010), arXiv:1008.4686, section 3. The stray part is a Cauchy
density, heavy-tailed enough for a unit slip; its width is given, so that the two parts cannot change places.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass

import numpy as np
from scipy import special

from reconcile.inference.model import Array

MOST_REPEATS = 4  # up to which every pattern of stray repeats is weighed; beyond it none, one or all
LIMIT_SPREAD = 1.0 / 3.0  # uncertainty near a detection limit over that limit, taken as three of them: common practice
_ROOT_2_OVER_PI = math.sqrt(2.0 / math.pi)


@dataclass(frozen=True, slots=True)
class Cell:
    """Cells of r repeats, and what is expected of each; arrays broadcast to (r, m, draws) or (m, draws)."""

    value: Array  # (r, m, 1) reading, or its limit where censored
    u: Array  # (r, m, 1)
    expected: Array  # (r, m, draws)
    gain: Array  # (r, m, draws) what a reading moves by when the shared scatter moves by one
    variance: Array  # (m, draws) of the shared scatter
    width: Array  # (m, draws) of stray readings


def density(cell: Cell, rate: Array, *, censored: bool) -> Array:
    """Probability density of the cells, (m, draws), in units of each repeat's own normal peak.

    `rate` (draws,) is the share of stray readings. Where `censored`, the probability of lying below the limit.
    """
    if censored:
        sound, stray = _below(cell)
        return (1.0 - rate) * sound[0] + rate * stray[0]
    if len(cell.value) == 1:  # the same sum written out: nearly every cell is single, and this is the inner loop
        deviation = (cell.value - cell.expected)[0]
        inflation = 1.0 / (1.0 + cell.variance * (cell.gain[0] / cell.u[0]) ** 2)
        sound = np.exp(-0.5 * (deviation / cell.u[0]) ** 2 * inflation) * np.sqrt(inflation)
        return (1.0 - rate) * sound + rate * _stray(deviation, cell.u[0], cell.width)
    return sum(term for _, term in _patterns(cell, rate))  # type: ignore[return-value]  # never an empty sum


def stray_probability(cell: Cell, rate: Array, *, censored: bool) -> Array:
    """Probability (r, m, draws) that each repeat is stray, given what is expected."""
    if censored:
        sound, stray = _below(cell)
        return rate * stray / ((1.0 - rate) * sound + rate * stray)
    total, by_repeat = np.zeros(1), [np.zeros(1) for _ in cell.value]
    for pattern, term in _patterns(cell, rate):
        total = total + term
        by_repeat = [
            so_far if is_sound else so_far + term for so_far, is_sound in zip(by_repeat, pattern, strict=True)
        ]
    return np.stack([part / total for part in by_repeat])


def _patterns(cell: Cell, rate: Array) -> list[tuple[tuple[bool, ...], Array]]:
    """Each pattern of sound (True) and stray (False) repeats, with its weighted density (m, draws)."""
    repeats = len(cell.value)
    if repeats <= MOST_REPEATS:
        patterns = list(itertools.product((True, False), repeat=repeats))
    else:
        one_stray = [tuple(other != number for other in range(repeats)) for number in range(repeats)]
        patterns = [(True,) * repeats, *one_stray, (False,) * repeats]
    deviation = cell.value - cell.expected
    relative = (deviation / cell.u) ** 2
    pull, hold = cell.gain * deviation / cell.u**2, (cell.gain / cell.u) ** 2
    stray = _stray(deviation, cell.u, cell.width)
    terms = []
    for pattern in patterns:
        sound = np.flatnonzero(pattern)
        weight = (1.0 - rate) ** len(sound) * rate ** (repeats - len(sound))
        for number in np.flatnonzero(~np.array(pattern)):
            weight = weight * stray[number]
        if len(sound):
            # Normal readings with one shared normal offset, integrated in closed form (Sherman and Morrison 1950).
            inflation = 1.0 + cell.variance * hold[sound].sum(axis=0)
            exponent = relative[sound].sum(axis=0) - cell.variance * pull[sound].sum(axis=0) ** 2 / inflation
            weight = weight * np.exp(-0.5 * exponent) / np.sqrt(inflation)
        terms.append((pattern, weight))
    return terms


def _stray(deviation: Array, u: Array, width: Array) -> Array:
    """Cauchy density in units of a normal density's peak, 1/(u √2π)."""
    return _ROOT_2_OVER_PI * u / (width * (1.0 + (deviation / width) ** 2))


def _below(cell: Cell) -> tuple[Array, Array]:
    """Probabilities (r, m, draws) of lying below the limit, for a sound and for a stray reading."""
    deviation = cell.value - cell.expected
    spread = np.sqrt(cell.u**2 + cell.gain**2 * cell.variance)
    return special.ndtr(deviation / spread), 0.5 + np.arctan(deviation / cell.width) / np.pi

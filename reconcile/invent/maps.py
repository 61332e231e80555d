"""Rendered height maps of craters, as an interference microscope gives them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

Array = NDArray[np.float64]

STEP_DECAY = 0.1  # [1] excess over which the finite depth at threshold sets in
FINER = 3  # sub-pixels along a pixel's side


@dataclass(frozen=True, slots=True)
class Crater:
    """A crater as the removal law shapes it."""

    depth: float  # [m] in its middle, below the surface around
    diameter: float  # [m] where it meets that surface
    excess: float  # [1] ln(fluence/threshold) in its middle
    exponent: float  # [1] of the heated depth's power law
    step_share: float  # [1] of its depth that comes at once at threshold
    rim: float  # [m] height of the raised rim outside

    def profile(self, distance: Array) -> Array:
        """Return height over the surface around by distance from the middle [m]; the rim beyond the edge.

        The local excess falls with the square of the distance (Gaussian beam) and is zero at the edge; the depth
        there is that excess times the heated depth at the local fluence, plus the step.
        """
        local = self.excess * np.maximum(1 - (2 * distance / self.diameter) ** 2, 0)
        by_law = local / self.excess * np.exp(self.exponent * (local - self.excess))
        step = -np.expm1(-local / STEP_DECAY) / -np.expm1(-self.excess / STEP_DECAY)
        below = self.depth * ((1 - self.step_share) * by_law + self.step_share * step)
        beyond = np.maximum(distance - self.diameter / 2, 0) / (0.03 * self.diameter)
        return np.asarray(self.rim * beyond * np.exp(1 - beyond) - below)

    @property
    def volume(self) -> float:
        """Volume below the surface around, the rim left out [m³]."""
        edges = np.linspace(0, self.diameter / 2, 4001)
        middle = 0.5 * (edges[1:] + edges[:-1])
        return float(np.sum(-self.profile(middle) * 2 * np.pi * middle * np.diff(edges)))


def height_map(
    crater: Crater | None, pitch: float, rng: np.random.Generator, *, side: int = 160, disturbed: bool = True
) -> Array:
    """Return a height map (side, side) [m], upwards positive, NaN where the instrument found none.

    Parameters
    ----------
    crater : None: untouched surface.
    pitch : true size of a pixel [m].
    rng : all that lies over the crater.
    disturbed : with tilt, form, roughness, vibration, spikes and missing points; False: the crater alone.
    """
    centre = 0.5 * (side - 1) + rng.uniform(-6, 6, size=2)
    height = np.zeros((side, side))
    offsets = (np.arange(FINER) + 0.5) / FINER - 0.5
    x, y = np.arange(side)[None, :] - centre[0], np.arange(side)[:, None] - centre[1]
    if crater is not None:
        for right in offsets:
            for down in offsets:
                height += crater.profile(pitch * np.hypot(x + right, y + down)) / FINER**2
    if not disturbed:
        return height
    steep = np.hypot(*np.gradient(height)) / pitch
    height += _surface(x / side, y / side, rng) + _roughness(side, pitch, rng)
    rows = np.arange(side)[:, None]
    height += float(rng.uniform(1e-9, 3e-9)) * np.sin(2 * np.pi * rows / float(rng.uniform(7, 13)) + rng.uniform(0, 6))
    height += 1.5e-9 * rng.standard_normal((side, side))
    for row, column in rng.integers(0, side, size=(int(rng.integers(15, 30)), 2)):
        height[row, column] += float(rng.choice([-1, 1])) * float(rng.uniform(0.2e-6, 1.5e-6))
    return np.where(_missing(steep, rng), np.nan, height)


def _surface(x: Array, y: Array, rng: np.random.Generator) -> Array:
    """Return the plate's tilt and form [m] over coordinates in shares of the side."""
    tilt, form = rng.uniform(-0.6e-6, 0.6e-6, size=2), rng.uniform(-30e-9, 30e-9, size=3)
    return np.asarray(2e-6 + tilt[0] * x + tilt[1] * y + form[0] * x**2 + form[1] * y**2 + form[2] * x * y)


def _roughness(side: int, pitch: float, rng: np.random.Generator) -> Array:
    """Return the polish of the plate [m]: a few nanometres, over a micrometre or two."""
    rough = ndimage.gaussian_filter(rng.standard_normal((side, side)), 0.8e-6 / pitch, mode="wrap")
    return np.asarray(float(rng.uniform(4e-9, 7e-9)) * rough / rough.std())


def _missing(steep: Array, rng: np.random.Generator) -> NDArray[np.bool_]:
    """Return where no height was found: single points, mostly where it is steep, and a patch in a corner."""
    chance = 0.004 + 0.15 * np.clip(steep / 0.3 - 0.1, 0, 1)
    missing = rng.random(steep.shape) < chance
    rows, columns = np.arange(steep.shape[0])[:, None], np.arange(steep.shape[1])[None, :]
    reach = float(rng.uniform(8, 16))
    return np.asarray(missing | (rows + columns < reach))

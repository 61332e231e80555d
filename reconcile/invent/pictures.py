"""Rendered pictures: back-lit frames of a bubble on its target, and electron micrographs of particles.

Shapes are analytic and drawn on a grid several times finer than the pixels, so that an edge lies where it should to a
small part of a pixel; light, dust, blur and noise come on top.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

Array = NDArray[np.float64]
Picture = NDArray[np.uint8] | NDArray[np.uint16]

FINER = 4  # sub-pixels along a pixel's side
ELECTRONS = 12_000  # of a full pixel of the camera
READ_NOISE = 10.0  # [electrons]
OFFSET = 0.02  # [1] of the full range, added by the camera
DARK = 0.045  # [1] share of the light that gets through a bubble or round the target
UNEVEN = 0.001  # [1] height of each wave round a bubble's edge, over its radius
BRIGHT_SPOT = 0.22  # [1] radius of the spot of light that goes straight through, over the bubble's


@dataclass(frozen=True, slots=True)
class Camera:
    """A camera that looks along the target's surface, and its back light. Lengths in pixels but for the pitch."""

    pitch: float  # [m] true size of a pixel at the object
    width: int
    height: int
    edge_row: float  # where the target's surface crosses the middle column, rows downwards
    tilt: float  # [rad] of the target's surface, positive: it falls to the right
    light: Array  # (6,) coefficients of the uneven light, see `_light`
    dust: Array  # (n, 4) specks that are there in every frame: column, row, radius, transmission


@dataclass(frozen=True, slots=True)
class Scene:
    """What is in front of the camera in one frame."""

    radius: float | None  # [m] of the hemisphere; None: no bubble
    shock_radius: float | None = None  # [m]; None: outside the frame
    bits: int = 8


def draw_camera(rng: np.random.Generator, pitch: float, *, width: int = 320, height: int = 240) -> Camera:
    """Set up a camera: target at the bottom, tilted by up to 1.5°, uneven light, dust on its window.

    Parameters
    ----------
    pitch : true size of a pixel at the object [m].
    width, height : of its frames [px].
    """
    light = np.array([0.62, *rng.uniform(-0.08, 0.08, size=2), *rng.uniform(-0.09, 0.01, size=2), 0.03])
    tilt = float(np.radians(rng.uniform(-1.4, 1.4)))
    return Camera(pitch, width, height, 0.885 * height, tilt, light, _specks(rng, 7, width, height))


def shadowgraph(camera: Camera, scene: Scene, rng: np.random.Generator) -> Picture:
    """Return a frame: bright field, target as a dark band at the bottom, and the dark half disc of a bubble on it.

    Parameters
    ----------
    camera : as set up.
    scene : what stands before it; its radius is drawn as radius/pitch pixels.
    rng : place of the bubble, drift of light and stage, loose dust, blur, noise.

    Returns
    -------
    Picture
        (height, width), 8 or 16 bits over the full range.
    """
    return _quantised(_exposed(_seen(camera, scene, rng), camera, rng), scene.bits)


def background(camera: Camera, rng: np.random.Generator, *, bits: int = 16) -> Picture:
    """Return a frame without a bubble, the mean of 16 exposures."""
    return _quantised(_exposed(_seen(camera, Scene(None), rng), camera, rng, exposures=16), bits)


def _seen(camera: Camera, scene: Scene, rng: np.random.Generator) -> Array:
    """Return the light that passes target and bubble (height, width) [1], blurred."""
    row = camera.edge_row + float(rng.uniform(-1.5, 1.5))
    tilt = float(np.clip(camera.tilt + np.radians(rng.normal(0, 0.08)), -0.0262, 0.0262))
    middle = 0.5 * (camera.width - 1) + float(rng.uniform(-8, 8))
    x, y = _fine_grid(camera.width, camera.height)
    x -= middle
    above = (row - y + np.tan(tilt) * x) * np.cos(tilt) + _roughness(rng, camera.width)  # height over the surface
    seen = np.ones_like(above)
    if scene.radius is not None:
        seen *= _bubble(x, y - row, scene.radius / camera.pitch, rng)
    if scene.shock_radius is not None:
        seen *= _ring(np.hypot(x, y - row) - scene.shock_radius / camera.pitch)
    glare = 1 + 0.06 * np.sin(x / 40 + rng.uniform(0, 6)) * np.exp(-np.maximum(above, 0) / 3)
    behind = DARK * (0.8 + 0.4 * np.sin(x / 55 + rng.uniform(0, 6)) ** 2)
    return _blurred(np.where(above > 0, seen * glare, behind), rng)


def dark_frame(camera: Camera, rng: np.random.Generator, *, bits: int = 8) -> Picture:
    """Return a frame for which the flash did not fire: noise on the camera's offset."""
    counted = rng.normal(0, READ_NOISE, size=(camera.height, camera.width)) / ELECTRONS
    return _quantised(counted + OFFSET, bits)


def _fine_grid(width: int, height: int) -> tuple[Array, Array]:
    """Return column (1, n) and row (m, 1) of every sub-pixel [px]; a pixel's middle has whole numbers."""
    offsets = (np.arange(FINER) + 0.5) / FINER - 0.5
    columns = (np.arange(width)[:, None] + offsets).reshape(1, -1)
    rows = (np.arange(height)[:, None] + offsets).reshape(-1, 1)
    return columns, rows


def _bubble(x: Array, y: Array, radius: float, rng: np.random.Generator) -> Array:
    """Return the light that comes through a bubble, fringe outside its edge and spot in its middle included.

    Its edge departs a little from a circle by waves of mean zero round the half disc. The longest, which a circle of
    another size would follow, is the lowest: the radius is then the same to 0.1 % however it is defined.
    """
    spot, angle = float(rng.uniform(0.5, 0.9)), np.arctan2(-y, x)
    heights = UNEVEN * rng.standard_normal(7) * np.array([0.4, 1, 1, 1, 1, 1, 1])
    waves = sum(height * np.cos(n * angle) for n, height in enumerate(heights, start=2))
    outside = np.hypot(x, y) - radius * (1 + waves)  # [px] of the edge
    beyond = np.maximum(outside, 0)
    fringe = 1 + 0.16 * np.exp(-beyond / 3.5) * np.sin(2 * np.pi * beyond / 7.0)
    across = np.hypot(x, y + 0.32 * radius) / (BRIGHT_SPOT * radius)
    through = DARK + spot / (1 + across**8) + 0.02 * np.exp(np.minimum(outside, 0) / 4)
    return np.where(outside > 0, fringe, through)


def _ring(outside: Array) -> Array:
    """Return the light across a shock front: a dark line, a bright one beside it."""
    dark, bright = 0.3 * np.exp(-((outside / 1.3) ** 2)), 0.18 * np.exp(-(((outside - 2.8) / 1.5) ** 2))
    return np.asarray(1 - dark + bright)


def _roughness(rng: np.random.Generator, width: int) -> Array:
    """Return small departures of the surface from a straight line (1, n) [px]."""
    rough = ndimage.gaussian_filter1d(rng.standard_normal(width * FINER), 6 * FINER, mode="wrap")
    return np.asarray(0.15 * rough / rough.std()).reshape(1, -1)


def _blurred(fine: Array, rng: np.random.Generator) -> Array:
    """Shake along a row, bin to pixels, defocus."""
    shaken = ndimage.uniform_filter1d(fine, int(rng.integers(1, FINER + 1)), axis=1, mode="nearest")
    rows, columns = fine.shape[0] // FINER, fine.shape[1] // FINER
    binned = shaken.reshape(rows, FINER, columns, FINER).mean(axis=(1, 3))
    return np.asarray(ndimage.gaussian_filter(binned, float(rng.uniform(0.6, 1.1)), mode="nearest"))


def _exposed(seen: Array, camera: Camera, rng: np.random.Generator, exposures: int = 1) -> Array:
    """Put a scene into the light, dust and noise on it; return shares of the full range (height, width)."""
    dust = np.vstack([camera.dust, _specks(rng, int(rng.integers(2, 6)), camera.width, camera.height)])
    electrons = ELECTRONS * seen * _light(camera, rng) * _dusty(dust, camera.width, camera.height)
    noise = np.sqrt((electrons + READ_NOISE**2) / exposures)
    return np.asarray(rng.normal(electrons, noise) / ELECTRONS + OFFSET)


def _light(camera: Camera, rng: np.random.Generator) -> Array:
    """Return the back light (height, width), drifting in strength and place from frame to frame."""
    x = np.linspace(-1, 1, camera.width)[None, :] - rng.normal(0, 0.02)
    y = np.linspace(-1, 1, camera.height)[:, None] - rng.normal(0, 0.02)
    level, a, b, c, d, e = camera.light
    strength = float(np.clip(1 + rng.normal(0, 0.04), 0.85, 1.12))
    return np.asarray(strength * (level + a * x + b * y + c * x**2 + d * y**2 + e * np.sin(7 * x + 4 * y)))


def _specks(rng: np.random.Generator, count: int, width: int, height: int) -> Array:
    return np.column_stack(
        [
            rng.uniform(0, width, count),
            rng.uniform(0, height, count),
            rng.uniform(1.2, 4.0, count),
            rng.uniform(0.5, 0.85, count),
        ]
    )


def _dusty(specks: Array, width: int, height: int) -> Array:
    """Return the light that specks of dust leave (height, width)."""
    left = np.ones((height, width))
    x, y = np.arange(width)[None, :], np.arange(height)[:, None]
    for column, row, radius, transmission in specks:
        left *= 1 - (1 - transmission) / (1 + (np.hypot(x - column, y - row) / radius) ** 6)
    return left


def _quantised(share: Array, bits: int) -> Picture:
    """Return shares of full range as whole counts."""
    top = 2**bits - 1
    counts = np.clip(np.round(share * top), 0, top)
    return counts.astype(np.uint8) if bits == 8 else counts.astype(np.uint16)


@dataclass(frozen=True, slots=True)
class Particles:
    """Particles on a film: where they lie in the micrograph, and how large they are."""

    column: Array  # (n,) [px]
    row: Array  # (n,) [px]
    diameter: Array  # (n,) [m] of the circle of equal area
    shape: Array  # (n, 2) [1, rad] ratio of the axes, direction of the long one
    density: Array  # (n,) [1] share of the beam that gets through


def scatter_particles(
    rng: np.random.Generator, diameters: Array, pitch: float, *, side: int = 512, touching: float = 0.15
) -> Particles:
    """Lay particles on a film, over somewhat more than the micrograph shows, so that its border cuts some.

    Parameters
    ----------
    diameters : (n,) [m].
    pitch : true size of a pixel [m].
    side : of the micrograph [px].
    touching : share of particles that are laid against an earlier one; the others keep clear of it.

    Raises
    ------
    ValueError : they do not fit.
    """
    order = np.argsort(-diameters, kind="stable")  # large ones first: they need the room
    radii = 0.5 * diameters[order] / pitch
    margin = float(radii.max())
    places = np.empty((len(radii), 2))
    for index, radius in enumerate(radii):
        against = index > 0 and rng.random() < touching
        for _ in range(2000):
            place = rng.uniform(-margin, side + margin, size=2)
            if against:
                other = int(rng.integers(index))
                angle = float(rng.uniform(0, 2 * np.pi))
                gap = radii[other] + radius * float(rng.uniform(0.85, 1.0))
                place = places[other] + gap * np.array([np.cos(angle), np.sin(angle)])
            clear = np.hypot(*(places[:index] - place).T) > radii[:index] + radius + 3
            if clear.sum() >= index - against:
                break
        else:
            raise ValueError(f"{len(radii)} particles do not fit on {side} px")
        places[index] = place
    shape = np.column_stack([np.exp(rng.normal(0, 0.03, len(radii))), rng.uniform(0, np.pi, len(radii))])
    return Particles(places[:, 0], places[:, 1], diameters[order], shape, rng.uniform(0.12, 0.4, len(radii)))


def micrograph(particles: Particles, pitch: float, rng: np.random.Generator, *, side: int = 512) -> NDArray[np.uint8]:
    """Return a bright-field micrograph: dark particles on an uneven film.

    Parameters
    ----------
    particles : where and how large.
    pitch : true size of a pixel [m].
    rng : film, focus and noise.
    side : of the picture [px].
    """
    seen = np.ones((side * FINER, side * FINER))
    columns, rows = _fine_grid(side, side)
    for index in range(len(particles.diameter)):
        _lay(seen, columns, rows, particles, index, pitch)
    binned = seen.reshape(side, FINER, side, FINER).mean(axis=(1, 3))
    sharp = ndimage.gaussian_filter(binned, float(rng.uniform(0.6, 1.0)), mode="nearest")
    x, y = np.linspace(-1, 1, side)[None, :], np.linspace(-1, 1, side)[:, None]
    slope = rng.uniform(-0.06, 0.06, size=4)
    film = 0.72 + slope[0] * x + slope[1] * y + slope[2] * x * y + slope[3] * np.cos(3 * x + 2 * y)
    grain = ndimage.gaussian_filter(rng.standard_normal((side, side)), 2.0, mode="wrap")
    light = film * (1 + 0.012 * grain / grain.std()) * sharp
    noisy = light + 0.02 * np.sqrt(light) * rng.standard_normal((side, side))
    return _quantised(noisy, 8).astype(np.uint8)


def _lay(seen: Array, columns: Array, rows: Array, particles: Particles, index: int, pitch: float) -> None:
    """Draw one particle into the fine picture; where two overlap the beam is weakened twice."""
    radius = 0.5 * particles.diameter[index] / pitch
    ratio, direction = particles.shape[index]
    reach = radius * max(ratio, 1 / ratio) + 1
    inside = [
        slice(*np.searchsorted(axis.ravel(), [centre - reach, centre + reach]))
        for axis, centre in ((rows, particles.row[index]), (columns, particles.column[index]))
    ]
    x, y = columns[:, inside[1]] - particles.column[index], rows[inside[0]] - particles.row[index]
    long = (x * np.cos(direction) + y * np.sin(direction)) / np.sqrt(ratio)
    short = (y * np.cos(direction) - x * np.sin(direction)) * np.sqrt(ratio)
    away = np.hypot(long, short) / radius
    through = particles.density[index] + 0.08 * np.minimum(away, 1) ** 4
    seen[inside[0], inside[1]] *= np.where(away < 1, through, 1.0)

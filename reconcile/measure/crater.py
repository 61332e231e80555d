"""A height map → the depth, the diameter and the volume of its crater below the surrounding surface.

The crater's outline at a safe level gives its shape; all points together, each at its distance relative to that shape,
give one profile in which noise has averaged down, and the profile tells where the removed area ends. The depth is that of
a surface fitted to the bottom: a single deepest point would follow the noise.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from reconcile.measure.crater_edge import BIN, Edge, find_edge, ring_means
from reconcile.measure.levelling import LEAST_SURROUND, MAD, Array, Levelled, Mask, level, smoothed, without_spikes
from reconcile.measure.measured import Finding, Measured, Outline, Stroke, Unmeasurable

LIMIT = 3.0  # noise
SEEN = 5.0  # noise of the smoothed map: shallower is no crater
FEWEST_POINTS = 20  # of a crater
SMOOTH = 1.5  # points; width of the Gaussian through which the outline is looked for
ANGLES = 96
# Waves of the outline's distance from its centre, by how deep the crater is in noise of the smoothed map: more would draw
# the outline after the noise.
HARMONICS = ((25.0, 4), (12.0, 2), (0.0, 1))
BOTTOM = 0.45  # of the radius: a quarter of the area, and in a paraboloid the deepest fifth
SURROUND_FROM = 2.5  # radii: at the latest; the rim lies within
POOREST = 0.2  # relative uncertainty of a diameter; beyond it the edge was not seen
FEWEST_RADIUS = 3.0  # points


@dataclass(frozen=True, slots=True)
class _Shape:
    """A crater's outline: its distance from a centre in every direction, at the level at which it was looked for."""

    row: float
    column: float
    cosines: Array  # (waves + 1,) [px]
    sines: Array  # (waves + 1,)

    def radius(self, angle: Array) -> Array:
        """Return the distance from the centre [px] in the directions `angle` [rad]."""
        orders = np.arange(self.cosines.size).reshape(-1, *[1] * angle.ndim)
        shaped = (-1, *[1] * angle.ndim)
        waves = self.cosines.reshape(shaped) * np.cos(orders * angle) + self.sines.reshape(shaped) * np.sin(
            orders * angle
        )
        return np.asarray(waves.sum(axis=0))

    @property
    def area_radius(self) -> float:
        """Radius of the circle of the same area [px]: half the mean of r² is the area over 2π."""
        waves = self.cosines[1:] ** 2 + self.sines[1:] ** 2
        return float(np.sqrt(self.cosines[0] ** 2 + 0.5 * waves.sum()))

    def distance(self, shape: tuple[int, ...]) -> Array:
        """Return every point's distance from the centre over that of the outline in its direction."""
        down = np.arange(shape[0])[:, None] - self.row
        across = np.arange(shape[1])[None, :] - self.column
        return np.hypot(down, across) / self.radius(np.arctan2(down, across))

    def line(self, scale: float) -> Array:
        """Return the closed outline, `scale` times as wide, as (n, 2) columns and rows."""
        angle = np.linspace(0, 2 * np.pi, 181)
        reach = scale * self.radius(angle)
        return np.stack([self.column + reach * np.cos(angle), self.row + reach * np.sin(angle)], axis=1)


@dataclass(frozen=True, slots=True)
class _Crater:
    """A crater as found in a levelled map."""

    shape: _Shape
    distance: Array  # (rows, columns) from the centre over that of the shape
    edge: Edge  # in the same measure
    rim_left: float  # height of the rim where the surround begins


def measure_map(height: Array, pixel_pitch: float) -> Finding:
    """Measure the crater in a height map.

    Parameters
    ----------
    height : Array
        (rows, columns) [m], upwards positive; NaN for missing points.
    pixel_pitch : float
        Distance between neighbouring points, nominal [m].

    Returns
    -------
    Finding
        crater-depth [m], crater-diameter [m] (2√(A/π) of the removed area A at the surrounding surface) and, for
        information, crater-volume [m³] below that surface; where no crater stands out of the noise a limit for the depth
        alone, three times the noise of a point.

    Raises
    ------
    Unmeasurable
        The crater runs out of the map, too little of its surround is there, or the map is flat without noise.
    """
    _check(height)
    clean = without_spikes(height)
    rough = level(clean)
    if rough is None:
        raise _no_surround()
    found = _region(rough)
    if found is None:
        return _empty(rough)
    shape = _outline(rough, found)
    distance = shape.distance(height.shape)
    edge = _edge(rough, shape, distance)
    excluded, rim_left = _excluded(rough, distance, edge.at, shape.area_radius)
    settled = level(clean, excluded) or rough
    shape = _outline(settled, found)
    distance = shape.distance(height.shape)
    edge = _edge(settled, shape, distance)
    return _finding(settled, _Crater(shape, distance, edge, rim_left), pixel_pitch)


def _check(height: Array) -> None:
    if height.ndim != 2 or min(height.shape) < 16:
        raise Unmeasurable(f"an array of shape {height.shape}", "a map of at least 16 by 16 points", "Check the file.")
    known = height[np.isfinite(height)]
    if known.size < 0.3 * height.size:
        raise Unmeasurable(
            f"{100 * known.size / height.size:.0f} % of the points",
            "heights at most points",
            "Measure the site again, with more light or a smaller slope.",
        )
    if float(np.ptp(known)) == 0:
        raise Unmeasurable("the same height at every point", "a surface with its noise", "Export the map again.")


def _no_surround() -> Unmeasurable:
    return Unmeasurable(
        "a map with too little of the flat surface around the crater",
        f"at least {100 * LEAST_SURROUND:.0f} % of the map outside crater and rim",
        "Map a larger field.",
    )


def _region(surface: Levelled) -> Mask | None:
    """Return the connected points of the crater, the largest volume that lies below the noise; None: there is none."""
    smooth = smoothed(surface.height, SMOOTH)
    usual = smooth[surface.surround & np.isfinite(smooth)]
    noise = MAD * float(np.median(np.abs(usual - np.median(usual))))
    known = np.where(np.isfinite(smooth), smooth, 0.0)
    labels, number = ndimage.label(known < -max(SEEN * noise, 1e-6 * float(np.ptp(known))))
    if not number:
        return None
    index = np.arange(1, number + 1)
    volumes = -ndimage.sum_labels(known, labels, index)
    largest = int(index[np.argmax(volumes)])
    inside = labels == largest
    if np.count_nonzero(inside) < FEWEST_POINTS:
        return None
    border = np.concatenate([inside[0], inside[-1], inside[:, 0], inside[:, -1]])
    if border.any():
        raise Unmeasurable(
            "a crater that runs out of the map", "the whole crater with its surround", "Map a larger field."
        )
    if np.count_nonzero(surface.surround) < LEAST_SURROUND * surface.height.size:
        raise _no_surround()
    return np.asarray(ndimage.binary_fill_holes(inside))


def _empty(surface: Levelled, at_least: float = 0.0) -> Finding:
    limit = max(LIMIT * surface.noise, at_least)
    caption = f"no crater above the noise: depth below {1e9 * limit:.3g} nm"
    return Finding((Measured("crater-depth", None, None, limit=limit),), Outline((), caption), _remarks(surface))


def _outline(surface: Levelled, region: Mask) -> _Shape:
    """Return the shape of the crater at a level that noise does not reach and that lies as high as it can."""
    smooth = smoothed(surface.height, SMOOTH)
    usual = smooth[surface.surround & np.isfinite(smooth)]
    noise = MAD * float(np.median(np.abs(usual)))
    deep = -float(np.nanpercentile(smooth[region], 5))
    at = -min(max(6 * noise, 0.1 * deep), 0.5 * deep)
    filled = np.where(np.isfinite(smooth), smooth, 0.0)
    row, column = (float(value) for value in ndimage.center_of_mass(np.where(region, -filled, 0.0).clip(0)))
    start = np.sqrt(np.count_nonzero(region) / np.pi)
    waves = next(number for least, number in HARMONICS if deep >= least * noise)
    shape = _Shape(row, column, np.zeros(waves + 1), np.zeros(waves + 1))
    for _ in range(3):
        shape = _harmonics(filled, at, shape, start)
        if not FEWEST_RADIUS <= shape.cosines[0] <= max(surface.height.shape):
            raise Unmeasurable(
                f"a crater of {max(shape.cosines[0], 0):.1f} points radius",
                f"a radius of at least {FEWEST_RADIUS:.0f} points",
                "Map the site with a finer pitch.",
            )
        # The first harmonic is a shift of the centre.
        shape = _Shape(
            shape.row + float(shape.sines[1]), shape.column + float(shape.cosines[1]), shape.cosines, shape.sines
        )
    shape = _harmonics(filled, at, shape, start)
    if np.min(shape.radius(np.linspace(0, 2 * np.pi, 360))) < 0.2 * shape.cosines[0]:
        raise Unmeasurable("a pit with a ragged outline", "a round crater", "Measure it by hand.")
    return shape


def _harmonics(smooth: Array, at: float, shape: _Shape, start: float) -> _Shape:
    """Return the outline at a level as seen from the centre of `shape`: crossings along rays, outliers left out."""
    waves = shape.cosines.size - 1
    angle = np.arange(ANGLES) * 2 * np.pi / ANGLES
    reach = np.arange(0.0, 3 * start + 4, 0.25)
    rows = shape.row + reach[None, :] * np.sin(angle)[:, None]
    columns = shape.column + reach[None, :] * np.cos(angle)[:, None]
    rays = ndimage.map_coordinates(smooth, [rows, columns], order=1, mode="nearest")
    below = rays < at
    below[:, reach < 0.5 * start] = True  # rough bottoms are no edge
    last = np.argmin(below, axis=1)
    crossed = last > 0
    low, high = rays[np.arange(ANGLES), last - 1], rays[np.arange(ANGLES), last]
    share = np.clip((at - low) / np.where(high > low, high - low, 1.0), 0, 1)
    radius = np.where(crossed, reach[last - 1] + 0.25 * share, np.nan)
    orders = np.arange(waves + 1)
    design = np.concatenate([np.cos(np.outer(angle, orders)), np.sin(np.outer(angle, orders[1:]))], axis=1)
    used = np.isfinite(radius)
    solution = np.zeros(design.shape[1])
    for _ in range(4):
        if np.count_nonzero(used) < ANGLES // 2:
            raise Unmeasurable("a pit whose edge is not closed", "a round crater", "Measure it by hand.")
        solution = np.linalg.lstsq(design[used], radius[used], rcond=None)[0]
        away = np.abs(radius - design @ solution)
        used = np.isfinite(radius) & (away <= max(3.5 * MAD * float(np.nanmedian(away)), 0.3))
    return _Shape(shape.row, shape.column, solution[: waves + 1], np.concatenate([np.zeros(1), solution[waves + 1 :]]))


def _excluded(surface: Levelled, distance: Array, edge: float, radius: float) -> tuple[Mask, float]:
    """Return crater and rim, and how high the rim still is where the surround begins.

    The surround begins where the rim has sunk into the noise of its ring, nearer where the map is small.
    """
    largest = float(np.quantile(distance, 1 - LEAST_SURROUND))
    ends = (1.15 * edge * radius, max(min(SURROUND_FROM * edge, largest), 1.2 * edge) * radius)
    rings = ring_means(distance * radius, surface.height, ends, surface.noise * np.sqrt(surface.together))
    if rings.x.size < 4:
        return np.asarray(distance < ends[1] / radius), 0.0
    width = min(max(int(0.1 * edge * radius / BIN), 1), rings.x.size)
    mean = np.convolve(rings.h, np.full(width, 1 / width), mode="same")
    high = np.flatnonzero(np.abs(mean) > max(0.2 * surface.noise, 3 * float(np.median(rings.sd)) / np.sqrt(width)))
    at = min(int(high[-1]) + width if high.size else 0, rings.x.size - 1)
    begins = max(rings.x[at] / radius, min(1.3 * edge, ends[1] / radius))
    left = float(abs(mean[at])) if high.size else 0.0
    return np.asarray(distance < begins), left


def _edge(surface: Levelled, shape: _Shape, distance: Array) -> Edge:
    """Return where the removed area ends, in units of the outline's own distance."""
    outwards = (distance - 1) * shape.area_radius
    edge = find_edge(outwards, surface.height, shape.area_radius, surface.noise, surface.together)
    return replace(edge, at=1 + edge.at / shape.area_radius, u=edge.u / shape.area_radius)


def _finding(surface: Levelled, crater: _Crater, pixel_pitch: float) -> Finding:
    shape, distance, edge = crater.shape, crater.distance, crater.edge
    known = np.isfinite(surface.height)
    level_u = float(np.hypot(surface.level_u(distance < edge.at), crater.rim_left))
    depth, bottom_u = _bottom(surface, shape, distance, edge.at)
    # A point may be a sample or a mean over the pitch, which of a paraboloid is d/(6 R²) less deep: half of it is taken.
    raster_u = depth / (12 * (edge.at * shape.area_radius) ** 2)
    depth += raster_u
    reference_u = np.hypot(surface.level_u(distance < BOTTOM * edge.at), crater.rim_left)
    depth_u = float(np.sqrt(bottom_u**2 + reference_u**2 + raster_u**2))
    if depth < LIMIT * depth_u:
        return _empty(surface, depth + 2 * depth_u)
    radius = edge.at * shape.area_radius
    # The level's own error moves the crossing as far as the profile is flat there; a step holds it.
    radius_u = float(np.hypot(edge.u * shape.area_radius, level_u / max(edge.slope, depth / radius)))
    diameter, diameter_u = 2 * radius * pixel_pitch, 2 * radius_u * pixel_pitch
    measured = [Measured("crater-depth", depth, depth_u)]
    remarks = _remarks(surface, shape)
    if diameter_u < POOREST * diameter:
        measured += [Measured("crater-diameter", diameter, diameter_u), _volume(surface, crater, level_u, pixel_pitch)]
    else:
        remarks += ("the edge of the crater is lost in the noise: its diameter and volume were not taken",)
    caption = f"depth {_micrometres(depth, depth_u)}"
    if len(measured) > 1:
        caption += f", diameter {_micrometres(diameter, diameter_u)}"
    strokes = (
        Stroke(shape.line(edge.at), "found"),
        Stroke(shape.line(BOTTOM * edge.at), "reference"),
        Stroke(np.argwhere(~known)[:500, ::-1].astype(float), "left-out", marks=True),
    )
    return Finding(tuple(measured), Outline(tuple(one for one in strokes if len(one.points)), caption), remarks)


def _micrometres(value: float, u: float) -> str:
    """Return "40.57 µm ± 0.12 µm": as many decimals as show two digits of the uncertainty."""
    decimals = max(1 - int(np.floor(np.log10(1e6 * u))), 0) if u > 0 else 4
    return f"{1e6 * value:.{decimals}f} µm ± {1e6 * u:.{decimals}f} µm"


def _volume(surface: Levelled, crater: _Crater, level_u: float, pixel_pitch: float) -> Measured:
    """Return the volume below the surround: the area times the mean depth of its points."""
    known, edge, radius = np.isfinite(surface.height), crater.edge, crater.edge.at * crater.shape.area_radius
    area = np.pi * radius**2
    # Points on the edge count by the share of them that lies inside; what they mix of both sides is in the uncertainty.
    # Points are missing more often where it is steep: each stands for those missing in its ring.
    share = np.clip(0.5 + (edge.at - crater.distance) * crater.shape.area_radius, 0, 1)
    ring = (crater.distance * crater.shape.area_radius).astype(int)
    there = np.bincount(ring[known], share[known], minlength=int(ring.max()) + 1)
    ratio = np.bincount(ring.ravel(), share.ravel()) / np.where(there > 0, there, 1.0)
    share = share[known] * ratio[ring[known]]
    volume = -float(np.average(surface.height[known], weights=share)) * area * pixel_pitch**2
    point_u = surface.noise * np.sqrt(surface.together / float(share.sum()))
    mixed_u = 2 * np.pi * radius * edge.slope / 6
    u = pixel_pitch**2 * float(np.hypot(area * np.hypot(level_u, point_u), mixed_u))
    return Measured("crater-volume", volume, u)


def _bottom(surface: Levelled, shape: _Shape, distance: Array, edge: float) -> tuple[float, float]:
    """Return the depth of the deepest place of a surface fitted to the bottom, and its standard uncertainty.

    A paraboloid, as a Gaussian beam leaves it where depth goes with the logarithm of fluence; with a fourth power of the
    distance where the bottom's own points ask for it.
    """
    inside = (distance < BOTTOM * edge) & np.isfinite(surface.height)
    if np.count_nonzero(inside) < 12:
        raise Unmeasurable(
            f"{np.count_nonzero(inside)} points at the bottom of the crater",
            "at least 12",
            "Map the site with a finer pitch, or measure it again where points are missing.",
        )
    rows, columns = np.nonzero(distance < BOTTOM * edge)  # the deepest place may lie where points are missing
    reach = BOTTOM * edge * shape.area_radius
    y, x = (rows - shape.row) / reach, (columns - shape.column) / reach
    everywhere, known = _bottom_terms(x, y), np.isfinite(surface.height[rows, columns])
    values, full = surface.height[rows, columns][known], everywhere[known]
    fits = [_fitted(design, values) for design in (full[:, :-1], full)]
    (_, _, _, plain_sd), (_, solution, covariance, sd) = fits
    n = values.size / surface.together
    if not (sd < plain_sd and n * np.log((plain_sd / max(sd, 1e-300)) ** 2) > np.log(n) + 9):
        _, solution, covariance, _ = fits[0]
    deepest = int(np.argmin(everywhere[:, : solution.size] @ solution))
    # The deepest place lies between points: a finer raster around the deepest of them.
    step = np.arange(-20, 21) / 20 / reach
    fine_y, fine_x = (grid.ravel() for grid in np.meshgrid(y[deepest] + step, x[deepest] + step, indexing="ij"))
    terms = _bottom_terms(fine_x, fine_y)[:, : solution.size]
    lowest = terms[int(np.argmin(terms @ solution))]
    return -float(lowest @ solution), float(np.sqrt(lowest @ covariance @ lowest * surface.together))


def _bottom_terms(x: NDArray[np.floating], y: NDArray[np.floating]) -> Array:
    """Return the terms of a paraboloid and of its fourth power: (n, 7)."""
    square = x * x + y * y
    return np.stack([np.ones_like(x), x, y, x * x, x * y, y * y, square * square], axis=1)


def _fitted(design: Array, values: Array) -> tuple[Array, Array, Array, float]:
    """Fit by least squares with biweights: design, solution, its covariance, standard deviation of a point."""
    weight: Array = np.ones(values.size)
    solution: Array = np.zeros(design.shape[1])
    residual = values
    for _ in range(5):
        root = np.sqrt(weight)
        solution = np.asarray(np.linalg.lstsq(design * root[:, None], values * root, rcond=None)[0], dtype=float)
        residual = values - design @ solution
        sd = MAD * float(np.median(np.abs(residual)))
        if sd == 0:
            break
        weight = np.clip(1 - (residual / (6 * sd)) ** 2, 0, None) ** 2
    spread = float(np.sqrt(np.sum(weight * residual**2) / max(np.sum(weight) - design.shape[1], 1)))
    normal = np.asarray(np.linalg.pinv((design * weight[:, None]).T @ design), dtype=float)
    return design, solution, normal * spread**2, spread


def _remarks(surface: Levelled, shape: _Shape | None = None) -> tuple[str, ...]:
    remarks = []
    if surface.order == 2:
        remarks.append("the surface around is curved; its curvature was taken off")
    if surface.stripes:
        remarks.append(f"offsets of {' and '.join(surface.stripes)} were taken off")
    if shape is not None:
        longest = shape.radius(np.linspace(0, np.pi, 90)) + shape.radius(np.linspace(np.pi, 2 * np.pi, 90))
        ratio = float(np.max(longest) / np.min(longest))
        if ratio > 1.15:
            remarks.append(f"the crater is {ratio:.2f} times as long as wide")
    return tuple(remarks)

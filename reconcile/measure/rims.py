"""The rims of particles: where brightness is half-way between film and particle, seen from each particle's middle.

What a neighbour hides of a rim is filled in from the rest of it. Blur makes the half level of a small disc lie inside its
rim; that is put right with the profile of a blurred disc.
"""

from __future__ import annotations

import functools
from dataclasses import dataclass

import numpy as np
from scipy import ndimage, special

from reconcile.measure.film import Flattened, Mask
from reconcile.measure.measured import Array
from reconcile.measure.touching import Seeds

RAYS = 72
STEPS = 64  # along a ray
CLEAR = 0.93  # of the way to where a neighbour begins
CLEAR_PIXELS = 1.0
EASE = 2.0  # px: a particle's own half level may lie that far inside the common one
CORE = 0.6  # of the radius: where a particle's own darkness is taken
SHARPEST_FROM = 6.0  # px; radius from which a rim tells the blur
_SHOULDER = 0.75  # of the rim's distance
_HALF_WAY = 0.75  # px on both sides of the rim, over which its slope is taken


@dataclass(frozen=True, slots=True)
class Rims:
    """What was seen of each of n particles."""

    row: Array  # (n,) centre [px]
    column: Array  # (n,)
    rim: Array  # (n, RAYS) distance of the half level from the centre, hidden parts filled in [px]
    free: Mask  # (n, RAYS) seen; False: hidden by a neighbour, outside the picture, or an outlier
    rough: Array  # (n,) relative scatter of the seen rim about an ellipse
    shoulder: (
        Array  # (n,) darkness at three quarters of the rim's distance over the particle's own; NaN: too little was seen
    )
    slope: Array  # (n,) of darkness across the rim over the particle's own darkness [1/px]; NaN: too little was seen

    @property
    def radius(self) -> Array:
        """Radius of the circle of the same area as inside the half level: (n,) [px]."""
        return np.asarray(np.sqrt(np.mean(self.rim**2, axis=1)))

    def line(self, index: int) -> Array:
        """Return a closed outline as (RAYS + 1, 2) columns and rows."""
        angle, reach = _angles(), self.rim[index]
        points = np.stack([self.column[index] + reach * np.cos(angle), self.row[index] + reach * np.sin(angle)], axis=1)
        return np.concatenate([points, points[:1]])


def _angles() -> Array:
    return np.arange(RAYS) * 2 * np.pi / RAYS


def find_rims(picture: Flattened, seeds: Seeds) -> Rims:
    """Return the rims of all particles: from the seeds first, then from the centres and radii so found."""
    spline = ndimage.spline_filter(picture.smooth, order=3)
    row, column, radius = seeds.row, seeds.column, np.maximum(seeds.radius, 1.0)
    rims = _seen(spline, picture.dark, (row, column, radius))
    for _ in range(2):
        orders = np.exp(1j * _angles())
        shift = 2 * np.mean(rims.rim * orders, axis=1)  # the first harmonic of the rim is a shift of its centre
        length = np.maximum(np.abs(shift) / (0.5 * rims.radius + 1e-9), 1)
        row, column = rims.row + shift.imag / length, rims.column + shift.real / length
        radius = np.clip(rims.radius, 0.6 * seeds.radius, 1.8 * seeds.radius + 2)
        rims = _seen(spline, picture.dark, (row, column, np.maximum(radius, 1.0)))
    return rims


def _seen(spline: Array, dark: Mask, circles: tuple[Array, Array, Array]) -> Rims:
    row, column, radius = circles
    angle = _angles()
    reach = np.linspace(0, 1, STEPS)[None, :] * (1.6 * radius + 4)[:, None]  # (n, STEPS)
    rows = row[:, None, None] + reach[:, None, :] * np.sin(angle)[None, :, None]
    columns = column[:, None, None] + reach[:, None, :] * np.cos(angle)[None, :, None]
    rays = ndimage.map_coordinates(spline, [rows, columns], order=3, prefilter=False, mode="nearest")
    core = np.where((reach <= CORE * radius[:, None])[:, None, :], rays, np.nan)
    core[:, :, 0] = rays[:, :, 0]
    own = np.nanmedian(core.reshape(row.size, -1), axis=1)
    within = ndimage.map_coordinates(dark.astype(np.uint8), [rows, columns], order=0, mode="constant")
    crossing, crossed = _crossings(rays, reach, 0.5 * own, within > 0)
    inside = (
        (row[:, None] + crossing * np.sin(angle) > 0.5)
        & (row[:, None] + crossing * np.sin(angle) < spline.shape[0] - 1.5)
        & (column[:, None] + crossing * np.cos(angle) > 0.5)
        & (column[:, None] + crossing * np.cos(angle) < spline.shape[1] - 1.5)
    )
    free = crossed & inside & (crossing < CLEAR * _neighbours(row, column, radius) - CLEAR_PIXELS)
    rim, free, rough = _filled(crossing, free, radius)
    across = np.stack([rim - _HALF_WAY, rim + _HALF_WAY, _SHOULDER * rim])
    places = [row[:, None] + across * np.sin(angle), column[:, None] + across * np.cos(angle)]
    levels = ndimage.map_coordinates(spline, places, order=3, prefilter=False, mode="nearest")
    drop = np.where(free, (levels[0] - levels[1]) / (2 * _HALF_WAY) / own[:, None], 0).sum(axis=1)
    seen = free.sum(axis=1)
    shoulder = np.where(free, levels[2] / own[:, None], 0).sum(axis=1)
    drop, shoulder = (np.where(seen > RAYS // 2, one / np.maximum(seen, 1), np.nan) for one in (drop, shoulder))
    return Rims(row, column, rim, free, rough, shoulder, drop)


def _crossings(rays: Array, reach: Array, level: Array, within: Mask) -> tuple[Array, Mask]:
    """Return where each ray falls below its particle's level as it leaves the dark: (n, RAYS), and whether it does.

    `within` tells where it is inside the dark, light spots of a particle included: they are passed over.
    """
    leaves = np.argmin(within, axis=2)  # 0 where it never leaves
    leaves = np.where(within.all(axis=2), STEPS, leaves)
    step = reach[:, 1][:, None]
    below = rays < level[:, None, None]
    below &= np.arange(STEPS) >= (leaves - EASE / step)[..., None]
    below[..., 0] = False
    first = np.argmax(below, axis=2)
    crossed = first > 0
    at = np.maximum(first, 1)[..., None]
    high = np.take_along_axis(rays, at - 1, axis=2)[..., 0]
    low = np.take_along_axis(rays, at, axis=2)[..., 0]
    share = np.clip((high - level[:, None]) / np.where(high > low, high - low, 1.0), 0, 1)
    return np.where(crossed, (at[..., 0] - 1 + share) * step, reach[:, -1][:, None]), crossed


def _neighbours(row: Array, column: Array, radius: Array) -> Array:
    """Return how far each ray runs until it is in another particle's part: (n, RAYS), inf where it never is.

    Two circles part at the line through their crossings, whether they overlap or not (their radical line).
    """
    angle = _angles()
    far = np.full((row.size, RAYS), np.inf)
    for index in range(row.size):
        down, across = row - row[index], column - column[index]
        distance = np.hypot(down, across)
        near = np.flatnonzero((distance > 0) & (distance < radius + radius[index] + 6))
        if near.size == 0:
            continue
        towards = (
            across[near, None] * np.cos(angle)[None, :] + down[near, None] * np.sin(angle)[None, :]
        )  # (k, RAYS) distance × cosine
        ahead = distance[near] ** 2 + radius[index] ** 2 - radius[near] ** 2
        with np.errstate(divide="ignore", invalid="ignore"):
            until = np.where(towards > 0, np.maximum(ahead, 0)[:, None] / (2 * towards), np.inf)
        far[index] = until.min(axis=0)
    return far


def _filled(crossing: Array, free: Mask, radius: Array) -> tuple[Array, Mask, Array]:
    """Fill the hidden parts of each rim from a smooth curve through the rest, outliers left out.

    Returns
    -------
    rims, what was used of them, relative scatter about the smooth curve
    """
    angle = _angles()
    ellipse = np.stack([np.ones(RAYS), np.cos(angle), np.sin(angle), np.cos(2 * angle), np.sin(2 * angle)], axis=1)
    rim, used, rough = crossing.copy(), free.copy(), np.full(radius.size, np.inf)
    for index in range(radius.size):
        seen = free[index].copy()
        for _ in range(3):
            number = int(seen.sum())
            if number < 8:
                break
            # A circle off its centre where little is seen of it, else an ellipse.
            design = ellipse if number > 0.6 * RAYS else ellipse[:, :3]
            solution = np.linalg.lstsq(design[seen], crossing[index, seen], rcond=None)[0]
            curve = design @ solution
            away = crossing[index] - curve
            scatter = float(np.sqrt(np.mean(away[seen] ** 2)))
            rough[index] = scatter / max(float(solution[0]), 1e-9)
            rim[index] = np.where(seen, crossing[index], curve)
            used[index] = seen
            seen = free[index] & (np.abs(away) <= max(3 * scatter, 0.3))
    return np.maximum(rim, 0.1), used, rough


def blur_of(slope: Array, radius: Array) -> float:
    """Return the standard deviation of the blur [px] that the rims show, the larger ones where there are some; 0: none tells.

    The blur with which a disc of the seen radius would have the seen slope across its rim.
    """
    usable = np.isfinite(slope) & (radius >= SHARPEST_FROM)
    if not usable.any():
        usable = np.isfinite(slope) & (radius > 1)
    if not usable.any():
        return 0.0
    seen, steepness = radius[usable], slope[usable]
    low, high = np.full(seen.size, 0.2), 0.7 * seen
    for _ in range(30):
        middle = 0.5 * (low + high)
        true = unblurred(seen, middle) / middle
        own = _blurred(true, 0.5 * CORE * seen / middle)
        drop = _blurred(true, (seen - _HALF_WAY) / middle) - _blurred(true, (seen + _HALF_WAY) / middle)
        steeper = drop / (2 * _HALF_WAY * own) > steepness
        low, high = np.where(steeper, middle, low), np.where(steeper, high, middle)
    return float(np.median(0.5 * (low + high)))


def unblurred(radius: Array, blur: Array | float) -> Array:
    """Return the radii of discs whose half level, after a Gaussian blur, lies at `radius` [px].

    A disc of radius R blurred by σ has at distance r the darkness of a non-central χ² of two degrees, P(R²/σ²; r²/σ²);
    for R ≫ σ its half level lies at R − σ²/(2R).
    """
    width = np.maximum(blur, 1e-6)
    true, seen = _half_levels()
    scaled = radius / width
    small = np.interp(scaled, seen, true)
    return np.asarray(width * np.where(scaled < seen[-1], small, scaled + 0.5 / np.maximum(scaled, 1e-9)))


def flat_shoulder(radius: Array, blur: float) -> Array:
    """Return what `Rims.shoulder` would be for discs of even darkness: (n,)."""
    width = max(blur, 1e-6)
    return _blurred(radius / width, _SHOULDER * radius / width)


def _blurred(true: Array, distance: Array) -> Array:
    """Return the darkness of a blurred disc at a distance from its middle; both in units of the blur."""
    return np.asarray(special.chndtr(true**2, 2, distance**2))


@functools.cache
def _half_levels() -> tuple[Array, Array]:
    """Return radii of discs and where their half levels lie, in units of the blur."""
    true = np.geomspace(0.5, 15, 160)
    low, high = np.zeros_like(true), true + 3
    for _ in range(45):
        middle = 0.5 * (low + high)
        # The particle's own darkness is the middle one of the samples along the rays, at half of the core's radius.
        above = _blurred(true, middle) > 0.5 * _blurred(true, 0.5 * CORE * middle)
        low, high = np.where(above, middle, low), np.where(above, high, middle)
    seen = 0.5 * (low + high)
    rising = int(np.argmax(np.diff(seen) > 1e-6))  # below, discs of any size look alike: nothing but blur is seen
    return true[rising:], seen[rising:]

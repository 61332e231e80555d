"""The outline of a cap on a target: a straight edge, then profiles across an arc and a circle through their edges."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from reconcile.measure.circle import Fit, fit_circle, fit_line
from reconcile.measure.edges import Edges, find_edges
from reconcile.measure.fringes import fringe_shift, mean_profile
from reconcile.measure.measured import Array, Unmeasurable
from reconcile.measure.scene import Cap, Scene

Mask = NDArray[np.bool_]

_STEP = 0.5  # px between samples of a profile
_GROUP = 4  # px of edge that one profile averages over: more than the blur correlates
_MOST_PROFILES = 180
_UNDECIDED = 0.1  # of the radius: standard deviation of the centre's height above the target before the outline is seen
_FLOOR = 0.004  # px: error of the radius that stays on discs without noise, from the interpolation between pixels
_HIDDEN = 0.03  # of the blur
_HIDING = 2.0  # px: blur that hides fringes of the common spacing of 5 to 8 px
_LEAST_ARC = 50.0  # degrees; with less, a circle's radius hangs on noise


@dataclass(frozen=True, slots=True)
class Contact:
    """The target's edge, from profiles across it."""

    scene: Scene  # with the edge refined
    u_height: float  # standard uncertainty of the edge under the bubble's centre [px]
    width: float  # blur of the edge [px]


@dataclass(frozen=True, slots=True)
class Arc:
    """The circle through the outline, in pixels."""

    centre: Array  # (2,) column, row
    height: float  # of the centre above the target's edge
    u_height: float
    half_level: float  # radius at which the profiles pass half their step
    radius: float  # the same without the blur's shift
    u: float
    width: float  # blur of the outline
    coverage: float  # degrees of arc that carry the fit
    contrast: float  # step of the outline, as a fraction of the light
    dark: float  # level inside
    scatter: float  # of single profiles about the circle
    points: Array  # (profiles, 2) column, row of each edge
    used: Mask  # (profiles,)
    saturated: float  # fraction of the outline in front of saturated light
    fringes: float  # amplitude of diffraction fringes beside the outline, as a fraction of its step; 0: none seen


def refine_contact(scene: Scene, cap: Cap | None) -> Contact:
    """Find the target's edge to a part of a pixel from the columns beside the bubble.

    Raises
    ------
    Unmeasurable
        Too little of the edge lies free.
    """
    rows, columns = scene.flat.shape
    centres = np.arange(_GROUP / 2 - 0.5, columns - _GROUP / 2, _GROUP)
    if cap is not None:
        centres = centres[np.abs(centres - cap.column) > 1.05 * cap.radius + max(6.0, 1.5 * scene.block)]
    half = max(10.0, 3.0 * scene.block)
    centres = centres[(scene.row_of_edge(centres) > 4.0) & (scene.row_of_edge(centres) < rows - 3.0)]
    if len(centres) < 5:
        raise Unmeasurable(
            f"a target whose edge lies free over {len(centres) * _GROUP} pixels only",
            "its edge, sharp, on at least one side of the bubble",
            "Focus on the site or use a smaller magnification, or measure it by hand.",
        )
    along = np.arange(-half, half + _STEP, _STEP)
    offsets = np.arange(_GROUP) - (_GROUP - 1) / 2
    at = centres[:, None] + offsets[None, :]
    sampled = _sample(scene.flat, at[:, :, None] + 0.0 * along, scene.row_of_edge(at)[:, :, None] - along)
    edges = find_edges(sampled.mean(axis=1), along, np.zeros(len(centres)), max(1.0, 0.5 * scene.block), 0.5 * half)
    edges = find_edges(sampled.mean(axis=1), along, _filled(edges.position), edges.width, 6.0)
    seen = np.isfinite(edges.position) & (edges.bright - edges.dark > 0.25 * (1.0 - scene.band))
    if seen.sum() < 5:
        raise Unmeasurable(
            "no clear edge of the target beside the bubble",
            "the target's edge visible on at least one side of the bubble",
            "Clean the optics or use a smaller magnification, or measure it by hand.",
        )
    found = scene.row_of_edge(centres[seen]) - edges.position[seen]
    line = fit_line(centres[seen], found)
    where = np.array([1.0, columns / 2 if cap is None else cap.column])
    u = float(np.sqrt(where @ line.covariance @ where + edges.shape**2))
    refined = replace(scene, intercept=float(line.values[0]), slope=float(line.values[1]))
    return Contact(refined, u, edges.width)


def _filled(position: Array) -> Array:
    known = np.isfinite(position)
    return np.where(known, position, np.median(position[known]) if known.any() else 0.0)


def _sample(image: Array, columns: Array, rows: Array) -> Array:
    return np.asarray(ndimage.map_coordinates(image, [rows, columns], order=1, mode="nearest"), dtype=float)


def _directions(slope: float) -> tuple[Array, Array]:
    """Return the unit vectors (column, row) along the target's edge and away from the target."""
    long = float(np.hypot(1.0, slope))
    return np.array([1.0, slope]) / long, np.array([slope, -1.0]) / long


def fit_arc(contact: Contact, cap: Cap, full: Mask | None) -> Arc:
    """Fit a circle to the bubble's outline.

    Parameters
    ----------
    contact : the frame and its target
    cap : where the bubble is, roughly
    full : pixels that hold no more light; None: none does

    Raises
    ------
    Unmeasurable
        Too little of the outline is seen, or it is no circle, or lies in front of saturated light.
    """
    scene = contact.scene
    along, away = _directions(scene.slope)
    origin = np.array([cap.column, float(scene.row_of_edge(np.array(cap.column)))])
    arm = np.array([cap.column, cap.row]) - origin
    place = np.array([arm @ along, arm @ away, cap.radius])  # centre along and above the target's edge, radius
    width = max(contact.width, 0.5)
    start = max(width, 0.6 * scene.block, 0.5 * min(cap.ragged, 0.2 * cap.radius))
    for turn in range(4):
        blur, free = (start, False) if turn == 0 else (width, True)
        angles, rays = _angles(place, contact, blur)
        seen = _Arm(scene, origin, along, away, place, angles, rays)
        window = _window(place[2], blur, turn == 0)
        clear = seen.inside(place[2] + 2.2 * blur + 3.0)
        saturated = seen.saturated(full, place[2] + 2.2 * blur, place[2] + 2.2 * blur + 6.0)
        kept = clear & (saturated < 0.2)
        _enough(angles, clear, kept)
        profiles = seen.profiles(window, kept)
        reach = max(4.0, min(8.0, 0.2 * place[2]))
        edges = find_edges(profiles, window, np.full(int(kept.sum()), place[2]), blur, reach, free)
        good = np.isfinite(edges.position) & (edges.bright - edges.dark > 0.05)
        if good.sum() < 6:
            raise _no_outline()
        radii, turned = edges.position[good], angles[kept][good]
        points = place[:2] + radii[:, None] * np.column_stack([np.cos(turned), np.sin(turned)])
        expected = (0.0, float(np.hypot(_UNDECIDED * place[2], contact.u_height)))
        step = np.median((edges.bright - edges.dark)[good])
        # A step's place from samples of independent noise, by its information: the integral of its slope squared. Of
        # the noise in the light, the part that photons would leave halfway down the step.
        halfway = np.sqrt(max(1.0 - 0.5 * step, 0.25))
        least = halfway * scene.noise / step * np.sqrt(2.0 * np.sqrt(np.pi) * edges.width / seen.rays)
        fit = fit_circle(points, place, expected, float(least))
        place, width = fit.values, edges.width
        if not 2.0 < place[2] < 8.0 * max(scene.flat.shape):
            raise _no_outline()
    steps = (edges.bright - edges.dark)[good][:, None]
    longer = np.arange(max(place[2] - 3.5 * width, 0.5), place[2] + 7.0 * width + 6.0, _STEP)
    profiles = (seen.profiles(longer, kept)[good] - edges.dark[good][:, None]) / steps
    offset, mean = mean_profile(profiles, longer, edges.position[good])
    noise = 1.25 * scene.noise / float(step) / float(np.sqrt(seen.rays * good.sum()))
    fringes = fringe_shift(offset, mean, edges.width, noise)
    return _judged(contact, fit, edges, good, points, origin, (float(np.mean(saturated[clear] >= 0.2)), *fringes))


def _angles(place: Array, contact: Contact, blur: float) -> tuple[Array, int]:
    """Return the directions of the profiles, from the target's edge on, and how many rays each averages over."""
    margin = max(3.0, 2.5 * contact.width)
    # Where the outline comes back below its centre, the light beside it must lie above the target too.
    outer = place[2] + (0.0 if place[1] < margin else 2.2 * blur + 6.0)
    lowest = float(np.arcsin(np.clip((margin - place[1]) / outer, -0.9, 0.9)))
    length = place[2] * (np.pi - 2.0 * lowest)
    number = int(np.clip(length // _GROUP, 8, _MOST_PROFILES))
    step = (np.pi - 2.0 * lowest) / number
    angles = lowest + step * (np.arange(number, dtype=np.float64) + 0.5)
    return np.asarray(angles, dtype=np.float64), max(2, round(place[2] * step))


def _window(radius: float, blur: float, first: bool) -> Array:
    half = max(8.0, 4.0 * blur + (0.25 * radius if first else min(8.0, 0.2 * radius) + 2.0))
    return np.arange(max(radius - half, 0.5), radius + half + _STEP, _STEP)


@dataclass(frozen=True, slots=True)
class _Arm:
    """Rays from a centre over an arc."""

    scene: Scene
    origin: Array
    along: Array
    away: Array
    place: Array
    angles: Array
    rays: int

    def _at(self, radii: Array, angles: Array) -> tuple[Array, Array]:
        """Return the columns and rows of points (…angles, radii)."""
        x = self.place[0] + np.cos(angles)[..., None] * radii
        y = self.place[1] + np.sin(angles)[..., None] * radii
        return (
            self.origin[0] + x * self.along[0] + y * self.away[0],
            self.origin[1] + x * self.along[1] + y * self.away[1],
        )

    def _fan(self) -> Array:
        """Return the angles of all rays, (profiles, rays)."""
        step = self.angles[1] - self.angles[0]
        return self.angles[:, None] + step * ((np.arange(self.rays) + 0.5) / self.rays - 0.5)[None, :]

    def inside(self, radius: float) -> Mask:
        """Return which profiles reach a radius within the frame."""
        columns, rows = self._at(np.array([radius]), self.angles)
        high, wide = self.scene.flat.shape
        return np.asarray((columns > 0) & (columns < wide - 1) & (rows > 0) & (rows < high - 1))[:, 0]

    def saturated(self, full: Mask | None, inner: float, outer: float) -> Array:
        """Return which part of each profile between two radii holds no more light."""
        if full is None:
            return np.zeros(len(self.angles))
        columns, rows = self._at(np.arange(inner, outer), self._fan())
        sampled = ndimage.map_coordinates(full.astype(np.float32), [rows, columns], order=0, mode="nearest")
        return np.asarray(sampled.mean(axis=(1, 2)), dtype=float)

    def profiles(self, radii: Array, kept: Mask) -> Array:
        """Return the levels along the kept profiles, (profiles, radii)."""
        columns, rows = self._at(radii, self._fan()[kept])
        return np.asarray(_sample(self.scene.flat, columns, rows).mean(axis=1))


def _no_outline() -> Unmeasurable:
    return Unmeasurable(
        "something dark on the target without a circular outline",
        "a bubble whose outline is part of a circle",
        "Look at the frame: debris, a second bubble or a torn one has to be measured by hand.",
    )


def _enough(angles: Array, clear: Mask, kept: Mask) -> None:
    """Refuse an outline of which too little can be used."""
    step = float(np.degrees(angles[1] - angles[0]))
    if kept.sum() * step >= _LEAST_ARC and kept.sum() >= 6:
        return
    if clear.sum() * step >= _LEAST_ARC:
        raise Unmeasurable(
            f"light that is saturated along {(clear.sum() - kept.sum()) * step:.0f}° of the outline",
            "light below saturation beside the bubble",
            "Lower the light or the gain for the next shots.",
        )
    raise Unmeasurable(
        f"a bubble of which {clear.sum() * step:.0f}° of arc lie in the frame",
        f"at least {_LEAST_ARC:.0f}° of its outline",
        "Use a smaller magnification, or measure it by hand.",
    )


def _judged(
    contact: Contact,
    fit: Fit,
    edges: Edges,
    good: Mask,
    points: Array,
    origin: Array,
    beside: tuple[float, float, float],
) -> Arc:
    """Turn the fitted circle into a radius with its uncertainty.

    `beside`: the part of the outline before saturated light; the shift and the amplitude of fringes.
    """
    saturated, by_fringes, fringes = beside
    along, away = _directions(contact.scene.slope)
    x, y, half_level = (float(value) for value in fit.values)
    used = fit.weights > 0.05
    if used.mean() < 0.5 or fit.scatter > max(0.06 * half_level, 0.6 * edges.width):
        raise _no_outline()
    if not -0.7 < y / half_level < 0.9:
        raise _no_outline()
    turned = np.unwrap(np.arctan2(points[:, 1] - y, points[:, 0] - x))
    step = float(np.median(np.abs(np.diff(turned))))
    coverage = float(np.degrees(step * used.sum()))
    # A blurred disc passes half its step inside its rim, since more light than dark lies around each point of the rim:
    # blurring moves a level line by curvature times half the variance, as diffusion does.
    shift = edges.width**2 / (2.0 * half_level)
    # Fringes closer than the blur are not seen, and move the half level by their amplitude times their spacing. At the
    # blur of a few pixels that hides them some 3 % of it is left open (judged from drawn fringes of 5 to 15 %).
    hidden = _HIDDEN * edges.width * (1.0 - np.exp(-((edges.width / _HIDING) ** 2))) ** 2
    u = np.sqrt(
        fit.covariance[2, 2] + edges.shape**2 + (0.1 * shift) ** 2 + (0.15 * by_fringes) ** 2 + hidden**2 + _FLOOR**2
    )
    return Arc(
        centre=origin + x * along + y * away,
        height=y,
        u_height=float(np.hypot(np.sqrt(fit.covariance[1, 1]), contact.u_height)),
        half_level=half_level,
        radius=half_level + shift + by_fringes,
        u=float(u),
        width=edges.width,
        coverage=coverage,
        contrast=float(np.median((edges.bright - edges.dark)[good])),
        dark=float(np.median(edges.dark[good])),
        scatter=fit.scatter,
        points=origin + points[:, :1] * along + points[:, 1:] * away,
        used=used,
        saturated=saturated,
        fringes=fringes,
    )


def radius_from_area(scene: Scene, arc: Arc, margin: float) -> float:
    """Return the radius at half level that the dark area gives, bright spots inside filled [px].

    A second route to `arc.half_level`: it uses every pixel once and no profile.
    """
    reach = 1.2 * arc.half_level + 4.0
    low = np.maximum(np.floor(arc.centre - reach).astype(int), 0)
    high = np.ceil(arc.centre + reach).astype(int) + 1
    part = scene.flat[low[1] : high[1], low[0] : high[0]]
    rows = np.arange(low[1], low[1] + part.shape[0])[:, None]
    columns = np.arange(low[0], low[0] + part.shape[1])[None, :]
    distance = np.hypot(columns - arc.centre[0], rows - arc.centre[1])
    counted = (scene.above(columns, rows) > margin) & (distance < reach)
    level = arc.dark + 0.5 * arc.contrast
    dark = (ndimage.uniform_filter(part, 3, mode="nearest") < level) | (scene.above(columns, rows) <= margin)
    dark = ndimage.binary_fill_holes(dark & (distance < reach))
    labels, _ = ndimage.label(dark)
    inside = labels[(distance < 0.9 * arc.half_level) & dark]
    own = labels == (np.bincount(inside).argmax() if len(inside) else 0)
    area, expected = float((own & counted & dark).sum()), float(((distance < arc.half_level) & counted).sum())
    return arc.half_level * float(np.sqrt(area / max(expected, 1.0)))

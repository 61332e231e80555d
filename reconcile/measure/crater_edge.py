"""Where a crater's profile ends: a step, or the place at which it reaches the level of the surround."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy.special import ndtr

from reconcile.measure.levelling import Array
from reconcile.measure.measured import Unmeasurable

BIN = 0.25  # points
BLURS = (0.3, 0.45, 0.7, 1.0, 1.5)  # points; standard deviations by which instrument and averaging widen a step
SURE = 5.0  # standard uncertainties by which a step must stand out
WINDOW = 0.2  # of the radius, on either side of the edge
LEAST_WINDOW = 4.0  # points
OUTER = (0.35, 0.7)  # of twice that, outside
RIDGE = 1e-9  # of the scaled normal equations: a step at the window's end has no parabola beyond it
UNRESOLVED = 0.15  # points: how far a step too low to be told apart from the slope beside it moves the crossing
VAGUE = 0.2  # points: an edge without a step less sure than this is taken from the whole outer half of the profile
PARTIAL = 0.25  # of a step: how far below the surround its upper end may seem to lie
FLOOR = 0.008  # points: what the raster leaves of a step's place however little noise there is


@dataclass(frozen=True, slots=True)
class Edge:
    """The end of the removed area along the profile."""

    at: float  # distance from where the profile's distances count from
    u: float  # its standard uncertainty, that of the surround's level left out
    slope: float  # of the profile there [height / point]
    step: bool  # a step stands there
    misfit: float  # of the fitted profile, mean squared over that expected


@dataclass(frozen=True, slots=True)
class Profile:
    """Mean heights in narrow rings."""

    x: Array  # (n,) distance [points]
    h: Array  # (n,) height
    sd: Array  # (n,) standard uncertainty


@dataclass(frozen=True, slots=True)
class _Step:
    """Parabolas on both sides of a blurred step."""

    at: float
    blur: float
    solution: Array  # inner 1, x, x²; then what the outer one differs by, about `at`
    covariance: Array
    misfit: float  # mean squared, over that expected


def find_edge(distance: Array, height: Array, radius: float, noise: float, together: float) -> Edge:
    """Find where the removed area ends.

    Parameters
    ----------
    distance : Array
        Of every point from the crater's outline at a lower level, outwards positive [points].
    height : Array
        Of every point above the surround; NaN: missing.
    radius : float
        Of that outline [points].
    noise : float
        Standard deviation of a point's height.
    together : float
        Points that err together.

    Returns
    -------
    Edge
        At a step where the profile has one that ends at or above the surround, else where the profile reaches the surround.
    """
    profile = ring_means(distance, height, (-0.6 * radius, max(0.8 * radius, 8.0)), noise * np.sqrt(together))
    about = _rough_crossing(profile)
    inner, outer = max(LEAST_WINDOW, WINDOW * radius), max(LEAST_WINDOW, 2 * WINDOW * radius)
    edges = [_edge(_cut(profile, about - inner, about + share * outer), about, 0.6 * inner) for share in OUTER]
    # Rims fall off over lengths of their own: two windows outside tell how much the edge depends on that.
    best, other = sorted(edges, key=lambda one: one.misfit)
    if not best.step and best.u > VAGUE:
        # A step too low to be seen would lie inside the extrapolated crossing: the truth is between the two.
        wide = _extrapolated(profile, about, -radius)
        u = 0.5 * float(np.sqrt(best.u**2 + wide.u**2 + (best.at - wide.at) ** 2))
        return replace(wide, at=0.5 * (best.at + wide.at), u=u)
    return replace(best, u=float(np.hypot(best.u, 0.3 * (best.at - other.at))))


def _extrapolated(profile: Profile, about: float, middle: float) -> Edge:
    """Return where a parabola through the whole outer half of the profile meets the surround: for edges lost in noise.

    The parabola has its lowest place in the middle of the crater, as that of a Gaussian beam has.
    """
    used = profile.x < about - 0.5
    x, h, sd = (profile.x[used] - middle) ** 2, profile.h[used], profile.sd[used]
    design = np.stack([np.ones_like(x), x], axis=1) / sd[:, None]
    covariance = np.linalg.inv(design.T @ design)
    bottom, bend = covariance @ (design.T @ (h / sd))
    if bend <= 0 or bottom >= 0:
        return Edge(about, about - profile.x[0], 0.0, False, np.inf)
    reach = float(np.sqrt(-bottom / bend))
    terms = np.array([1.0, reach**2])
    slope = 2 * float(bend) * reach
    u = float(np.sqrt(terms @ covariance @ terms)) / slope
    return Edge(middle + reach, float(np.hypot(u, UNRESOLVED)), slope, False, 1.0)


def _cut(profile: Profile, start: float, end: float) -> Profile:
    near = (profile.x >= start) & (profile.x <= end)
    if np.count_nonzero(near) < 12:
        raise Unmeasurable(
            "too few points along the edge of the crater",
            "heights on most of the edge",
            "Measure the site again, with more light or a finer pitch.",
        )
    return Profile(profile.x[near], profile.h[near], profile.sd[near])


def _edge(window: Profile, about: float, reach: float) -> Edge:
    step, place_u = _best_step(window, about, reach)
    jump, jump_u = float(step.solution[3]), float(np.sqrt(step.covariance[3, 3]))
    inner = float(step.solution[0])
    crossing = _crossing(step, reach)
    if jump > SURE * jump_u and inner < 0 and inner + jump > -PARTIAL * jump:
        slope = jump / (step.blur * np.sqrt(2 * np.pi)) + abs(float(step.solution[1]))
        doubt = 0.5 * abs(step.at - crossing.at) if jump < 2 * SURE * jump_u else 0.0  # noise may feign a weak step
        return Edge(step.at, float(np.sqrt(place_u**2 + FLOOR**2 + doubt**2)), slope, True, step.misfit)
    return replace(crossing, u=float(np.hypot(crossing.u, min(place_u, UNRESOLVED))))


def ring_means(distance: Array, height: Array, ends: tuple[float, float], noise: float) -> Profile:
    """Return the mean height in narrow rings, points far from their ring left out.

    Parameters
    ----------
    distance, height : Array
        Of every point [points], [height]; NaN: missing.
    ends : tuple
        From where to where [points].
    noise : float
        The least standard deviation of a point, correlation counted in.
    """
    used = np.isfinite(height) & (distance > ends[0]) & (distance < ends[1])
    index = ((distance[used] - ends[0]) / BIN).astype(int)
    values, places = height[used], distance[used]
    size = int((ends[1] - ends[0]) / BIN) + 1
    kept = np.ones(values.size, dtype=bool)
    mean: Array = np.zeros(size)
    place, spread, count = mean, mean, mean
    for _ in range(2):  # the second time without what lies far from its ring
        count = np.bincount(index[kept], minlength=size).astype(float)
        some = np.maximum(count, 1)
        mean = np.bincount(index[kept], values[kept], minlength=size) / some
        place = np.bincount(index[kept], places[kept], minlength=size) / some
        square = np.bincount(index[kept], (values[kept] - mean[index[kept]]) ** 2, minlength=size) / some
        spread = np.sqrt(np.clip(square, noise**2, None)) + 1e-300
        kept = np.abs(values - mean[index]) <= 4 * spread[index]
    enough = count >= 3
    return Profile(place[enough], mean[enough], spread[enough] / np.sqrt(count[enough]))


def _rough_crossing(profile: Profile) -> float:
    """Return where the profile first rises to the surround, on its way out; from below the noise by its slope."""
    smooth = np.convolve(np.pad(profile.h, 1, mode="edge"), [0.25, 0.5, 0.25], mode="valid")
    start = int(np.argmin(np.abs(profile.x + 0.2 * abs(profile.x[0]))))
    for index in range(start, smooth.size):
        if smooth[index] >= -0.5 * profile.sd[index]:
            return float(profile.x[index])
    return float(profile.x[-1])


def _basis(x: Array, blur: float) -> Array:
    """Return 1, x, x² and the same begun at 0, blurred by a Gaussian, along a last axis of 6."""
    rise, bell = ndtr(x / blur), np.exp(-0.5 * (x / blur) ** 2) / np.sqrt(2 * np.pi)
    line = x * rise + blur * bell
    square = (x * x + blur**2) * rise + blur * x * bell
    return np.stack([np.ones_like(x), x, x * x + blur**2, rise, line, square], axis=-1)


def _best_step(window: Profile, about: float, reach: float) -> tuple[_Step, float]:
    """Return the likeliest place and blur of a step, and the standard uncertainty of the place."""
    places = about + np.arange(-reach, reach + 0.01, 0.25)
    places = places[(places > window.x[0] + 1) & (places < window.x[-1] - 1)]
    misfits = np.array([_misfits(window, places, blur) for blur in BLURS])
    blur = BLURS[int(np.argmin(misfits.min(axis=1)))]
    about = float(places[int(np.argmin(misfits.min(axis=0)))])
    places = about + np.arange(-0.3, 0.31, 0.02)
    misfit = _misfits(window, places, blur)
    at = float(places[int(np.argmin(misfit))])
    best = _step(window, at, blur)
    # The uncertainty: how far the place moves until the misfit has grown by that of one standard uncertainty.
    usual = max(best.misfit, 1.0)
    distances = np.array([0.05, 0.1, 0.2, 0.4, 0.8, 1.6, 3.2])
    sides = np.array([_misfits(window, at + np.append(-distances, distances), one) for one in BLURS]).min(axis=0)
    growth = sides.reshape(2, -1) - misfit.min()
    for distance, both in zip(distances, growth.T, strict=True):
        if both.min() > usual:
            return best, float(distance * np.sqrt(usual / both.mean()))
    return best, reach


def _misfits(window: Profile, places: Array, blur: float) -> Array:
    """Return the sum of squared misfits of a step at each of several places."""
    design = _basis(window.x[None, :] - places[:, None], blur) / window.sd[:, None]
    target = window.h / window.sd
    scale = np.sqrt(np.sum(design**2, axis=1)) + 1e-300
    design = design / scale[:, None, :]
    normal = np.swapaxes(design, 1, 2) @ design + RIDGE * np.eye(design.shape[2])
    right = np.swapaxes(design, 1, 2) @ target
    solution = np.linalg.solve(normal, right[..., None])[..., 0]
    residual = target - np.einsum("mnk,mk->mn", design, solution)
    return np.asarray(np.sum(residual**2, axis=1))


def _step(window: Profile, at: float, blur: float) -> _Step:
    design = _basis(window.x - at, blur) / window.sd[:, None]
    target = window.h / window.sd
    scale = np.sqrt(np.sum(design**2, axis=0)) + 1e-300
    inverse = np.linalg.inv((design / scale).T @ (design / scale) + RIDGE * np.eye(scale.size)) / np.outer(scale, scale)
    solution = inverse @ (design.T @ target)
    misfit = float(np.sum((target - design @ solution) ** 2)) / max(target.size - 8, 1)
    return _Step(at, blur, solution, inverse * max(misfit, 1.0), misfit)


def _crossing(step: _Step, reach: float) -> Edge:
    """Return where the parabola on the inner side of the weak step, or of the bend, meets the surround."""
    solution, covariance = step.solution[:3], step.covariance[:3, :3]
    roots = np.roots(solution[::-1])
    real = roots[np.abs(roots.imag) < 1e-9].real
    rising = [root for root in real if solution[1] + 2 * solution[2] * root > 0 and abs(root) <= reach]
    if rising:
        at = float(min(rising, key=abs))
    elif solution[1] > 0:
        at = float(np.clip(-solution[0] / solution[1], -reach, reach))
    else:
        at = 0.0
    slope = max(float(solution[1] + 2 * solution[2] * at), 1e-300)
    terms = np.array([1.0, at, at * at])
    u = float(np.sqrt(terms @ covariance @ terms)) / slope
    return Edge(step.at + at, float(np.hypot(min(u, reach), FLOOR)), slope, False, step.misfit)

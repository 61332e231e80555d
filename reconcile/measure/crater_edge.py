"""Where a crater's profile ends: a step, or the place at which it reaches the level of the surround."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy.special import log_ndtr, ndtr

from reconcile.measure.levelling import Array
from reconcile.measure.measured import Unmeasurable

BIN = 0.25  # points
# Points; standard deviations by which instrument and averaging widen a step.
BLURS = (0.3, 0.4, 0.55, 0.75, 1.0, 1.4)
# Points; lengths over which a step's foot falls inside its upper edge, as a depth reached soon after threshold has it.
FEET = (0.0, 0.35, 0.5, 0.7, 1.0, 1.4, 2.0, 2.8)
WINDOW = 0.2  # of the radius, on either side of the edge
LEAST_WINDOW = 4.0  # points
OUTER = (0.35, 0.7)  # of twice that, outside
RIDGE = 1e-9  # of the scaled normal equations: a step at the window's end has no parabola beyond it
UNRESOLVED = 0.15  # points: how far a step too low to be told apart from the slope beside it moves the crossing
VAGUE = 1.0  # points: an edge without a step less sure than this is taken from the whole outer half of the profile
PARTIAL = 0.25  # of a step: how far below the surround its upper end may seem to lie
FORM = 0.1  # of how far a foot moves the crossing: the least that the choice of the profile's form leaves open
ALIKE = 1.5  # ratio of two windows' misfits up to which they fit equally well
FLOOR = 0.008  # points: what the raster leaves of a step's place however little noise there is


Spread = tuple[float, float]  # blur and foot of a step [points]


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
    spread: Spread
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
        Where the profile, freed of its blur, reaches the surround.
    """
    profile = ring_means(distance, height, (-0.6 * radius, max(0.8 * radius, 8.0)), noise * np.sqrt(together))
    about = _rough_crossing(profile)
    inner, outer = max(LEAST_WINDOW, WINDOW * radius), max(LEAST_WINDOW, 2 * WINDOW * radius)
    edges = [_edge(_cut(profile, about - inner, about + share * outer), about, 0.6 * inner) for share in OUTER]
    # Rims fall off over lengths of their own: two windows outside tell how much the edge depends on that.
    # The better fitted one is taken; of two fitted alike, the surer one.
    least = min(one.misfit for one in edges)
    best, other = sorted(edges, key=lambda one: (one.misfit > ALIKE * least, one.u))
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
    """Return where the profile, freed of its blur, meets the surround: the mean over all likely steps.

    A foot inside and a blur to both sides widen a step nearly alike and place its crossing differently: what one
    profile cannot tell of them is averaged over, and so is in the uncertainty.
    """
    places = about + np.arange(-reach, reach + 0.01, 0.25)
    places = places[(places > window.x[0] + 1) & (places < window.x[-1] - 1)]
    spreads: list[Spread] = [(blur, foot) for blur in BLURS for foot in FEET]
    upright = float("nan")
    for least in (0.6, 0.12, 0.0):
        fits = [_fits(window, places, spread) for spread in spreads]
        misfits = np.array([misfit for misfit, _ in fits])
        usual = max(float(misfits.min()) / max(window.x.size - 9, 1), 1.0)
        crossings = np.array(
            [places + _crossings(one, spread[1], reach) for (_, one), spread in zip(fits, spreads, strict=True)]
        )
        share = np.exp(-0.5 * (misfits - misfits.min()) / usual)
        if np.isnan(upright):
            without = np.array([not foot for _, foot in spreads])
            own = misfits[without]
            upright, _ = _mean(crossings[without], np.exp(-0.5 * (own - own.min()) / usual))
        mean, sd = _mean(np.broadcast_to(places, share.shape), share)
        if sd > 2 * (places[1] - places[0]) or not least:
            break
        spreads = [one for one, likely in zip(spreads, share.max(axis=1) > 1e-8, strict=True) if likely]
        places = mean + np.linspace(-1, 1, 41) * max(5 * sd, least)
    at, u = _mean(crossings, share)
    first, second = np.unravel_index(int(np.argmin(misfits)), misfits.shape)
    best = _step(window, float(places[second]), spreads[int(first)])
    slope, own_u = _slope(best, float(crossings[first, second]) - best.at)
    form_u = FORM * (at - upright)
    return Edge(at, float(np.sqrt(u**2 + own_u**2 + form_u**2 + FLOOR**2)), slope, own_u == 0, best.misfit)


def _mean(values: Array, share: Array) -> tuple[float, float]:
    mean = float(np.average(values, weights=share))
    return mean, float(np.sqrt(np.average((values - mean) ** 2, weights=share)))


def _curve(x: Array, foot: float) -> Array:
    """Return the terms of `_basis` without the blur: (n, 6)."""
    out = np.where(x >= 0, x, 0.0)
    step = np.exp(np.minimum(x, 0.0) / foot) if foot else np.where(x >= 0, 1.0, 0.0)
    return np.stack([np.ones_like(x), x, x * x, step, out, out * out], axis=-1)


def _crossings(solutions: Array, foot: float, reach: float) -> Array:
    """Return how far from the upper end of each step its profile first rises to the surround.

    Where the upper end lies at the surround but for noise, the removed area ends with it.
    """
    x = np.append(np.arange(-reach, 0.0, 0.05), [-1e-6, *np.arange(0.0, reach, 0.1)])
    h = solutions @ _curve(x, foot).T
    inside = int(np.count_nonzero(x < 0))
    begun = np.maximum.accumulate(h < 0, axis=1)
    risen = (h >= 0) & begun
    at = np.where(risen.any(axis=1), np.argmax(risen, axis=1), h.shape[1] - 1)
    before = np.maximum(at - 1, 0)
    every = np.arange(h.shape[0])
    low, high = h[every, before], h[every, at]
    share = np.clip(-low / np.where(high > low, high - low, 1.0), 0, 1)
    crossing = x[before] + share * (x[at] - x[before])
    top, jump = solutions[:, 0] + solutions[:, 3], solutions[:, 3]
    ended = (at >= inside) & (top > -PARTIAL * np.abs(jump))
    return np.asarray(np.where(ended, 0.0, crossing))


def _slope(best: _Step, at: float) -> tuple[float, float]:
    """Return the profile's slope at its crossing, and how far noise moves the crossing while the step stands still."""
    blur, foot = best.spread
    jump = max(float(best.solution[3]), 0.0)
    terms, near = _curve(np.array([at]), foot)[0], _curve(np.array([at - 0.02, at]), foot) @ best.solution
    slope = max(float(near[1] - near[0]) / 0.02, 1e-300)
    if abs(at) < 1e-5:
        return max(jump / (blur * np.sqrt(2 * np.pi) + foot) + float(best.solution[1]), 1e-300), 0.0
    return slope, min(float(np.sqrt(terms @ best.covariance @ terms)) / slope, 3.0)


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


def _basis(x: Array, spread: Spread) -> Array:
    """Return 1, x, x², the step, and x, x² begun at 0, blurred by a Gaussian, along a last axis of 6.

    The step reaches its full height at 0, its foot falls as exp(x / foot) inside: blurred, an exponentially modified
    Gaussian (Grushka 1972, Anal. Chem. 44, 1733, from memory).
    """
    blur, foot = spread
    rise, bell = ndtr(x / blur), np.exp(-0.5 * (x / blur) ** 2) / np.sqrt(2 * np.pi)
    line = x * rise + blur * bell
    square = (x * x + blur**2) * rise + blur * x * bell
    step = rise
    if foot:
        step = rise + np.exp(x / foot + 0.5 * (blur / foot) ** 2 + log_ndtr(-x / blur - blur / foot))
    return np.stack([np.ones_like(x), x, x * x + blur**2, step, line, square], axis=-1)


def _fits(window: Profile, places: Array, spread: Spread) -> tuple[Array, Array]:
    """Return the sum of squared misfits of a step at each of several places, and its terms: (n,), (n, 6)."""
    design = _basis(window.x[None, :] - places[:, None], spread) / window.sd[:, None]
    target = window.h / window.sd
    scale = np.sqrt(np.sum(design**2, axis=1)) + 1e-300
    design = design / scale[:, None, :]
    normal = np.swapaxes(design, 1, 2) @ design + RIDGE * np.eye(design.shape[2])
    right = np.swapaxes(design, 1, 2) @ target
    solution = np.linalg.solve(normal, right[..., None])[..., 0]
    residual = target - np.einsum("mnk,mk->mn", design, solution)
    return np.asarray(np.sum(residual**2, axis=1)), np.asarray(solution / scale)


def _step(window: Profile, at: float, spread: Spread) -> _Step:
    design = _basis(window.x - at, spread) / window.sd[:, None]
    target = window.h / window.sd
    scale = np.sqrt(np.sum(design**2, axis=0)) + 1e-300
    inverse = np.linalg.inv((design / scale).T @ (design / scale) + RIDGE * np.eye(scale.size)) / np.outer(scale, scale)
    solution = inverse @ (design.T @ target)
    misfit = float(np.sum((target - design @ solution) ** 2)) / max(target.size - 8, 1)
    return _Step(at, spread, solution, inverse * max(misfit, 1.0), misfit)

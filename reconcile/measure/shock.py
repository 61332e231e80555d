"""The trace of the shock front around a bubble: a thin ring about the same site."""

from __future__ import annotations

import numpy as np
from scipy import ndimage

from reconcile.measure.measured import Array

_SECTORS = 6
_CLEAR = 7.0  # times the scatter of the profile elsewhere: a ring in the whole fan
_SHARE = 5  # of the sectors must show it at the same radius
_REACH = 8.0  # px about the strongest sign: a bright and a dark line beside each other
_WIDEST = 12.0  # px: what is broader is light, no front


def shock_ring(flat: Array, centre: Array, slope: float, inner: float, margin: float) -> tuple[float, float] | None:
    """Return the radius of a ring about a centre and its standard uncertainty [px], or None where none is clear.

    Parameters
    ----------
    flat : array (rows, columns), the frame with its light taken out, the target at the lower side
    centre : array (2,), column and row of the site, on the target's edge
    slope : of the target's edge
    inner : radius from which on a ring may lie [px]
    margin : how far above the target's edge the picture is free of it [px]

    Notes
    -----
    The ring is dark, bright or both, one beside the other; its radius is the middle of what departs from the light,
    and half its width, with a uniform distribution, the uncertainty.
    """
    rows, columns = flat.shape
    reach = float(np.hypot(max(centre[0], columns - centre[0]), centre[1]))
    radii = np.arange(inner, reach, 0.5)
    if len(radii) < 60:
        return None
    lean = float(np.arctan(slope))
    angles = np.linspace(np.radians(12.0), np.radians(168.0), 20 * _SECTORS)
    x = centre[0] + radii * np.cos(angles - lean)[:, None]
    y = centre[1] - radii * np.sin(angles - lean)[:, None]
    inside = (x > 1) & (x < columns - 2) & (y > 1) & (radii * np.sin(angles)[:, None] > margin)
    sampled = ndimage.map_coordinates(flat, [y, x], order=1, mode="nearest")
    fans = [_departure(sampled[part], inside[part]) for part in np.array_split(np.arange(len(angles)), _SECTORS)]
    whole = _departure(sampled, inside)
    scatter = 1.4826 * np.nanmedian(np.abs(whole)) if np.isfinite(whole).sum() > 40 else np.inf
    strength = np.nan_to_num(np.abs(whole))
    at = int(np.argmax(strength))
    if not strength[at] > max(_CLEAR * float(scatter), 0.01):
        return None
    around = slice(max(at - 6, 0), at + 7)
    showing = sum(bool(_shows(fan, around)) for fan in fans)
    known = sum(bool(np.isfinite(fan[around]).any()) for fan in fans)
    if known < 2 or showing < min(_SHARE, known):
        return None
    wide = np.flatnonzero(strength > 0.3 * strength[at])
    wide = wide[np.abs(wide - at) <= 2 * _REACH]
    width = 0.5 * float(wide[-1] - wide[0] + 1)
    if width > _WIDEST:
        return None
    middle = float(np.sum(radii[wide] * strength[wide]) / np.sum(strength[wide]))
    return middle, max(0.5 * width, 0.5) / float(np.sqrt(3.0))


def _departure(sampled: Array, inside: Array) -> Array:
    """Return the median over the rays of a fan, less its own smooth run; NaN where fewer than a quarter reach."""
    enough = inside.mean(axis=0) >= 0.25
    departure = np.full(sampled.shape[1], np.nan)
    if enough.sum() < 20:
        return departure
    mean = np.nanmedian(np.where(inside[:, enough], sampled[:, enough], np.nan), axis=0)
    departure[enough] = mean - ndimage.median_filter(mean, size=41, mode="nearest")
    return departure


def _shows(fan: Array, around: slice) -> bool:
    """Return whether a fan departs from its light near a radius more than it does elsewhere."""
    here = fan[around]
    if not np.isfinite(here).any():
        return False
    return float(np.nanmax(np.abs(here))) > 3.5 * 1.4826 * float(np.nanmedian(np.abs(fan)))

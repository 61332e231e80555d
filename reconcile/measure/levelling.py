"""The surface around a crater: levelled, freed of stripes and spikes, and how well it is known.

Form removal by robust least squares on the surround alone follows ISO 25178-3 practice; what the surround leaves after it
is the noise of one point, and how far neighbouring points err together.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

MAD = 1.4826  # median absolute deviation of a normal distribution → standard deviation
SPIKE = 8.0  # noise, beyond what the points around differ by
OUTLYING = 4.0  # smoothed noise: a crater, its rim or dirt
STRIPED = 3.0  # variance of the rows' levels over what noise alone gives: then they are stripes
SETTLED = 0.002  # share of the map that may still change sides
LEAST_SURROUND = 0.15  # share of the map
_PASSES = 6
_LAGS = 4  # points within which the correlation of the noise is summed
_FEWEST = 60  # points of the surround
_FEWEST_IN_ROW = 8


@dataclass(frozen=True, slots=True)
class Levelled:
    """A height map relative to its surround."""

    height: Array  # (rows, columns) above the surround, in the unit of the map; NaN: missing or a spike
    surround: Mask  # points that fixed the level
    noise: float  # standard deviation of one point of the surround
    together: float  # points that err together: n of them average down as n / together; 1 for white noise
    order: int  # of the form taken off: 1 a plane, 2 curved
    stripes: tuple[str, ...]  # "rows", "columns": offsets that were taken off
    covariance: Array  # of the form's parameters
    line_u: float  # standard uncertainty of one line's offset; 0 without stripes

    def level_u(self, inside: Mask) -> float:
        """Return the standard uncertainty of the surround's level under a part of the map, in the map's unit.

        Two parts: the form's own from its covariance, and unevenness that is wider than the form follows, from means
        over blocks of the surround about half as wide as that part.
        """
        terms = _terms(self.height.shape, self.order)[:, inside].mean(axis=1)
        form = float(terms @ self.covariance @ terms)
        lines = self.line_u**2 / max(int(np.count_nonzero(inside.any(axis=1))), 1)
        side = max(int(np.sqrt(np.count_nonzero(inside)) / 2), 4)
        return float(np.sqrt(form + lines + self._unevenness(side) ** 2))

    def _unevenness(self, side: int) -> float:
        """Return the standard deviation of block means of the surround beyond that of noise; 0 where there is none."""
        rows, columns = (size // side for size in self.height.shape)
        if rows < 2 or columns < 2:
            return 0.0
        cut = (slice(0, rows * side), slice(0, columns * side))
        shape = (rows, side, columns, side)
        used = self.surround[cut].reshape(shape)
        count = used.sum(axis=(1, 3))
        full = count > 0.7 * side**2
        if np.count_nonzero(full) < 6:
            return 0.0
        sums = np.where(used, self.height[cut].reshape(shape), 0.0).sum(axis=(1, 3))
        means = sums[full] / count[full]
        expected = self.together * self.noise**2 / count[full].mean()
        return float(np.sqrt(max(np.mean(means**2) - 1.5 * expected, 0.0)))


def level(height: Array, excluded: Mask | None = None) -> Levelled | None:
    """Take the form of the surround off a height map.

    Parameters
    ----------
    height : Array
        (rows, columns) [m], NaN for missing points and spikes.
    excluded : Mask
        (rows, columns) The crater with its rim, where it is known; None: found, as what stands out of the surround.

    Returns
    -------
    Levelled, or None where too little of a surround is left.
    """
    known = np.isfinite(height)
    residual = height - _first_tilt(height)
    if excluded is None:
        surround, passes = known & ~standing_out(residual, known), _PASSES
    else:
        surround, passes = known & ~excluded, 2
    order, lines = 1, _Lines.none(height.shape)
    parameters, covariance, noise, together = np.zeros(3), np.zeros((3, 3)), 0.0, 1.0
    for step in range(passes):
        if np.count_nonzero(surround) < _FEWEST:
            return None
        target = height - lines.offsets()
        together = 1.0 if step < 1 else _together(residual, surround)
        order, parameters, covariance, noise = _form(target, surround, together)
        formless = height - np.tensordot(parameters, _terms(height.shape, order), axes=1)
        lines = _Lines.of(formless, surround)
        residual = formless - lines.offsets()
        noise = _deviation(residual[surround])
        within = np.abs(residual) <= max(5 * noise, 1e-12 * float(np.nanmax(np.abs(residual))) + 1e-300)
        flat = (known & ~standing_out(residual, surround) if excluded is None else surround) & within
        # A surround that keeps shrinking has lost its form, not found a larger crater.
        before, surround = surround, flat if np.count_nonzero(flat) > LEAST_SURROUND * flat.size else surround & within
        if step and np.count_nonzero(before != surround) < SETTLED * flat.size:
            break
    residual = residual - float(np.mean(residual[surround]))
    noise, settled = float(np.std(residual[surround])), _together(residual, surround)
    covariance = covariance * settled / together
    return Levelled(residual, surround, noise, settled, order, lines.names(), covariance, lines.u)


def without_spikes(height: Array) -> Array:
    """Return the map with single points far from all around them set to NaN."""
    nearest = ndimage.distance_transform_edt(~np.isfinite(height), return_distances=False, return_indices=True)
    filled = height[tuple(nearest)]
    around = ndimage.median_filter(filled, size=5, mode="nearest")
    away = np.abs(filled - around)
    usual = ndimage.median_filter(away, size=5, mode="nearest")  # large on slopes, where neighbours differ
    noise = MAD * float(np.median(away))
    return np.where(away > SPIKE * (noise + MAD * usual), np.nan, height)


def standing_out(residual: Array, surround: Mask) -> Mask:
    """Return the largest thing that rises or sinks out of the surround, what stands out close to it, and a margin.

    All else that stands out is left to robust weights: left out as well, the bends of a form not yet fitted would go too.
    """
    smooth = smoothed(residual, 1.5)
    usual = smooth[surround & np.isfinite(smooth)]
    away = np.abs(np.where(np.isfinite(smooth), smooth, np.median(usual)) - np.median(usual))
    labels, number = ndimage.label(away > OUTLYING * MAD * float(np.median(np.abs(usual - np.median(usual)))))
    if not number:
        return np.zeros(residual.shape, dtype=bool)
    volumes = np.bincount(labels.ravel(), away.ravel())
    volumes[0] = 0
    main = labels == int(np.argmax(volumes))
    if np.count_nonzero(main) < 9:
        return np.zeros(residual.shape, dtype=bool)
    radius = float(np.sqrt(np.count_nonzero(main) / np.pi))
    reach = np.asarray(ndimage.distance_transform_edt(~main))
    close = np.unique(labels[reach <= 0.6 * radius])
    mask = np.isin(labels, close[close > 0]) & (reach <= 2 * radius)
    return np.asarray((reach <= max(0.25 * radius, 3.0)) | ndimage.binary_dilation(mask, iterations=2))


def smoothed(values: Array, width: float) -> Array:
    """Return a Gaussian mean of the points that are there; NaN where none lies near."""
    known = np.isfinite(values)
    weight = ndimage.gaussian_filter(known.astype(float), width, mode="constant")
    total = ndimage.gaussian_filter(np.where(known, values, 0.0), width, mode="constant")
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.asarray(np.where(weight > 0.05, total / weight, np.nan))


def _first_tilt(height: Array) -> Array:
    """Return a plane from medians of differences and the most frequent level: it needs only a flat majority."""
    rows, columns = height.shape
    far, along = max(rows // 16, 1), max(columns // 16, 1)
    down = float(np.nanmedian(height[far:] - height[:-far])) / far
    across = float(np.nanmedian(height[:, along:] - height[:, :-along])) / along
    plane = down * np.arange(rows)[:, None] + across * np.arange(columns)[None, :]
    detilted = height - plane
    return np.asarray(plane + _half_sample_mode(detilted[np.isfinite(detilted)]))


def _half_sample_mode(values: Array) -> float:
    """Return the densest place of a sample: halves of it, each time the narrowest (Robertson and Cryer 1974, from memory)."""
    ordered = np.sort(values)[:: max(values.size // 20_000, 1)]
    while ordered.size > 3:
        half = (ordered.size + 1) // 2
        widths = ordered[half - 1 :] - ordered[: ordered.size - half + 1]
        start = int(np.argmin(widths))
        ordered = ordered[start : start + half]
    return float(np.mean(ordered))


def _deviation(values: Array) -> float:
    return MAD * float(np.median(np.abs(values - np.median(values))))


def _terms(shape: tuple[int, ...], order: int) -> Array:
    """Return 1, x, y and for the second order x², xy, y², with x and y from −1 to 1: (terms, rows, columns)."""
    y, x = np.meshgrid(np.linspace(-1, 1, shape[0]), np.linspace(-1, 1, shape[1]), indexing="ij")
    flat = [np.ones(shape), x, y]
    return np.array(flat if order == 1 else [*flat, x * x, x * y, y * y])


def _form(target: Array, surround: Mask, together: float) -> tuple[int, Array, Array, float]:
    """Fit a plane and a curved form to the surround; the curved one stands where the evidence asks for it.

    Returns
    -------
    order, parameters, their covariance, standard deviation of a point
    """
    values = target[surround]
    n = values.size / together
    fits = []
    for order in (1, 2):
        design = _terms(target.shape, order)[:, surround].T
        parameters, weight, sd = _robust(design, values)
        normal = np.asarray(np.linalg.inv((design * weight[:, None]).T @ design), dtype=float)
        fits.append((order, parameters, normal * sd**2 * together, sd))
    (_, _, _, flat), (_, _, _, curved) = fits
    # Bayesian information criterion: three more parameters, each worth ln n (Schwarz 1978, Ann. Stat. 6, 461, from memory).
    better = curved > 0 and 2 * n * np.log(flat / curved) > 3 * np.log(n) + 6
    return fits[1] if better else fits[0]


def _robust(design: Array, values: Array) -> tuple[Array, Array, float]:
    """Fit by least squares with biweights: parameters, weights, standard deviation."""
    weight = np.ones(values.size)
    parameters: Array = np.zeros(design.shape[1])
    sd = 0.0
    for _ in range(4):
        normal = (design * weight[:, None]).T @ design
        parameters = np.asarray(np.linalg.solve(normal, design.T @ (weight * values)), dtype=float)
        residual = values - design @ parameters
        sd = MAD * float(np.median(np.abs(residual)))
        if sd == 0:
            break
        weight = np.clip(1 - (residual / (6 * sd)) ** 2, 0, None) ** 2
    return parameters, weight, sd


@dataclass(frozen=True, slots=True)
class _Lines:
    """Offsets of whole rows or columns, as vibration leaves them while a map is scanned."""

    rows: Array | None  # (rows, 1)
    columns: Array | None  # (1, columns)
    shape: tuple[int, ...]
    u: float

    @classmethod
    def none(cls, shape: tuple[int, ...]) -> _Lines:
        return cls(None, None, shape, 0.0)

    @classmethod
    def of(cls, residual: Array, surround: Mask) -> _Lines:
        """Return the offsets of rows and of columns, each where they vary more than noise alone would let them."""
        values = np.where(surround, residual, np.nan)
        rows, row_u = _offsets(values)
        columns, column_u = _offsets((values if rows is None else values - rows[:, None]).T)
        return cls(
            None if rows is None else rows[:, None],
            None if columns is None else columns[None, :],
            residual.shape,
            float(np.hypot(row_u, column_u)),
        )

    def offsets(self) -> Array:
        total = np.zeros(self.shape)
        for part in (self.rows, self.columns):
            if part is not None:
                total = total + part
        return total

    def names(self) -> tuple[str, ...]:
        return tuple(name for name, part in (("rows", self.rows), ("columns", self.columns)) if part is not None)


def _offsets(values: Array) -> tuple[Array | None, float]:
    """Return the level of each row, that of its neighbours where too little of it is left, and its uncertainty; None without stripes."""
    count = np.isfinite(values).sum(axis=1)
    enough = count >= _FEWEST_IN_ROW
    if np.count_nonzero(enough) < 8:
        return None, 0.0
    levels = np.zeros(values.shape[0])
    levels[enough] = np.nanmedian(values[enough], axis=1)
    levels = np.interp(np.arange(levels.size), np.flatnonzero(enough), levels[enough])
    within = values - levels[:, None]
    spread = MAD * float(np.nanmedian(np.abs(within)))
    pair = within[:, 1:] * within[:, :-1]
    lag = (
        float(np.clip(np.nanmean(np.clip(pair, -9 * spread**2, 9 * spread**2)) / spread**2, 0, 0.9)) if spread else 0.0
    )
    # A median's variance is π/2 of a mean's; points that err alike along the row count less (first-order process).
    expected = 0.5 * np.pi * spread**2 * (1 + lag) / (1 - lag) / count[enough]
    if spread == 0 or float(np.median(levels[enough] ** 2 / expected)) < STRIPED * 0.455:  # 0.455: median of χ² of 1
        return None, 0.0
    return levels, float(np.sqrt(np.mean(expected)))


def _together(residual: Array, surround: Mask) -> float:
    """Return the points that err together: the sum of the surround's autocorrelation over short lags; at least 1."""
    values = np.where(surround, residual, 0.0)
    used = surround.astype(float)
    variance = float(np.sum(values**2) / max(np.sum(used), 1))
    if variance == 0:
        return 1.0
    total = 1.0
    for down in range(_LAGS + 1):
        for across in range(-_LAGS, _LAGS + 1):
            if down == 0 and across <= 0:
                continue
            here, there = _shifted(values, down, across)
            both = float(np.sum(np.multiply(*_shifted(used, down, across))))
            if both < _FEWEST:
                continue
            correlation = float(np.sum(here * there)) / both / variance
            if correlation > 3 / np.sqrt(both):
                total += 2 * correlation
    return total


def _shifted(values: Array, down: int, across: int) -> tuple[Array, Array]:
    """Return the parts of an array that lie `down` rows and `across` columns apart."""
    rows, columns = values.shape
    left, right = max(across, 0), min(across, 0)
    return values[: rows - down, -right : columns - left], values[down:, left : columns + right]

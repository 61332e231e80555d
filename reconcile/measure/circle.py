"""A circle, and a straight line, through points of which some belong to something else."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from reconcile.measure.measured import Array

_TUNING = 4.685  # of the biweight: 95 % efficient on normal errors (Beaton and Tukey 1974; from memory)
_ROUNDS = 30


@dataclass(frozen=True, slots=True)
class Fit:
    """Parameters found by weighted least squares."""

    values: Array  # (parameters,)
    covariance: Array  # (parameters, parameters), neighbouring residuals' correlation included
    residuals: Array  # (points,)
    weights: Array  # (points,) 0 to 1; 0: left out
    scatter: float  # robust standard deviation of a residual


def fit_circle(points: Array, start: Array, level: tuple[float, float] | None = None, least: float = 0.0) -> Fit:
    """Fit a circle by the distances of the points from it, not by their squares' differences.

    Parameters
    ----------
    points : array (points, 2), neighbours in sequence
    start : array (3,), first guess of the centre's two coordinates and the radius
    level : the second coordinate that the centre is expected to have and that expectation's standard deviation
    least : standard deviation of a point that its noise alone gives: a few points can scatter less by chance

    Returns
    -------
    Fit
        Of the centre's coordinates and the radius.
    """
    values = np.array(start, dtype=float)
    weights = np.ones(len(points))
    residuals, scatter = np.zeros(len(points)), 1.0
    for turn in range(_ROUNDS):
        arm = points - values[:2]
        distance = np.maximum(np.hypot(arm[:, 0], arm[:, 1]), 1e-9)
        residuals = distance - values[2]
        scatter = max(_scatter(residuals), least)
        # At first the radius may be off by more than the points scatter.
        weights = (
            _biweight(residuals, scatter) if turn > 3 else _biweight(residuals - np.median(residuals), 3.0 * scatter)
        )
        design = np.column_stack([arm / distance[:, None], np.ones(len(points))])
        normal = design.T @ (weights[:, None] * design) / scatter**2
        pull = design.T @ (weights * residuals) / scatter**2
        if level is not None:
            normal[1, 1] += level[1] ** -2
            pull[1] += (level[0] - values[1]) / level[1] ** 2
        step = np.linalg.lstsq(normal, pull, rcond=None)[0]
        values += step
        if turn > 4 and np.abs(step).max() < 1e-6 * max(values[2], 1.0):
            break
    spread = np.linalg.pinv(normal) * _inflation(residuals, weights, scatter, 3, least)
    return Fit(values, spread, residuals, weights, scatter)


def fit_line(along: Array, across: Array) -> Fit:
    """Fit across = values[0] + values[1]·along; neighbours in sequence."""
    design = np.column_stack([np.ones(len(along)), along])
    # Start from the median slope of distant pairs, which a few stray points cannot move (Theil 1950).
    half = len(along) // 2
    gap = along[len(along) - half :] - along[:half]
    slope = float(np.median((across[len(along) - half :] - across[:half]) / np.where(gap == 0, np.inf, gap)))
    values = np.array([float(np.median(across - slope * along)), slope])
    weights, residuals, scatter = np.ones(len(along)), across - design @ values, 1.0
    normal = design.T @ design
    for _ in range(_ROUNDS):
        residuals = across - design @ values
        scatter = _scatter(residuals)
        weights = _biweight(residuals, scatter)
        normal = design.T @ (weights[:, None] * design) / scatter**2
        step = np.linalg.lstsq(normal, design.T @ (weights * residuals) / scatter**2, rcond=None)[0]
        values = values + step
        if np.abs(step).max() < 1e-9:
            break
    return Fit(values, np.linalg.pinv(normal) * _inflation(residuals, weights, scatter, 2), residuals, weights, scatter)


def _scatter(residuals: Array) -> float:
    return max(1.4826 * float(np.median(np.abs(residuals - np.median(residuals)))), 1e-4)


def _biweight(residuals: Array, scatter: float) -> Array:
    ratio = residuals / (_TUNING * scatter)
    return np.where(np.abs(ratio) < 1.0, (1.0 - ratio**2) ** 2, 0.0)


def _inflation(residuals: Array, weights: Array, scatter: float, parameters: int, least: float = 0.0) -> float:
    """Return by how much the variance of the parameters exceeds that of independent residuals of the robust scatter.

    Two causes: parameters that were taken from the residuals, with the scatter's own estimate by weighted squares; and
    neighbours that err together, by the sum of their correlations up to the first that may be chance.
    """
    used = weights > 0.05
    count = int(used.sum())
    if count <= parameters + 1:
        return 10.0
    kept = residuals[used]
    square = (
        float(np.sum(weights[used] * kept**2) / np.sum(weights[used])) / 0.83
    )  # of normal errors under the biweight
    variance = max(square, 0.5 * scatter**2) * count / (count - parameters) / scatter**2
    if least > 0.0:
        # Few points say little of their own variance; what the noise gives weighs as much as ten of them.
        variance = max(variance, (variance * count + 10.0 * (least / scatter) ** 2) / (count + 10.0))
    centred = kept - kept.mean()
    power = float(centred @ centred)
    together = 1.0
    for lag in range(1, max(2, count // 4)):
        # The fit itself makes neighbours differ: about -parameters/count of correlation at every lag.
        correlation = float(centred[:-lag] @ centred[lag:]) / max(power, 1e-30) + parameters / count
        if correlation < (1.0 if lag == 1 else 2.0) / np.sqrt(count):
            break
        together += 2.0 * correlation
    return variance * min(together, 6.0)

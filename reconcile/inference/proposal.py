"""A proposal density that bends to the posterior: correlated Student t, each coordinate warped by sinh-arcsinh.

The sinh-arcsinh transformation gives a coordinate its own skewness and tail weight: M. C. Jones and A. Pewsey,
Biometrika 96 (2009) 761.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy import optimize, special

from reconcile.inference.model import Array

_LEVELS = np.array([0.02, 0.1, 0.25, 0.5, 0.75, 0.9, 0.98])
_SCORES = special.ndtri(_LEVELS)
_LEAN = 2.0  # weight of the earlier covariance, in points per dimension


def root_of(covariance: Array) -> Array:
    """Lower Cholesky factor (k, k); raises LinAlgError where the matrix is not positive definite."""
    return np.linalg.cholesky(covariance).astype(np.float64, copy=False)


@dataclass(frozen=True, slots=True)
class Warp:
    """x = location + scale · sinh((asinh z + skew) / tail), coordinate by coordinate; all (k,)."""

    location: Array
    scale: Array
    skew: Array
    tail: Array  # 1: as z; below 1: heavier

    @classmethod
    def none(cls, k: int) -> Warp:
        """Return the identity."""
        return cls(np.zeros(k), np.ones(k), np.zeros(k), np.ones(k))

    @classmethod
    def fit(cls, points: Array, weights: Array) -> Warp:
        """Match seven weighted quantiles of each coordinate of `points` (n, k) to a standard normal's."""
        return cls(*np.array([_match(_quantiles(column, weights)) for column in points.T]).T)

    def outward(self, z: Array) -> Array:
        """Warp (n, k)."""
        return self.location + self.scale * np.sinh((np.arcsinh(z) + self.skew) / self.tail)

    def inward(self, x: Array) -> tuple[Array, Array]:
        """Unwarp (n, k), and ln |dz/dx| summed over coordinates, (n,)."""
        standard = (x - self.location) / self.scale
        angle = np.clip(self.tail * np.arcsinh(standard) - self.skew, -300.0, 300.0)
        log_slope = np.log(self.tail) + _log_cosh(angle) - 0.5 * np.log1p(standard**2) - np.log(self.scale)
        return np.sinh(angle), log_slope.sum(axis=1)


@dataclass(frozen=True, slots=True)
class Proposal:
    """A warped multivariate Student t."""

    warp: Warp
    mean: Array  # (k,)
    root: Array  # (k, k) lower Cholesky factor of the scale matrix
    freedom: float

    @classmethod
    def normal_like(cls, mean: Array, covariance: Array, freedom: float) -> Proposal:
        """Return an unwarped t about a mean with that scale matrix."""
        return cls(Warp.none(len(mean)), mean, root_of(covariance), freedom)

    @classmethod
    def fit(cls, points: Array, weights: Array, freedom: float, earlier: Array) -> Proposal:
        """Fit to weighted points (n, k): warp first, then mean and covariance of what is left.

        A pool that is small against the dimension gives a matrix that is too eccentric, so the covariance leans on that
        of `earlier` (n, k), unweighted draws of a proposal that is not far off, as if they were a few points more.
        """
        warp = Warp.fit(points, weights)
        mean, covariance = _moments(warp, points, weights)
        k, effective = len(mean), 1.0 / np.sum(weights**2)
        _, before = _moments(warp, earlier, np.full(len(earlier), 1.0 / len(earlier)))
        lean = _LEAN * k / (_LEAN * k + effective)
        covariance = (1.0 - lean) * covariance + lean * before
        return cls(warp, mean, root_of(covariance + 1e-9 * np.eye(k)), freedom)

    def sample(self, rng: np.random.Generator, n: int) -> Array:
        """Return (n, k) draws."""
        normal = rng.standard_normal((n, len(self.mean)))
        stretch = np.sqrt(self.freedom / rng.chisquare(self.freedom, n))
        return self.warp.outward(self.mean + (normal * stretch[:, None]) @ self.root.T)

    def log_pdf(self, x: Array) -> Array:
        """Log density, (n,), at (n, k)."""
        z, log_slope = self.warp.inward(x)
        white = np.linalg.solve(self.root, (z - self.mean).T)
        k, freedom = len(self.mean), self.freedom
        constant = special.gammaln((freedom + k) / 2.0) - special.gammaln(freedom / 2.0)
        constant -= 0.5 * k * math.log(freedom * math.pi) + float(np.log(np.diag(self.root)).sum())
        return constant - 0.5 * (freedom + k) * np.log1p((white**2).sum(axis=0) / freedom) + log_slope


@dataclass(frozen=True, slots=True)
class Mixture:
    """A fitted proposal, and defensive ones beside it so that no region is left without mass."""

    parts: tuple[Proposal, ...]  # the fitted one first
    shares: tuple[float, ...]  # of each; they add up to 1

    def sample(self, rng: np.random.Generator, n: int) -> Array:
        """Return (n, k) draws."""
        chosen = np.searchsorted(np.cumsum(self.shares)[:-1], rng.uniform(size=n))
        drawn = np.stack([part.sample(rng, n) for part in self.parts])
        return drawn[chosen, np.arange(n)]

    def log_pdf(self, x: Array) -> Array:
        """Log density, (n,), at (n, k)."""
        logs = [part.log_pdf(x) + math.log(share) for part, share in zip(self.parts, self.shares, strict=True)]
        return np.asarray(np.logaddexp.reduce(logs, axis=0))


def _moments(warp: Warp, points: Array, weights: Array) -> tuple[Array, Array]:
    """Mean and covariance of unwarped points, far outliers held back."""
    z = np.clip(warp.inward(points)[0], -6.0, 6.0)
    mean = weights @ z
    centred = z - mean
    return mean, (centred * weights[:, None]).T @ centred


def _quantiles(column: Array, weights: Array) -> Array:
    order = np.argsort(column)
    cumulative = np.cumsum(weights[order]) - 0.5 * weights[order]
    return np.interp(_LEVELS, cumulative, column[order])


def _match(quantiles: Array) -> Array:
    """Location, scale, skew, tail whose warp brings a standard normal's quantiles to these."""
    spread = max((quantiles[5] - quantiles[1]) / (_SCORES[5] - _SCORES[1]), 1e-12)
    target = (quantiles - quantiles[3]) / spread

    def miss(parameters: Array) -> Array:
        location, log_scale, skew, log_tail = parameters
        tail = math.exp(log_tail)
        warped = location + math.exp(log_scale) * np.sinh((np.arcsinh(_SCORES) + skew) / tail)
        # Held near the identity: quantiles of a small pool are noisy.
        return np.concatenate([warped - target, [0.02 * skew, 0.05 * log_tail, 0.02 * log_scale]])

    bounds = ([-5.0, -3.0, -1.5, -0.7], [5.0, 3.0, 1.5, 0.7])
    found = optimize.least_squares(miss, np.zeros(4), bounds=bounds, xtol=1e-6, ftol=1e-6).x
    scale = math.exp(found[1])
    return np.array([quantiles[3] + spread * found[0], spread * scale, found[2], math.exp(found[3])])


def _log_cosh(x: Array) -> Array:
    return np.abs(x) + np.log1p(np.exp(-2.0 * np.abs(x))) - math.log(2.0)

"""Prior densities: each family cut to an input's physical range."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import special

from reconcile.campaign.campaign import Prior

Array = NDArray[np.float64]

# Families that end sharply at a bound of their own.
_BOUNDED = ("beta", "uniform", "loguniform")
_LOG_ROOT_2PI = 0.5 * math.log(2.0 * math.pi)


@dataclass(frozen=True, slots=True)
class Density:
    """A prior cut to ``[low, high]`` and normalised there. Arrays in, arrays of the same shape out.

    Parameters
    ----------
    prior : as stated
    low, high : physical range of the input [its unit]
    """

    prior: Prior
    low: float
    high: float

    @property
    def fixed(self) -> bool:
        """Whether the prior has no spread."""
        return self.prior.family == "fixed"

    @property
    def bounded(self) -> bool:
        """Whether the cut, or the family itself, ends the density sharply at two finite bounds."""
        kept = self._cdf_high() - self._cdf_low()
        finite = all(math.isfinite(bound) for bound in self.support)
        return finite and (self.prior.family in _BOUNDED or kept < 1.0 - 1e-7)

    @property
    def support(self) -> tuple[float, float]:
        """The range in which the density is above zero [unit of the input]."""
        family, a, b = self.prior.family, self.prior.a, self.prior.b
        if family in ("uniform", "loguniform"):
            return max(self.low, a), min(self.high, b)
        if family in ("beta", "logitnormal"):
            return max(self.low, 0.0), min(self.high, 1.0)
        return (max(self.low, 0.0), self.high) if family == "lognormal" else (self.low, self.high)

    def log_pdf(self, x: Array) -> Array:
        """Natural logarithm of the density [1/unit]; −inf outside the support."""
        low, high = self.support
        inside = (x >= low) & (x <= high) & ~self._at_open_end(x)
        safe = np.where(inside, x, self.quantile(np.array(0.5)))
        with np.errstate(divide="ignore"):
            value = self._log_pdf_uncut(safe) - math.log(self._cdf_high() - self._cdf_low())
        return np.where(inside, value, -np.inf)

    def _at_open_end(self, x: Array) -> NDArray[np.bool_]:
        """Where a family's own density falls to nothing at the very end of its range."""
        family = self.prior.family
        return ((family in ("lognormal", "logitnormal")) & (x == 0.0)) | ((family == "logitnormal") & (x == 1.0))

    def cdf(self, x: Array) -> Array:
        """Probability of lying below `x`."""
        low, high = self.support
        raw = self._cdf_uncut(np.clip(x, low, high))
        return np.clip((raw - self._cdf_low()) / (self._cdf_high() - self._cdf_low()), 0.0, 1.0)

    def quantile(self, p: Array) -> Array:
        """Inverse of `cdf` [unit of the input]."""
        if self.fixed:
            return np.full_like(p, self.prior.a)
        raw = self._cdf_low() + (self._cdf_high() - self._cdf_low()) * p
        return np.clip(self._quantile_uncut(raw), *self.support)

    def moments(self) -> tuple[float, float]:
        """Mean and standard deviation [unit of the input], by quadrature over normal scores."""
        if self.fixed:
            return self.prior.a, 0.0
        score = np.linspace(-8.0, 8.0, 1601)
        weight = np.exp(-0.5 * score**2)
        weight /= weight.sum()
        x = self.quantile(special.ndtr(score))
        mean = float(weight @ x)
        return mean, math.sqrt(float(weight @ (x - mean) ** 2))

    def sample(self, rng: np.random.Generator, n: int) -> Array:
        """Return `n` independent draws, shape (n,) [unit of the input]."""
        return self.quantile(rng.uniform(size=n))

    def _cdf_low(self) -> float:
        return float(self._cdf_uncut(np.array(self.support[0])))

    def _cdf_high(self) -> float:
        return float(self._cdf_uncut(np.array(self.support[1])))

    def _score(self, x: Array) -> Array:
        """Normal score of the three families that are normal on some scale."""
        family, a, b = self.prior.family, self.prior.a, self.prior.b
        with np.errstate(divide="ignore"):
            if family == "normal":
                return (x - a) / b
            if family == "lognormal":
                return (np.log(x) - math.log(a)) / b
            return (special.logit(x) - special.logit(a)) / b

    def _log_pdf_uncut(self, x: Array) -> Array:
        family, a, b = self.prior.family, self.prior.a, self.prior.b
        match family:
            case "uniform":
                return np.full_like(x, -math.log(b - a))
            case "loguniform":
                return -np.log(x) - math.log(math.log(b / a))
            case "beta":
                return np.asarray(special.xlogy(a - 1.0, x) + special.xlog1py(b - 1.0, -x) - special.betaln(a, b))
            case "fixed":
                return np.zeros_like(x)
        value = -0.5 * self._score(x) ** 2 - math.log(b) - _LOG_ROOT_2PI
        if family == "lognormal":
            return value - np.log(x)
        return value - np.log(x) - np.log1p(-x) if family == "logitnormal" else value

    def _cdf_uncut(self, x: Array) -> Array:
        family, a, b = self.prior.family, self.prior.a, self.prior.b
        match family:
            case "uniform":
                return np.clip((x - a) / (b - a), 0.0, 1.0)
            case "loguniform":
                return np.clip(np.log(x / a) / math.log(b / a), 0.0, 1.0)
            case "beta":
                return special.betainc(a, b, x)
            case "fixed":
                return (x >= a).astype(float)
        return special.ndtr(self._score(x))

    def _quantile_uncut(self, p: Array) -> Array:
        family, a, b = self.prior.family, self.prior.a, self.prior.b
        match family:
            case "uniform":
                return a + (b - a) * p
            case "loguniform":
                return a * (b / a) ** p
            case "beta":
                return special.betaincinv(a, b, p)
            case "normal":
                return a + b * special.ndtri(p)
            case "lognormal":
                return a * np.exp(b * special.ndtri(p))
        return special.expit(special.logit(a) + b * special.ndtri(p))

"""Particle sizes of a sample: number median and geometric standard deviation from a histogram or a list of diameters.

One lognormal population is fitted by maximum likelihood to the numbers of particles in size intervals; a second,
coarse population is told apart where the evidence asks for it. The uncertainties are those of counting: how far
another sample of as many particles would differ. What all diameters share (the size of a pixel) is not in them.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.optimize import minimize
from scipy.special import expit, log_ndtr

Floats = NDArray[np.float64]

FEWEST_PARTICLES = 10
RESOLUTION = 1e-3  # relative width of the interval that stands for one measured diameter; its effect on s² is 1e-7
SMALLEST_SPREAD = 0.01  # of ln d; narrower than any colloid that laser ablation makes (common practice)
WIDEST_SPREAD = 3.0  # of ln d: a factor of 20 either way
POOREST_SPREAD = 0.5  # relative uncertainty of s beyond which the bins do not fix it; ten diameters fix it to 0.22
COARSER = 2.0  # a second population is a coarse one from twice the fine median; those of ablation lie further off (common practice)
# Two populations may differ in spread by this factor at most: without a bound the likelihood of a mixture grows
# without limit where one population shrinks onto one particle (Hathaway 1985, Ann. Stat. 13, 795, from memory).
SPREAD_RATIO = 3.0
EVIDENCE = 6.0  # difference in BIC that counts as strong (Raftery 1995, Sociol. Methodol. 25, 111, from memory)


@dataclass(frozen=True, slots=True)
class Sizes:
    """Number median and spread of the particles of one sample."""

    median: float  # [m]
    median_u: float  # [m] standard uncertainty from counting
    geometric_sd: float  # [1] exp of the standard deviation of ln d
    geometric_sd_u: float  # [1]
    n: int  # particles counted, those of a coarse population included
    note: str | None  # what a person should know; None: nothing


@dataclass(frozen=True, slots=True)
class _Bins:
    """Occupied size intervals on the scale of ln d, centred and scaled so that fits start near 0 and 1."""

    low: Floats  # (bins,) may be -inf
    high: Floats  # (bins,) may be inf
    count: Floats  # (bins,)
    n: float  # particles; of weighted ones as many equal ones as tell as much


@dataclass(frozen=True, slots=True)
class _Fit:
    """A fitted mixture: (mean, ln s) of the fine one, then (mean, ln of the spreads' ratio, logit share) of the coarse."""

    parameters: Floats  # (2,) or (5,)
    covariance: Floats  # the same, squared; 0 for a parameter at its bound
    log_likelihood: float

    def bic(self, n: float) -> float:
        """Bayesian information criterion; smaller is better."""
        return self.parameters.size * math.log(n) - 2 * self.log_likelihood


def from_counts(lower: ArrayLike, upper: ArrayLike, count: ArrayLike) -> Sizes:
    """Measure a sample from its size histogram.

    Parameters
    ----------
    lower, upper : ArrayLike
        (bins,) Edges of each bin [m]; `lower` may be 0, the last `upper` may be inf.
    count : ArrayLike
        (bins,) Particles in each bin, whole numbers.

    Returns
    -------
    Sizes
        Of the fine population where two are told apart; `note` then tells of the coarse one.

    Raises
    ------
    ValueError
        With a sentence, where the histogram is no histogram or the sizes cannot be measured from it.

    Notes
    -----
    No particle lies outside the bins. Likelihood of grouped data: Kulldorff 1961, Estimation from Grouped and
    Partially Grouped Samples (from memory); lognormal sizes: Hatch and Choate 1929, J. Franklin Inst. 207, 369.

    """
    low, high, counts = (np.atleast_1d(np.asarray(column, dtype=float)) for column in (lower, upper, count))
    if not low.shape == high.shape == counts.shape or low.ndim != 1:
        raise ValueError("The histogram needs as many lower edges as upper edges and counts.")
    _check_counts(counts)
    if not np.all(np.isfinite(low)) or np.any(low < 0) or np.any(np.isnan(high)) or np.any(high <= low):
        raise ValueError("Each bin needs a lower edge of 0 or more and an upper edge above it.")
    order = np.argsort(low, kind="stable")
    low, high, counts = low[order], high[order], counts[order]
    if np.any(high[:-1] > low[1:] * (1 + 1e-9)):
        first = int(np.argmax(high[:-1] > low[1:] * (1 + 1e-9)))
        raise ValueError(
            f"The bins overlap: one ends at {high[first]:.4g} m and the next begins at {low[first + 1]:.4g} m."
        )
    low, high, closed = _close_gaps(low, high)
    occupied = counts > 0
    if np.count_nonzero(occupied) < 2:
        raise ValueError("All particles lie in one bin: their median and spread cannot be told.")
    with np.errstate(divide="ignore"):  # ln 0 is -inf: an open first bin
        bins = _Bins(np.log(low[occupied]), np.log(high[occupied]), counts[occupied], float(counts.sum()))
    note = "gaps between the bins were closed at their middle" if closed else None
    return _measure(bins, note)


def from_diameters(diameters: ArrayLike, weights: ArrayLike | None = None) -> Sizes:
    """Measure a sample from the diameters of its particles.

    Parameters
    ----------
    diameters : ArrayLike
        (n,) One a particle [m].
    weights : ArrayLike
        (n,) Above 0: how many particles each of them stands for, up to a common factor (the inverse of its chance to be
        measured); None: all alike.

    Returns
    -------
    Sizes
        Of the fine population where two are told apart; `note` then tells of the coarse one.

    Raises
    ------
    ValueError
        With a sentence, where a diameter or a weight is not above 0 or there are too few.

    Notes
    -----
    Weighted particles count together as (Σw)²/Σw² equal ones (Kish 1965, Survey Sampling, from memory).

    """
    sizes = np.atleast_1d(np.asarray(diameters, dtype=float))
    if sizes.ndim != 1 or not np.all(np.isfinite(sizes)) or np.any(sizes <= 0):
        raise ValueError("Each particle needs a diameter above 0.")
    _check_counts(np.ones_like(sizes))
    shares = np.ones_like(sizes) if weights is None else np.atleast_1d(np.asarray(weights, dtype=float))
    if shares.shape != sizes.shape or not np.all(np.isfinite(shares)) or np.any(shares <= 0):
        raise ValueError("Each particle needs a weight above 0.")
    values, index = np.unique(np.log(sizes), return_inverse=True)
    if values.size < 2:
        raise ValueError("All particles have the same diameter: their spread cannot be told.")
    half = 0.5 * RESOLUTION
    counts = np.bincount(index.ravel(), shares) * (shares.sum() / np.sum(shares**2))
    found = _measure(_Bins(values - half, values + half, counts, float(counts.sum())), None)
    return replace(found, n=sizes.size)


def _check_counts(counts: Floats) -> None:
    if not np.all(np.isfinite(counts)) or np.any(counts < 0):
        raise ValueError("A count is missing or below 0.")
    if np.any(counts != np.round(counts)):
        raise ValueError("The counts are not whole numbers: a share does not tell how many particles were counted.")
    if counts.sum() < FEWEST_PARTICLES:
        raise ValueError(f"{counts.sum():.0f} particles are too few: at least {FEWEST_PARTICLES} are needed.")


def _close_gaps(low: Floats, high: Floats) -> tuple[Floats, Floats, bool]:
    """Close gaps narrower than a third of both neighbours: bins written 5-9, 10-14 for diameters in whole numbers."""
    gap = low[1:] - high[:-1]
    width = np.minimum(high[:-1] - low[:-1], high[1:] - low[1:])
    close = (gap > 1e-9 * low[1:]) & (gap < width / 3)
    middle = 0.5 * (low[1:] + high[:-1])
    low, high = low.copy(), high.copy()
    low[1:] = np.where(close, middle, low[1:])
    high[:-1] = np.where(close, middle, high[:-1])
    return low, high, bool(close.any())


def _measure(bins: _Bins, note: str | None) -> Sizes:
    """Fit one population, then two, and take what the evidence asks for."""
    one = _fit_one(bins)
    two = _fit_two(bins, one)
    if one.bic(bins.n) - two.bic(bins.n) <= EVIDENCE or two.covariance[0, 0] <= 0:
        return _sizes(bins, one, note)
    mean, log_s, coarse_mean, log_ratio, logit_share = (float(value) for value in two.parameters)
    spread, coarse_spread, share = math.exp(log_s), math.exp(log_s + log_ratio), float(expit(logit_share))
    # Two lognormals are told apart where their medians lie further apart than their spreads together: with equal
    # spreads that is where a mixture of equal parts has two peaks (Behboodian 1970, Technometrics 12, 131, from memory).
    apart = coarse_mean - mean > max(spread + coarse_spread, math.log(COARSER))
    if not apart or bins.n * (1 - share) < FEWEST_PARTICLES:
        shape = "the sizes are not one lognormal population; median and spread are those of the nearest one"
        return _sizes(bins, one, _joined(note, shape))
    told = (
        f"a second, coarse population was told apart and left out: {100 * share:.2g} % of the particles, "
        f"median {1e9 * math.exp(coarse_mean):.3g} nm"
    )
    return _sizes(bins, two, _joined(note, told))


def _joined(*notes: str | None) -> str:
    return "; ".join(note for note in notes if note)


def _sizes(bins: _Bins, fit: _Fit, note: str | None) -> Sizes:
    """State the fine population; the spread as a sample standard deviation, n − 1 in place of the n of the likelihood."""
    mean, log_s = fit.parameters[:2]
    fine = bins.n * (1.0 if fit.parameters.size == 2 else 1 - float(expit(fit.parameters[4])))
    spread_n = math.exp(log_s)
    u_log_s = math.sqrt(max(float(fit.covariance[1, 1]), 0.0))
    if spread_n < SMALLEST_SPREAD * 1.01 or spread_n > WIDEST_SPREAD / 1.01 or not 0 < u_log_s < POOREST_SPREAD:
        raise ValueError(
            "The particles lie in too few bins, or too close together, for their median and spread to be told."
        )
    correction = math.sqrt(fine / (fine - 1))
    spread = spread_n * correction
    u_mean = math.sqrt(fit.covariance[0, 0]) * correction
    u_spread = spread * u_log_s
    median, geometric_sd = math.exp(mean), math.exp(spread)
    return Sizes(median, median * u_mean, geometric_sd, geometric_sd * u_spread, round(bins.n), note)


def _fit_one(bins: _Bins) -> _Fit:
    centre, spread = _moments(bins, bins.count)
    bounds = [(None, None), (math.log(SMALLEST_SPREAD), math.log(WIDEST_SPREAD))]
    return _fit(bins, [np.array([centre, math.log(spread)])], bounds)


def _fit_two(bins: _Bins, one: _Fit) -> _Fit:
    """Fit two populations from several ways to cut the sizes in two, and from the single one."""
    cumulative = np.cumsum(bins.count) / bins.n
    starts = []
    for cut in (0.3, 0.5, 0.7, 0.85, 0.95, 1 - 1.5 / bins.n):
        fine = cumulative <= cut
        if not fine.any() or fine.all():
            continue
        mean, spread = _moments(bins, np.where(fine, bins.count, 0))
        coarse_mean, coarse_spread = _moments(bins, np.where(fine, 0, bins.count))
        ratio = min(max(coarse_spread / spread, 1 / SPREAD_RATIO), SPREAD_RATIO)
        share = 1 - bins.count[fine].sum() / bins.n
        starts.append(np.array([mean, math.log(spread), coarse_mean, math.log(ratio), math.log(share / (1 - share))]))
    if not starts:
        mean, log_s = one.parameters
        starts.append(np.array([mean, log_s, mean + 2 * math.exp(log_s), 0.0, -2.0]))
    widest = math.log(SPREAD_RATIO)
    bounds = [
        (None, None),
        (math.log(SMALLEST_SPREAD), math.log(WIDEST_SPREAD)),
        (None, None),
        (-widest, widest),
        (-12.0, 12.0),
    ]
    return _fit(bins, starts, bounds)


def _moments(bins: _Bins, weight: Floats) -> tuple[float, float]:
    """Return a rough mean and spread of ln d, every particle in the middle of its bin: where a fit starts."""
    low = np.where(np.isfinite(bins.low), bins.low, bins.high - 0.7)  # an open bin: a factor of 2
    high = np.where(np.isfinite(bins.high), bins.high, bins.low + 0.7)
    middle = 0.5 * (low + high)
    mean = float(np.average(middle, weights=weight))
    width = float(np.average(high - low, weights=weight))
    spread = math.sqrt(float(np.average((middle - mean) ** 2, weights=weight)) + width**2 / 12)
    return mean, min(max(spread, 0.05), 1.5)


def _fit(bins: _Bins, starts: list[Floats], bounds: list[tuple[float | None, float | None]]) -> _Fit:
    """Return the likeliest parameters over all starts, with the inverse of the observed information (0 where there is none)."""
    found = [minimize(_objective, start, args=(bins,), jac=True, method="L-BFGS-B", bounds=bounds) for start in starts]
    best = min(found, key=lambda result: float(result.fun))
    parameters = _fine_first(np.asarray(best.x, dtype=float))
    free = [
        index
        for index, (value, (low, high)) in enumerate(zip(parameters, bounds, strict=True))
        if (low is None or value > low + 1e-6) and (high is None or value < high - 1e-6)
    ]
    covariance = np.zeros((parameters.size, parameters.size))
    information = _information(parameters, bins)[np.ix_(free, free)]
    if np.linalg.eigvalsh(information)[0] > 1e-9 * bins.n:  # else left at 0: these data do not fix the parameters
        covariance[np.ix_(free, free)] = np.linalg.inv(information)
    return _Fit(parameters, covariance, -float(best.fun))


def _fine_first(parameters: Floats) -> Floats:
    if parameters.size == 2 or parameters[0] <= parameters[2]:
        return parameters
    mean, log_s, other_mean, log_ratio, logit_share = parameters
    return np.array([other_mean, log_s + log_ratio, mean, -log_ratio, -logit_share])


def _information(parameters: Floats, bins: _Bins) -> Floats:
    """Return the second derivatives of minus the log-likelihood, from central differences of its gradient."""
    step = 1e-4 * np.eye(parameters.size)
    rows = [(_objective(parameters + row, bins)[1] - _objective(parameters - row, bins)[1]) / 2e-4 for row in step]
    matrix = np.array(rows)
    return np.asarray(0.5 * (matrix + matrix.T))


def _objective(parameters: Floats, bins: _Bins) -> tuple[float, Floats]:
    """Return minus the log-likelihood of one or two lognormal populations, and its gradient."""
    log_p, by_mean, by_log_s = _population(parameters[0], math.exp(parameters[1]), bins)
    if parameters.size == 2:
        return -float(bins.count @ log_p), -np.array([bins.count @ by_mean, bins.count @ by_log_s])
    coarse_s = math.exp(parameters[1] + parameters[3])
    coarse_p, coarse_by_mean, coarse_by_log_s = _population(parameters[2], coarse_s, bins)
    fine_share, coarse_share = float(expit(-parameters[4])), float(expit(parameters[4]))
    log_fine, log_coarse = math.log(fine_share) + log_p, math.log(coarse_share) + coarse_p
    log_total = np.logaddexp(log_fine, log_coarse)
    fine, coarse = bins.count * np.exp(log_fine - log_total), bins.count * np.exp(log_coarse - log_total)
    gradient = [
        fine @ by_mean,
        fine @ by_log_s + coarse @ coarse_by_log_s,
        coarse @ coarse_by_mean,
        coarse @ coarse_by_log_s,
        coarse.sum() * fine_share - fine.sum() * coarse_share,
    ]
    return -float(bins.count @ log_total), -np.array(gradient)


def _population(mean: float, spread: float, bins: _Bins) -> tuple[Floats, Floats, Floats]:
    """Return the log-probability of each bin under a normal distribution of ln d, and its derivatives by mean and ln s."""
    low, high = (bins.low - mean) / spread, (bins.high - mean) / spread
    # In the upper half the probabilities of lying above are taken: differences of numbers near 1 would lose their digits.
    flip = low > 0
    near, far = np.where(flip, -low, high), np.where(flip, -high, low)
    log_near = log_ndtr(near)
    log_p = log_near + np.log1p(-np.exp(np.minimum(log_ndtr(far) - log_near, -1e-300)))
    at_low, at_high = (np.exp(-0.5 * edge**2 - 0.5 * math.log(2 * math.pi) - log_p) for edge in (low, high))
    by_mean = (at_low - at_high) / spread
    by_log_s = np.where(np.isfinite(low), low, 0) * at_low - np.where(np.isfinite(high), high, 0) * at_high
    return log_p, by_mean, by_log_s

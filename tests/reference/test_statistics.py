"""Certified regressions, a published straight line with outliers, and eight schools, through our sampler and mixture."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from scipy import integrate, special, stats

from reconcile.campaign.progress import silent
from reconcile.inference.adapt import Begin
from reconcile.inference.mixture import Cell, density, stray_probability
from reconcile.inference.sampling import Draws, Target, sample
from reconcile.inference.start import climb, curvature

ENOUGH = 4000  # effective draws: four standard errors of a mean are then 6 % of the posterior's width


class Posterior:
    """A target from a function of positions (n, k)."""

    def __init__(self, log_prob: Callable[[np.ndarray], np.ndarray]) -> None:
        self.log_prob = log_prob


def sampled(target: Target, begin: np.ndarray, widths: np.ndarray, seed: int = 1, enough: int = ENOUGH) -> Draws:
    """Climb from a rough start, take the curvature there, and sample; nothing of the answer is given away."""
    peak = climb(target.log_prob, begin, np.diag(widths))
    covariance = curvature(target.log_prob, peak.position, peak.covariance)
    draws = sample(
        target,
        Begin(peak.position, covariance),
        np.random.SeedSequence(seed),
        target=enough,
        workers=1,
        progress=silent,
    )
    assert draws.converged
    return draws


def agree(draws: np.ndarray, mean: float, sd: float, effective: float) -> None:
    """Mean and standard deviation within four Monte Carlo standard errors; `effective` is the smallest of any coordinate."""
    kurtosis = float(stats.kurtosis(draws.ravel(), fisher=False))
    assert draws.mean() == pytest.approx(mean, abs=4 * sd / np.sqrt(effective))
    assert draws.std() == pytest.approx(sd, abs=4 * sd * np.sqrt((kurtosis - 1) / (4 * effective)))


# -- certified regressions -------------------------------------------------------------------------------------------
# National Institute of Standards and Technology, Statistical Reference Datasets, https://www.itl.nist.gov/div898/strd/
# With flat priors and p(s) ∝ 1/s each coefficient of a linear model follows Student's t: its standard deviation is the
# certified one × √(ν/(ν − 2)) (A. Gelman et al., Bayesian Data Analysis, 3rd ed., section 14.2; from memory).

# Norris: calibration of ozone monitors, y and x. The file is in scipy's tests too, nist_linregress/Norris.dat.
NORRIS = np.array(
    [
        (0.1, 0.2), (338.8, 337.4), (118.1, 118.2), (888.0, 884.6), (9.2, 10.1), (228.1, 226.5), (668.5, 666.3),
        (998.5, 996.3), (449.1, 448.6), (778.9, 777.0), (559.2, 558.2), (0.3, 0.4), (0.1, 0.6), (778.1, 775.5),
        (668.8, 666.9), (339.3, 338.0), (448.9, 447.5), (10.8, 11.6), (557.7, 556.0), (228.3, 228.1), (998.0, 995.8),
        (888.8, 887.6), (119.6, 120.2), (0.3, 0.3), (0.6, 0.3), (557.6, 556.8), (339.3, 339.1), (888.0, 887.2),
        (998.5, 999.0), (778.9, 779.0), (10.2, 11.1), (117.6, 118.3), (228.9, 229.2), (668.4, 669.1), (449.2, 448.9),
        (0.2, 0.5),
    ],
    dtype=float,
)  # fmt: skip
NORRIS_CERTIFIED = ((-0.262323073774029, 0.232818234301152), (1.00211681802045, 4.29796848199937e-4))
NORRIS_RESIDUAL = 0.884796396144373

# Misra1a: volume of nitrogen adsorbed y against pressure x, y = b1 (1 − exp(−b2 x)), nonlinear.
MISRA_X = np.array([77.6, 114.9, 141.1, 190.8, 239.9, 289.0, 332.8, 378.4, 434.8, 477.3, 536.8, 593.1, 689.1, 760.0])
MISRA_Y = np.array([10.07, 14.73, 17.94, 23.93, 29.61, 35.18, 40.02, 44.82, 50.76, 55.05, 61.01, 66.40, 75.47, 81.78])
MISRA_CERTIFIED = ((2.3894212918e2, 2.7070075241), (5.5015643181e-4, 7.2668688436e-6))
MISRA_START = (250.0, 5e-4)  # the second of the two that come with the data
MISRA_SQUARES = 1.2455138894e-1


def least_squares_posterior(y: np.ndarray, curve: Callable[[np.ndarray], np.ndarray]) -> Posterior:
    """Normal errors of unknown size s, flat in the coefficients and in ln s, the last coordinate."""

    def log_prob(position: np.ndarray) -> np.ndarray:
        log_s = position[:, -1]
        squares = ((y - curve(position)) ** 2).sum(axis=1)
        return -len(y) * log_s - 0.5 * squares * np.exp(-2.0 * log_s)

    return Posterior(log_prob)


def test_a_certified_straight_line():
    y, x = NORRIS.T
    target = least_squares_posterior(y, lambda p: p[:, :1] + p[:, 1:2] * x)
    draws = sampled(target, np.array([0.0, 1.0, 0.0]), np.array([1.0, 1e-3, 0.3]))
    nu = 34
    for column, (value, sd) in enumerate(NORRIS_CERTIFIED):
        agree(draws.position[..., column], value, sd * np.sqrt(nu / (nu - 2)), draws.quality.min_ess)
    # ν s²ᵣ/s² is χ² of ν: ln s has mean ln sᵣ + (ln(ν/2) − ψ(ν/2))/2 and variance ψ'(ν/2)/4.
    mean = np.log(NORRIS_RESIDUAL) + 0.5 * (np.log(nu / 2) - special.digamma(nu / 2))
    sd = 0.5 * np.sqrt(float(special.polygamma(1, nu / 2)))
    agree(draws.position[..., 2], float(mean), sd, draws.quality.min_ess)


def misra_by_quadrature() -> np.ndarray:
    """Mean and standard deviation of both coefficients (2, 2), s summed out: p ∝ (sum of squares)^(−n/2), on a grid."""
    (b1, sd1), (b2, sd2) = MISRA_CERTIFIED
    # Along the ridge, b2 against b1 × b2: axes that hardly trade. da db2 = b2 db1 db2 is taken back by the weight.
    first = b1 * b2 * (1.0 + np.linspace(-0.06, 0.06, 801))[:, None]
    second = (b2 + sd2 * np.linspace(-16.0, 16.0, 801))[None]
    squares = np.zeros((801, 801))
    for x, y in zip(MISRA_X, MISRA_Y, strict=True):
        squares += (y - first / second * -np.expm1(-second * x)) ** 2
    weight = (squares / MISRA_SQUARES) ** -7.0 / second
    weight /= weight.sum()
    found = []
    for values in (first / second, second + 0.0 * first):
        mean = float((weight * values).sum())
        found.append((mean, np.sqrt(float((weight * (values - mean) ** 2).sum()))))
    return np.array(found)


def test_a_certified_saturation_curve():
    target = least_squares_posterior(MISRA_Y, lambda p: p[:, :1] * -np.expm1(-p[:, 1:2] * MISRA_X))
    draws = sampled(target, np.array([*MISRA_START, 0.0]), np.array([10.0, 2e-5, 0.5]))
    nu = 12
    for column, (certified, exact) in enumerate(zip(MISRA_CERTIFIED, misra_by_quadrature(), strict=True)):
        agree(draws.position[..., column], *exact, draws.quality.min_ess)
        # The curve is not straight in its coefficients, so Student's t holds nearly: its mean is off by some 6 % of a
        # standard deviation. Four standard errors of 400 effective draws, as few as are ever taken, are 20 %.
        value, sd = certified[0], certified[1] * np.sqrt(nu / (nu - 2))
        agree(draws.position[..., column], value, sd, 400.0)


def test_climbing_finds_the_certified_minimum():
    target = least_squares_posterior(MISRA_Y, lambda p: p[:, :1] * -np.expm1(-p[:, 1:2] * MISRA_X))
    peak = climb(target.log_prob, np.array([*MISRA_START, 0.0]), np.diag([10.0, 2e-5, 0.5]))
    for found, (value, sd) in zip(peak.position, MISRA_CERTIFIED, strict=False):
        assert found == pytest.approx(value, abs=0.05 * sd)  # the climb stops at a slope of 0.02 a whitened unit
    assert np.exp(peak.position[2]) == pytest.approx(np.sqrt(MISRA_SQUARES / 14), rel=0.02)
    covariance = curvature(target.log_prob, peak.position, peak.covariance)
    for column, (_, sd) in enumerate(MISRA_CERTIFIED):
        # At the mode s² is the sum of squares over 14, certified over 12; 5 %: second differences of half a sd, on a
        # likelihood that is curved.
        assert np.sqrt(covariance[column, column]) == pytest.approx(sd * np.sqrt(12 / 14), rel=0.05)


# -- a straight line with outliers -----------------------------------------------------------------------------------
# D. W. Hogg, J. Bovy and D. Lang, Data analysis recipes: Fitting a model to data (2010), arXiv:1008.4686, table 1:
# x, y, standard deviation of y, of 20 points (the other columns are not used here).
HOGG = np.array(
    [
        (201, 592, 61), (244, 401, 25), (47, 583, 38), (287, 402, 15), (203, 495, 21), (58, 173, 15), (210, 479, 27),
        (202, 504, 14), (198, 510, 30), (158, 416, 16), (165, 393, 14), (201, 442, 25), (157, 317, 52), (131, 311, 16),
        (166, 400, 34), (160, 337, 31), (186, 423, 42), (125, 334, 26), (218, 533, 16), (146, 344, 22),
    ],
    dtype=float,
)  # fmt: skip
HOGG_X, HOGG_Y, HOGG_S = HOGG.T
CLEAN = slice(4, 20)  # points 5 to 20
# Published: (2.24 ± 0.11) x + (34 ± 18) (exercise 1; from memory). More digits by weighted least squares below.
CLEAN_SLOPE, CLEAN_SLOPE_SD = 2.239921, 0.107780
MIDDLE = 170.0  # where the line's height is taken, so that it and the slope hardly trade


def weighted_line(x: np.ndarray, y: np.ndarray, s: np.ndarray) -> tuple[float, float]:
    """Slope and its standard deviation."""
    design = np.stack([np.ones_like(x), x], axis=1) / s[:, None]
    covariance = np.linalg.inv(design.T @ design)
    return float((covariance @ design.T @ (y / s))[1]), float(np.sqrt(covariance[1, 1]))


def test_the_line_through_the_clean_points_alone():
    slope, sd = weighted_line(HOGG_X[CLEAN], HOGG_Y[CLEAN], HOGG_S[CLEAN])
    assert slope == pytest.approx(CLEAN_SLOPE, abs=1e-5)
    assert sd == pytest.approx(CLEAN_SLOPE_SD, abs=1e-5)
    assert (round(slope, 2), round(sd, 2)) == (2.24, 0.11)  # as published


def hogg_parts(p: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Weighted densities (n, 20) of good and of bad points: bad ones are normal about Yb with variance Vb + s²."""
    slope, height, logit_bad, mean_bad, log_variance_bad = p.T[..., None]
    rate = special.expit(logit_bad)
    good = stats.norm.pdf(HOGG_Y, height + slope * (HOGG_X - MIDDLE), HOGG_S)
    bad = stats.norm.pdf(HOGG_Y, mean_bad, np.sqrt(np.exp(log_variance_bad) + HOGG_S**2))
    return (1.0 - rate) * good, rate * bad


def hogg_log_prob(p: np.ndarray) -> np.ndarray:
    """Flat priors on the line, on the share of bad points, on Yb and ln Vb, as in section 3 of the paper."""
    good, bad = hogg_parts(p)
    # The last two flat priors need an end; these lie far outside what the data allow.
    inside = (np.abs(p[:, 3] - 400.0) < 2000.0) & (np.abs(p[:, 4] - 10.0) < 10.0)
    jacobian = -np.logaddexp(0.0, p[:, 2]) - np.logaddexp(0.0, -p[:, 2])
    return np.where(inside, np.log(good + bad + 1e-300).sum(axis=1) + jacobian, -np.inf)


def test_the_published_mixture_with_its_outliers():
    begin = np.array([2.0, 400.0, -1.5, 450.0, 9.0])
    draws = sampled(Posterior(hogg_log_prob), begin, np.array([0.2, 10.0, 1.0, 100.0, 1.0]), enough=2000)
    flat = draws.position.reshape(-1, 5)
    intercept = flat[:, 1] - MIDDLE * flat[:, 0]
    share = special.expit(flat[:, 2])
    # Computed once with another sampler (64 stretch-move walkers): 2.257 ± 0.121, 32.1 ± 19.9, 0.293 ± 0.127. 0.02 and 3
    # are a sixth of the widths, room for both samplers' errors; for the third likewise.
    assert flat[:, 0].mean() == pytest.approx(2.257, abs=0.02)
    assert flat[:, 0].std() == pytest.approx(0.121, abs=0.02)
    assert intercept.mean() == pytest.approx(32.1, abs=3.0)
    assert intercept.std() == pytest.approx(19.9, abs=3.0)
    assert share.mean() == pytest.approx(0.293, abs=0.02)
    good, bad = hogg_parts(flat[:: len(flat) // 4000])
    outlier = (bad / (good + bad)).mean(axis=0)
    assert np.all(outlier[1:4] > 0.99)
    assert outlier[0] == pytest.approx(0.27, abs=0.03)  # an outlier to the eye, but not to this model
    # The largest of the rest is 0.34; the same Monte Carlo error as above goes with it.
    assert outlier[4:].max() == pytest.approx(0.34, abs=0.03)


WIDTH = 150.0  # of stray points here: some times the spread of the good ones about the line


def hogg_cells(p: np.ndarray) -> tuple[Cell, np.ndarray]:
    """The twenty points as cells of one repeat, without scatter; and the stray rate."""
    slope, height, logit_rate = p.T
    expected = height + slope * (HOGG_X - MIDDLE)[:, None]
    shape = (1, 20, 1)
    cell = Cell(HOGG_Y.reshape(shape), HOGG_S.reshape(shape), expected[None], np.zeros(shape), np.full((20, 1), WIDTH))
    return cell, special.expit(logit_rate)


def our_log_prob(p: np.ndarray) -> np.ndarray:
    cell, rate = hogg_cells(p)
    jacobian = -np.logaddexp(0.0, p[:, 2]) - np.logaddexp(0.0, -p[:, 2])
    return np.log(density(cell, rate, censored=False)).sum(axis=0) + jacobian


def test_our_mixture_draws_the_line_that_the_clean_points_draw():
    begin, widths = np.array([2.0, 400.0, -1.5]), np.array([0.2, 10.0, 1.0])
    draws = sampled(Posterior(our_log_prob), begin, widths, enough=2000)
    flat = draws.position.reshape(-1, 3)
    slope = flat[:, 0]
    # The stray part must neither drag the slope by its own width nor cost much of what the clean points say.
    assert abs(slope.mean() - CLEAN_SLOPE) < CLEAN_SLOPE_SD
    assert CLEAN_SLOPE_SD < slope.std() < 1.5 * CLEAN_SLOPE_SD
    all_points, _ = weighted_line(HOGG_X, HOGG_Y, HOGG_S)
    assert abs(all_points - CLEAN_SLOPE) > 5 * CLEAN_SLOPE_SD  # least squares over all is led astray
    cell, rate = hogg_cells(flat[:: len(flat) // 2000])
    stray = stray_probability(cell, rate, censored=False)[0].mean(axis=1)
    assert np.all(stray[1:4] > 0.99)
    assert np.all(stray[4:] < 0.5)


# -- eight schools ---------------------------------------------------------------------------------------------------
# D. B. Rubin, J. Educ. Stat. 6 (1981) 377; A. Gelman et al., Bayesian Data Analysis, section 5.5: effect of coaching and
# its standard error in eight schools, flat in the mean and the spread of the true effects.
EFFECT = np.array([28.0, 8.0, -3.0, 7.0, -1.0, 1.0, 18.0, 12.0])
ERROR = np.array([15.0, 10.0, 16.0, 11.0, 9.0, 11.0, 10.0, 18.0])


def schools_log_prob(p: np.ndarray) -> np.ndarray:
    """Mean and ln spread, the true effects summed out; with them the density has no highest point to start from."""
    mean, log_spread = p[:, :1], p[:, 1]
    variance = ERROR**2 + np.exp(2.0 * np.minimum(log_spread, 50.0))[:, None]
    return log_spread - 0.5 * (np.log(variance) + (EFFECT - mean) ** 2 / variance).sum(axis=1)


def schools_by_quadrature() -> tuple[np.ndarray, np.ndarray, float, float]:
    """Grid of the spread, its distribution function, its mean, and the mean of the mean: true effects summed out."""
    spread = np.linspace(1e-4, 400.0, 80_001)
    weight = 1.0 / (ERROR**2 + spread[:, None] ** 2)
    variance = 1.0 / weight.sum(axis=1)
    centre = variance * (weight * EFFECT).sum(axis=1)
    log_p = 0.5 * np.log(variance) + 0.5 * np.log(weight).sum(axis=1)
    p = np.exp(log_p - 0.5 * (weight * (EFFECT - centre[:, None]) ** 2).sum(axis=1))
    below = integrate.cumulative_simpson(p, x=spread, initial=0.0)
    mean_spread = integrate.simpson(p * spread, x=spread) / below[-1]
    return spread, below / below[-1], float(mean_spread), float(integrate.simpson(p * centre, x=spread) / below[-1])


def test_eight_schools():
    draws = sampled(Posterior(schools_log_prob), np.array([8.0, 1.5]), np.array([5.0, 1.0]))
    mean, spread = draws.position[..., 0].ravel(), np.exp(draws.position[..., 1].ravel())
    effective = draws.quality.min_ess
    grid, below, mean_spread, mean_mean = schools_by_quadrature()
    # Shares below exact quantiles are shares of draws: each good to √(p (1 − p)/n).
    for p in (0.025, 0.25, 0.5, 0.75, 0.975):
        found = np.mean(spread < np.interp(p, below, grid))
        assert found == pytest.approx(p, abs=4 * np.sqrt(p * (1 - p) / effective))
    assert spread.mean() == pytest.approx(mean_spread, abs=4 * spread.std() / np.sqrt(effective))
    assert mean.mean() == pytest.approx(mean_mean, abs=4 * mean.std() / np.sqrt(effective))
    # Computed elsewhere, to two decimals: spread of mean 6.57; mean effect of median 7.89.
    assert mean_spread == pytest.approx(6.57, abs=0.01)
    assert np.median(mean) == pytest.approx(7.89, abs=4 * 1.25 * mean.std() / np.sqrt(effective))
    # The book's medians of the true effects, table 5.3 (from memory): 10 8 7 8 5 6 10 8; given without decimals.
    weight, own = 1.0 / spread[:, None] ** 2, 1.0 / ERROR**2
    centre, width = (weight * mean[:, None] + own * EFFECT) / (weight + own), 1.0 / np.sqrt(weight + own)
    true = centre + width * np.random.default_rng(1).standard_normal(centre.shape)
    error = 4 * 1.25 * true.std(axis=0) / np.sqrt(effective)
    assert np.all(np.abs(np.median(true, axis=0) - [10, 8, 7, 8, 5, 6, 10, 8]) < 0.5 + error)

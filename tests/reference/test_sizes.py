"""Lognormal particle sizes against closed forms: how well n particles fix them, and their moments."""

import math

import numpy as np
import pytest
from scipy import stats

from reconcile.measure.particles import from_counts, from_diameters

NM = 1e-9


def quantiles(median: float, geometric_sd: float, n: int) -> np.ndarray:
    """Return n diameters spread evenly in probability: a sample without luck."""
    return np.asarray(stats.lognorm(s=math.log(geometric_sd), scale=median).ppf((np.arange(n) + 0.5) / n))


@pytest.mark.parametrize("n", [50, 400])
def test_variances_of_the_estimates_are_those_of_the_normal_distribution_of_the_logarithm(n):
    # var(ln median) = s²/n, var(s) = s²/(2n): Fisher information of a normal distribution (e.g. Kendall and Stuart, from memory).
    found = from_diameters(quantiles(10 * NM, 1.6, n))
    s = math.log(found.geometric_sd)
    assert found.median_u / found.median == pytest.approx(s / math.sqrt(n), rel=1e-4)
    assert found.geometric_sd_u / found.geometric_sd == pytest.approx(s / math.sqrt(2 * n), rel=1e-4)


def test_grouping_adds_to_the_variance_as_the_information_of_the_groups_says():
    # Information on the mean in groups: n Σ (φ(a) − φ(b))²/P / s², summed with scipy.stats on the expected counts.
    s, n = math.log(1.5), 1_000_000
    edges = np.append(np.arange(0, 60, 5), np.inf) * NM
    distribution = stats.lognorm(s=s, scale=12 * NM)
    share = np.diff(distribution.cdf(edges))
    with np.errstate(divide="ignore"):
        z = np.log(edges / (12 * NM)) / s
    slope = np.diff(stats.norm.pdf(z))
    z_slope = np.diff(np.where(np.isfinite(z), z, 0) * stats.norm.pdf(z))
    # matrix of (mean, ln s), both in units of s
    information = n * np.array(
        [
            [np.sum(slope**2 / share), np.sum(slope * z_slope / share)],
            [np.sum(slope * z_slope / share), np.sum(z_slope**2 / share)],
        ]
    )
    covariance = np.linalg.inv(information)
    found = from_counts(edges[:-1], edges[1:], np.round(n * share))
    assert found.median == pytest.approx(12 * NM, rel=1e-5)  # counts are rounded to 1e-6 of n
    assert found.median_u / found.median == pytest.approx(s * math.sqrt(covariance[0, 0]), rel=1e-3)
    assert found.geometric_sd_u / found.geometric_sd == pytest.approx(s * math.sqrt(covariance[1, 1]), rel=1e-3)


@pytest.mark.parametrize(
    ("median", "geometric_sd", "means"),
    # mode, arithmetic mean, area mean, volume mean, Sauter mean, mass median, standard deviation [nm]. Hatch and Choate 1929,
    # J. Franklin Inst. 207, 369; moments as ISO 9276-5 names them. Worked by hand from C exp(k s²), k = -1, ½, 1, 3/2, 5/2, 3.
    [
        (10, 1.6, (8.0179, 11.1678, 12.4720, 13.9285, 17.3717, 19.4004, 5.5526)),
        (20, 1.5, (16.9680, 21.7135, 23.5738, 25.5934, 30.1667, 32.7512, 9.1786)),
    ],
)
def test_fitted_median_and_spread_give_the_published_moments(median, geometric_sd, means):
    found = from_diameters(quantiles(median * NM, geometric_sd, 20_000))
    c, s2 = found.median / NM, math.log(found.geometric_sd) ** 2
    expected = [c * math.exp(k * s2) for k in (-1, 0.5, 1, 1.5, 2.5, 3)]
    expected.append(c * math.exp(s2 / 2) * math.sqrt(math.expm1(s2)))
    # 20 000 even quantiles miss the last 1/40 000 of either tail: s falls short by 4e-5, the mass median by 1e-4.
    assert expected == pytest.approx(list(means), rel=3e-4)

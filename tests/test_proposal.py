"""The proposal: a density that is what it says, draws that follow it, and its fit to lopsided and bent targets."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import integrate, special, stats

from reconcile.inference.adapt import Begin, adapt
from reconcile.inference.proposal import Mixture, Proposal, Warp


def proposal(k: int, seed: int, freedom: float = 8.0) -> Proposal:
    """Return a warped, correlated proposal, different in every coordinate."""
    rng = np.random.default_rng(seed)
    warp = Warp(rng.normal(0, 2, k), rng.uniform(0.3, 3, k), rng.uniform(-1, 1, k), rng.uniform(0.7, 1.5, k))
    root = np.tril(rng.normal(0, 0.5, (k, k)), -1) + np.diag(rng.uniform(0.6, 1.4, k))
    return Proposal(warp, rng.normal(0, 0.3, k), root, freedom)


def mixture(k: int) -> Mixture:
    """Return a fitted part with two defences beside it."""
    plain = Proposal.normal_like(np.full(k, 0.5), np.eye(k) + 0.3, 8.0)
    return Mixture((proposal(k, 5), plain, proposal(k, 6, freedom=5.0)), (0.8, 0.13, 0.07))


# Integrals over the whole line on an even grid of y, x = centre + scale × sinh y: heavy tails end in y.
Y = np.linspace(-14.0, 14.0, 701)
REACH, SLOPE = np.sinh(Y), np.cosh(Y) * (Y[1] - Y[0])


@pytest.mark.parametrize("seed", range(4))
def test_in_one_dimension_the_density_integrates_to_one(seed):
    here = proposal(1, seed)
    centre, scale = float(here.warp.location[0]), float(here.warp.scale[0])

    def density(y: float) -> float:
        return float(np.exp(here.log_pdf(np.array([[centre + scale * np.sinh(y)]]))[0])) * scale * np.cosh(y)

    area = sum(integrate.quad(density, a, a + 1.0)[0] for a in range(-16, 16))
    assert area == pytest.approx(1.0, abs=1e-7)  # quad's 1.5e-8, and a tail of power 8 cut at 4e6 scales


@pytest.mark.parametrize("here", [proposal(2, 0), proposal(2, 1), mixture(2)], ids=["one", "another", "mixture"])
def test_in_two_dimensions_the_density_integrates_to_one(here):
    x = np.stack(np.meshgrid(REACH, REACH, indexing="ij"), axis=-1).reshape(-1, 2)
    cells = np.multiply.outer(SLOPE, SLOPE).ravel()
    # Sums over an even grid of a smooth density that dies out at both ends: exact but for the tail beyond 6e5.
    assert cells @ np.exp(here.log_pdf(x)) == pytest.approx(1.0, abs=1e-4)


@pytest.mark.parametrize("here", [proposal(2, 0), mixture(2)], ids=["one", "mixture"])
def test_draws_follow_the_density(here):
    draws = here.sample(np.random.default_rng(9), 4000)
    assert draws.shape == (4000, 2)
    x = np.stack(np.meshgrid(REACH, REACH, indexing="ij"), axis=-1).reshape(-1, 2)
    table = np.exp(here.log_pdf(x)).reshape(len(Y), len(Y))
    for axis in (0, 1):
        below = np.cumsum((table @ SLOPE if axis == 0 else SLOPE @ table) * SLOPE)
        # Midway, so that a cumulative sum stands for the integral up to the point itself.
        halfway = below - 0.5 * np.diff(below, prepend=0.0)
        # The seed is fixed; a right sampler fails one seed in ten thousand.
        assert stats.kstest(draws[:, axis], lambda v, p=halfway: np.interp(np.arcsinh(v), Y, p)).pvalue > 1e-4
    # Both axes together: the share of draws above a level of density is the integral over the region above it.
    levels = np.quantile(here.log_pdf(draws), [0.1, 0.3, 0.5, 0.7, 0.9])
    cells = np.multiply.outer(SLOPE, SLOPE).ravel() * table.ravel()
    above = [float(cells[np.log(table.ravel() + 1e-300) > level].sum()) for level in levels]
    assert above == pytest.approx([0.9, 0.7, 0.5, 0.3, 0.1], abs=0.035)  # 4 × √(p (1 − p)/4000)


def test_a_warp_leads_there_and_back_with_its_slope():
    warp = proposal(3, 2).warp
    z = np.random.default_rng(1).normal(0, 2, (50, 3))
    x = warp.outward(z)
    back, log_slope = warp.inward(x)
    assert back == pytest.approx(z, rel=1e-9, abs=1e-9)
    h = 1e-5
    slope = (warp.outward(z + h) - warp.outward(z - h)) / (2 * h)
    assert log_slope == pytest.approx(-np.log(slope).sum(axis=1), abs=1e-6)  # differences of width 1e-5
    identity, nothing = Warp.none(3).inward(z)
    assert identity == pytest.approx(z)
    assert nothing == pytest.approx(np.zeros(50), abs=1e-12)


LEVELS = np.array([0.02, 0.05, 0.1, 0.25, 0.5, 0.75, 0.9, 0.95, 0.98])
LOPSIDED = {
    "normal": stats.norm(3.0, 2.0),
    "exponential of a normal": stats.lognorm(0.5, scale=1e-3),
    "gamma of shape 3": stats.gamma(3.0),
    "the same, turned round": None,
    "t of 5": stats.t(5),
}


def quantiles_of(name: str, shares: np.ndarray) -> np.ndarray:
    if LOPSIDED[name] is None:
        return -stats.gamma(3.0).ppf(1.0 - shares)
    return LOPSIDED[name].ppf(shares)


@pytest.mark.parametrize("name", LOPSIDED)
def test_a_fitted_warp_gives_a_normal_variable_the_quantiles_of_the_points(name):
    points = quantiles_of(name, (np.arange(4000) + 0.5) / 4000)
    warp = Warp.fit(points[:, None], np.full(4000, 1 / 4000))
    found = warp.outward(stats.norm.ppf(LEVELS)[:, None])[:, 0]
    true = quantiles_of(name, LEVELS)
    # Four parameters cannot follow nine quantiles of a foreign family; they must leave less than a quarter of what the
    # best straight line through these quantiles leaves.
    score = stats.norm.ppf(LEVELS)
    straight = np.abs(np.polyval(np.polyfit(score, true, 1), score) - true).max()
    assert np.abs(found - true).max() < max(0.25 * straight, 0.005 * np.std(true))


def test_weights_count_in_the_fit_of_a_warp():
    points = np.linspace(-12.0, 12.0, 4001)
    weights = stats.gamma(3.0, loc=-2.0).pdf(points)
    warp = Warp.fit(points[:, None], weights / weights.sum())
    # The same distribution as points of equal weight, at its own quantiles.
    even = stats.gamma(3.0, loc=-2.0).ppf((np.arange(4000) + 0.5) / 4000)
    same = Warp.fit(even[:, None], np.full(4000, 1 / 4000))
    z = stats.norm.ppf(LEVELS)[:, None]
    assert warp.outward(z) == pytest.approx(same.outward(z), abs=0.01)  # steps between the points are 0.006


def test_a_fitted_proposal_has_the_points_correlation():
    rng = np.random.default_rng(4)
    covariance = np.array([[1.0, -0.9], [-0.9, 1.0]])
    points = rng.multivariate_normal([1.0, 2.0], covariance, size=4000) * [1.0, 100.0]
    fitted = Proposal.fit(points, np.full(4000, 1 / 4000), 12.0, points[:200])
    draws = fitted.sample(rng, 4000)
    # Rank correlation, which heavy tails do not blur; of 4000 draws, each good to (1 − ρ²)/√4000 = 0.003.
    assert stats.spearmanr(draws).statistic == pytest.approx(stats.spearmanr(points).statistic, abs=0.02)
    assert np.median(draws, axis=0) == pytest.approx([1.0, 200.0], rel=0.1)


class Bent:
    """A banana, (x, y) with y about (x² − 1)/2, beside a lopsided coordinate: the logarithm of a gamma variable."""

    shape = 1.5
    # Exact: x of variance 1; y of 0.5² + Var(x²)/4 = 0.25 + 0.5; digamma and trigamma of the shape.
    mean = np.array([0.0, 0.0, special.digamma(1.5)])
    variance = np.array([1.0, 0.75, special.polygamma(1, 1.5)])

    def log_prob(self, position: np.ndarray) -> np.ndarray:
        x, y, g = position.T
        bent = -0.5 * x**2 - 0.5 * ((y - 0.5 * (x**2 - 1.0)) / 0.5) ** 2 - np.log(2 * np.pi * 0.5)
        return bent + self.shape * g - np.exp(np.minimum(g, 50.0)) - special.gammaln(self.shape)


def bent_begin(reach: bool) -> Begin:
    # The normal approximation at the mode (0, −1/2, ln shape): second derivatives by hand. In x: 1 − 2 (y' stays) = 1.
    mode = np.array([0.0, -0.5, np.log(1.5)])
    wide = (np.zeros(3), 9.0 * np.eye(3)) if reach else None
    return Begin(mode, np.diag([1.0, 0.25, 1 / 1.5]), wide)


@pytest.mark.parametrize("reach", [False, True])
@pytest.mark.parametrize("seed", [1, 2])
def test_adapting_finds_a_bent_and_lopsided_target(reach, seed):
    target = Bent()
    adapted = adapt(target.log_prob, bent_begin(reach), np.random.default_rng(seed))
    weights = np.exp(adapted.log_weights)
    weights /= weights.sum()
    mean = weights @ adapted.points
    variance = weights @ (adapted.points - mean) ** 2
    assert adapted.effective == pytest.approx(1.0 / np.sum(weights**2))
    assert adapted.effective > 500  # so that the four standard errors below are less than a fifth of the target's width
    assert adapted.evaluations == len(adapted.points) == len(adapted.log_prob)
    assert np.array_equal(adapted.log_prob, target.log_prob(adapted.points))
    # Four Monte Carlo standard errors, from the weighted points themselves.
    error = np.sqrt((weights**2) @ (adapted.points - mean) ** 2)
    assert np.all(np.abs(mean - target.mean) < 4 * error)
    error = np.sqrt((weights**2) @ ((adapted.points - mean) ** 2 - variance) ** 2)
    assert np.all(np.abs(variance - target.variance) < 4 * error)


def test_the_adapted_proposal_is_nearer_the_target_than_the_first_one():
    target, rng = Bent(), np.random.default_rng(3)
    begin = bent_begin(False)
    adapted = adapt(target.log_prob, begin, rng)

    def efficiency(here: Proposal | Mixture) -> float:
        draws = here.sample(rng, 4000)
        weights = np.exp(target.log_prob(draws) - here.log_pdf(draws))
        # The target is normalised, so its weights average 1 whatever the proposal.
        assert weights.mean() == pytest.approx(1.0, abs=4 * weights.std() / np.sqrt(4000))
        return float(weights.sum() ** 2 / np.sum(weights**2) / 4000)

    first = efficiency(Proposal.normal_like(begin.mode, 1.2 * begin.covariance, 8.0))
    # Warps of single coordinates cannot follow a banana all the way; the first proposal wastes nine draws in ten.
    assert efficiency(adapted.proposal) > 2 * first


def test_adapting_is_repeatable():
    one, other = (adapt(Bent().log_prob, bent_begin(True), np.random.default_rng(8)) for _ in range(2))
    assert np.array_equal(one.points, other.points)
    assert np.array_equal(one.log_weights, other.log_weights)


def test_adapting_survives_a_target_that_is_nil_over_much_of_the_space():
    def half(position: np.ndarray) -> np.ndarray:
        inside = position[:, 0] > 0.0
        return np.where(inside, -0.5 * (position**2).sum(axis=1), -np.inf)

    begin = Begin(np.array([0.3, 0.0]), np.eye(2))
    adapted = adapt(half, begin, np.random.default_rng(1))
    weights = np.exp(adapted.log_weights) / np.exp(adapted.log_weights).sum()
    mean = weights @ adapted.points
    error = np.sqrt((weights**2) @ (adapted.points - mean) ** 2)
    assert np.all(np.abs(mean - [np.sqrt(2 / np.pi), 0.0]) < 4 * error)  # half a normal distribution

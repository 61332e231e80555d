"""Priors cut to a range, against scipy's own distributions."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import integrate, stats

from reconcile.campaign.campaign import Prior
from reconcile.inference.density import Density

INF = math.inf


def density(family: str, a: float, b: float, low: float = -INF, high: float = INF) -> Density:
    """Return a density of that family, cut."""
    return Density(Prior(family, a, b, f"{family}({a}, {b})"), low, high)  # type: ignore[arg-type]


class _LogitNormal(stats.rv_continuous):
    """The one family that scipy lacks: a normal variable through the logistic function."""

    def _pdf(self, x, mean, sd):  # type: ignore[no-untyped-def]  # scipy's own signature
        return stats.norm.pdf(np.log(x / (1 - x)), mean, sd) / (x * (1 - x))

    def _cdf(self, x, mean, sd):  # type: ignore[no-untyped-def]
        return stats.norm.cdf(np.log(x / (1 - x)), mean, sd)

    def _argcheck(self, mean, sd):  # type: ignore[no-untyped-def]
        return sd > 0


def logit_normal(median: float, sd: float):  # type: ignore[no-untyped-def]
    """Return scipy's frozen distribution of a logit-normal variable."""
    return _LogitNormal(a=0.0, b=1.0, shapes="mean, sd")(math.log(median / (1 - median)), sd)


# What a campaign brings, some at extreme scales (depths of 1e-7 m, energy densities of 1e10 J/m³) and some cut hard:
# ours, scipy's uncut, and the bounds of the cut distribution.
CASES = {
    "normal, uncut": (density("normal", -0.2, 0.12), stats.norm(-0.2, 0.12), -INF, INF),
    "normal, cut at both ends": (density("normal", 0.88, 0.05, 0.6, 1.0), stats.norm(0.88, 0.05), 0.6, 1.0),
    "normal, half cut away": (density("normal", 0.0, 0.02, 0.0, 1.6), stats.norm(0.0, 0.02), 0.0, 1.6),
    "normal, four sd outside": (density("normal", -0.4, 0.1, 0.0, 1.0), stats.norm(-0.4, 0.1), 0.0, 1.0),
    "normal, four sd outside above": (density("normal", 1.4, 0.1, 0.0, 1.0), stats.norm(1.4, 0.1), 0.0, 1.0),
    "lognormal, tiny": (density("lognormal", 1e-7, 0.45, 0.0), stats.lognorm(0.45, scale=1e-7), 0.0, INF),
    "lognormal, huge": (density("lognormal", 6e9, 0.4, 0.0), stats.lognorm(0.4, scale=6e9), 0.0, INF),
    "lognormal, cut at 1": (density("lognormal", 0.7, 0.6, 0.0, 1.0), stats.lognorm(0.6, scale=0.7), 0.0, 1.0),
    "beta": (density("beta", 2.0, 8.0, 0.0, 1.0), stats.beta(2.0, 8.0), 0.0, 1.0),
    "beta, cut": (density("beta", 3.0, 1.5, 0.6, 1.0), stats.beta(3.0, 1.5), 0.6, 1.0),
    "uniform": (density("uniform", 0.1, 0.4, 0.0, 1.0), stats.uniform(0.1, 0.3), 0.1, 0.4),
    "uniform, cut": (density("uniform", -1.0, 0.4, 0.0, 1.0), stats.uniform(-1.0, 1.4), 0.0, 0.4),
    "loguniform": (density("loguniform", 1e-8, 1e-6, 0.0), stats.loguniform(1e-8, 1e-6), 1e-8, 1e-6),
    "loguniform, cut": (density("loguniform", 0.01, 10.0, 0.0, 1.0), stats.loguniform(0.01, 10.0), 0.01, 1.0),
    "logitnormal": (density("logitnormal", 0.05, 1.0, 0.0, 1.0), logit_normal(0.05, 1.0), 0.0, 1.0),
    "logitnormal, cut": (density("logitnormal", 0.6, 0.8, 0.6, 1.0), logit_normal(0.6, 0.8), 0.6, 1.0),
}
cases = pytest.mark.parametrize(("ours", "uncut", "low", "high"), CASES.values(), ids=CASES)
SHARES = np.array([1e-6, 1e-3, 0.02, 0.16, 0.5, 0.84, 0.98, 1 - 1e-3, 1 - 1e-6])


def _inside(uncut, low: float, high: float) -> np.ndarray:  # type: ignore[no-untyped-def]
    """Points of the cut distribution, by scipy's quantiles."""
    below, above = uncut.cdf(low), uncut.sf(high)
    return uncut.ppf(below + SHARES * (1 - above - below))


@cases
def test_the_density_is_scipys_over_what_the_cut_keeps(ours, uncut, low, high):
    x = _inside(uncut, low, high)
    kept = 1.0 - uncut.cdf(low) - uncut.sf(high)
    # Both work in double precision; where nearly all is cut away, 1 − cdf loses digits: 1e-16/3e-5.
    assert ours.log_pdf(x) == pytest.approx(uncut.logpdf(x) - math.log(kept), rel=1e-9, abs=1e-9)


def test_a_cut_normal_is_scipys_truncated_one():
    x = np.linspace(0.601, 0.999, 50)
    reference = stats.truncnorm((0.6 - 0.88) / 0.05, (1.0 - 0.88) / 0.05, loc=0.88, scale=0.05)
    ours = density("normal", 0.88, 0.05, 0.6, 1.0)
    assert ours.log_pdf(x) == pytest.approx(reference.logpdf(x), rel=1e-10)  # double precision, a few operations
    assert ours.cdf(x) == pytest.approx(reference.cdf(x), rel=1e-10, abs=1e-14)
    assert ours.quantile(SHARES) == pytest.approx(reference.ppf(SHARES), rel=1e-10)


@cases
def test_the_density_integrates_to_its_own_distribution_function(ours, uncut, low, high):
    x = _inside(uncut, low, high)
    for left, right in zip(x[:-1], x[1:], strict=True):
        # In u = (x − left)/(right − left), so that quad's absolute tolerance means something at 1e-7 and at 1e10.
        width = right - left
        area = integrate.quad(lambda u: math.exp(ours.log_pdf(np.array(left + width * u))) * width, 0.0, 1.0)[0]  # noqa: B023
        assert area == pytest.approx(float(ours.cdf(right) - ours.cdf(left)), rel=1e-7, abs=1e-11)  # quad's own 1.5e-8


@cases
def test_the_distribution_function_is_scipys_within_the_cut(ours, uncut, low, high):
    x = _inside(uncut, low, high)
    kept = 1.0 - uncut.cdf(low) - uncut.sf(high)
    assert ours.cdf(x) == pytest.approx((uncut.cdf(x) - uncut.cdf(low)) / kept, abs=1e-10)  # 1e-16 over what is kept


@cases
def test_mean_and_standard_deviation_are_those_of_the_cut_density(ours, uncut, low, high):
    x = uncut.ppf(uncut.cdf(low) + (1 - uncut.cdf(low) - uncut.sf(high)) * np.array([1e-9, 0.5, 1 - 1e-9]))
    start, unit = x[0], x[2] - x[0]
    edges = np.linspace(0.0, 1.0, 31)

    def moment(power: int) -> float:
        def integrand(u: float) -> float:
            return u**power * float(uncut.pdf(start + unit * u)) * unit

        return sum(integrate.quad(integrand, a, b)[0] for a, b in zip(edges[:-1], edges[1:], strict=True))

    whole = moment(0)
    mean = moment(1) / whole
    sd = math.sqrt(moment(2) / whole - mean**2)
    found_mean, found_sd = ours.moments()
    # 2e-9 of the probability is left out here, at most some 20 sd away; densities that end in a step cost the lattice of
    # normal scores little, for the step lies at a score of infinity.
    assert (found_mean - start) / unit == pytest.approx(mean, rel=1e-6, abs=1e-6 * sd)
    assert found_sd / unit == pytest.approx(sd, rel=1e-5)


@given(st.sampled_from(sorted(CASES)), st.floats(1e-6, 1 - 1e-6))
def test_a_quantile_has_its_share_below_it_and_leads_back(case, share):
    ours = CASES[case][0]
    x = ours.quantile(np.array(share))
    low, high = ours.support
    assert low <= x <= high
    assert float(ours.cdf(x)) == pytest.approx(
        share, abs=1e-9
    )  # 1e-16 over the 3e-5 that the hardest cut keeps, and some
    again = ours.quantile(ours.cdf(x))
    spread = float(ours.quantile(np.array(0.84)) - ours.quantile(np.array(0.16)))
    assert abs(float(again - x)) < 1e-6 * spread


@cases
def test_outside_the_support_there_is_no_density(ours, uncut, low, high):
    assert ours.support == (low, high)
    spread = float(np.diff(ours.quantile(np.array([0.16, 0.84])))[0])
    outside = [
        bound for bound in (low - 1e-6 * spread, low - spread, high + 1e-6 * spread, high + spread) if abs(bound) < INF
    ]
    assert all(ours.log_pdf(np.array(outside)) == -INF)
    assert all(np.isin(ours.cdf(np.array(outside)), (0.0, 1.0)))


@pytest.mark.parametrize(
    ("case", "at_low", "at_high"),
    [
        # By hand: a normal's own density over what is kept; a beta density that does not vanish at 1 with b = 1.5 does.
        ("normal, cut at both ends", stats.norm(0.88, 0.05).pdf(0.6), stats.norm(0.88, 0.05).pdf(1.0)),
        ("lognormal, tiny", 0.0, None),
        ("lognormal, cut at 1", 0.0, stats.lognorm(0.6, scale=0.7).pdf(1.0)),
        ("beta", 0.0, 0.0),
        ("beta, cut", stats.beta(3.0, 1.5).pdf(0.6), 0.0),
        ("uniform", 1 / 0.3, 1 / 0.3),
        ("uniform, cut", 1 / 1.4, 1 / 1.4),
        ("loguniform", 1 / (1e-8 * math.log(100)), 1 / (1e-6 * math.log(100))),
        ("logitnormal", 0.0, 0.0),
    ],
)
def test_at_its_bounds_the_density_is_what_it_tends_to(case, at_low, at_high):
    ours, uncut, low, high = CASES[case]
    kept = 1.0 - uncut.cdf(low) - uncut.sf(high)
    for bound, limit in ((low, at_low), (high, at_high)):
        if limit is not None:
            expected = math.log(limit / kept) if limit else -INF
            assert ours.log_pdf(np.array(bound)) == pytest.approx(expected, rel=1e-9)


@cases
def test_draws_follow_the_cut_distribution_and_their_seed(ours, uncut, low, high):
    draws = ours.sample(np.random.default_rng(3), 2000)
    below, kept = uncut.cdf(low), 1.0 - uncut.cdf(low) - uncut.sf(high)
    assert draws.shape == (2000,)
    # The seed is fixed; a right sampler fails one seed in ten thousand.
    assert stats.kstest(draws, lambda x: (uncut.cdf(x) - below) / kept).pvalue > 1e-4
    assert np.array_equal(draws, ours.sample(np.random.default_rng(3), 2000))


def test_a_fixed_input_has_one_value_and_no_spread():
    ours = density("fixed", 0.003, 0.0, 0.0)
    assert ours.fixed
    assert not any(case[0].fixed for case in CASES.values())
    assert ours.moments() == (0.003, 0.0)
    assert ours.quantile(np.array([0.1, 0.9])).tolist() == [0.003, 0.003]
    assert ours.sample(np.random.default_rng(1), 3).tolist() == [0.003] * 3


@pytest.mark.parametrize(
    ("ours", "bounded"),
    [
        (density("normal", 0.88, 0.05, 0.6, 1.0), True),  # 0.8 % lies above 1
        (density("normal", 0.5, 0.02, 0.0, 1.0), False),  # the bounds are 25 sd away
        (density("lognormal", 0.7, 0.6, 0.0, 1.0), True),
        (density("lognormal", 1e-7, 0.45, 0.0), False),
        (density("normal", 0.0, 0.02, 0.0), False),  # half is cut away, but the other side is open
        (density("beta", 2.0, 8.0, 0.0, 1.0), True),
        (density("uniform", 0.1, 0.4, 0.0, 1.0), True),
        (density("loguniform", 1e-8, 1e-6, 0.0), True),
    ],
)
def test_bounded_tells_a_density_that_ends_sharply_at_two_bounds(ours, bounded):
    assert ours.bounded is bounded

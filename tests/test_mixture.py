"""Sound or stray: cells of repeats against the integral over the scatter that they share, done numerically."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import integrate, stats

from reconcile.inference.mixture import Cell, density, stray_probability


def cell(value, u, expected, shared, width) -> Cell:
    """Return one cell of r repeats for one draw, from numbers."""
    value = np.asarray(value, dtype=float)
    shape = (len(value), 1, 1)

    def column(numbers) -> np.ndarray:
        return np.broadcast_to(np.asarray(numbers, dtype=float), len(value)).reshape(shape).copy()

    return Cell(column(value), column(u), column(expected), column(shared), np.full((1, 1), float(width)))


def by_quadrature(value, u, expected, shared, width, rate, stray: int | None = None) -> float:
    """Probability density of repeats: mixtures multiplied, and integrated over the standard normal offset they share.

    A stray reading has forgotten the offset: its Cauchy density stands about the expectation. With `stray`, only the
    part in which that repeat is a stray one.
    """
    r = len(value)
    u, expected, shared = (np.broadcast_to(np.asarray(part, dtype=float), r) for part in (u, expected, shared))

    def integrand(offset: float) -> float:
        product = stats.norm.pdf(offset)
        for n in range(r):
            z = (value[n] - expected[n] - shared[n] * offset) / u[n]
            sound = (1.0 - rate) * math.exp(-0.5 * z * z) / (u[n] * math.sqrt(2.0 * math.pi))
            wide = math.hypot(width, u[n])
            wrong = rate / (math.pi * wide * (1.0 + ((value[n] - expected[n]) / wide) ** 2))
            product *= wrong if stray == n else sound + wrong
        return product

    # Narrow peaks of the integrand, one a repeat, must be shown to the rule.
    peaks = [(value[n] - expected[n]) / shared[n] for n in range(r) if shared[n]]
    edges = np.unique(np.clip([*np.linspace(-9, 9, 37), *peaks], -9, 9))
    return sum(integrate.quad(integrand, a, b, epsabs=0.0, epsrel=1e-9)[0] for a, b in itertools.pairwise(edges))


def in_peaks(density_value: float, u, r: int) -> float:
    """Turn a density into units of each repeat's own normal peak."""
    return density_value * float(np.prod(np.broadcast_to(u, r))) * math.sqrt(2.0 * math.pi) ** r


# value, u, expected, shared scatter, width of stray readings, rate
CELLS = {
    "one, sound": ([1.05], 0.05, 1.0, 0.04, 1.2, 0.05),
    "one, eight sd off": ([1.5], 0.05, 1.0, 0.04, 1.2, 0.05),
    "one, a unit slip of 1000": ([1000.0], 0.05, 1.0, 0.04, 1.2, 0.05),
    "one, without scatter": ([1.05], 0.05, 1.0, 0.0, 1.2, 0.05),
    "two that agree with each other": ([1.12, 1.11], 0.02, 1.0, 0.08, 1.2, 0.05),
    "two, one stray": ([1.02, 1.7], [0.02, 0.05], 1.0, 0.05, 1.2, 0.1),
    "two of two instruments": ([0.98, 1.06], [0.03, 0.01], [1.0, 1.02], [0.05, 0.051], 1.2, 0.05),
    "three": ([0.97, 1.0, 1.04], 0.03, 1.0, 0.05, 1.2, 0.05),
    "three, one stray": ([0.97, 3.0, 1.04], 0.03, 1.0, 0.05, 1.2, 0.05),
    "three, two stray that agree": ([1.0, 1.5, 1.51], [0.03, 0.02, 0.04], 1.0, 0.05, 0.4, 0.2),
    "three in the logarithm, expected at 1e-30": ([-10.0, -10.1, -9.9], 0.1, -69.0, 0.05, 1.0, 0.05),
    "three tiny ones": ([4.1e-7, 4.3e-7, 4.2e-7], 2e-8, 4e-7, 2e-8, 5e-7, 0.05),
    "four": ([0.97, 1.0, 1.04, 2.0], [0.03, 0.02, 0.01, 0.03], 1.0, 0.05, 1.2, 0.05),
}
cells = pytest.mark.parametrize(("value", "u", "expected", "shared", "width", "rate"), CELLS.values(), ids=CELLS)


@cells
def test_a_cell_is_its_integral_over_the_shared_scatter(value, u, expected, shared, width, rate):
    found = density(cell(value, u, expected, shared, width), np.array([rate]), censored=False)
    brute = by_quadrature(value, u, expected, shared, width, rate)
    assert found.shape == (1, 1)
    assert found[0, 0] == pytest.approx(in_peaks(brute, u, len(value)), rel=1e-7, abs=0)  # quad is asked for 1e-9


@cells
def test_a_repeat_is_stray_by_its_share_of_the_integral(value, u, expected, shared, width, rate):
    found = stray_probability(cell(value, u, expected, shared, width), np.array([rate]), censored=False)
    brute = by_quadrature(value, u, expected, shared, width, rate)
    assert found.shape == (len(value), 1, 1)
    for n in range(len(value)):
        share = by_quadrature(value, u, expected, shared, width, rate, stray=n) / brute
        assert found[n, 0, 0] == pytest.approx(share, rel=1e-6, abs=1e-12)  # two integrals of 1e-9


@given(
    st.lists(st.tuples(st.floats(-3, 3), st.floats(0.05, 0.5)), min_size=1, max_size=3),
    st.floats(0.02, 1.0),
    st.floats(0.5, 5.0),
    st.floats(0.001, 0.5),
)
def test_any_cell_is_its_integral(repeats, shared, width, rate):
    value, u = [v for v, _ in repeats], [s for _, s in repeats]
    found = density(cell(value, u, 0.0, shared, width), np.array([rate]), censored=False)
    brute = by_quadrature(value, u, 0.0, shared, width, rate)
    assert found[0, 0] == pytest.approx(in_peaks(brute, u, len(value)), rel=1e-6, abs=0)  # quad is asked for 1e-9


def test_many_cells_and_draws_are_each_on_their_own():
    rng = np.random.default_rng(7)
    r, m, draws = 2, 3, 4
    value, u = rng.normal(1.0, 0.1, (r, m, 1)), rng.uniform(0.02, 0.1, (r, m, 1))
    expected, shared = rng.normal(1.0, 0.1, (r, m, draws)), rng.uniform(0.02, 0.1, (r, m, draws))
    width, rate = rng.uniform(0.5, 2.0, (m, draws)), rng.uniform(0.01, 0.2, draws)
    found = density(Cell(value, u, expected, shared, width), rate, censored=False)
    assert found.shape == (m, draws)
    for i, j in itertools.product(range(m), range(draws)):
        brute = by_quadrature(value[:, i, 0], u[:, i, 0], expected[:, i, j], shared[:, i, j], width[i, j], rate[j])
        assert found[i, j] == pytest.approx(in_peaks(brute, u[:, i, 0], r), rel=1e-7, abs=0)  # quad is asked for 1e-9


def test_weighing_changes_none_of_what_it_is_given():
    arguments = [0.97], 0.05, 1.0, 0.04, 1.2
    given_cell, untouched, rate = cell(*arguments), cell(*arguments), np.array([0.05])
    density(given_cell, rate, censored=False)
    for name in ("value", "u", "expected", "shared", "width"):
        assert np.array_equal(getattr(given_cell, name), getattr(untouched, name))
    assert rate[0] == 0.05


@pytest.mark.parametrize("limit", [0.2, 0.9, 1.0, 1.3, 5.0])
@pytest.mark.parametrize("rate", [0.02, 0.4])
def test_below_a_limit_counts_the_probability_of_lying_there(limit, rate):
    u, expected, shared, width = 0.1, 1.0, 0.2, 0.8
    here = cell([limit], u, expected, shared, width)

    # What a reading would be: normal twice over, or Cauchy; summed up to the limit.
    def sound(offset: float) -> float:
        return stats.norm.pdf(offset) * stats.norm.cdf(limit, expected + shared * offset, u)

    below_sound = integrate.quad(sound, -9, 9, epsabs=1e-13, limit=200)[0]
    below_stray = integrate.quad(
        lambda y: stats.cauchy.pdf(y, expected, math.hypot(width, u)), -np.inf, limit, epsabs=1e-13
    )[0]
    whole = (1 - rate) * below_sound + rate * below_stray
    found = density(here, np.array([rate]), censored=True)
    assert found.shape == (1, 1)
    assert found[0, 0] == pytest.approx(whole, rel=1e-9, abs=1e-11)  # quad's tolerance
    stray = stray_probability(here, np.array([rate]), censored=True)
    assert stray.shape == (1, 1, 1)
    assert stray[0, 0, 0] == pytest.approx(rate * below_stray / whole, rel=1e-8)  # quotient of the same


def test_a_censored_cell_far_above_its_limit_is_not_impossible():
    # A crater where none was seen: only a stray reading can explain it. By hand, the Cauchy tail: width/(π distance).
    found = density(cell([1.0], 0.1, 1000.0, 0.1, 1.0), np.array([0.05]), censored=True)
    assert found[0, 0] == pytest.approx(
        0.05 * np.hypot(1.0, 0.1) / (np.pi * 999.0), rel=1e-5
    )  # next term of the tail: 1/(3 · 999²)


# From five repeats on, only no, one or all strays are weighed: 2^r patterns would be too many.
MANY = [1.01, 0.98, 1.03, 1.0, 0.97, 1.02]


def test_six_sound_repeats_lose_next_to_nothing_by_the_shortcut():
    found = density(cell(MANY, 0.03, 1.0, 0.05, 1.2), np.array([0.05]), censored=False)[0, 0]
    brute = in_peaks(by_quadrature(MANY, 0.03, 1.0, 0.05, 1.2, 0.05), 0.03, 6)
    # Left out: two or more strays among 15 pairs, each (rate/(1 − rate) × peak ratio 0.02)² ~ 1e-6.
    assert found == pytest.approx(brute, rel=1e-4)
    assert found <= brute * (1 + 1e-9)  # patterns left out can only be missing


def test_one_stray_among_six_is_found_and_the_others_are_kept():
    value = [*MANY[:5], 1.6]
    here, rate = cell(value, 0.03, 1.0, 0.05, 1.2), np.array([0.05])
    brute = by_quadrature(value, 0.03, 1.0, 0.05, 1.2, 0.05)
    assert density(here, rate, censored=False)[0, 0] == pytest.approx(in_peaks(brute, 0.03, 6), rel=1e-2)
    stray = stray_probability(here, rate, censored=False)[:, 0, 0]
    exact = [by_quadrature(value, 0.03, 1.0, 0.05, 1.2, 0.05, stray=n) / brute for n in range(6)]
    assert stray[5] > 0.999
    # A second stray beside the first, left out, has some 0.002 to itself.
    assert stray == pytest.approx(exact, abs=5e-3)


TWO_STRAY = [*MANY[:4], 1.6, 0.3]


def test_two_strays_among_six_are_both_found():
    stray = stray_probability(cell(TWO_STRAY, 0.03, 1.0, 0.05, 1.2), np.array([0.05]), censored=False)[:, 0, 0]
    assert min(stray[4:]) > 0.99
    assert all(0.0 <= p <= 1.0 for p in stray)


def test_two_strays_among_six_do_not_take_the_others_with_them():
    here, rate = cell(TWO_STRAY, 0.03, 1.0, 0.05, 1.2), np.array([0.05])
    brute = by_quadrature(TWO_STRAY, 0.03, 1.0, 0.05, 1.2, 0.05)
    stray = stray_probability(here, rate, censored=False)[:, 0, 0]
    exact = [by_quadrature(TWO_STRAY, 0.03, 1.0, 0.05, 1.2, 0.05, stray=n) / brute for n in range(6)]
    assert stray == pytest.approx(exact, abs=0.05)  # four good ones of some 0.002 each
    # A third stray beside the two may be left out: four of some 0.002.
    assert density(here, rate, censored=False)[0, 0] == pytest.approx(in_peaks(brute, 0.03, 6), rel=0.02)


def test_a_reading_too_uncertain_to_contradict_anything_is_not_called_stray():
    # A hundred times more uncertain than a stray one is wide: it agrees with whatever is expected.
    here = cell([0.3], 100.0, 0.0, 0.05, 1.0)
    assert stray_probability(here, np.array([0.05]), censored=False)[0, 0, 0] < 0.05

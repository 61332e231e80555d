"""Particle sizes against draws and probabilities from scipy.stats, which the measurement itself does not use."""

import math

import numpy as np
import pytest
from scipy import optimize, stats

from reconcile.measure.particles import Sizes, from_counts, from_diameters

NM = 1e-9
EDGES = np.append(np.arange(0, 60, 3), np.inf) * NM  # last bin open


def draw(median: float, geometric_sd: float, n: int, rng: np.random.Generator) -> np.ndarray:
    return np.asarray(stats.lognorm(s=math.log(geometric_sd), scale=median).rvs(n, random_state=rng))


def binned(diameters: np.ndarray, edges: np.ndarray = EDGES) -> Sizes:
    return from_counts(edges[:-1], edges[1:], np.histogram(diameters, edges)[0])


def u_log_s(sizes: Sizes) -> float:
    return sizes.geometric_sd_u / sizes.geometric_sd / math.log(sizes.geometric_sd)


def test_many_particles_give_back_the_distribution_they_were_drawn_from():
    found = from_diameters(draw(12 * NM, 1.5, 40_000, np.random.default_rng(11)))
    # four standard uncertainties of 40 000 particles: 0.8 % of the median
    assert found.median == pytest.approx(12 * NM, rel=4 * math.log(1.5) / 200)
    assert found.geometric_sd == pytest.approx(1.5, rel=4 * math.log(1.5) / 200 / math.sqrt(2))
    assert found.n == 40_000
    assert found.note is None


def test_a_list_gives_the_geometric_mean_and_the_sample_deviation_of_the_logarithm():
    diameters = draw(8 * NM, 1.4, 57, np.random.default_rng(12))
    found = from_diameters(diameters)
    assert found.median == pytest.approx(stats.gmean(diameters), rel=1e-5)
    assert found.geometric_sd == pytest.approx(stats.gstd(diameters, ddof=1), rel=1e-5)


def test_a_histogram_gives_the_likeliest_parameters_of_its_bins():
    counts = np.array([3, 18, 41, 30, 12, 5, 1])
    lower, upper = np.arange(0, 14, 2) * NM, np.append(np.arange(2, 14, 2) * NM, np.inf)

    def minus_log_likelihood(parameters: np.ndarray) -> float:
        shape, scale = np.exp(parameters)
        distribution = stats.lognorm(s=shape, scale=scale * NM)
        return -float(counts @ np.log(distribution.cdf(upper) - distribution.cdf(lower)))

    best = optimize.minimize(
        minus_log_likelihood, np.log([0.4, 5.0]), method="Nelder-Mead", options={"xatol": 1e-7, "fatol": 1e-9}
    )
    found = from_counts(lower, upper, counts)
    n = counts.sum()
    assert found.median == pytest.approx(math.exp(best.x[1]) * NM, rel=1e-4)
    assert math.log(found.geometric_sd) == pytest.approx(math.exp(best.x[0]) * math.sqrt(n / (n - 1)), rel=1e-4)


def test_bins_cost_some_knowledge_and_fine_bins_next_to_none():
    diameters = draw(15 * NM, 1.5, 300, np.random.default_rng(13))
    listed = from_diameters(diameters)
    fine, coarse = binned(diameters, np.arange(0, 120, 0.25) * NM), binned(diameters, np.arange(0, 130, 10) * NM)
    assert fine.median == pytest.approx(listed.median, rel=1e-3)
    assert fine.median_u == pytest.approx(listed.median_u, rel=5e-3)
    assert coarse.median_u > 1.02 * listed.median_u
    assert coarse.geometric_sd_u > 1.02 * listed.geometric_sd_u


@pytest.mark.parametrize("measure", [from_diameters, binned])
@pytest.mark.parametrize("n", [25, 150])
def test_stated_uncertainties_cover_the_truth(measure, n):
    rng = np.random.default_rng(1000 + n)
    found = [measure(draw(12 * NM, 1.5, n, rng)) for _ in range(200)]
    # In the logarithm, where the estimates of a lognormal are symmetric about the truth.
    pulls = np.array([math.log(sizes.median / (12 * NM)) * sizes.median / sizes.median_u for sizes in found])
    spread_pulls = np.array(
        [math.log(math.log(sizes.geometric_sd) / math.log(1.5)) / u_log_s(sizes) for sizes in found]
    )
    # Of 200 intervals of 95 %, 190 ± 3.1 hold the truth; Student's t with 24 degrees of freedom makes it 187: bound at 4 sd.
    assert np.sum(np.abs(pulls) < 1.96) >= 175
    assert np.sum(np.abs(spread_pulls) < 1.96) >= 175
    # sd of 200 pulls is known to 5 %; t with 24 degrees of freedom has 1.04
    assert [np.std(pulls), np.std(spread_pulls)] == pytest.approx([1, 1], abs=0.25)
    assert abs(np.mean(pulls)) < 4 / math.sqrt(200)
    assert sum(sizes.note is not None for sizes in found) <= 4  # one population is not taken for two: at most 2 %


def test_a_coarse_population_is_told_apart_and_leaves_the_fine_median_alone():
    rng = np.random.default_rng(14)
    pulls = []
    for _ in range(30):
        diameters = np.concatenate([draw(10 * NM, 1.4, 270, rng), draw(70 * NM, 1.3, 30, rng)])
        for found in (from_diameters(diameters), binned(diameters, np.arange(0, 203, 3) * NM)):
            assert found.note is not None
            assert "coarse population" in found.note
            assert found.n == 300
            pulls.append(((found.median - 10 * NM) / found.median_u, (found.geometric_sd - 1.4) / found.geometric_sd_u))
    assert np.abs(np.mean(pulls, axis=0)).max() < 4 / math.sqrt(30)
    assert np.std(pulls, axis=0) == pytest.approx([1, 1], abs=4 / math.sqrt(60))


def test_the_note_says_how_many_are_coarse_and_how_large():
    rng = np.random.default_rng(15)
    found = from_diameters(np.concatenate([draw(10 * NM, 1.4, 3_600, rng), draw(70 * NM, 1.3, 400, rng)]))
    share, median = (
        float(part.split()[0]) for part in (found.note.split("left out: ")[1], found.note.split("median ")[1])
    )
    assert share == pytest.approx(10, abs=1)
    assert median == pytest.approx(70, rel=0.06)  # four standard uncertainties of 400 particles


def test_a_single_coarse_particle_does_not_shift_the_median():
    fine = draw(10 * NM, 1.3, 200, np.random.default_rng(16))
    alone, found = from_diameters(fine), from_diameters(np.append(fine, 300 * NM))
    assert found.median == pytest.approx(alone.median, rel=2e-3)
    assert found.geometric_sd == pytest.approx(alone.geometric_sd, rel=2e-3)


def test_order_of_rows_does_not_matter():
    diameters = draw(12 * NM, 1.5, 100, np.random.default_rng(17))
    counts = np.histogram(diameters, EDGES)[0]
    backwards = from_counts(EDGES[:-1][::-1], EDGES[1:][::-1], counts[::-1])
    assert backwards == binned(diameters)


def test_classes_of_whole_nanometres_are_joined_and_said():
    diameters = draw(30 * NM, 1.4, 500, np.random.default_rng(18))
    edges = np.arange(4.5, 200, 5) * NM
    counts = np.histogram(diameters, edges)[0]
    written = from_counts(edges[:-1] + 0.5 * NM, edges[1:] - 0.5 * NM, counts)  # 5-9, 10-14 ...
    assert "gaps" in written.note
    assert written.median == pytest.approx(from_counts(edges[:-1], edges[1:], counts).median, rel=1e-3)


@pytest.mark.parametrize(
    ("lower", "upper", "count", "sentence"),
    [
        ([0, 5, 10], [5, 10, 15], [3, 4, 2], "9 particles are too few"),
        ([0, 5, 10], [5, 10, 15], [0, 40, 0], "one bin"),
        ([0, 5, 10], [5, 10, 15], [3, -4, 20], "below 0"),
        ([0, 5, 10], [5, 10, 15], [3, math.nan, 20], "missing"),
        ([0, 5, 10], [5, 10, 15], [33.3, 40.1, 26.6], "whole numbers"),
        ([0, 4, 10], [5, 10, 15], [3, 4, 20], "overlap"),
        ([0, 10, 10], [5, 10, 15], [3, 4, 20], "upper edge above"),
        ([-5, 0, 5], [0, 5, 10], [3, 4, 20], "0 or more"),
        ([0, 5], [5, 10, 15], [3, 4, 20], "as many"),
        ([0, 5, 10], [5, 10, 15], [0, 20, 20], "too few bins"),
        ([0, 10], [10, math.inf], [20, 20], "told"),
        ([], [], [], "too few"),
    ],
)
def test_a_histogram_that_cannot_be_measured_is_refused_with_a_sentence(lower, upper, count, sentence):
    with pytest.raises(ValueError, match=sentence):
        from_counts(np.array(lower) * NM, np.array(upper) * NM, count)


@pytest.mark.parametrize(
    ("diameters", "sentence"),
    [
        ([5.0] * 9, "too few"),
        ([5.0] * 40, "same diameter"),
        ([5.0] * 20 + [0.0], "above 0"),
        ([5.0] * 20 + [math.inf], "above 0"),
        ([5.0] * 20 + [5.001] * 20, "too close together"),
    ],
)
def test_a_list_that_cannot_be_measured_is_refused_with_a_sentence(diameters, sentence):
    with pytest.raises(ValueError, match=sentence):
        from_diameters(np.array(diameters) * NM)


def test_a_weight_of_two_moves_the_median_like_a_particle_counted_twice_and_equal_weights_change_nothing():
    rng = np.random.default_rng(41)
    diameters = draw(12 * NM, 1.4, 300, rng)
    often = rng.integers(1, 4, diameters.size)
    weighted = from_diameters(diameters, often)
    repeated = from_diameters(np.repeat(diameters, often))
    assert weighted.median == pytest.approx(repeated.median, rel=1e-6, abs=0)
    assert weighted.n == 300
    # Kish: unequal weights tell less than as many equal ones
    expected = math.log(weighted.geometric_sd) * math.sqrt(np.sum(often**2)) / often.sum()
    assert weighted.median_u / weighted.median == pytest.approx(expected, rel=1e-4)
    alike, plain = from_diameters(diameters, np.full(300, 7.0)), from_diameters(diameters)
    assert alike.median_u == pytest.approx(plain.median_u, rel=1e-9, abs=0)


@pytest.mark.parametrize("weights", [[1.0] * 11, [0.0] * 12, [math.nan] * 12, [-1.0] * 12])
def test_weights_that_are_none_are_refused(weights):
    with pytest.raises(ValueError, match="weight"):
        from_diameters(np.linspace(8, 20, 12) * NM, weights)

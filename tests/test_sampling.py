"""Sampling: moves that leave a known target alone, draws that do not depend on workers, runs that can be interrupted."""

from __future__ import annotations

import gc
import warnings
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import emcee
import numpy as np
import pytest
from hand_campaign import READINGS, gathered
from scipy import stats

from reconcile.campaign.progress import silent
from reconcile.campaign.refusal import Refusal
from reconcile.inference.adapt import Begin
from reconcile.inference.checkpoint import Checkpoint, Stored, fingerprint
from reconcile.inference.proposal import Mixture, Proposal, Warp
from reconcile.inference.sampling import ENSEMBLES, Draws, Ensemble, Memory, independence_move, judge, sample


def covariance_of(k: int) -> np.ndarray:
    """Return a covariance with standard deviations from 0.1 to 10 and correlations of every size."""
    rng = np.random.default_rng(k)
    root = rng.normal(size=(k, k + 2))
    matrix = root @ root.T / (k + 2)
    scale = 10.0 ** np.linspace(-1, 1, k) / np.sqrt(np.diag(matrix))
    return matrix * np.outer(scale, scale)


class Gaussian:
    """A normal density of k dimensions about 1, 2, … k; at the module's level, so that workers find it."""

    def __init__(self, k: int) -> None:
        self.mean, self.covariance = np.arange(1.0, k + 1.0), covariance_of(k)
        self.precision = np.linalg.inv(self.covariance)

    def squared(self, position: np.ndarray) -> np.ndarray:
        """Squared distance in standard deviations; k on average."""
        off = position - self.mean
        return np.einsum("...i,ij,...j->...", off, self.precision, off)

    def log_prob(self, position: np.ndarray) -> np.ndarray:
        return -0.5 * self.squared(position)


def imperfect(target: Gaussian) -> Mixture:
    """Return a proposal that is off in place, shape and width, as a fitted one is."""
    k = len(target.mean)
    sd = np.sqrt(np.diag(target.covariance))
    warp = Warp(target.mean + 0.1 * sd, sd, np.full(k, 0.05), np.full(k, 0.95))
    correlation = target.covariance / np.outer(sd, sd)
    fitted = Proposal(warp, np.full(k, -0.05), np.linalg.cholesky(1.15 * correlation), 12.0)
    defence = Proposal.normal_like(target.mean, 1.3 * target.covariance, 8.0)
    return Mixture((fitted, defence), (0.93, 0.07))


MOVES: dict[str, Callable[[Gaussian], list[tuple[object, float]]]] = {
    "independence": lambda target: [(independence_move(imperfect(target)), 1.0)],
    "differential evolution": lambda target: [(emcee.moves.DEMove(), 1.0)],
    "both, as they are mixed": lambda target: [
        (independence_move(imperfect(target)), 0.85),
        (emcee.moves.DEMove(), 0.15),
    ],
}
DIMENSIONS, WALKERS = 20, 240


def variance_after(moves: list[tuple[object, float]], target: Gaussian, steps: int) -> tuple[float, float, float]:
    """Mean squared distance over its right value, its standard error, and the share of accepted moves.

    Walkers start from exact draws, so every step of theirs is an exact draw if the moves leave the target alone. The
    standard error is that of walkers' time averages.
    """
    rng = np.random.default_rng(17)
    begin = rng.multivariate_normal(target.mean, target.covariance, size=WALKERS)
    state = emcee.State(begin, random_state=np.random.RandomState(5).get_state())
    sampler = emcee.EnsembleSampler(WALKERS, DIMENSIONS, target.log_prob, moves=moves, vectorize=True)
    sampler.run_mcmc(state, steps, skip_initial_state_check=True)
    by_walker = target.squared(sampler.get_chain()).mean(axis=0) / DIMENSIONS
    return by_walker.mean(), by_walker.std() / np.sqrt(WALKERS), float(sampler.acceptance_fraction.mean())


@pytest.mark.parametrize("name", MOVES)
def test_a_move_in_use_leaves_a_known_target_alone(name):
    target = Gaussian(DIMENSIONS)
    ratio, error, accepted = variance_after(MOVES[name](target), target, 600)
    assert accepted > 0.1  # a move that is never made leaves everything alone
    assert error < 0.01  # tight enough to see a defect of some percent
    assert abs(ratio - 1.0) < 4.0 * error


def test_this_would_show_a_move_that_does_not():
    """A published move of the same library shrinks the target, which is why it is not used (emcee 3.1.6)."""
    target = Gaussian(DIMENSIONS)
    ratio, error, _ = variance_after([(emcee.moves.DESnookerMove(), 1.0)], target, 600)
    assert ratio < 1.0 - 10.0 * error


def drawn(k: int, workers: int = 1, *, target: int = 400, seed: int = 1, memory: Memory | None = None) -> Draws:
    known = Gaussian(k)
    # A start beside the mode and too wide, as an approximation may be.
    begin = Begin(known.mean + 0.3 * np.sqrt(np.diag(known.covariance)), 1.5 * known.covariance)
    return sample(
        known, begin, np.random.SeedSequence(seed), target=target, workers=workers, progress=silent, memory=memory
    )


def test_sampling_a_correlated_normal_density_gives_its_moments():
    known, draws = Gaussian(DIMENSIONS), drawn(DIMENSIONS, target=1000)
    assert draws.converged
    assert draws.quality.min_ess >= 1000
    assert draws.quality.max_rhat < 1.01
    assert draws.position.shape[:2] == draws.log_prob.shape
    flat = draws.position.reshape(-1, DIMENSIONS)
    assert draws.log_prob.ravel() == pytest.approx(known.log_prob(flat))
    white = np.linalg.solve(np.linalg.cholesky(known.covariance), (flat - known.mean).T).T
    # min_ess is over coordinates as sampled; 20 means and 210 covariances, of which one in 15 000 exceeds 4 errors.
    n = draws.quality.min_ess
    assert np.abs(white.mean(axis=0)).max() < 4.0 / np.sqrt(n)
    off = white.T @ white / len(white) - np.eye(DIMENSIONS)
    assert np.abs(np.diag(off)).max() < 4.0 * np.sqrt(2.0 / n)
    assert np.abs(off - np.diag(np.diag(off))).max() < 4.5 / np.sqrt(n)
    assert known.squared(flat).mean() / DIMENSIONS == pytest.approx(1.0, abs=4.0 * np.sqrt(2.0 / (DIMENSIONS * n)))


def test_draws_do_not_depend_on_the_number_of_workers():
    alone, together = drawn(3, workers=1), drawn(3, workers=2)
    assert np.array_equal(alone.position, together.position)
    assert np.array_equal(alone.log_prob, together.log_prob)
    assert alone.evaluations == together.evaluations


def test_draws_follow_the_seed():
    once, again, other = drawn(3), drawn(3), drawn(3, seed=2)
    assert np.array_equal(once.position, again.position)
    assert not np.array_equal(once.position, other.position)


def test_sampling_leaves_the_global_generator_alone():
    np.random.seed(1)  # noqa: NPY002  # the generator that emcee falls back on
    before = np.random.get_state()  # noqa: NPY002
    drawn(2)
    after = np.random.get_state()  # noqa: NPY002
    assert np.array_equal(before[1], after[1])
    assert before[2:] == after[2:]


# -- interrupted runs ------------------------------------------------------------------------------------------------


class _Interrupted(Exception):
    pass


def stored(ensembles: list[Ensemble], k: int = 3) -> Stored:
    """Return a checkpoint's content around these ensembles; the rest is made up."""
    points = {0: np.arange(5, dtype=np.intp), 7: np.array([3, 9], dtype=np.intp)}
    reach = (np.arange(float(k)), 2.0 * np.eye(k))
    return Stored(np.arange(float(k)), covariance_of(k), -12.5, reach, (4, 11), points, 0.0125, ensembles)


@pytest.fixture(scope="module")
def interrupted(tmp_path_factory) -> Path:
    """Run until the second round is written, and stop there."""
    path = tmp_path_factory.mktemp("interrupted") / "fit.npz"
    checkpoint, rounds = Checkpoint(path, "the same", resume=False), []

    def keep(ensembles: list[Ensemble]) -> None:
        checkpoint.save(stored(ensembles))
        rounds.append(len(ensembles[0].chain))
        if len(rounds) == 2:
            raise _Interrupted

    with pytest.raises(_Interrupted):
        drawn(3, target=8000, memory=Memory(None, keep))
    assert rounds[1] > rounds[0] > 0
    return path


def test_an_interrupted_run_goes_on_as_if_nothing_had_happened(interrupted):
    kept = Checkpoint(interrupted, "the same", resume=True).load()
    assert kept is not None
    lengths: list[int] = []
    memory = Memory(kept.ensembles, lambda ensembles: lengths.append(len(ensembles[0].chain)))
    resumed = drawn(3, target=8000, memory=memory)
    whole = drawn(3, target=8000)
    assert len(whole.position) > lengths[0]  # there was something left to do
    assert np.array_equal(resumed.position, whole.position)
    assert np.array_equal(resumed.log_prob, whole.log_prob)
    assert resumed.evaluations == whole.evaluations
    assert resumed.quality == whole.quality


def test_a_checkpoint_holds_everything_bit_for_bit(interrupted, tmp_path):
    kept = Checkpoint(interrupted, "the same", resume=True).load()
    assert kept is not None
    assert len(kept.ensembles) == ENSEMBLES
    expected = stored(kept.ensembles)
    assert kept.log_prob == expected.log_prob
    assert kept.late == expected.late
    assert kept.points is not None
    assert {shot: points.tolist() for shot, points in kept.points.items()} == {0: [0, 1, 2, 3, 4], 7: [3, 9]}
    for one, other in zip(
        (kept.mode, kept.covariance, *kept.reach), (expected.mode, expected.covariance, *expected.reach), strict=True
    ):
        assert np.array_equal(one, other)
    again = Checkpoint(tmp_path / "deeper" / "again.npz", "the same", resume=True)
    again.save(kept)
    twice = again.load()
    assert twice is not None
    for one, other in zip(kept.ensembles, twice.ensembles, strict=True):
        assert one.evaluations == other.evaluations
        assert one.accepted == other.accepted
        assert one.random_state[0] == other.random_state[0]
        assert np.array_equal(one.random_state[1], other.random_state[1])
        assert one.random_state[2:] == other.random_state[2:]
        x = one.position
        assert np.array_equal(one.proposal.log_pdf(x), other.proposal.log_pdf(x))
    assert [path.name for path in (tmp_path / "deeper").iterdir()] == ["again.npz"]  # nothing half-written beside it


def test_without_a_shot_that_is_read_there_is_no_lattice_to_keep(interrupted, tmp_path):
    kept = Checkpoint(interrupted, "the same", resume=True).load()
    assert kept is not None
    bare = Checkpoint(tmp_path / "bare.npz", "the same", resume=True)
    bare.save(replace(kept, points=None, late=()))
    again = bare.load()
    assert again is not None
    assert again.points is None
    assert again.late == ()


def test_a_checkpoint_of_other_data_is_refused(interrupted):
    with pytest.raises(Refusal, match=r"interrupted fit of other files.*without --resume"):
        Checkpoint(interrupted, "another", resume=True).load()


def test_without_resume_or_without_a_file_a_run_begins_anew(interrupted, tmp_path):
    assert Checkpoint(interrupted, "the same", resume=False).load() is None
    assert Checkpoint(tmp_path / "absent.npz", "the same", resume=True).load() is None
    assert Checkpoint(None, "the same", resume=True).load() is None


def test_what_counts_as_the_same_data():
    here = gathered()
    mark = fingerprint(here, 1, 400)
    assert mark == fingerprint(gathered(), 1, 400)
    assert mark == fingerprint(replace(here, campaign=replace(here.campaign, folder=Path("moved"))), 1, 400)
    assert mark != fingerprint(here, 2, 400)  # another seed
    assert mark != fingerprint(here, 1, 1000)
    value = READINGS[0].value
    assert value is not None
    nudged = (replace(READINGS[0], value=np.nextafter(value, 1.0)), *READINGS[1:])
    assert mark != fingerprint(replace(here, readings=nudged), 1, 400)
    assert mark != fingerprint(replace(here, shots=here.shots[:-1]), 1, 400)
    spot = replace(here.campaign.beam.spot_radius, u=9e-7)
    wider = replace(here.campaign, beam=replace(here.campaign.beam, spot_radius=spot))
    assert mark != fingerprint(replace(here, campaign=wider), 1, 400)


def refused(path: Path) -> bool:
    """Return whether a file is refused in words and closed again; anything but a refusal comes through."""
    with warnings.catch_warnings(record=True) as warned:
        warnings.simplefilter("always")
        try:
            Checkpoint(path, "the same", resume=True).load()
        except Refusal as refusal:
            said = str(refusal)
        else:
            said = "nothing"
        gc.collect()  # a file left open is noticed when it is collected
    return "no interrupted fit" in said and not warned


@pytest.mark.parametrize("share", [0.0, 0.001, 0.3, 0.9, 0.9999])
def test_a_file_that_was_cut_short_is_refused(interrupted, tmp_path, share):
    whole = interrupted.read_bytes()
    path = tmp_path / "short.npz"
    path.write_bytes(whole[: int(share * len(whole))])
    assert refused(path)


@pytest.mark.parametrize(
    "content",
    [
        b"",
        b"\x00" * 500,
        b"not a fit\n",
        b"PK\x03\x04" + b"\x00" * 300,
        b"\x93NUMPY\x01\x00v\x00{",
    ],
)
def test_a_file_of_something_else_is_refused(tmp_path, content):
    path = tmp_path / "other.npz"
    path.write_bytes(content)
    assert refused(path)


def test_an_archive_of_something_else_is_refused(tmp_path):
    path = tmp_path / "other.npz"
    np.savez(path, x=np.arange(3))
    assert refused(path)
    np.savez(path, mark=np.array("the same"), x=np.arange(3))
    assert refused(path)


def test_an_array_of_something_else_is_refused(tmp_path):
    path = tmp_path / "other.npz"
    with path.open("wb") as file:
        np.save(file, np.arange(3))
    assert refused(path)


@pytest.mark.parametrize("flag", [0x01, 0x20, 0x40])  # encrypted, patched, strongly encrypted: .ZIP file format, 4.4.4
def test_a_damaged_flag_is_refused(interrupted, tmp_path, flag):
    damaged = bytearray(interrupted.read_bytes())
    damaged[damaged.rfind(b"PK\x01\x02") + 8] ^= flag  # of the last entry in the archive's directory
    path = tmp_path / "damaged.npz"
    path.write_bytes(bytes(damaged))
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ResourceWarning)  # a file left open: the matter of the tests above
        try:
            Checkpoint(path, "the same", resume=True).load()
        except Refusal as refusal:
            said = str(refusal)
        except (NotImplementedError, RuntimeError) as error:
            said = repr(error)
        gc.collect()
    assert "no interrupted fit" in said


# Not strict: which bytes are hit depends on the library's way of writing.
def test_a_damaged_byte_is_refused_or_does_no_harm(interrupted, tmp_path):
    whole = interrupted.read_bytes()
    right = Checkpoint(interrupted, "the same", resume=True).load()
    assert right is not None
    path = tmp_path / "damaged.npz"
    rng = np.random.default_rng(3)
    # Bytes anywhere, and more among the names and headers near either end.
    places = [
        *rng.integers(0, len(whole), 40),
        *rng.integers(0, 600, 60),
        *rng.integers(len(whole) - 3000, len(whole), 60),
    ]
    harmless, amiss = 0, []
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ResourceWarning)  # a file left open: the matter of the tests above
        for place in places:
            damaged = bytearray(whole)
            damaged[place] ^= 1 << int(rng.integers(8))
            path.write_bytes(bytes(damaged))
            try:
                found = Checkpoint(path, "the same", resume=True).load()
            except Refusal:
                continue
            except (NotImplementedError, RuntimeError, TypeError, AttributeError, LookupError, OSError) as error:
                amiss.append((int(place), repr(error)))
                continue
            harmless += 1  # in a date or another field that nobody reads
            assert found is not None
            for one, other in zip(right.ensembles, found.ensembles, strict=True):
                assert np.array_equal(one.chain, other.chain)
                assert np.array_equal(one.position, other.position)
        gc.collect()
    assert not amiss
    assert harmless < len(places) / 2


# -- judging ---------------------------------------------------------------------------------------------------------


def ensembles_of(chains: np.ndarray) -> list[Ensemble]:
    """Return ensembles with these chains (ensembles, steps, walkers, k), and nothing else of interest."""
    k = chains.shape[-1]
    nowhere = Proposal.normal_like(np.zeros(k), np.eye(k), 8.0)
    state = ("MT19937", np.zeros(624, dtype=np.uint32), 0, 0, 0.0)
    return [
        Ensemble(Mixture((nowhere,), (1.0,)), own[-1], state, own, np.zeros(own.shape[:2]), 0, 1.0) for own in chains
    ]


def rank_normalised_rhat(halves: np.ndarray) -> float:
    """Return rank-normalised split R-hat of chains (chains, draws), written from the paper.

    Vehtari, Gelman, Simpson, Carpenter and Bürkner, Bayesian Analysis 16 (2021) 667, equations 1 to 4 and 14; the larger
    of that of the draws and of their distance from the median.
    """

    def of(values: np.ndarray) -> float:
        m, n = values.shape
        z = stats.norm.ppf((stats.rankdata(values) - 3 / 8) / (values.size + 1 / 4)).reshape(m, n)
        within = z.var(axis=1, ddof=1).mean()
        between = n * z.mean(axis=1).var(ddof=1)
        return float(np.sqrt(((n - 1) / n * within + between / n) / within))

    n = halves.shape[1] // 2
    split = np.concatenate([halves[:, :n], halves[:, n : 2 * n]])
    return max(of(split), of(np.abs(split - np.median(split))))


def test_independent_draws_pass():
    chains = np.random.default_rng(1).normal(size=(4, 20, 48, 3))
    quality = judge(ensembles_of(chains))
    # Tails are worth as much as the body; an estimate over 3 coordinates of 3840 independent draws.
    assert 3000 < quality.min_ess < 4600
    assert quality.max_rhat < 1.01
    assert quality.enough(1000)
    assert not quality.enough(5000)


@pytest.mark.parametrize("shift", [0.0, 0.3, 2.0])
def test_rhat_is_that_of_the_paper_over_ensembles_and_halves_of_the_run(shift):
    chains = np.random.default_rng(2).gamma(2.0, size=(4, 20, 12, 2))
    chains[1, :, :, 1] += shift
    expected = max(rank_normalised_rhat(chains[..., column].reshape(4, -1)) for column in range(2))
    assert judge(ensembles_of(chains)).max_rhat == pytest.approx(expected, rel=1e-9)


def test_two_ensembles_stuck_elsewhere_do_not_pass():
    chains = np.random.default_rng(1).normal(size=(4, 60, 48, 3))
    chains[2:, :, :, 1] += 1.0
    quality = judge(ensembles_of(chains))
    assert quality.max_rhat > 1.1
    assert not quality.enough(400)


def test_two_ensembles_that_do_not_move_do_not_pass():
    chains = np.random.default_rng(1).normal(size=(4, 60, 48, 3))
    chains[2:] = chains[2:, :1]
    quality = judge(ensembles_of(chains))
    assert quality.min_ess < 400
    assert not quality.enough(400)


def test_a_slow_drift_of_all_ensembles_does_not_pass():
    chains = np.random.default_rng(1).normal(size=(4, 60, 48, 3))
    chains[:, :, :, 0] += np.linspace(-1, 1, 60)[None, :, None]
    quality = judge(ensembles_of(chains))
    assert quality.max_rhat > 1.05
    assert not quality.enough(400)


def test_sticky_walkers_are_worth_few_draws():
    # An autoregressive walk: n draws of correlation ρ are worth n (1 − ρ)/(1 + ρ) of the mean.
    rng, rho, steps = np.random.default_rng(6), 0.9, 1500
    chains = np.empty((4, steps, 12, 1))
    chains[:, 0] = rng.normal(size=(4, 12, 1))
    for n in range(1, steps):
        chains[:, n] = rho * chains[:, n - 1] + np.sqrt(1 - rho**2) * rng.normal(size=(4, 12, 1))
    expected = chains.size * (1 - rho) / (1 + rho)
    # Tails decorrelate faster than the mean, so the mean decides; its estimate comes from some 4 000 effective draws.
    assert judge(ensembles_of(chains)).min_ess == pytest.approx(expected, rel=0.15)


def test_a_run_that_has_not_begun_is_not_enough():
    nothing = [replace(own, chain=own.chain[:0]) for own in ensembles_of(np.zeros((4, 3, 8, 2)))]
    assert not judge(nothing).enough(1)

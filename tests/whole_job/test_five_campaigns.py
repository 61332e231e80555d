"""Five invented campaigns, their seeds fixed before the first run, against what was true of them.

The campaigns are simulated with fuller physics than the reduced model holds (integrated bubble motion, full shock
relations, exact dispersion of the interface). One is invented, written and closed out here from its tables; the other
four are read from tables that were stored when the seeds were fixed. With `-m long` all five are rendered as frames,
traces, maps and micrographs, measured and closed out.
"""

from __future__ import annotations

import csv
import tomllib
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from multiprocessing import get_context
from pathlib import Path

import numpy as np
import pytest

from reconcile.campaign.manifest import load
from reconcile.campaign.progress import silent
from reconcile.example import invent
from reconcile.gather import gather
from reconcile.inference.checkpoint import Checkpoint
from reconcile.inference.fit import EFFORTS, fit
from reconcile.inference.verdicts import absorbed_draws, judge

STORED = Path(__file__).parents[1] / "data" / "campaigns"
FRESH, SEEDS = 101, (102, 103, 104, 105)

pytestmark = pytest.mark.slow


@dataclass(frozen=True)
class Score:
    """How one close-out did."""

    converged: bool
    absorbed_fraction_held: bool
    relative_held: float  # share of shots whose fluence, relative to the campaign's common level, lies in its interval
    misread_planted: frozenset[str]
    misread_flagged: frozenset[str]
    strays_planted: frozenset[tuple[str, str]]
    strays_flagged: frozenset[tuple[str, str]]
    gross: frozenset[tuple[str, str]]  # planted strays five predictive standard deviations away, another reading beside
    judged: int  # shots and readings that could have been flagged


def score(folder: Path) -> Score:
    """Close out a folder and hold it against the truth beside it."""
    gathered = gather(load(folder))
    target = EFFORTS["quick"]
    fitted = fit(
        gathered,
        seed=1,
        target=target,
        workers=1,
        without=(),
        progress=silent,
        checkpoint=Checkpoint(None, "", resume=False),
    )
    judged = judge(fitted, gathered, np.random.default_rng(5))
    fraction = np.quantile(fitted.inputs["absorbed_fraction"], [0.025, 0.975])
    truth = tomllib.loads((folder / "truth" / "truth.toml").read_text(encoding="utf-8"))
    with (folder / "truth" / "truth_shots.csv").open(encoding="utf-8") as file:
        shots = {row["shot"]: row for row in csv.DictReader(file)}
    with (folder / "truth" / "truth_strays.csv").open(encoding="utf-8") as file:
        strays = [row for row in csv.DictReader(file) if row["shot"]]
    names = [shot.name for shot in gathered.shots]
    draws = np.log(absorbed_draws(fitted, np.random.default_rng(7)))
    true = np.log([1e3 * float(shots[name]["absorbed fluence (kJ/m2)"]) for name in names])
    # The common level is divided out of the truth and of every draw alike, so that the intervals are narrow ones.
    low, high = np.quantile(draws - np.median(draws, axis=0), [0.025, 0.975], axis=1)
    held = (low < true - np.median(true)) & (true - np.median(true) < high)
    planted = frozenset((row["kind"], row["shot"]) for row in strays)
    readings = {(r.reading.kind, r.reading.shot): r for r in judged.readings if r.predicted is not None}
    gross = frozenset(
        key
        for key in planted
        if abs(readings[key].reading.value - readings[key].predicted)
        > 5.0 * np.hypot(readings[key].predicted_sd, readings[key].reading.u)
        and sum(shot == key[1] for _, shot in readings) > 1
    )
    return Score(
        fitted.draws.converged,
        bool(fraction[0] < truth["inputs"]["absorbed_fraction"] < fraction[1]),
        float(held.mean()),
        frozenset(name for name, row in shots.items() if float(row["misread by a factor of"]) != 1.0),
        frozenset(shot.shot.name for shot in judged.shots if shot.verdict == "misread"),
        planted,
        frozenset(key for key, result in readings.items() if result.verdict == "stray" and key[1] is not None),
        gross,
        len(gathered.shots) + len(readings),
    )


@pytest.fixture(scope="module", params=["tables", pytest.param("files", marks=pytest.mark.long)])
def scores(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> list[Score]:
    place = tmp_path_factory.mktemp("campaigns")
    if request.param == "tables":
        invent(FRESH).write(place / "fresh", style="plain")
        folders = [place / "fresh", *(STORED / str(seed) for seed in SEEDS)]
    else:
        folders = [place / str(seed) for seed in (FRESH, *SEEDS)]
        for folder in folders:
            invent(int(folder.name)).write(folder, style="files")
    with ProcessPoolExecutor(2, get_context("spawn")) as pool:
        return list(pool.map(score, folders))


def test_absorbed_fractions_lie_in_their_intervals(scores: list[Score]) -> None:
    assert sum(result.absorbed_fraction_held for result in scores) >= 4


def test_relative_fluences_lie_in_their_intervals(scores: list[Score]) -> None:
    assert min(result.relative_held for result in scores) >= 0.9


def test_every_misread_energy_is_flagged(scores: list[Score]) -> None:
    for result in scores:
        assert len(result.misread_planted) >= 2
        assert result.misread_planted <= result.misread_flagged


def test_gross_strays_are_flagged(scores: list[Score]) -> None:
    gross = sum(len(result.gross) for result in scores)
    found = sum(len(result.gross & result.strays_flagged) for result in scores)
    assert gross >= 8
    assert found >= 0.8 * gross


def test_few_sound_shots_or_readings_are_flagged(scores: list[Score]) -> None:
    false = sum(
        len(result.misread_flagged - result.misread_planted) + len(result.strays_flagged - result.strays_planted)
        for result in scores
    )
    assert false <= 0.02 * sum(result.judged for result in scores)


def test_sampling_converges(scores: list[Score]) -> None:
    assert all(result.converged for result in scores)

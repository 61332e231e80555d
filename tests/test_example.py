"""The invented campaign: what is true in it, what is planted, and the folder that it is written to."""

from __future__ import annotations

import csv
import math
import tomllib
import wave
from collections import Counter
from pathlib import Path

import h5py
import numpy as np
import openpyxl
import pytest
from PIL import Image

from reconcile.campaign.inputs import FAMILIES, INPUTS, describe
from reconcile.campaign.kinds import KINDS
from reconcile.campaign.prior_text import parse_prior
from reconcile.campaign.refusal import Refusal
from reconcile.example import BENCH, Truth, invent, write_example

SEEDS = (11, 12, 13)
COMMITTED = Path(__file__).parent.parent / "example_campaign"


@pytest.fixture(scope="module")
def campaigns():
    return [invent(seed) for seed in SEEDS]


@pytest.fixture(scope="module")
def example(tmp_path_factory):
    folder = tmp_path_factory.mktemp("example") / "campaign"
    write_example(folder)
    return folder


def readings_by_shot(campaign):
    by_shot = {}
    for reading in campaign.readings:
        by_shot.setdefault(reading.shot, []).append(reading)
    return by_shot


def test_a_seed_gives_one_campaign_and_another_seed_another(campaigns):
    again = invent(SEEDS[0])
    assert again.truth == campaigns[0].truth
    assert again.shots == campaigns[0].shots
    assert again.readings == campaigns[0].readings
    assert all((a.counts == b.counts).all() for a, b in zip(again.histograms, campaigns[0].histograms, strict=True))
    assert campaigns[1].truth != campaigns[0].truth
    assert campaigns[1].shots != campaigns[0].shots


def test_every_input_has_a_true_value_in_its_physical_range(campaigns):
    planted = {"stray_rate", "misread_rate"}  # faults are planted, not drawn
    for campaign in campaigns:
        for name in set(INPUTS) - planted:
            entry = describe(name)
            assert entry.low <= campaign.truth[name] <= entry.high or name == "probe_angle", name
        names = set(campaign.truth.values)
        assert all(name in INPUTS or name.partition(".")[0] in FAMILIES for name in names)
        fitted = {kind.name for kind in KINDS.values() if kind.fitted} - {"reflected-fraction"}
        assert {f"scatter.{kind}" for kind in fitted} <= names


def test_true_numbers_stay_near_the_default_priors():
    # within 1.2 sd of the priors as the table of inputs writes them; 40 campaigns' worth of draws
    from reconcile.invent.truth import draw_truth

    rng = np.random.default_rng(5)
    drawn = [draw_truth(rng) for _ in range(40)]
    stated = {name: entry.default for name, entry in INPUTS.items() if entry.default and name not in BENCH}
    stated |= {f"scatter.{kind.name}": kind.scatter for kind in KINDS.values() if kind.scatter}
    missing = {"stray_rate", "misread_rate", "scatter.reflected-fraction"}
    for name in set(stated) - missing:
        prior = parse_prior(name, stated[name])
        values = np.array([truth[name] for truth in drawn])
        if prior.family == "fixed":
            assert (values == prior.a).all(), name
            continue
        deviation = (values - prior.a if prior.family == "normal" else np.log(values / prior.a)) / prior.b
        assert np.abs(deviation).max() < 1.2, name
        assert deviation.std() > 0.4, name  # a normal distribution cut at 1.2 has 0.63


def test_fluences_follow_from_the_true_energy_as_the_contract_words_them(campaigns):
    for campaign in campaigns:
        v = campaign.truth.values
        for shot in campaign.shots:
            shown = shot.logged_energy / shot.misread_factor
            energy = v["meter_calibration"] * shown * math.exp(shot.deviation)
            assert shot.true_energy == pytest.approx(energy, rel=1e-12)
            incident = v["delivery"] * energy * 2 / (math.pi * v["spot_radius"] ** 2)
            assert shot.incident_fluence == pytest.approx(incident, rel=1e-12)
            share = v["absorbed_fraction"] * (incident / 1e4) ** v["absorption_exponent"]
            assert share < 1
            assert shot.absorbed_fluence == pytest.approx(share * incident, rel=1e-12)


def test_levels_span_the_threshold(campaigns):
    for campaign in campaigns:
        assert len(campaign.shots) == 72
        assert len({shot.level for shot in campaign.shots}) == 8
        below = [shot for shot in campaign.shots if shot.level == "L0"]
        assert len(below) == 3
        assert all(shot.absorbed_fluence < campaign.truth["threshold_fluence"] for shot in below)
        strongest = max(shot.absorbed_fluence for shot in campaign.shots)
        assert 8 < strongest / campaign.truth["threshold_fluence"] < 45
        assert strongest < 13e3  # 10 kJ/m² and the jitter of single shots
        assert {shot.pulses for shot in campaign.shots} == {1, 5, 10}
        assert sum(shot.pulses == 1 for shot in campaign.shots) > 45


def test_every_kind_is_read_and_no_radius_after_the_collapse(campaigns):
    for campaign in campaigns:
        counts = Counter(reading.kind for reading in campaign.readings)
        assert set(counts) == {kind.name for kind in KINDS.values() if kind.fitted} - {"reflected-fraction"}
        assert min(counts[kind] for kind in counts if kind != "median-diameter") > 25
        lifetimes = {r.shot: r.true for r in campaign.of("bubble-lifetime")}
        radii = [r for r in campaign.of("bubble-radius") if r.shot in lifetimes]
        assert len(radii) > 10
        assert all(r.delay < 0.95 * lifetimes[r.shot] for r in radii)  # true lifetimes carry their scatter here
        assert all(r.true > 0 for r in campaign.of("bubble-radius"))


def test_readings_differ_from_what_is_true_by_their_own_uncertainty(campaigns):
    gains = [c.truth["probe_sensitivity"] / BENCH["probe_sensitivity"].value for c in campaigns]
    late = [c.truth["trigger_offset"] for c in campaigns]
    for kind in (
        "crater-depth",
        "crater-diameter",
        "bubble-radius",
        "bubble-lifetime",
        "pressure-integral",
        "arrival-time",
    ):
        z = []
        for campaign, gain, offset in zip(campaigns, gains, late, strict=True):
            factor = {"crater-depth": campaign.truth["scale.profiler"], "pressure-integral": gain**2}.get(kind, 1.0)
            shift = offset if kind == "arrival-time" else 0.0
            z += [
                (reading.value - factor * reading.true - shift) / reading.u
                for reading in campaign.of(kind)
                if not reading.below_limit and not reading.stray
            ]
        # some 150 unit normal deviates: their mean and spread within four standard errors
        assert abs(np.mean(z)) < 4 / math.sqrt(len(z)), kind
        assert np.std(z) == pytest.approx(1, abs=4 / math.sqrt(2 * len(z))), kind


def test_craters_below_threshold_lie_below_the_limit(campaigns):
    for campaign in campaigns:
        depths = {reading.shot: reading for reading in campaign.of("crater-depth")}
        below = [depths[shot.name] for shot in campaign.shots if shot.level == "L0"]
        assert sum(reading.below_limit for reading in below) >= 2
        assert all(reading.limit == 30e-9 and reading.u is None for reading in below if reading.below_limit)


def test_planted_strays_are_gross_and_their_shots_have_other_readings(campaigns):
    for campaign in campaigns:
        strays = [reading for reading in campaign.readings if reading.stray]
        assert len(strays) == 3
        assert len({reading.kind for reading in strays}) == 3
        shots = {shot.name: shot for shot in campaign.shots}
        for reading in strays:
            others = [r for r in readings_by_shot(campaign)[reading.shot] if r.kind != reading.kind]
            assert others and not any(r.stray for r in others)
            assert shots[reading.shot].misread_factor == 1.0
            relative = math.hypot(campaign.truth[f"scatter.{reading.kind}"], campaign.truth["energy_jitter"])
            spread = math.hypot(relative * reading.true, reading.u)
            if reading.kind == "pressure-integral":  # judged in the logarithm; the sensitivity is common to all shots
                gain = campaign.truth["probe_sensitivity"] / BENCH["probe_sensitivity"].value
                off = abs(math.log(reading.value / (gain**2 * reading.true)))
                assert off > 5 * math.hypot(relative, 0.06)
            elif reading.kind == "bubble-lifetime":
                assert abs(math.log(reading.value / reading.true)) > 5 * spread / reading.true
            else:
                assert abs(reading.value - reading.true) > 5 * spread


def test_planted_misread_energies_are_large_and_have_two_kinds_or_more(campaigns):
    for campaign in campaigns:
        misread = [shot for shot in campaign.shots if shot.misread_factor != 1.0]
        assert len(misread) == 3
        for shot in misread:
            factor = max(shot.misread_factor, 1 / shot.misread_factor)
            assert 1.5 <= factor <= 2.2
            kinds = {reading.kind for reading in readings_by_shot(campaign)[shot.name]}
            assert len(kinds) >= 2
            assert shot.excess > 0.5
        assert {shot.misread_factor > 1 for shot in misread} == {True, False}


def test_sizes_of_a_sample_are_lognormal_about_its_median(campaigns):
    for campaign in campaigns:
        assert len(campaign.histograms) == len(campaign.of("median-diameter")) == 6
        for histogram, reading in zip(campaign.histograms, campaign.of("median-diameter"), strict=True):
            assert histogram.sample == reading.sample
            assert histogram.counts.sum() == 400
            centres = np.log((histogram.edges[1:] + histogram.edges[:-1]) / 2)
            mean = np.average(centres, weights=histogram.counts)
            sd = math.sqrt(np.average((centres - mean) ** 2, weights=histogram.counts))
            assert mean == pytest.approx(math.log(reading.true), abs=4 * math.log(1.5) / 20 + 0.01)
            assert math.exp(sd) == pytest.approx(1.5, abs=0.1)


def test_given_true_numbers_are_used():
    base = invent(SEEDS[0]).truth
    truth = Truth({**base.values, "scatter.bubble-lifetime": 1e-6, "wall_prolongation": 2.0})
    doubled, single = invent(3, truth=truth), invent(3, truth=Truth({**truth.values, "wall_prolongation": 1.0}))
    long = {reading.shot: reading.true for reading in doubled.of("bubble-lifetime")}
    ratio = [long[reading.shot] / reading.true for reading in single.of("bubble-lifetime") if reading.shot in long]
    assert len(ratio) > 20
    assert ratio == pytest.approx([2.0] * len(ratio), rel=1e-5)


def test_too_few_shots_for_eight_levels_are_refused(tmp_path):
    with pytest.raises(ValueError, match="at least 48"):
        invent(1, shots=20)
    small = invent(1, shots=48)
    assert len(small.shots) == 48
    small.write(tmp_path / "small", style="untidy")
    assert (tmp_path / "small" / "campaign.toml").is_file()


@pytest.mark.parametrize("style", ["plain", "untidy"])
def test_the_folder_holds_what_its_manifest_names(campaigns, tmp_path, style):
    folder = tmp_path / "campaign"
    campaigns[0].write(folder, style=style)
    manifest = tomllib.loads((folder / "campaign.toml").read_text(encoding="utf-8"))
    named = {manifest["shots"]["file"], *(table["file"] for table in manifest["readings"])}
    present = {path.name for path in folder.iterdir() if path.is_file()}
    assert named <= present
    beside = {"campaign.toml"} | ({"README.txt", "notes.txt"} if style == "untidy" else set())
    assert present - named == beside
    assert {path.name for path in (folder / "truth").iterdir()} == {"truth.toml", "truth_shots.csv", "truth_strays.csv"}
    assert "truth" not in (folder / "campaign.toml").read_text(encoding="utf-8")


def test_the_truth_is_written_beside(campaigns, tmp_path):
    campaigns[1].write(tmp_path / "campaign", style="plain")
    folder = tmp_path / "campaign" / "truth"
    written = tomllib.loads((folder / "truth.toml").read_text(encoding="utf-8"))
    assert written["inputs"]["absorbed_fraction"] == pytest.approx(campaigns[1].truth["absorbed_fraction"], rel=1e-5)
    assert written["derived"]["threshold_fluence"] == pytest.approx(campaigns[1].truth["threshold_fluence"], rel=1e-5)
    with (folder / "truth_shots.csv").open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    assert [row["shot"] for row in rows] == [shot.name for shot in campaigns[1].shots]
    wrong = {row["shot"] for row in rows if float(row["misread by a factor of"]) != 1}
    assert wrong == {shot.name for shot in campaigns[1].shots if shot.misread_factor != 1}


def test_a_folder_that_holds_something_is_refused(tmp_path):
    (tmp_path / "mine.txt").write_text("a note", encoding="utf-8")
    with pytest.raises(Refusal, match="holds something"):
        write_example(tmp_path)
    assert [path.name for path in tmp_path.iterdir()] == ["mine.txt"]
    with pytest.raises(Refusal, match="found a file"):
        write_example(tmp_path / "mine.txt")


def cells(path):
    """Return every cell of a workbook by address, formulas as written."""
    book = openpyxl.load_workbook(path)
    return {(sheet.title, cell.coordinate): cell.value for sheet in book for row in sheet for cell in row}


def numbers(path):
    """Return what a rendered file holds, in whole steps of its camera or recorder (maps: in picometres)."""
    if path.suffix in {".png", ".tif"}:
        with Image.open(path) as image:
            steps = np.asarray(image, dtype=float)
        return np.nan_to_num(1e6 * steps, nan=-1.0) if path.parent.name == "maps" else steps
    if path.suffix == ".wav":
        with wave.open(str(path), "rb") as file:
            return np.frombuffer(file.readframes(file.getnframes()), "<i2") / 16.0
    if path.suffix == ".csv":
        values = np.loadtxt(path, delimiter=",", skiprows=6)[:, 1]
    elif path.suffix == ".h5":
        with h5py.File(path) as file:
            values = file["probe (V)"][:]
    else:
        with np.load(path) as file:
            values = file["probe (V)"]
    return values / np.min(np.diff(np.unique(np.round(values, 9))))


def test_the_committed_example_is_what_the_verb_writes(example):
    # workbooks by their cells, pictures and traces by what they hold: compression differs between systems, and the
    # last bit of a calculation with it, so that one value in a thousand may be rounded the other way
    names = {path.relative_to(example).as_posix() for path in example.rglob("*") if path.is_file()}
    assert names == {path.relative_to(COMMITTED).as_posix() for path in COMMITTED.rglob("*") if path.is_file()}
    with (COMMITTED / "truth" / "truth_files.csv").open(encoding="utf-8", newline="") as file:
        broken = {row["file"] for row in csv.DictReader(file) if row["fault"] == "truncated"}
    for name in sorted(names - broken):
        if name.endswith(".xlsx"):
            assert cells(example / name) == cells(COMMITTED / name), name
        elif name.split("/")[0] in {"frames", "traces", "maps", "tem"}:
            made, kept = numbers(example / name), numbers(COMMITTED / name)
            assert made.shape == kept.shape, name
            assert np.abs(made - kept).max() < 1.5 and np.mean(np.abs(made - kept) > 0.5) < 1e-3, name
        else:
            assert (example / name).read_bytes() == (COMMITTED / name).read_bytes(), name
    assert len(broken) == 1


def test_the_example_stays_small_enough_to_be_kept():
    assert sum(path.stat().st_size for path in COMMITTED.rglob("*") if path.is_file()) < 12 * 2**20


def test_the_example_is_written_the_same_byte_for_byte(example, tmp_path):
    write_example(tmp_path / "again")
    for path in example.rglob("*"):
        if path.is_file():
            assert path.read_bytes() == (tmp_path / "again" / path.relative_to(example)).read_bytes(), path.name

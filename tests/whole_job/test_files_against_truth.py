"""Freshly rendered campaigns, gathered from their files: what was measured against what is true of each file."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import pytest

from reconcile.campaign.manifest import load
from reconcile.example import BENCH, invent
from reconcile.gather import gather
from reconcile.invent.plan import plan

pytestmark = pytest.mark.slow
SEEDS = (101, 102, 103)

# Largest median of the relative errors, instruments' common errors divided out.
LARGEST = {
    "bubble-radius": 0.01,
    "pressure-integral": 0.05,
    "bubble-lifetime": 0.01,
    "crater-depth": 0.03,
    "median-diameter": 0.02,
}


@dataclass(frozen=True, slots=True)
class Compared:
    """One number measured from a file, and what the file shows."""

    kind: str
    source: str
    value: float
    u: float
    expected: float  # true value as instruments with these true errors show it
    drawn: float  # the same of what was drawn: differs for particles, of which some hundred stand for all

    @property
    def pull(self):
        return (self.value - self.expected) / self.u

    @property
    def error(self):
        return abs(self.value / self.drawn - 1)


@pytest.fixture(scope="module")
def gathered(tmp_path_factory):
    found = []
    for seed in SEEDS:
        folder = tmp_path_factory.mktemp("files") / "campaign"
        invented = invent(seed)
        invented.write(folder, style="files")
        found.append((plan(invented), gather(load(folder), workers=1)))
    return found


def as_shown(one, planned):
    """Return what nominal instrument numbers make of a true number, by the true errors of the instruments."""
    truth, bench = planned.truth, {name: stated.value for name, stated in BENCH.items()}
    late = truth["trigger_offset"] - bench["trigger_offset"]
    if one.kind == "arrival-time":
        return one.true + late
    if one.kind == "bubble-lifetime":
        return one.true + late + (truth["standoff"] - bench["standoff"]) / planned.probe.sound_speed
    if one.kind == "pressure-integral":
        return one.factor * one.true * (truth["probe_sensitivity"] / bench["probe_sensitivity"]) ** 2
    table, power = {
        "bubble-radius": ("camera-1", 1),
        "shock-radius": ("camera-1", 1),
        "crater-diameter": ("microscope", 1),
        "crater-volume": ("microscope", 2),
        "crater-depth": ("microscope", 0),
        "median-diameter": ("tem-images", 1),
    }[one.kind]
    return one.true * (planned.pitches[table].value / truth[f"pixel_pitch.{table}"]) ** power


def drawn_share(one, planned):
    """Return the geometric mean of the particles that were drawn over the true median of all; 1 for other kinds."""
    if one.kind != "median-diameter":
        return 1.0
    drawn = np.concatenate([file.diameters for file in planned.micrographs if file.sample == one.sample])
    return float(np.exp(np.log(drawn).mean())) / one.true


def matched(planned, gathered):
    """Return each number that a file shows, with its reading; None where there is none."""
    tables = {"camera-1", "recorder-1", "recorder-2", "recorder-1-h5", "recorder-1-npz", "microscope", "tem-images"}
    by_key = {
        (
            reading.kind,
            reading.shot,
            reading.sample,
            None if reading.delay is None else round(1e9 * reading.delay),
        ): reading
        for reading in gathered.readings
        if reading.table in tables
    }
    for one in planned.shown:
        key = (one.kind, one.shot, one.sample, None if one.delay is None else round(1e9 * one.delay))
        yield one, by_key.get(key)


@pytest.fixture(scope="module")
def compared(gathered):
    return [
        Compared(
            one.kind,
            one.file,
            reading.value,
            reading.u,
            shown := as_shown(one, planned),
            shown * drawn_share(one, planned),
        )
        for planned, got in gathered
        for one, reading in matched(planned, got)
        if reading is not None and reading.value is not None and one.true > 0
    ]


@pytest.mark.parametrize("kind", LARGEST)
def test_half_of_the_errors_are_small(compared, kind):
    errors = [one.error for one in compared if one.kind == kind]
    if kind == "median-diameter":
        assert len(errors) == 3 * len(SEEDS)
    assert np.median(errors) < LARGEST[kind]


@pytest.mark.parametrize("kind", [*LARGEST, "crater-diameter", "arrival-time"])
def test_stated_uncertainties_are_those_of_the_errors(compared, kind):
    pulls = np.array([one.pull for one in compared if one.kind == kind])
    worst = max((one for one in compared if one.kind == kind), key=lambda one: abs(one.pull))
    assert 0.6 < pulls.std() < 1.6, worst
    assert abs(pulls.mean()) < 0.6 + 3 / math.sqrt(len(pulls)), worst


def test_nearly_every_number_is_found(gathered):
    for planned, got in gathered:
        missing = [one for one, reading in matched(planned, got) if reading is None and one.kind != "shock-radius"]
        assert len(missing) <= 0.05 * len(planned.shown), missing


def test_an_empty_place_is_below_a_limit(gathered):
    for planned, got in gathered:
        for one, reading in matched(planned, got):
            if one.true == 0 and one.kind in {"bubble-radius", "crater-depth"}:
                assert reading is not None and reading.value is None and reading.limit > 0, one


def test_bad_files_are_refused_by_name_and_nothing_else_is(gathered):
    for planned, got in gathered:
        refused = {refused.source.split("!")[0] for refused in got.refused}
        bad = {file.name for file in planned.frames if file.fault} | {
            file.name for file in planned.traces if file.fault
        }
        assert {name for name in refused if name.split("/")[0] in {"frames", "maps", "tem"}} <= bad
        assert {file.name for file in planned.frames if file.fault} <= refused
        clipped = {file.name for file in planned.traces if file.fault == "clipped"}
        noted = {note.source for note in got.notes if "clip" in note.note} | refused
        assert clipped <= noted
        assert not any(r.kind == "pressure-integral" and r.place.file in clipped for r in got.readings)
        sounds = {file.name for file in planned.traces}
        assert len((refused & sounds) - bad) <= 2

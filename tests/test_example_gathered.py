"""The invented campaign's folder, read back by the package's own reading."""

from __future__ import annotations

import pytest

from reconcile.campaign.manifest import load
from reconcile.example import invent
from reconcile.gather import gather
from reconcile.invent.untidy import blemishes

SEED = 21
TRUTH = ("truth/truth.toml", "truth/truth_shots.csv", "truth/truth_strays.csv")


@pytest.fixture(scope="module")
def invented():
    return invent(SEED)


@pytest.fixture(scope="module", params=["plain", "untidy"])
def read_back(request, invented, tmp_path_factory):
    folder = tmp_path_factory.mktemp(request.param) / "campaign"
    invented.write(folder, style=request.param)
    return request.param, gather(load(folder))


def key(reading):
    return reading.kind, reading.shot or reading.sample, None if reading.delay is None else round(1e9 * reading.delay)


def test_shots_come_back_as_logged(invented, read_back):
    style, gathered = read_back
    struck = blemishes(invented).struck if style == "untidy" else None
    assert len(gathered.shots) == len(invented.shots)
    for got, made in zip(gathered.shots, invented.shots, strict=True):
        assert got.name == made.name
        assert got.metered_energy == pytest.approx(made.logged_energy, rel=1e-9)
        assert (got.pulses, got.sites, got.level, got.sample) == (made.pulses, made.sites, made.level, made.sample)
        assert (got.set_aside is not None) == (got.name == struck)


def test_readings_come_back_as_written_down(invented, read_back):
    style, gathered = read_back
    lost = ("crater-diameter", blemishes(invented).unreadable, None) if style == "untidy" else None
    written = {key(reading): reading for reading in invented.readings if key(reading) != lost}
    got = {key(reading): reading for reading in gathered.readings if reading.kind != "geometric-sd"}
    assert set(got) == set(written)
    for name, reading in got.items():
        made = written[name]
        if reading.kind == "median-diameter":
            # the histogram's median against the one of the particles themselves, both of 400
            assert reading.value == pytest.approx(made.value, rel=0.05)
            assert reading.u == pytest.approx(made.u, rel=0.5)
        elif made.below_limit:
            assert reading.value is None and reading.u is None
            assert reading.limit == pytest.approx(made.limit, rel=1e-9)
        else:
            assert reading.value == pytest.approx(made.value, rel=1e-8)
            assert reading.u == pytest.approx(made.u, rel=1e-8)


def test_nothing_is_refused_or_noted_but_the_folders_own_oddities(invented, read_back):
    style, gathered = read_back
    if style == "plain":
        assert gathered.refused == gathered.notes == ()
        assert gathered.unasked == TRUTH
        return
    odd = blemishes(invented)
    assert len({odd.struck, odd.unreadable, odd.hidden, odd.misspelt, odd.doubled}) == 5
    (refused,) = gathered.refused
    row = next(i for i, reading in enumerate(invented.of("crater-depth"), start=5) if reading.shot == odd.unreadable)
    assert refused.source == f"craters.xlsx!profiler!D{row}"
    assert "formula without a stored value" in refused.reason
    misspelt = sum(reading.shot == odd.misspelt for reading in invented.of("bubble-radius"))
    files = [note.source.partition("!")[0] for note in gathered.notes]
    assert files == misspelt * ["radii.csv"] + ["lifetimes.csv", "sound.xlsx"]
    notes = dict(zip(files, (note.note for note in gathered.notes), strict=True))
    assert f"'{odd.misspelt}' of the log" in notes["radii.csv"]
    assert "equal to an earlier one" in notes["lifetimes.csv"]
    assert "hidden row" in notes["sound.xlsx"]
    assert gathered.unasked == ("README.txt", "notes.txt", *TRUTH)

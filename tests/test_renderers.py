"""Rendered files: what they show is what was asked, checked by counting and summing; the folder they make."""

from __future__ import annotations

import csv
import io
import math
import re
import tomllib

import numpy as np
import pytest
from PIL import Image

from reconcile.example import BENCH, invent
from reconcile.invent.files import rendered_frame, rendered_map, rendered_micrograph, rendered_trace
from reconcile.invent.maps import Crater, height_map
from reconcile.invent.pictures import Scene, dark_frame, draw_camera, micrograph, scatter_particles, shadowgraph
from reconcile.invent.plan import plan
from reconcile.invent.waveforms import Probe, Recorder, Sound, first_pulse, pressure, trace, volts

SEEDS = (21, 22)
PROBE = Probe(0.47e-6, 5.2e-9, 4.95e-3, 12e-9, 1482.35, 6e-3, 15e-3)


@pytest.fixture(scope="module")
def plans():
    return [plan(invent(seed)) for seed in SEEDS]


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    made = tmp_path_factory.mktemp("files") / "campaign"
    invent(SEEDS[0]).write(made, style="files")
    return made


def dark_pixels_over_the_target(picture, camera, empty):
    """Count pixels darker than half of the empty frame, above the target; the bright spot is part of the bubble."""
    share = picture / np.maximum(empty, 1)
    rows, columns = np.arange(camera.height)[:, None], np.arange(camera.width)[None, :]
    middle = 0.5 * (camera.width - 1)
    over = camera.edge_row - rows + math.tan(camera.tilt) * (columns - middle)
    return share, over


@pytest.mark.parametrize("radius", [45e-6, 100e-6, 165e-6])
@pytest.mark.parametrize("bits", [8, 16])
def test_dark_pixels_count_up_to_the_half_disc(radius, bits):
    camera = draw_camera(np.random.default_rng(1), 1.4e-6)
    found = []
    for seed in range(4):
        # one seed: the target lies at the same place in both, while light and dust differ by one frame's drift
        picture = shadowgraph(camera, Scene(radius, bits=bits), np.random.default_rng(seed)).astype(float)
        empty = shadowgraph(camera, Scene(None, bits=bits), np.random.default_rng(seed)).astype(float)
        share, over = dark_pixels_over_the_target(picture, camera, empty)
        dark = share < 0.55
        dark[(over < 2)] = False  # the target itself, and its edge
        # columns that hold the bubble, from its top down to the target: the bright spot lies inside
        top = np.where(dark.any(axis=0), dark.argmax(axis=0), camera.height)
        columns = np.flatnonzero(dark.sum(axis=0) > 3)
        filled = sum(max(over[top[column], column] + 0.5, 0) for column in columns)
        found.append(math.sqrt(2 * filled / math.pi) * camera.pitch)
    assert np.median(found) == pytest.approx(radius, rel=0.03)


def test_a_bubble_is_dark_and_its_spot_and_field_are_bright():
    camera = draw_camera(np.random.default_rng(2), 1.4e-6)
    radius = 140e-6
    picture = shadowgraph(camera, Scene(radius), np.random.default_rng(5)) / 255
    reach = radius / camera.pitch
    row, middle = round(camera.edge_row), camera.width // 2
    field = np.median(picture[: row // 4])
    inside = np.median(picture[round(row - 0.85 * reach) : round(row - 0.7 * reach), middle - 5 : middle + 6])
    spot = np.median(picture[round(row - 0.34 * reach) : round(row - 0.3 * reach), middle - 3 : middle + 4])
    target = np.median(picture[row + 6 :])
    assert field > 0.4
    assert inside < 0.2 * field and target < 0.2 * field
    assert spot > 0.4 * field
    assert np.std(picture[:20, :20]) > 0.002  # noise


def test_light_drifts_and_some_dust_stays():
    camera = draw_camera(np.random.default_rng(3), 1.4e-6)
    frames = [shadowgraph(camera, Scene(None), np.random.default_rng(seed)) / 255 for seed in range(8)]
    levels = [np.median(frame[:100]) for frame in frames]
    assert 0.01 < np.std(levels) / np.mean(levels) < 0.1
    column, row = (round(value) for value in max(camera.dust, key=lambda speck: -speck[1])[:2])
    around = np.median(frames[0][max(row - 12, 0) : row + 12, max(column - 12, 0) : column + 12])
    assert all(
        frame[row, min(column, camera.width - 1)] < 0.93 * around * level / levels[0]
        for frame, level in zip(frames, levels, strict=True)
    )
    dark = dark_frame(camera, np.random.default_rng(4))
    assert dark.max() < 12 and dark.std() > 0


def test_a_shock_in_view_darkens_a_ring():
    camera = draw_camera(np.random.default_rng(2), 1.4e-6)
    radius = 150e-6
    with_ring = shadowgraph(camera, Scene(40e-6, radius), np.random.default_rng(6)).astype(float)
    without = shadowgraph(camera, Scene(40e-6), np.random.default_rng(6)).astype(float)
    rows, columns = np.nonzero(with_ring - without < -20)
    middle, row = columns.mean(), camera.edge_row
    away = np.hypot(columns - middle, rows - row)
    assert np.median(away) * camera.pitch == pytest.approx(radius, rel=0.02)  # the frame's shift by 1.5 px is in it


@pytest.mark.parametrize(
    ("integral", "duration", "response"), [(3.0, 5e-9, 5.5e-9), (60.0, 10e-9, 5e-9), (700.0, 18e-9, 6e-9)]
)
def test_the_first_pulse_has_the_asked_integral_and_foot(integral, duration, response):
    sound = Sound(3.3e-6, integral, duration, 15e-6, 1.0)
    time = np.arange(3.2e-6, 4.0e-6, 0.1e-9)
    recorded = first_pulse(time, sound, response)
    assert np.trapezoid(recorded**2, time) == pytest.approx(integral, rel=0.005)
    above = time[recorded > 0.01 * recorded.max()]
    assert above[0] == pytest.approx(3.3e-6, abs=0.3e-9)
    assert (recorded[time < 3.3e-6] == 0).all()
    # one pole with this response time fed with the triangle: tau y' + y is a straight line from the front to its end
    driven = response * np.gradient(recorded, time) + recorded
    front, end = (np.argmin(abs(time - 3.3e-6 - share * duration)) for share in (0.2, 0.8))
    assert driven[end] / driven[front] == pytest.approx(0.25, abs=0.02)


def test_echoes_and_collapse_come_when_they_should():
    sound = Sound(3.3e-6, 60.0, 10e-9, 15e-6, 1.5)
    time = np.arange(0, 30e-6, 1e-9)
    recorded = pressure(time, sound, PROBE, np.random.default_rng(3))
    first = recorded[abs(time - 3.32e-6) < 0.1e-6].max()
    collapse = abs(time - 15e-6 - 4.95e-3 / 1482.35) < 0.1e-6
    assert recorded[collapse].max() == pytest.approx(1.5 * first, rel=0.1)
    steepest = time[collapse][np.argmax(np.gradient(recorded[collapse]))]
    assert steepest == pytest.approx(15e-6 + 4.95e-3 / 1482.35, abs=8e-9)
    turned = abs(time - 3.3e-6 - 2 * 1.05e-3 / 1482.35) < 0.1e-6
    assert recorded[turned].min() == pytest.approx(-0.45 * first, rel=0.05)


def test_a_recorder_quantises_and_clips():
    sound = Sound(3.3e-6, 60.0, 10e-9, 15e-6, 1.5)
    wide = Recorder(2e-9, -1e-6, 12_000, 0.2, 8)
    steps = trace(sound, PROBE, wide, np.random.default_rng(1))
    assert steps.dtype == np.int32 and steps.min() >= -128 and steps.max() < 127
    assert len(np.unique(steps)) > 20
    before = volts(steps, wide)[wide.time < 0]
    assert 0 < before.std() < 0.01 * 0.2
    pick_up = abs(volts(steps, wide)[abs(wide.time - 0.15e-6) < 0.15e-6]).max()
    assert pick_up > 0.05
    narrow = Recorder(2e-9, -1e-6, 12_000, 0.01, 8)
    clipped = trace(sound, PROBE, narrow, np.random.default_rng(1))
    assert np.sum(clipped == 127) > 2


CRATERS = [Crater(120e-9, 18e-6, 0.4, -0.2, 0.2, 15e-9), Crater(1.5e-6, 48e-6, 2.5, -0.05, 0.02, 120e-9)]


@pytest.mark.parametrize("crater", CRATERS)
def test_a_map_sums_up_to_the_craters_volume(crater):
    height = height_map(crater, 0.5e-6, np.random.default_rng(2), disturbed=False)
    assert -np.minimum(height, 0).sum() * 0.25e-12 == pytest.approx(crater.volume, rel=0.01)
    assert -height.min() == pytest.approx(crater.depth, rel=0.01)
    below = np.sum(height < 0) * 0.25e-12
    assert math.sqrt(4 * below / math.pi) == pytest.approx(crater.diameter, rel=0.02)
    # a pixel's mean at the rim's top, where the curvature is rim/(0.03 diameter)², lies lower by pixel²/24 of
    # that, and by up to twice as much where the top falls between pixels
    lower = (0.5e-6 / (0.03 * crater.diameter)) ** 2 / 12
    assert height.max() == pytest.approx(crater.rim * (1 - lower / 2), rel=lower / 2 + 0.005)
    disturbed = height_map(crater, 0.5e-6, np.random.default_rng(2))
    assert 0.003 < np.isnan(disturbed).mean() < 0.1
    flat = disturbed - height
    # tilt and form taken off: roughness of a few nanometres is left, and spikes stand out of it
    rows, columns = np.nonzero(np.isfinite(flat))
    x, y = columns / 160, rows / 160
    basis = np.column_stack([np.ones_like(x), x, y, x * x, y * y, x * y])
    left = flat[rows, columns] - basis @ np.linalg.lstsq(basis, flat[rows, columns], rcond=None)[0]
    middle_half = np.subtract(*np.percentile(left, [75, 25])) / 1.349
    assert 3e-9 < middle_half < 25e-9
    assert 8 < np.sum(abs(left) > 150e-9) < 40


def test_particles_darken_their_own_area():
    rng = np.random.default_rng(8)
    diameters, pitch = 8e-9 * 1.4 ** rng.standard_normal(90), 0.45e-9
    particles = scatter_particles(rng, diameters, pitch, touching=0.0)
    picture = micrograph(particles, pitch, rng) / 255
    reach = 0.5 * particles.diameter / pitch
    whole = (
        (particles.column > reach + 4)
        & (particles.column < 507 - reach)
        & (particles.row > reach + 4)
        & (particles.row < 507 - reach)
    )
    ratio = []
    for column, row, radius in zip(particles.column[whole], particles.row[whole], reach[whole], strict=True):
        rows, columns = np.ogrid[:512, :512]
        away = np.hypot(rows - row, columns - column)
        film = np.median(picture[(away > radius + 2) & (away < radius + 4)])
        within = np.median(picture[away < 0.7 * radius])
        # its own disc, cut off well outside: what is missing of the film's light is its area
        ring = away < 1.06 * radius + 2.5
        counted = np.sum(picture[ring] < 0.5 * (film + within + 0.04))
        ratio.append(math.sqrt(counted / math.pi) / radius)
    assert len(ratio) > 40
    assert np.median(ratio) == pytest.approx(1, abs=0.02)


def test_some_particles_touch_and_none_are_alike():
    rng = np.random.default_rng(9)
    particles = scatter_particles(rng, 8e-9 * 1.5 ** rng.standard_normal(120), 0.45e-9)
    x, y, r = particles.column, particles.row, 0.5 * particles.diameter / 0.45e-9
    gap = np.hypot(x[:, None] - x, y[:, None] - y) - r[:, None] - r
    touching = (np.triu(gap, 1) < 0)[np.triu_indices(len(x), 1)].sum()
    assert 8 < touching < 30  # 15 % of 120 are laid against another
    assert len(np.unique(particles.diameter)) == 120
    with pytest.raises(ValueError, match="do not fit"):
        scatter_particles(rng, np.full(3000, 20e-9), 0.45e-9)


def test_a_file_depends_on_the_seed_alone(plans):
    again = plan(invent(SEEDS[0]))
    first, other = plans
    assert again.shown == first.shown and again.truth == first.truth
    assert (rendered_frame(again, again.frames[3]) == rendered_frame(first, first.frames[3])).all()
    assert (rendered_trace(again, again.traces[0]) == rendered_trace(first, first.traces[0])).all()
    assert np.array_equal(rendered_map(again, again.maps[0]), rendered_map(first, first.maps[0]), equal_nan=True)
    assert (rendered_micrograph(again, again.micrographs[0]) == rendered_micrograph(first, first.micrographs[0])).all()
    assert other.shown != first.shown
    assert not np.array_equal(rendered_frame(other, other.frames[3]), rendered_frame(first, first.frames[3]))
    assert not np.array_equal(rendered_map(other, other.maps[0]), rendered_map(first, first.maps[0]), equal_nan=True)


def test_true_pitches_lie_about_the_stated_ones(plans):
    for one in plans:
        for name, stated in one.pitches.items():
            assert abs(one.truth[f"pixel_pitch.{name}"] - stated.value) < 4 * stated.u
            assert re.fullmatch(r"[\d.]+ [nu]m ± [\d.]+ %", stated.text)
        assert set(BENCH) < set(one.truth.values)


def test_files_and_tables_share_out_the_readings(plans):
    for seed, one in zip(SEEDS, plans, strict=True):
        whole = invent(seed)
        left = {(r.kind, r.shot, r.sample, r.delay): r for r in one.tables.readings}
        shown = {(s.kind, s.shot, s.sample, s.delay): s for s in one.shown}
        clipped = {file.shot for file in one.traces if file.fault == "clipped"}
        assert not set(left) & set(shown)
        for reading in whole.readings:
            key = (reading.kind, reading.shot, reading.sample, reading.delay)
            if key in left:
                assert left[key] == reading
            elif reading.kind == "pressure-integral" and reading.shot in clipped:
                continue
            elif not reading.below_limit:
                assert shown[key].true == reading.true
        for kind in ("crater-depth", "crater-diameter", "bubble-radius", "bubble-lifetime", "pressure-integral"):
            assert any(key[0] == kind for key in left) and any(key[0] == kind for key in shown), kind
        assert 40 <= len(one.traces) <= 60 and len(one.maps) == 8 and 6 <= len(one.micrographs) <= 8
        assert 30 <= len(one.frames) <= 38


def test_planted_strays_stay_wrong(plans):
    for seed, one in zip(SEEDS, plans, strict=True):
        in_tables = {(r.kind, r.shot) for r in one.tables.readings if r.stray}
        in_files = {(s.kind, s.shot) for s in one.shown if s.factor != 1.0}
        assert in_tables | in_files == {(r.kind, r.shot) for r in invent(seed).readings if r.stray}


def test_every_named_file_is_there_and_the_folder_is_small(folder):
    manifest = tomllib.loads((folder / "campaign.toml").read_text(encoding="utf-8"))
    patterns = [table["files"] for table in manifest["readings"] if "files" in table]
    assert len(patterns) == 7
    names = {path.relative_to(folder).as_posix() for path in folder.rglob("*") if path.is_file()}
    matched = set()
    for pattern in patterns:
        expression = re.compile(re.sub(r"\\{[a-z]+\\}", "[^/]+", re.escape(pattern)))
        mine = {name for name in names if expression.fullmatch(name)}
        assert mine, pattern
        assert not mine & matched
        matched |= mine
    pictured = {name for name in names if name.split("/")[0] in {"frames", "traces", "maps", "tem"}}
    assert pictured - matched == {"frames/background.png"}
    assert sum((folder / name).stat().st_size for name in names) < 12 * 2**20


def test_the_truth_lists_every_file(folder):
    with (folder / "truth" / "truth_files.csv").open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    listed = {row["file"] for row in rows}
    for path in folder.rglob("*"):
        name = path.relative_to(folder).as_posix()
        if path.is_file() and name.split("/")[0] in {"frames", "traces", "maps"} and "background" not in name:
            assert name in listed, name
    assert {row["fault"] for row in rows} == {"", "truncated", "dark", "clipped", "cut"}
    one = next(row for row in rows if row["kind"] == "bubble-radius" and float(row["true (SI)"]) > 0)
    planned = plan(invent(SEEDS[0]))
    same = next(s for s in planned.shown if s.file == one["file"] and s.kind == "bubble-radius")
    assert float(one["true (SI)"]) == pytest.approx(same.true, rel=1e-5)
    truth = tomllib.loads((folder / "truth" / "truth.toml").read_text(encoding="utf-8"))
    assert truth["inputs"]["pixel_pitch.camera-1"] == pytest.approx(planned.truth["pixel_pitch.camera-1"], rel=1e-5)


def test_bad_files_are_bad(folder, plans):
    frame = next(file for file in plans[0].frames if file.fault == "truncated")
    with pytest.raises(OSError, match="truncated"), Image.open(io.BytesIO((folder / frame.name).read_bytes())) as image:
        image.load()
    dark = next(file for file in plans[0].frames if file.fault == "dark")
    with Image.open(folder / dark.name) as image:
        assert np.asarray(image).max() < (12 if dark.bits == 8 else 12 * 257)
    clipped = next(file for file in plans[0].traces if file.fault == "clipped")
    top = 2 ** (clipped.recorder.bits - 1) - 1
    late = clipped.recorder.time > 1e-6
    assert np.sum(rendered_trace(plans[0], clipped)[late] == top) > 1
    for file in plans[0].traces:
        if file.fault == "cut":
            assert file.recorder.time[-1] < file.sound.lifetime + PROBE.standoff / PROBE.sound_speed
        elif not file.fault:
            assert file.recorder.time[-1] > file.sound.lifetime + 5.3e-3 / PROBE.sound_speed
            assert rendered_trace(plans[0], file).max() < 2 ** (file.recorder.bits - 1) - 1


def test_pictures_are_stored_as_rendered(folder, plans):
    frame = plans[0].frames[0]
    with Image.open(folder / frame.name) as image:
        assert (np.asarray(image) == rendered_frame(plans[0], frame)).all()
    crater_map = plans[0].maps[0]
    with Image.open(folder / crater_map.name) as image:
        assert np.array_equal(np.asarray(image), rendered_map(plans[0], crater_map), equal_nan=True)


def test_the_same_trace_stands_in_every_format(folder, plans):
    import wave

    import h5py

    read = {}
    for form in ("csv", "wav", "h5", "npz"):
        file = next(file for file in plans[0].traces if file.name.endswith(form))
        wanted, path = volts(rendered_trace(plans[0], file), file.recorder), folder / file.name
        if form == "csv":
            time, value = np.loadtxt(path, delimiter=",", skiprows=6).T
            assert time == pytest.approx(1e6 * file.recorder.time, abs=1e-9)
            value = 1e-3 * value
        elif form == "wav":
            with wave.open(str(path), "rb") as stored:
                assert stored.getframerate() == 500_000_000
                codes = np.frombuffer(stored.readframes(stored.getnframes()), "<i2")
            value = codes / 32_768 * file.recorder.full_scale
        elif form == "h5":
            with h5py.File(path, "r") as stored:
                value = stored["probe (V)"][:]
                assert stored["t (us)"][:] == pytest.approx(1e6 * file.recorder.time, abs=1e-9)
        else:
            with np.load(path) as stored:
                value = stored["probe (V)"]
        read[form] = value
        assert value == pytest.approx(wanted, abs=2e-5 * file.recorder.full_scale, rel=1e-4)
    assert len(read) == 4


@pytest.mark.slow
def test_the_folder_is_written_the_same_byte_for_byte(folder, tmp_path):
    invent(SEEDS[0]).write(tmp_path / "again", style="files")
    for path in folder.rglob("*"):
        if path.is_file():
            assert path.read_bytes() == (tmp_path / "again" / path.relative_to(folder)).read_bytes(), path.name

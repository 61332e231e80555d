"""Tables of images, traces and maps: which files they name, and what becomes of what was measured on them."""

import csv
import unicodedata
from types import SimpleNamespace

import numpy as np
import pytest
from campaign_folder import LOG, write
from PIL import Image
from pytest import approx

import reconcile.gather.measuring as measuring
from reconcile.campaign.files import sha256_of
from reconcile.campaign.manifest import load
from reconcile.campaign.patterns import matching, ways
from reconcile.campaign.refusal import Refusal
from reconcile.cli import main
from reconcile.gather import gather
from reconcile.measure.measured import Finding, Measured, Outline, Unmeasurable
from reconcile.measure.particles import from_diameters

TABLE = '\n[[readings]]\nkind = "{}"\n{}\n'
FRAMES = TABLE.format(
    "shadowgraph", 'name = "camera"\npixel_pitch = "2 um ± 0.02 um"\ntarget_edge = "bottom"\nfiles = "frames/{}"'
)
PROBE = """
[probe]
standoff = "5.0 mm ± 0.1 mm"
sensitivity = "0.45 V/MPa ± 10 %"
bandwidth = "30 MHz"
trigger_offset = "10 ns ± 20 ns"
"""
TRACES = TABLE.format("probe-trace", 'files = "traces/{shot}.csv"\ncolumns = { time = "t (us)", voltage = "U (V)" }')
MAPS = TABLE.format("crater-map", 'files = "maps/{shot}.csv"\npixel_pitch = "0.5 um ± 0.5 %"\nheight_unit = "um"')
MICROGRAPHS = TABLE.format("micrograph", 'files = "tem/{sample}_{frame}.png"\npixel_pitch = "1 nm ± 1 %"')
SAMPLES = ('energy = "Energy (uJ)"', 'energy = "Energy (uJ)", sample = "Sample"')
SAMPLE_LOG = "Shot,Energy (uJ),Sample\ns001,10,A\ns002,20,A\ns003,30,B\n"
NOTHING = Outline((), "")


def picture(path, grey=100, size=(24, 16), pages=1):
    path.parent.mkdir(parents=True, exist_ok=True)
    images = [Image.fromarray(np.full(size[::-1], grey + page, dtype=np.uint8)) for page in range(pages)]
    images[0].save(path, **({"save_all": True, "append_images": images[1:]} if pages > 1 else {}))
    return path


def frames(folder, *names):
    return [picture(folder / "frames" / name, grey=100 + number) for number, name in enumerate(names)]


@pytest.fixture
def camera(monkeypatch):
    """Stand in for the measuring of frames: the radius [px] is the mean grey level."""
    seen = []

    def measure(frame, pixel_pitch, target_edge, background=None, saturated=None):
        seen.append(SimpleNamespace(edge=target_edge, background=background, saturated=saturated))
        level = float(frame.mean()) * 255
        if level < 1:
            return Finding((Measured("bubble-radius", None, None, limit=3 * pixel_pitch),), NOTHING)
        if level > 254.5:
            raise Unmeasurable("nothing but light", "a bubble", "Lower the exposure.")
        found = (Measured("bubble-radius", level * pixel_pitch, pixel_pitch), Measured("shock-radius", 1e-3, 1e-5))
        return Finding(found, NOTHING, ("as round as it can be",) if level < 50 else ())

    monkeypatch.setattr(measuring, "measure_frame", measure)
    return seen


def read(folder, **options):
    return gather(load(folder), **options)


def radii(found):
    return {(one.shot, str(one.place)): one.delay for one in found.readings if one.kind == "bubble-radius"}


# ---- names ----


def test_every_way_to_read_a_name_is_found():
    assert ways("f/{shot}_{delay}ns.png", "f/a_1_20ns.png") == [
        {"shot": "a", "delay": "1_20"},
        {"shot": "a_1", "delay": "20"},
    ]
    assert ways("{sample}_*.tif", "gold 5_x_y.tif") == [{"sample": "gold 5"}, {"sample": "gold 5_x"}]
    assert ways("**/{shot}.t?f", "a/b/s1.tif") == [{"shot": "s1"}]
    assert ways("{shot}.png", "a/s1.png") == []
    assert ways("{shot}.png", ".png") == []
    assert len(ways("{shot}{sample}{delay}{frame}*ns", 200 * "a" + "ns")) == 1000


def test_a_pattern_gives_shot_and_delay_of_each_file(tmp_path, camera):
    frames(tmp_path, "s001_800ns.png", "s001_1600ns.png", "s003_0.5ns.png", "s002_1,25ns.png")
    found = read(write(tmp_path, more=FRAMES.format("{shot}_{delay}ns.png")))
    assert radii(found) == {
        ("s001", "frames/s001_800ns.png"): approx(800e-9, abs=0),
        ("s001", "frames/s001_1600ns.png"): approx(1600e-9, abs=0),
        ("s003", "frames/s003_0.5ns.png"): approx(0.5e-9, abs=0),
        ("s002", "frames/s002_1,25ns.png"): approx(1.25e-9, abs=0),
    }
    one = next(one for one in found.readings if one.kind == "bubble-radius")
    assert (one.table, one.value, one.u) == ("camera", approx(202e-6, rel=1e-6), approx(2e-6))
    assert [one.kind for one in found.readings].count("shock-radius") == 4
    assert all(one.delay is not None for one in found.readings if one.kind == "shock-radius")
    assert found.refused == ()


def test_of_several_ways_to_read_a_name_the_one_whose_shot_is_in_the_log_holds(tmp_path, camera):
    frames(tmp_path, "run_1_7_4.png", "run_2_7.png", "run_2_7_4.png")
    log = "Shot,Energy (uJ)\nrun_1,10\nrun_2,10\nrun_2_7,10\ns001,10\ns002,20\n"
    more = FRAMES.format("{shot}_{frame}.png") + 'first_delay = "1 us"\n'
    found = read(write(tmp_path, more=more, log=log))
    assert [shot for shot, _ in radii(found)] == ["run_1", "run_2"]
    assert [one.source for one in found.refused] == ["frames/run_2_7_4.png"]
    assert "shot 'run_2'" in found.refused[0].reason and "shot 'run_2_7'" in found.refused[0].reason


def test_a_name_that_fits_but_for_case_and_zeros_is_taken_with_a_note_and_an_unknown_one_refused(tmp_path, camera):
    frames(tmp_path, "S1_800ns.png", "s009_800ns.png", "s002_latens.png", "s002_1,234ns.png")
    found = read(write(tmp_path, more=FRAMES.format("{shot}_{delay}ns.png")))
    assert radii(found) == {("s001", "frames/S1_800ns.png"): approx(800e-9, abs=0)}
    assert [note.source for note in found.notes] == ["frames/S1_800ns.png"]
    refused = {one.source: one.reason for one in found.refused}
    assert "the shot 's009', which is not in the log" in refused["frames/s009_800ns.png"]
    assert "'late' where the pattern has {delay}" in refused["frames/s002_latens.png"]
    assert 'decimal = ","' in refused["frames/s002_1,234ns.png"]
    declared = FRAMES.format("{shot}_{delay}ns.png") + 'decimal = ","\n'
    again = read(write(tmp_path, more=declared))
    assert radii(again)["s002", "frames/s002_1,234ns.png"] == approx(1.234e-9, abs=0)


def test_names_with_blanks_and_of_any_script_are_read(tmp_path, camera):
    decomposed = unicodedata.normalize("NFD", "größe 2")
    frames(tmp_path, "金 1 800ns.png", f"{decomposed} 900ns.png")
    log = "Shot,Energy (uJ)\n金 1,10\ngröße 2,20\ns001,10\ns002,20\n"
    found = read(write(tmp_path, more=FRAMES.format("{shot} {delay}ns.png"), log=log))
    assert [shot for shot, _ in radii(found)] == ["größe 2", "金 1"]
    assert found.notes == () and found.unasked == ()


def test_the_readings_of_a_refused_shot_are_refused(tmp_path, camera):
    frames(tmp_path, "s003_800ns.png")
    found = read(write(tmp_path, more=FRAMES.format("{shot}_{delay}ns.png"), log=LOG.replace("s003,30", "s003,")))
    assert "which was refused (shots.csv!line 4)" in found.refused[-1].reason


def test_patterns_pass_over_output_folders_and_what_the_manifest_names_for_something_else(tmp_path, camera):
    frames(tmp_path, "s001.png", "empty.png")
    frames(tmp_path / "reports", "s002.png")
    (tmp_path / "reports" / "checksums.sha256").write_text("", encoding="utf-8")
    more = (
        FRAMES.replace("frames/", "**/").format("{shot}.png")
        + 'background = "frames/empty.png"\nfirst_delay = "1 us"\n'
    )
    assert matching(tmp_path, "**/{shot}.png") == ["frames/empty.png", "frames/s001.png"]
    found = read(write(tmp_path, more=more))
    assert list(radii(found)) == [("s001", "frames/s001.png")]
    assert found.refused == () and found.unasked == ()


def test_a_file_that_two_tables_name_is_refused_once_and_read_by_neither(tmp_path, camera):
    frames(tmp_path, "s001_800ns.png", "s002_800ns.png")
    frames(tmp_path, "s003_900ns.png")
    second = FRAMES.format("{shot}_8*.png").replace("camera", "other") + 'first_delay = "1 us"\n'
    found = read(write(tmp_path, more=FRAMES.format("{shot}_{delay}ns.png") + second))
    assert list(radii(found)) == [("s003", "frames/s003_900ns.png")]
    assert [one.source for one in found.refused] == ["frames/s001_800ns.png", "frames/s002_800ns.png"]
    assert all("two tables" in one.reason for one in found.refused)


@pytest.mark.parametrize(
    ("table", "says"),
    [
        (FRAMES.format("{shot}_{delay}us.png"), "no file that matches 'frames/{shot}_{delay}us.png'"),
        (FRAMES.format("{sample}_{delay}ns.png"), "belongs to a shot"),
        (FRAMES.format("{shot}_{delay}ns.png") + 'first_delay = "1 us"', "both first_delay and a delay"),
        (FRAMES.format("{shot}_{delay}ns.png") + 'background = "dark.png"', "no file 'dark.png'"),
        (FRAMES.format("{shot}_{delay}ns.png") + 'background = "craters.csv"', "a PNG or TIFF picture"),
        (
            FRAMES.format("{shot}_{delay}ns.png").replace('pixel_pitch = "2 um ± 0.02 um"', "")
            + 'graticule = { file = "frames/s001_800ns.png", spacing = "50 um" }',
            "a graticule, which this version does not measure",
        ),
    ],
)
def test_a_table_that_cannot_be_followed_refuses_the_campaign(tmp_path, camera, table, says):
    frames(tmp_path, "s001_800ns.png", "s002_800ns.png")
    with pytest.raises(Refusal) as refusal:
        read(write(tmp_path, more=table))
    assert says in str(refusal.value)
    assert "campaign.toml" in str(refusal.value) or "craters.csv" in str(refusal.value)


# ---- delays ----


def test_a_list_names_files_shots_and_delays(tmp_path, camera):
    frames(tmp_path, "a 1.png", "b.png", "c.png", "d.png", "e.png")
    listed = "Nr,Image,t (us)\ns001,a 1.png,0.8\ns002,b.png,1.6\ns002,b.png,1.6\ns003,b.png,2\ns003,lost.png,1\ns009,d.png,1\n"
    listed += "s003,../frames/c.png,1\ns003,c.png,\n"
    (tmp_path / "list.csv").write_text(listed, encoding="utf-8")
    entry = (
        'list = { file = "list.csv", columns = { shot = "Nr", path = "Image", delay = "t (us)" }, folder = "frames" }'
    )
    table = FRAMES.replace('files = "frames/{}"', "{}").format(entry)
    found = read(write(tmp_path, more=table))
    assert radii(found) == {
        ("s001", "frames/a 1.png"): approx(0.8e-6, abs=0),
        ("s002", "frames/b.png"): approx(1.6e-6, abs=0),
    }
    assert {one.source: one.reason.partition(";")[0] for one in found.refused} == {
        "list.csv!line 5": "found the file 'frames/b.png' once more, for another shot or delay",
        "list.csv!line 6": "found 'lost.png', which is no file 'frames/lost.png' in the campaign folder",
        "list.csv!line 7": "found the shot 's009', which is not in the log",
        "list.csv!line 8": "found the path 'frames/../frames/c.png'",
        "list.csv!line 9": "found no delay",
    }
    assert "list.csv" in [file.path for file in found.files]
    assert found.unasked == ("frames/e.png",)


def test_the_log_gives_the_delay_where_neither_name_nor_list_does(tmp_path, camera):
    frames(tmp_path, "s001.png", "s002.png")
    log = "Shot,Energy (uJ),Delay (us)\ns001,10,0.8\ns002,20,\ns003,30,2\n"
    changes = ('energy = "Energy (uJ)"', 'energy = "Energy (uJ)", delay = "Delay (us)"')
    found = read(write(tmp_path, changes, more=FRAMES.format("{shot}.png"), log=log))
    assert radii(found) == {("s001", "frames/s001.png"): approx(0.8e-6, abs=0)}
    assert [one.source for one in found.refused] == ["frames/s002.png"]


def test_the_pages_of_a_stack_follow_each_other_in_time(tmp_path, camera):
    picture(tmp_path / "frames" / "s001.tif", grey=252, pages=4)  # the fourth is all light
    picture(tmp_path / "frames" / "s002.tif")
    times = 'first_delay = "200 ns"\nframe_interval = "1 us"\n'
    found = read(write(tmp_path, more=FRAMES.format("{shot}.tif") + times))
    assert radii(found) == {
        ("s001", "frames/s001.tif!page 1"): approx(0.2e-6, abs=0),
        ("s001", "frames/s001.tif!page 2"): approx(1.2e-6, abs=0),
        ("s001", "frames/s001.tif!page 3"): approx(2.2e-6, abs=0),
        ("s002", "frames/s002.tif"): approx(0.2e-6, abs=0),
    }
    assert [(one.source, one.reason) for one in found.refused] == [
        ("frames/s001.tif!page 4", "found nothing but light; expected a bubble. Lower the exposure.")
    ]
    without = read(write(tmp_path, more=FRAMES.format("{shot}.tif") + times.partition("\n")[0]))
    assert "4 pages in one file" in without.refused[0].reason
    assert list(radii(without)) == [("s002", "frames/s002.tif")]


# ---- what was measured ----


def test_limits_remarks_refusals_and_checksums_are_kept(tmp_path, camera):
    picture(tmp_path / "frames" / "s001_1ns.png", grey=0)
    picture(tmp_path / "frames" / "s002_1ns.png", grey=20)
    picture(tmp_path / "frames" / "s003_1ns.png", grey=255)
    found = read(write(tmp_path, more=FRAMES.format("{shot}_{delay}ns.png")))
    empty = next(one for one in found.readings if one.shot == "s001" and one.kind == "bubble-radius")
    assert (empty.value, empty.u, empty.limit) == (None, None, approx(6e-6))
    assert [(one.source, one.note) for one in found.notes] == [("frames/s002_1ns.png", "as round as it can be")]
    assert [one.source for one in found.refused] == ["frames/s003_1ns.png"]
    sums = {file.path: file.sha256 for file in found.files}
    assert all(sums[f"frames/s00{n}_1ns.png"] == sha256_of(tmp_path / "frames" / f"s00{n}_1ns.png") for n in (1, 2, 3))


def test_a_file_that_is_there_twice_counts_once_and_one_under_two_shots_is_pointed_out(tmp_path, camera):
    for name in ("s001_1ns.png", "s001_1ns again.png", "s002_1ns.png"):
        picture(tmp_path / "frames" / name)
    found = read(write(tmp_path, more=FRAMES.format("{shot}_{delay}ns*.png")))
    assert list(radii(found)) == [("s001", "frames/s001_1ns again.png"), ("s002", "frames/s002_1ns.png")]
    assert [(one.source, one.note.partition(" of ")[0]) for one in found.notes] == [
        ("frames/s001_1ns.png", "the same file as 'frames/s001_1ns again.png'; it counts once"),
        ("frames/s002_1ns.png", "the same file as 'frames/s001_1ns again.png'"),
    ]
    assert len(found.files) == 6


def test_the_background_is_read_once_and_frames_of_another_size_are_refused(tmp_path, camera, monkeypatch):
    frames(tmp_path, "s001_1ns.png", "s002_1ns.png")
    picture(tmp_path / "frames" / "s003_1ns.png", size=(20, 16))
    picture(tmp_path / "dark.tif", grey=10, pages=3)
    opened = []
    original = measuring.read_frames
    monkeypatch.setattr(measuring, "read_frames", lambda path, name: opened.append(name) or original(path, name))
    found = read(write(tmp_path, more=FRAMES.format("{shot}_{delay}ns.png") + 'background = "dark.tif"\n'))
    assert opened.count("dark.tif") == 1
    assert [one.background.mean() * 255 for one in camera] == [approx(11, rel=1e-5)] * 2
    assert "20 x 16 pixels; expected 24 x 16" in found.refused[0].reason
    assert found.unasked == () and "dark.tif" in [file.path for file in found.files]


def test_numbers_that_nobody_foresaw_refuse_their_file_and_say_whose_fault_it_is(tmp_path, monkeypatch):
    frames(tmp_path, "s001_1ns.png", "s002_1ns.png")
    outcomes = iter(
        [Finding((Measured("bubble-radius", float("nan"), 1e-6),), NOTHING), np.linalg.LinAlgError("singular")]
    )

    def measure(*_):
        outcome = next(outcomes)
        if isinstance(outcome, Finding):
            return outcome
        raise outcome

    monkeypatch.setattr(measuring, "measure_frame", measure)
    found = read(write(tmp_path, more=FRAMES.format("{shot}_{delay}ns.png")))
    assert [one.source for one in found.refused] == ["frames/s001_1ns.png", "frames/s002_1ns.png"]
    assert "LinAlgError: singular" in found.refused[1].reason
    assert all("fault of the program" in one.reason for one in found.refused)


def trace(folder, name):
    folder.mkdir(exist_ok=True)
    rows = "".join(f"{n / 100},{np.sin(n):.4f}\n" for n in range(100))
    (folder / name).write_text("t (us),U (V)\n" + rows, encoding="utf-8")


def test_a_trace_gives_several_readings_with_one_source_and_its_shots_standoff(tmp_path, monkeypatch):
    setups = []

    def measure(time, voltage, setup):
        setups.append((setup, time, voltage))
        kinds = ("arrival-time", "pressure-integral", "bubble-lifetime", "peak-pressure")
        return Finding(tuple(Measured(kind, 2.0, 1.0) for kind in kinds), NOTHING)

    monkeypatch.setattr(measuring, "measure_trace", measure)
    for name in ("s001.csv", "s002.csv"):
        trace(tmp_path / "traces", name)
    log = "Shot,Energy (uJ),Probe (mm)\ns001,10,\ns002,20,4.5\n"
    changes = ('energy = "Energy (uJ)"', 'energy = "Energy (uJ)", standoff = "Probe (mm)"')
    found = read(write(tmp_path, changes, more=PROBE + TRACES, log=log))
    kinds = [one.kind for one in found.readings if str(one.place) == "traces/s002.csv"]
    assert kinds == ["arrival-time", "pressure-integral", "bubble-lifetime", "peak-pressure"]
    first, second = (setup for setup, _, _ in setups)
    assert (first.standoff, second.standoff) == (approx(5e-3), approx(4.5e-3))
    assert (first.sensitivity, first.trigger_offset) == (approx(0.45e-6, abs=0), approx(10e-9, abs=0))
    assert first.response_time == approx(5.305e-9, rel=1e-3, abs=0)
    assert first.sound_speed == approx(1482.3, abs=0.5)  # water at 20 °C: Del Grosso and Mader 1972, from memory
    assert setups[0][1][1] - setups[0][1][0] == approx(1e-8, rel=1e-6, abs=0)


def test_traces_need_a_flat_sensitivity(tmp_path):
    trace(tmp_path / "traces", "s001.csv")
    (tmp_path / "probe.csv").write_text("f (MHz),M\n1,2\n", encoding="utf-8")
    by_frequency = 'sensitivity_file = { file = "probe.csv", columns = { frequency = "f (MHz)", magnitude = "M" } }\n'
    probe = PROBE.replace('sensitivity = "0.45 V/MPa ± 10 %"\n', by_frequency + 'sensitivity_uncertainty = "10 %"\n')
    with pytest.raises(Refusal, match="depends on frequency"):
        read(write(tmp_path, more=probe + TRACES))


def test_a_map_gives_depth_diameter_and_volume(tmp_path, monkeypatch):
    seen = []

    def measure(height, pixel_pitch):
        seen.append((height, pixel_pitch))
        found = ("crater-depth", 1e-6, 1e-8), ("crater-diameter", 1e-5, 1e-7), ("crater-volume", 1e-17, 1e-18)
        return Finding(tuple(Measured(*one) for one in found), NOTHING)

    monkeypatch.setattr(measuring, "measure_map", measure)
    (tmp_path / "maps").mkdir()
    rows = "\n".join(",".join(f"{0.1 * row + 0.01 * column:.2f}" for column in range(12)) for row in range(10))
    (tmp_path / "maps" / "s001.csv").write_text(rows, encoding="utf-8")
    found = read(write(tmp_path, more=MAPS))
    mapped = [one for one in found.readings if one.place.file == "maps/s001.csv"]
    assert [one.kind for one in mapped] == ["crater-depth", "crater-diameter", "crater-volume"]
    height, pitch = seen[0]
    assert height.shape == (10, 12) and pitch == approx(0.5e-6, abs=0)
    assert height[3, 2] == approx(0.32e-6, abs=0)
    with pytest.raises(Refusal, match="no height_unit"):
        read(write(tmp_path, more=MAPS.replace('height_unit = "um"', "")))


def test_the_micrographs_of_a_sample_are_measured_together(tmp_path, monkeypatch):
    sizes = np.random.default_rng(5).lognormal(np.log(8e-9), 0.3, 90)
    share = {10: sizes[:40], 20: sizes[40:], 30: sizes[:4]}

    def measure(frame, pixel_pitch):
        diameters = share[round(float(frame.mean()) * 255)]
        return SimpleNamespace(diameters=diameters, weights=diameters / 8e-9, outline=NOTHING, remarks=("seen",))

    monkeypatch.setattr(measuring, "measure_micrograph", measure)
    for name, grey in (("A_1", 10), ("A_2", 20), ("B_1", 30)):
        picture(tmp_path / "tem" / f"{name}.png", grey=grey)
    (tmp_path / "tem" / "A_3.png").write_bytes(b"")
    found = read(write(tmp_path, SAMPLES, more=MICROGRAPHS, log=SAMPLE_LOG))
    together = from_diameters(sizes, sizes / 8e-9)
    median, spread = (one for one in found.readings if one.sample == "A")
    assert (median.kind, median.value, median.u) == (
        "median-diameter",
        approx(together.median),
        approx(together.median_u),
    )
    assert (spread.kind, spread.value) == ("geometric-sd", approx(together.geometric_sd))
    assert (str(median.place), median.shot, median.table) == ("tem/A_1.png", None, "2")
    assert any("90 particles of 2 micrographs together" in one.note for one in found.notes)
    refused = {one.source: one.reason for one in found.refused}
    assert set(refused) == {"tem/A_3.png", "tem/B_1.png"}
    assert "4 particles are too few" in refused["tem/B_1.png"]


def test_a_micrograph_named_by_its_shot_belongs_to_the_shots_sample(tmp_path, monkeypatch):
    sizes = np.linspace(5e-9, 9e-9, 30)
    monkeypatch.setattr(
        measuring,
        "measure_micrograph",
        lambda *_: SimpleNamespace(diameters=sizes, weights=np.ones(30), outline=NOTHING, remarks=()),
    )
    picture(tmp_path / "tem" / "s003.png")
    found = read(write(tmp_path, SAMPLES, more=MICROGRAPHS.replace("{sample}_{frame}", "{shot}"), log=SAMPLE_LOG))
    assert {one.sample for one in found.readings if one.kind == "median-diameter"} == {"B"}


# ---- the command ----


def test_measure_writes_readings_refusals_and_a_drawing_of_each_file(tmp_path, camera, capsys, monkeypatch):
    temporary = tmp_path / "temporary"
    temporary.mkdir()
    monkeypatch.setattr("tempfile.tempdir", str(temporary))
    folder, out = tmp_path / "campaign", tmp_path / "out"
    picture(folder / "frames" / "s001_1ns.png", grey=20)
    picture(folder / "frames" / "s002_1ns.png", grey=255)
    picture(folder / "frames" / "other.png")
    more = FRAMES.format("{shot}_{delay}ns.png")
    assert main(["measure", str(write(folder, more=more)), "--out", str(out), "--quiet"]) == 0
    said = capsys.readouterr().out
    for part in (
        "bubble radius: 1 reading",
        "1 drawing of what was found, in overlays/",
        "refused frames/s002_1ns.png: found nothing but light",
        "note frames/s001_1ns.png: as round as it can be",
        "no table asks for frames/other.png",
    ):
        assert part in said
    with (out / "readings.csv").open(encoding="utf-8-sig", newline="") as stream:
        rows = [row for row in csv.DictReader(stream) if row["kind"] == "bubble-radius"]
    assert [(row["shot"], row["source"], float(row["delay"])) for row in rows] == [
        ("s001", "frames/s001_1ns.png", approx(1e-9, abs=0))
    ]
    assert "frames/s002_1ns.png" in (out / "refused.csv").read_text(encoding="utf-8-sig")
    assert [path.name for path in (out / "overlays").iterdir()] == ["frames_s001_1ns.png.png"]
    assert list(temporary.iterdir()) == []
    assert main(["verify", str(out)]) == 0

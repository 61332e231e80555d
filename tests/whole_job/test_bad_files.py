"""Broken images, traces, maps and micrographs: each is refused by name, and the rest goes through."""

import io
import struct
import zlib

import numpy as np
import pytest
from campaign_folder import write
from PIL import Image

from reconcile.campaign.files import sha256_of
from reconcile.campaign.manifest import load
from reconcile.gather import gather
from reconcile.gather.crew import FEW

SHOTS = [f"s{number:03d}" for number in range(1, 41)]
LOG = "Shot,Energy (uJ),Sample\n" + "".join(f"{shot},{10 + n},{'AB'[n % 2]}\n" for n, shot in enumerate(SHOTS))
SAMPLES = ('energy = "Energy (uJ)"', 'energy = "Energy (uJ)", sample = "Sample"')
TABLES = """
[probe]
standoff = "5.0 mm ± 0.1 mm"
sensitivity = "0.45 V/MPa ± 10 %"
bandwidth = "30 MHz"
trigger_offset = "0 ns ± 20 ns"

[[readings]]
kind = "shadowgraph"
name = "camera"
files = "frames/{shot}_{delay}us.*"
pixel_pitch = "2 um ± 0.02 um"
target_edge = "bottom"
background = "frames/empty.png"

[[readings]]
kind = "probe-trace"
name = "hydrophone"
files = "traces/{shot}.*"
columns = { time = "t (us)", voltage = "U (V)" }
full_scale = "1 V"

[[readings]]
kind = "crater-map"
name = "profiler"
files = "maps/{shot}.*"
pixel_pitch = "0.5 um ± 0.5 %"
height_unit = "um"

[[readings]]
kind = "micrograph"
name = "microscope"
files = "tem/{sample}_{frame}.*"
pixel_pitch = "0.5 nm ± 1 %"
"""


# ---- sound files, drawn from plain formulas ----


def blurred(picture):
    """Soften an edge over about two pixels."""
    for axis in (0, 1):
        picture = (np.roll(picture, 1, axis) + 2 * picture + np.roll(picture, -1, axis)) / 4
    return picture


def frame(rng, radius):
    """A dark hemisphere on a dark target in even light; 8 bits."""
    rows, columns = np.mgrid[0:180, 0:240]
    seen = np.where(rows > 160, 0.04, 0.7)
    if radius:
        seen = np.where((rows <= 160) & (np.hypot(columns - 121.3, rows - 160) < radius), 0.08, seen)
    return (255 * np.clip(blurred(seen) + rng.normal(0, 0.008, seen.shape), 0, 1)).astype(np.uint8)


def trace_rows(rng, lifetime=60e-6):
    """A pulse by time of flight, and one more when the bubble collapses."""
    time = np.arange(-2e-6, 80e-6, 4e-9)
    voltage = rng.normal(0, 0.002, time.size)
    for arrival, height in ((3.37e-6, 0.5), (3.37e-6 + lifetime, 0.3)):
        after = np.maximum(time - arrival, 0)
        voltage += height * (1 - np.exp(-after / 6e-9)) * np.exp(-after / 15e-9)
    return np.column_stack((time * 1e6, voltage))


def heights(rng):
    """A pit 0.6 µm deep in a tilted plane [µm]."""
    rows, columns = np.mgrid[0:120, 0:140]
    pit = np.maximum(0, 1 - ((rows - 60) ** 2 + (columns - 70) ** 2) / 30**2)
    return 0.001 * rows + 0.002 * columns - 0.6 * pit + rng.normal(0, 0.005, rows.shape)


def micrograph(rng):
    """Dark discs well apart on a bright ground; 8 bits."""
    rows, columns = np.mgrid[0:300, 0:300]
    seen = np.full(rows.shape, 0.75)
    for row in range(30, 300, 48):
        for column in range(30, 300, 48):
            seen[np.hypot(rows - row, columns - column) < rng.lognormal(np.log(9), 0.2)] = 0.3
    return (255 * np.clip(blurred(seen) + rng.normal(0, 0.01, seen.shape), 0, 1)).astype(np.uint8)


def png(picture):
    stream = io.BytesIO()
    Image.fromarray(picture).save(stream, "PNG")
    return stream.getvalue()


def tiff(picture):
    stream = io.BytesIO()
    Image.fromarray(picture).save(stream, "TIFF")
    return stream.getvalue()


def text(rows, head=""):
    return (head + "\n".join(",".join(f"{value:.6g}" for value in row) for row in rows)).encode()


# ---- broken ones ----


def huge_png():
    """A header of 60 000 by 60 000 pixels above a few bytes."""

    def chunk(kind, content):
        return struct.pack(">I", len(content)) + kind + content + struct.pack(">I", zlib.crc32(kind + content))

    header = struct.pack(">IIBBBBB", 60_000, 60_000, 16, 0, 0, 0, 0)
    return (
        b"\x89PNG\r\n\x1a\n" + chunk(b"IHDR", header) + chunk(b"IDAT", zlib.compress(b"\0" * 99)) + chunk(b"IEND", b"")
    )


def huge_tiff():
    """A directory of 60 000 by 60 000 floating-point numbers above no data."""
    entries = [
        (256, 60_000),
        (257, 60_000),
        (258, 32),
        (259, 1),
        (262, 1),
        (273, 8),
        (277, 1),
        (278, 60_000),
        (279, 12),
        (339, 3),
    ]
    directory = b"".join(struct.pack("<HHII", tag, 4, 1, value) for tag, value in entries)
    return b"II*\0" + struct.pack("<I", 20) + b"\0" * 12 + struct.pack("<H", len(entries)) + directory + b"\0" * 4


def broken_frames(rng):
    good = png(frame(rng, 60))
    holed = frame(rng, 60).astype(np.float32) / 255
    holed[40:60, 50:70] = np.nan
    return {
        "truncated": ("png", good[: len(good) // 2]),
        "empty": ("png", b""),
        "wrong type": ("png", b"%PDF-1.7\n" + good),
        "wrong shape": ("png", png(frame(rng, 60)[:, :200])),
        "NaN block": ("tif", tiff(holed)),
        "oversized header": ("png", huge_png()),
    }


def broken_traces(rng):
    rows = trace_rows(rng)
    good = text(rows, "t (us),U (V)\n")
    holed = rows.copy()
    holed[900:950, 1] = np.nan
    return {
        "truncated": ("csv", good[:300]),
        "empty": ("csv", b""),
        "wrong type": ("csv", png(frame(rng, 60))),
        "wrong shape": ("csv", text(rows[:, :1], "t (us)\n")),
        "NaN block": ("csv", text(holed, "t (us),U (V)\n")),
        "oversized header": ("wav", huge_wav()),
    }


def huge_wav():
    """A header of 4 GiB of samples above a few bytes."""
    form = struct.pack("<HHIIHH", 1, 1, 250_000_000, 500_000_000, 2, 16)
    return (
        b"RIFF"
        + struct.pack("<I", 0xFFFFFFF0)
        + b"WAVEfmt "
        + struct.pack("<I", 16)
        + form
        + b"data"
        + struct.pack("<I", 0xFFFFFF00)
        + bytes(400)
    )


def broken_maps(rng):
    good = text(heights(rng))
    holed = heights(rng)
    holed[:80] = np.nan
    return {
        "truncated": ("csv", good[: len(good) // 2]),
        "empty": ("csv", b""),
        "wrong type": ("csv", png(frame(rng, 60))),
        "wrong shape": ("csv", text(heights(rng)[:2])),
        "NaN block": ("tif", tiff(holed.astype(np.float32))),
        "oversized header": ("tif", huge_tiff()),
    }


def broken_micrographs(rng):
    good = png(micrograph(rng))
    holed = micrograph(rng).astype(np.float32) / 255
    holed[40:60, 50:70] = np.nan
    colours = np.stack([micrograph(rng), micrograph(rng), micrograph(rng)], axis=-1)
    return {
        "truncated": ("png", good[: len(good) // 2]),
        "empty": ("png", b""),
        "wrong type": ("png", b"d (nm)\n12\n13\n"),
        "wrong shape": ("png", png(colours)),
        "NaN block": ("tif", tiff(holed)),
        "oversized header": ("tif", huge_tiff()),
    }


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    """A campaign with sound and broken files of every kind; the broken ones go with the last shots."""
    rng = np.random.default_rng(11)
    root = write(tmp_path_factory.mktemp("campaign") / "files", SAMPLES, more=TABLES, log=LOG)
    for name in ("frames", "traces", "maps", "tem"):
        (root / name).mkdir()
    (root / "frames" / "empty.png").write_bytes(png(frame(rng, 0)))
    for number, shot in enumerate(SHOTS[: FEW + 2]):
        (root / "frames" / f"{shot}_2us.png").write_bytes(png(frame(rng, 40 + number)))
    for shot in SHOTS[:3]:
        (root / "traces" / f"{shot}.csv").write_bytes(text(trace_rows(rng), "t (us),U (V)\n"))
        (root / "maps" / f"{shot}.csv").write_bytes(text(heights(rng)))
    for name in ("A_1", "B_1"):
        (root / "tem" / f"{name}.png").write_bytes(png(micrograph(rng)))
    for shot, (kind, content) in zip(SHOTS[-6:], broken_frames(rng).values(), strict=True):
        (root / "frames" / f"{shot}_2us.{kind}").write_bytes(content)
    for name, broken in (("traces", broken_traces(rng)), ("maps", broken_maps(rng))):
        for shot, (kind, content) in zip(SHOTS[-6:], broken.values(), strict=True):
            (root / name / f"{shot}.{kind}").write_bytes(content)
    for number, (kind, content) in enumerate(broken_micrographs(rng).values()):
        (root / "tem" / f"A_x{number}.{kind}").write_bytes(content)
    return root


@pytest.fixture(scope="module")
def alone(folder, tmp_path_factory):
    return gather(load(folder), workers=1, overlays=tmp_path_factory.mktemp("one"))


def broken_names(folder):
    names = [f"frames/{path.name}" for shot in SHOTS[-6:] for path in (folder / "frames").glob(f"{shot}*")]
    names += [
        f"{part}/{path.name}"
        for part in ("traces", "maps")
        for shot in SHOTS[-6:]
        for path in (folder / part).glob(f"{shot}*")
    ]
    return sorted(names + [f"tem/{path.name}" for path in (folder / "tem").glob("A_x*")])


def test_each_broken_file_is_refused_by_name_and_nothing_else(folder, alone):
    assert len(broken_names(folder)) == 24
    files = [refused.source.partition("!")[0] for refused in alone.refused]
    assert sorted(files) == broken_names(folder)
    assert [one for one in alone.refused if "fault of the program" in one.reason] == []


def test_the_reasons_say_what_is_wrong(alone):
    reasons = {one.source.partition("!")[0].partition(".")[0]: one.reason for one in alone.refused}
    shots = dict(
        zip(
            ("truncated", "empty", "wrong type", "wrong shape", "NaN block", "oversized header"),
            SHOTS[-6:],
            strict=True,
        )
    )
    assert "200 x 180 pixels" in reasons[f"frames/{shots['wrong shape']}_2us"]
    assert "400 pixels that hold no number" in reasons[f"frames/{shots['NaN block']}_2us"]
    assert "60000 x 60000" in reasons[f"frames/{shots['oversized header']}_2us"]
    assert "a PDF document" in reasons[f"frames/{shots['wrong type']}_2us"]
    assert "50 of" in reasons[f"traces/{shots['NaN block']}"]
    assert all("empty" in reasons[f"{part}/{shots['empty']}"] for part in ("traces", "maps"))


def test_the_rest_goes_through(alone):
    found = {}
    for reading in alone.readings:
        found.setdefault(reading.kind, []).append(reading)
    assert len(found["bubble-radius"]) == FEW + 2
    for number, reading in enumerate(found["bubble-radius"]):
        assert reading.value == pytest.approx((40 + number) * 2e-6, rel=0.02)
    assert [one.value for one in found["bubble-lifetime"]] == pytest.approx([60e-6] * 3, rel=0.01, abs=0)
    for kind in ("arrival-time", "pressure-integral", "crater-diameter"):
        assert len(found[kind]) == 3
    measured = [one.value for one in found["crater-depth"] if one.table == "profiler"]
    assert measured == pytest.approx([0.6e-6] * 3, rel=0.05, abs=0)
    assert [one.sample for one in found["median-diameter"]] == ["A", "B"]
    assert [one.value for one in found["median-diameter"]] == pytest.approx([9e-9] * 2, rel=0.1, abs=0)


def test_every_file_that_was_read_has_its_checksum_and_every_sound_one_its_drawing(folder, alone):
    read = {file.path: file.sha256 for file in alone.files}
    for part in ("frames", "traces", "maps", "tem"):
        for path in (folder / part).iterdir():
            assert read[f"{part}/{path.name}"] == sha256_of(path)
    assert alone.unasked == ()
    sound = set(read) - set(broken_names(folder)) - {"campaign.toml", "shots.csv", "craters.csv", "frames/empty.png"}
    assert set(alone.overlays) == sound
    for path in alone.overlays.values():
        assert path.stat().st_size <= 60_000


def test_two_workers_give_what_one_gives(folder, alone, tmp_path):
    told = []
    both = gather(load(folder), workers=2, progress=lambda *one: told.append(one), overlays=tmp_path)
    assert (both.readings, both.refused, both.notes, both.files) == (
        alone.readings,
        alone.refused,
        alone.notes,
        alone.files,
    )
    assert list(both.overlays) == list(alone.overlays)
    for source, path in both.overlays.items():
        assert path.read_bytes() == alone.overlays[source].read_bytes()
    total = FEW + 2 + 6
    assert ("measuring shadowgraph 'camera'", 0, total) in told
    assert ("measuring shadowgraph 'camera'", total, total) in told

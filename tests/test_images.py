"""Image files: what is read comes back as it was written, and what is damaged or hostile is refused by name."""

from __future__ import annotations

import os
import struct
import subprocess
import sys
import zlib
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from PIL import Image

from reconcile.campaign.refusal import Refusal
from reconcile.read.images import read_frames

SHAPE = (60, 50)


def grey(bits: int, seed: int = 1) -> np.ndarray:
    rng = np.random.default_rng(seed)
    return rng.integers(0, 2**bits, SHAPE).astype(np.uint8 if bits == 8 else np.uint16)


def chunk(kind: bytes, content: bytes) -> bytes:
    return struct.pack(">I", len(content)) + kind + content + struct.pack(">I", zlib.crc32(kind + content))


def png(rows: list[bytes], columns: int, bits: int, colour: int, extra: bytes = b"") -> bytes:
    """Return a PNG file of rows without filters, put together from the standard's text."""
    header = struct.pack(">IIBBBBB", columns, len(rows), bits, colour, 0, 0, 0)
    pixels = zlib.compress(b"".join(b"\0" + row for row in rows))
    return b"\x89PNG\r\n\x1a\n" + chunk(b"IHDR", header) + extra + chunk(b"IDAT", pixels) + chunk(b"IEND", b"")


def tiff(
    pages: list[tuple[dict[int, object], list[bytes]]], order: str = "<", loop: bool = False, big: bool = False
) -> bytes:
    """Return a TIFF file of pages given as tags and strips, put together from the standard's text."""
    content = bytearray((b"II" if order == "<" else b"MM") + struct.pack(order + "H", 43 if big else 42))
    content += struct.pack(order + "HHQ", 8, 0, 0) if big else struct.pack(order + "I", 0)
    word, link, first = ("Q", len(content) - 8, 0) if big else ("I", 4, 0)
    for tags, strips in pages:
        offsets = []
        for strip in strips:
            offsets.append(len(content))
            content += strip
        entries = {273: offsets, 279: [len(strip) for strip in strips], **tags}
        outside, table = bytearray(), bytearray()
        start = len(content)
        size = len(entries) * (20 if big else 12) + (16 if big else 6)
        for tag, value in sorted(entries.items()):
            text = isinstance(value, bytes)
            values = value if text else list(value) if isinstance(value, list | tuple) else [value]
            packed = value if text else struct.pack(f"{order}{len(values)}I", *values)
            table += struct.pack(order + "HH" + word, tag, 2 if text else 4, len(values))
            if len(packed) <= (8 if big else 4):
                table += packed.ljust(8 if big else 4, b"\0")
            else:
                table += struct.pack(order + word, start + size + len(outside))
                outside += packed
        content[link : link + (8 if big else 4)] = struct.pack(order + word, start)
        content += struct.pack(order + ("Q" if big else "H"), len(entries)) + table
        link = len(content)
        first = first or start
        content += struct.pack(order + word, 0) + outside
    if loop:
        content[link : link + 4] = struct.pack(order + "I", first)
    return bytes(content)


def tags(columns: int = 50, rows: int = 60, bits: int = 8, **change: int) -> dict[int, object]:
    named = {"compression": 259, "photometric": 262, "samples": 277, "strip_rows": 278, "format": 339, "predictor": 317}
    base: dict[int, object] = {256: columns, 257: rows, 258: bits, 259: 1, 262: 1, 277: 1, 278: rows}
    return {**base, **{named[key]: value for key, value in change.items()}}


def read(path: Path, content: bytes) -> np.ndarray:
    path.write_bytes(content)
    return read_frames(path, path.name)[0]


# ---- what is read ----


@pytest.mark.parametrize("bits", [8, 16])
def test_a_png_gives_its_levels_over_the_full_range(tmp_path: Path, bits: int) -> None:
    stored = grey(bits)
    Image.fromarray(stored).save(tmp_path / "a.png")
    frames = read_frames(tmp_path / "a.png", "a.png")
    assert (len(frames), frames.bits, frames.saturated) == (1, bits, 1.0)
    assert frames[0].dtype == np.float32
    np.testing.assert_allclose(frames[0], stored / (2**bits - 1), atol=1e-6)


@pytest.mark.parametrize("order", ["<", ">"])
@pytest.mark.parametrize("big", [False, True])
@pytest.mark.parametrize(
    ("kind", "packing"),
    [(kind, packing) for kind in ("u1", "u2", "f4", "f8") for packing in ("none", "deflate")]
    + [("u1", "predicted"), ("u2", "predicted")],
)
def test_a_tiff_is_read_in_either_order_of_bytes(
    tmp_path: Path, order: str, big: bool, kind: str, packing: str
) -> None:
    rng = np.random.default_rng(2)
    whole = kind[0] == "u"
    bits = 8 * int(kind[1])
    stored = rng.integers(0, 2**bits, SHAPE).astype(kind) if whole else rng.normal(size=SHAPE).astype(kind)
    written = stored.copy()
    if packing == "predicted":
        written[:, 1:] -= stored[:, :-1]
    raw = written.astype(order + kind).tobytes()
    half = len(raw) // 2
    strips = [raw[:half], raw[half:]]
    if packing != "none":
        strips = [zlib.compress(strip) for strip in strips]
    about = tags(
        bits=bits,
        strip_rows=30,
        compression=1 if packing == "none" else 8,
        format=1 if whole else 3,
        predictor=2 if packing == "predicted" else 1,
    )
    found = read(tmp_path / "a.tif", tiff([(about, strips)], order, big=big))
    np.testing.assert_allclose(found, stored / (2**bits - 1) if whole else stored, rtol=1e-6, atol=1e-7)


@pytest.mark.parametrize("kind", [np.uint8, np.uint16, np.float32])
@pytest.mark.parametrize("packing", ["tiff_lzw", "packbits", "tiff_adobe_deflate"])
def test_packed_strips_of_another_writer_are_read(tmp_path: Path, kind: type, packing: str) -> None:
    stored = (np.random.default_rng(3).random(SHAPE) * (1 if kind is np.float32 else np.iinfo(kind).max)).astype(kind)
    for predictor in (1, 2) if kind is not np.float32 else (1, 3):
        if packing == "packbits" and predictor > 1:
            continue
        Image.fromarray(stored).save(tmp_path / "a.tif", compression=packing, tiffinfo={317: predictor})
        found = read_frames(tmp_path / "a.tif", "a.tif")[0]
        np.testing.assert_allclose(found, stored / (1 if kind is np.float32 else np.iinfo(kind).max), atol=1e-6)


@pytest.mark.parametrize(("bits", "packing"), [(8, 1), (16, 1), (8, 8), (16, 8), (8, 5), (16, 5)])
def test_white_is_zero_is_turned_round(tmp_path: Path, bits: int, packing: int) -> None:
    stored = grey(bits)
    path = tmp_path / "a.tif"
    if packing == 5:
        Image.fromarray(stored).save(path, compression="tiff_lzw")
        content = path.read_bytes()
        at = content.index(struct.pack("<HHI", 262, 3, 1)) + 8
        path.write_bytes(content[:at] + b"\0\0" + content[at + 2 :])
    else:
        raw = stored.tobytes()
        about = tags(bits=bits, photometric=0, compression=packing)
        path.write_bytes(tiff([(about, [raw if packing == 1 else zlib.compress(raw)])]))
    np.testing.assert_allclose(read_frames(path, "a.tif")[0], 1 - stored / (2**bits - 1), atol=1e-6)


def test_equal_channels_are_one_grey_level(tmp_path: Path) -> None:
    stored = grey(8)
    Image.fromarray(np.stack([stored] * 3, 2)).save(tmp_path / "rgb.png")
    Image.fromarray(np.stack([stored] * 3 + [np.full(SHAPE, 255, np.uint8)], 2)).save(tmp_path / "rgba.png")
    Image.fromarray(np.stack([stored] * 3, 2)).save(tmp_path / "rgb.tif")
    Image.fromarray(np.stack([stored] * 3, 2)).save(tmp_path / "lzw.tif", compression="tiff_lzw")
    for name in ("rgb.png", "rgba.png", "rgb.tif", "lzw.tif"):
        np.testing.assert_allclose(read_frames(tmp_path / name, name)[0], stored / 255, atol=1e-6)


def test_16_bit_colour_that_loses_bits_is_said_so(tmp_path: Path) -> None:
    stored = grey(16)
    rows = [np.repeat(row[:, None], 3, 1).astype(">u2").tobytes() for row in stored]
    path = tmp_path / "deep.png"
    path.write_bytes(png(rows, 50, 16, 2))
    frames = read_frames(path, "deep.png")
    assert frames.bits == 8 and "upper 8 bits" in frames.notes[0]
    np.testing.assert_allclose(frames[0], (stored >> 8) / 255, atol=1e-6)
    raw = np.repeat(stored[:, :, None], 3, 2).tobytes()
    deep = read(tmp_path / "deep.tif", tiff([({**tags(photometric=2, samples=3), 258: [16] * 3}, [raw])]))
    np.testing.assert_allclose(deep, stored / 65535, atol=1e-6)


def test_tiles_are_laid_where_they_belong(tmp_path: Path) -> None:
    stored = grey(16)
    padded = np.zeros((64, 64), np.uint16)
    padded[:60, :50] = stored
    tiles = [padded[y : y + 16, x : x + 32].tobytes() for y in range(0, 64, 16) for x in (0, 32)]
    about = {**tags(bits=16), 322: 32, 323: 16}
    del about[278]
    plain = tiff([(about, tiles)])
    # The same file with its strips' tags renamed to those of tiles.
    content = plain.replace(struct.pack("<HH", 273, 4), struct.pack("<HH", 324, 4))
    content = content.replace(struct.pack("<HH", 279, 4), struct.pack("<HH", 325, 4))
    np.testing.assert_allclose(read(tmp_path / "a.tif", content), stored / 65535, atol=1e-6)


def test_a_stack_gives_each_page_and_passes_a_thumbnail_over(tmp_path: Path) -> None:
    stored = [grey(16, seed) for seed in range(5)]
    pages = [(tags(bits=16), [frame.tobytes()]) for frame in stored]
    pages.insert(1, ({**tags(5, 6), 254: 1}, [bytes(30)]))
    path = tmp_path / "stack.tif"
    path.write_bytes(tiff(pages))
    frames = read_frames(path, "stack.tif")
    assert len(frames) == 5 and frames.notes
    for found, frame in zip(frames, stored, strict=True):
        np.testing.assert_allclose(found, frame / 65535, atol=1e-6)
    np.testing.assert_allclose(frames[-1], stored[-1] / 65535, atol=1e-6)
    with pytest.raises(IndexError):
        frames[5]


def test_a_damaged_page_is_refused_by_its_number_and_the_others_are_read(tmp_path: Path) -> None:
    stored = grey(8)
    packed = zlib.compress(stored.tobytes())
    bad = packed[:40] + bytes(20) + packed[60:]
    good = (tags(compression=8), [packed])
    path = tmp_path / "stack.tif"
    path.write_bytes(tiff([good, (tags(compression=8), [bad]), good]))
    frames = read_frames(path, "runs/stack.tif")
    with pytest.raises(Refusal, match=r"^runs/stack\.tif!page 2: "):
        frames[1]
    np.testing.assert_allclose(frames[2], stored / 255, atol=1e-6)


def test_names_with_blanks_and_any_script_and_a_wrong_ending_are_read(tmp_path: Path) -> None:
    stored = grey(8)
    for name in ("кадр 3 µs.png", "フレーム.png", "really a.tif"):
        with (tmp_path / name).open("wb") as stream:
            Image.fromarray(stored).save(stream, format="PNG")
        np.testing.assert_allclose(read_frames(tmp_path / name, name)[0], stored / 255, atol=1e-6)


# ---- what is refused ----

RAW = grey(8).tobytes()
GOOD_PNG = png([RAW[50 * row : 50 * row + 50] for row in range(60)], 50, 8, 0)
GOOD_TIFF = tiff([(tags(), [RAW])])
FLOATS = np.zeros(SHAPE, np.float32)
FLOATS[10:20, 10:20] = np.nan


def _huge_png() -> bytes:
    header = struct.pack(">IIBBBBB", 20_000, 20_000, 8, 0, 0, 0, 0)
    pixels = zlib.compress(bytes(20_001 * 2000))
    return b"\x89PNG\r\n\x1a\n" + chunk(b"IHDR", header) + chunk(b"IDAT", pixels) + chunk(b"IEND", b"")


def _inflating(size: int) -> bytes:
    packer = zlib.compressobj()
    return b"".join(packer.compress(bytes(1 << 20)) for _ in range(size >> 20)) + packer.flush()


def _rgb() -> bytes:
    rows = np.random.default_rng(4).integers(0, 255, (60, 150)).astype(np.uint8)
    return png([row.tobytes() for row in rows], 50, 8, 2)


DAMAGED: dict[str, tuple[Callable[[], bytes], str]] = {
    "empty.png": (lambda: b"", "an empty file"),
    "text.png": (lambda: b"delay,radius\n1,2\n", "a text file"),
    "greek.tif": (lambda: "ακτίνα, καθυστέρηση".encode(), "a text file"),
    "photo.png": (lambda: b"\xff\xd8\xff\xe0" + bytes(100), "JPEG"),
    "table.tif": (lambda: b"PK\x03\x04" + bytes(100), "zip"),
    "noise.tif": (lambda: bytes(range(1, 9)) * 99, "does not begin as a picture"),
    "cut.png": (lambda: GOOD_PNG[: len(GOOD_PNG) // 2], "breaks off"),
    "only-signature.png": (lambda: GOOD_PNG[:8], "breaks off"),
    "no-end.png": (lambda: GOOD_PNG[:-12], "breaks off"),
    "flipped.png": (lambda: GOOD_PNG[:300] + bytes([GOOD_PNG[300] ^ 255]) + GOOD_PNG[301:], "checksum"),
    "short.png": (
        lambda: png([RAW[:50]] * 30, 50, 8, 0).replace(*_taller()),
        "1530 bytes of pixels, unpacked, in place of 3060",
    ),
    "no-pixels.png": (lambda: GOOD_PNG[:33] + chunk(b"IEND", b""), "without pixels"),
    "huge.png": (_huge_png, "20000 x 20000"),
    "palette.png": (lambda: png([RAW[:50]] * 60, 50, 8, 3, chunk(b"PLTE", bytes(768))), "palette"),
    "colour.png": (_rgb, "channels differ"),
    "clear.png": (lambda: png([RAW[:100]] * 60, 50, 8, 4), "transparent"),
    "bilevel.png": (lambda: png([RAW[:7]] * 60, 50, 1, 0), "1 bits"),
    "cut.tif": (lambda: tiff([(tags(), [RAW])])[:2000], "ought to hold"),
    "header-only.tif": (lambda: GOOD_TIFF[:8], "ought to hold|breaks off"),
    "four-bytes.tif": (lambda: GOOD_TIFF[:4], "ought to hold|breaks off"),
    "no-page.tif": (lambda: b"II*\0\0\0\0\0", "no page"),
    "circle.tif": (lambda: tiff([(tags(), [RAW])] * 2, loop=True), "circle"),
    "huge.tif": (lambda: tiff([(tags(60_000, 60_000), [bytes(12)])]), "60000 x 60000"),
    "thin.tif": (lambda: tiff([(tags(4000, 4000), [bytes(12)])]), "12 bytes of pixels"),
    "flat.tif": (lambda: tiff([(tags(0, 60), [RAW])]), "0 x 60 pixels"),
    "strips.tif": (lambda: tiff([(tags(strip_rows=20), [RAW])]), "1 strips or tiles in place of 3"),
    "excess.tif": (lambda: tiff([(tags(10, 10, compression=8), [bytes(70_000)])]), "70000 bytes"),
    "bomb.tif": (lambda: tiff([(tags(16, 16, compression=8), [_inflating(48 << 20)])]), "more than the 256 bytes"),
    "starved.tif": (lambda: tiff([(tags(compression=8), [zlib.compress(RAW[:999])])]), "999 bytes in place of 3000"),
    "torn.tif": (lambda: tiff([(tags(compression=8), [zlib.compress(RAW)[:500]])]), "in place of 3000|unpacked"),
    "lzw.tif": (lambda: tiff([(tags(compression=5), [b"\x80\x0b\x60\x50" * 9])]), "cannot be unpacked"),
    "jpeg.tif": (lambda: tiff([(tags(compression=7), [bytes(100)])]), "JPEG"),
    "packed.tif": (lambda: tiff([(tags(bits=12), [bytes(4500)])]), "12 bits, packed"),
    "signed.tif": (lambda: tiff([(tags(bits=16, format=2), [bytes(6000)])]), "signed"),
    "palette.tif": (lambda: tiff([(tags(photometric=3), [RAW])]), "palette"),
    "nan.tif": (lambda: tiff([(tags(bits=32, format=3), [FLOATS.tobytes()])]), "100 pixels that hold no number"),
    "tiles.tif": (lambda: _tiled(60_000), "tiles of 60000"),
    "many-tags.tif": (lambda: b"II*\0\x08\0\0\0" + b"\xff\xff" + bytes(100), "directory of 65535"),
    "long-tag.tif": (lambda: _long_tag(), "2000000000 values"),
    "hyper.tif": (lambda: tiff([({**tags(), 270: b"ImageJ=1\nimages=40\n"}, [RAW])]), "40 frames behind"),
    "stack.tif": (lambda: tiff([(tags(8192, 8192), [bytes(9)])] * 65), "65 pages, 4.1 GiB"),
}


def _taller() -> tuple[bytes, bytes]:
    def header(rows: int) -> bytes:
        return chunk(b"IHDR", struct.pack(">IIBBBBB", 50, rows, 8, 0, 0, 0, 0))

    return header(30), header(60)


def _tiled(side: int) -> bytes:
    plain = tiff([({**tags(), 322: side, 323: side}, [RAW])])
    content = plain.replace(struct.pack("<HH", 273, 4), struct.pack("<HH", 324, 4))
    return content.replace(struct.pack("<HH", 279, 4), struct.pack("<HH", 325, 4))


def _long_tag() -> bytes:
    return GOOD_TIFF.replace(struct.pack("<HHI", 273, 4, 1), struct.pack("<HHI", 273, 4, 2_000_000_000))


@pytest.mark.parametrize("name", DAMAGED)
def test_a_damaged_or_hostile_file_is_refused_by_name(tmp_path: Path, name: str) -> None:
    make, words = DAMAGED[name]
    path = tmp_path / name
    path.write_bytes(make())
    with pytest.raises(Refusal, match=words) as caught:
        read_frames(path, f"frames/{name}")
    assert str(caught.value).startswith(f"frames/{name}")
    assert caught.value.remedy.endswith(".")


def test_a_png_whose_lower_rows_are_really_black_is_read(tmp_path: Path) -> None:
    stored = grey(8)
    stored[40:] = 0
    for interlaced in (False, True):
        Image.fromarray(stored).save(tmp_path / "a.png", interlace=interlaced)
        np.testing.assert_allclose(read_frames(tmp_path / "a.png", "a.png")[0], stored / 255, atol=1e-6)


def test_a_missing_file_and_a_folder_are_refused(tmp_path: Path) -> None:
    for path in (tmp_path / "none.png", tmp_path):
        with pytest.raises(Refusal, match="cannot be read"):
            read_frames(path, "none.png")


def test_random_damage_never_ends_in_anything_but_a_refusal_or_a_frame(tmp_path: Path) -> None:
    Image.fromarray(grey(16)).save(tmp_path / "lzw.tif", compression="tiff_lzw")
    rng = np.random.default_rng(6)
    path, refused = tmp_path / "damaged", 0
    for whole in (GOOD_PNG, GOOD_TIFF, (tmp_path / "lzw.tif").read_bytes()):
        for _ in range(120):
            content = bytearray(whole)
            for at in rng.integers(0, len(content), rng.integers(1, 6)):
                content[at] = rng.integers(256)
            # The header and the directories are where damage does most.
            content[int(rng.integers(4, 40))] = rng.integers(256)
            content[-int(rng.integers(1, 200))] = rng.integers(256)
            path.write_bytes(bytes(content))
            try:
                for frame in read_frames(path, "damaged"):
                    assert np.isfinite(frame).all()
            except Refusal:
                refused += 1
    assert refused > 120


@pytest.mark.skipif(sys.platform != "linux", reason="the limit on memory is set as Linux does")
def test_no_file_takes_a_gigabyte(tmp_path: Path) -> None:
    (tmp_path / "bomb.tif").write_bytes(tiff([(tags(16, 16, compression=8), [_inflating(256 << 20)])]))
    (tmp_path / "huge.png").write_bytes(_huge_png())
    large = np.zeros((8192, 4096), np.uint16)
    (tmp_path / "large.tif").write_bytes(tiff([(tags(4096, 8192, bits=16), [large.tobytes()])]))
    script = (
        "import resource, sys\n"
        "from pathlib import Path\n"
        "import PIL.Image\n"
        "from reconcile.campaign.refusal import Refusal\n"
        "from reconcile.read.images import read_frames\n"
        "resource.setrlimit(resource.RLIMIT_AS, (1 << 30, 1 << 30))\n"
        "for name in sys.argv[1:]:\n"
        "    try:\n"
        "        print(read_frames(Path(name), name)[0].shape)\n"
        "    except Refusal as refusal:\n"
        "        print('refused', refusal.found)\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", script, "bomb.tif", "huge.png", "large.tif"],
        cwd=tmp_path,
        env={**os.environ, "OMP_NUM_THREADS": "1", "PYTHONPATH": str(Path(__file__).parent.parent)},
        capture_output=True,
        encoding="utf-8",
        timeout=60,
    )
    assert done.returncode == 0, done.stderr
    bomb, huge, shape = done.stdout.splitlines()
    assert bomb.startswith("refused") and bomb.endswith("bytes of pixels where 256 would do")
    assert huge == "refused a frame of 20000 x 20000 pixels"
    assert shape == "(8192, 4096)"

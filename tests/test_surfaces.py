"""Height maps as files: what is read as written, what is mended with a note, and what is refused by name."""

import struct
from pathlib import Path

import numpy as np
import pytest
import tifffile
from PIL import Image

from reconcile.campaign.refusal import Refusal
from reconcile.read.surfaces import Surface, read_surface

UM = 1e-6


def heights(rows: int = 20, columns: int = 30) -> np.ndarray:
    return np.random.default_rng(5).normal(0, 0.3, (rows, columns)).astype(np.float32)


def read(path: Path, **settings: str) -> Surface:
    return read_surface(path, f"maps/{path.name}", UM, **settings)


def grid(folder: Path, text: str, name: str = "map.csv") -> Path:
    path = folder / name
    path.write_text(text, encoding="utf-8")
    return path


def as_text(values: np.ndarray, delimiter: str, decimal: str = ".") -> str:
    rows = (delimiter.join(f"{value:.4f}".replace(".", decimal) for value in row) for row in values)
    return "\n".join(rows) + "\n"


@pytest.mark.parametrize("order", ["<", ">"])
@pytest.mark.parametrize("kind", [np.float32, np.float64])
def test_a_floating_tiff_gives_its_heights(tmp_path, order, kind):
    values = heights().astype(kind)
    tifffile.imwrite(tmp_path / "s001.tif", values, byteorder=order)
    surface = read(tmp_path / "s001.tif")
    np.testing.assert_allclose(surface.height, values.astype(float) * UM, rtol=1e-12)
    assert surface.notes == ()


@pytest.mark.parametrize("compression", ["tiff_lzw", "tiff_adobe_deflate"])
def test_a_packed_tiff_gives_the_same_heights(tmp_path, compression):
    values = heights()
    Image.fromarray(values).save(tmp_path / "s001.tif", compression=compression)
    np.testing.assert_allclose(read(tmp_path / "s001.tif").height, values.astype(float) * UM, rtol=1e-12)


def test_whole_numbers_are_taken_with_a_note(tmp_path):
    values = np.random.default_rng(6).integers(-900, 900, (20, 30)).astype(np.int16)
    tifffile.imwrite(tmp_path / "s001.tif", values)
    surface = read(tmp_path / "s001.tif")
    np.testing.assert_allclose(surface.height, values * UM, rtol=1e-12)
    assert "whole numbers" in surface.notes[0].note


@pytest.mark.parametrize("mark", [np.nan, np.inf, -32768.0, 1e38, -9999.0])
def test_missing_points_are_nan_however_they_are_marked(tmp_path, mark):
    values = heights()
    lost = np.random.default_rng(7).random(values.shape) < 0.1
    values[lost] = mark
    tifffile.imwrite(tmp_path / "s001.tif", values)
    np.testing.assert_array_equal(np.isnan(read(tmp_path / "s001.tif").height), lost)


def test_the_largest_measured_height_stays_although_it_repeats(tmp_path):
    values = np.round(heights(), 1)  # a coarse step: every height repeats
    tifffile.imwrite(tmp_path / "s001.tif", values)
    assert np.isfinite(read(tmp_path / "s001.tif").height).all()


@pytest.mark.parametrize(
    ("delimiter", "decimal"), [(",", "."), (";", "."), (";", ","), ("\t", ","), ("  ", "."), (" ", ","), ("|", ".")]
)
def test_delimiter_and_decimal_sign_of_a_grid_are_found(tmp_path, delimiter, decimal):
    values = heights()
    surface = read(grid(tmp_path, as_text(values, delimiter, decimal)))
    np.testing.assert_allclose(surface.height, values.astype(float) * UM, atol=0.5e-4 * UM, rtol=0)


def test_missing_points_of_a_grid_and_titles_above_it(tmp_path):
    lines = ["; ".join(f"{value:.3f}" for value in row) for row in heights()]
    lines[4] = "; ".join(["", "NaN", "***", "-"] + ["0.125"] * 26)
    surface = read(grid(tmp_path, "Height map\nunit: um\n" + "\n".join(lines) + "\n"))
    assert surface.height.shape == (20, 30)
    assert np.flatnonzero(np.isnan(surface.height)).tolist() == [120, 121, 122, 123]
    assert surface.height[4, 10] == pytest.approx(0.125 * UM, rel=1e-12, abs=0)
    assert "2 lines above" in surface.notes[0].note


def test_a_delimiter_at_the_end_of_each_line_is_no_column(tmp_path):
    text = as_text(heights(), ";").replace("\n", ";\n")
    assert read(grid(tmp_path, text)).height.shape == (20, 30)


def test_a_comma_that_could_be_either_sign_is_asked_for(tmp_path):
    text = "\n".join(";".join(["1,234"] * 10) for _ in range(10))
    with pytest.raises(Refusal, match="decimal"):
        read(grid(tmp_path, text))
    assert read(grid(tmp_path, text), decimal=",").height[0, 0] == pytest.approx(1.234 * UM, rel=1e-12, abs=0)


def tiff_with(folder: Path, **tags: int) -> Path:
    """Write a sound float TIFF, then overwrite the values of tags in its header."""
    codes = {"width": 256, "rows": 257, "offsets": 273, "counts": 279}
    path = folder / "s009.tif"
    tifffile.imwrite(path, heights(), rowsperstrip=20, metadata=None)
    with tifffile.TiffFile(path) as file:
        places = {name: file.pages[0].tags[codes[name]] for name in tags}
        found = {name: (tag.offset, tag.dtype) for name, tag in places.items()}
    content = bytearray(path.read_bytes())
    for name, value in tags.items():
        at = found[name][0]
        struct.pack_into("<HII", content, at + 2, 4, 1, value)
    path.write_bytes(bytes(content))
    return path


def cut(folder: Path, keep: float) -> Path:
    path = folder / "s009.tif"
    tifffile.imwrite(path, heights(64, 64))
    content = path.read_bytes()
    path.write_bytes(content[: int(len(content) * keep)])
    return path


def written(folder: Path, content: bytes, name: str = "s009.tif") -> Path:
    path = folder / name
    path.write_bytes(content)
    return path


def saved(folder: Path, values: np.ndarray, **settings: object) -> Path:
    path = folder / "s009.tif"
    tifffile.imwrite(path, values, **settings)
    return path


def part_missing(share: float) -> np.ndarray:
    values = heights()
    values[: round(20 * share)] = np.nan
    return values


def packed_and_cut(folder: Path) -> Path:
    path = folder / "s009.tif"
    Image.fromarray(heights(200, 200)).save(path, compression="tiff_adobe_deflate")
    content = bytearray(path.read_bytes())
    content[2000:6000] = b"\xff" * 4000
    path.write_bytes(bytes(content))
    return path


DAMAGED = {
    "half of it": (lambda folder: cut(folder, 0.5), "cannot be read|too early"),
    "its header alone": (lambda folder: written(folder, b"II*\0\x08\0\0\0"), "cannot be read"),
    "nothing": (lambda folder: written(folder, b""), "an empty file"),
    "an empty grid": (lambda folder: written(folder, b"\n\n", "s009.csv"), "an empty file"),
    "a text": (lambda folder: written(folder, b"height in um"), "no TIFF"),
    "a header far too large": (lambda folder: tiff_with(folder, width=60_000, rows=60_000), "60000 points"),
    "more rows than bytes": (lambda folder: tiff_with(folder, rows=4_000), "cannot be read|strips|bytes"),
    "a strip outside the file": (lambda folder: tiff_with(folder, offsets=900_000), "cannot be read|too early"),
    "colours": (lambda folder: saved(folder, np.zeros((20, 30, 3), np.uint8), photometric="rgb"), "colours"),
    "a grey picture": (lambda folder: saved(folder, np.zeros((20, 30), np.uint8)), "picture"),
    "several pages": (
        lambda folder: saved(folder, np.zeros((4, 20, 30), np.float32), photometric="minisblack"),
        "4 pages",
    ),
    "no height at all": (lambda folder: saved(folder, part_missing(1)), "without a single height"),
    "more missing than half": (lambda folder: saved(folder, part_missing(0.7)), "70 % of its points missing"),
    "one line": (lambda folder: saved(folder, heights(1, 300)), "1 rows of 300"),
    "packed and broken": (packed_and_cut, "cannot be read"),
    "a ragged row": (
        lambda folder: grid(folder, as_text(heights(), ";") + "0.1;0.2;0.3\n", "s009.csv"),
        r"line 21.*3 points in a row.*30",
    ),
    "a word among heights": (
        lambda folder: grid(folder, as_text(heights(), ";").replace(";", ";off ", 1), "s009.csv"),
        "line 1.*'off",
    ),
    "a table": (lambda folder: grid(folder, "shot;depth\ns001;0.4\ns002;0.5\n", "s009.csv"), "line 2|row of"),
    "bytes in a grid": (lambda folder: written(folder, bytes(range(256)) * 20, "s009.csv"), "bytes that are no text"),
    "an unknown ending": (lambda folder: written(folder, b"abc", "s009.xyz"), "ends in '.xyz'"),
}


@pytest.mark.parametrize("damage", DAMAGED)
def test_a_damaged_map_is_refused_by_name(tmp_path, damage):
    make, told = DAMAGED[damage]
    path = make(tmp_path)
    with pytest.raises(Refusal, match=told) as refusal:
        read(path)
    assert str(refusal.value).startswith(f"maps/{path.name}")


def test_a_folder_in_place_of_a_map_is_refused(tmp_path):
    (tmp_path / "s001.tif").mkdir()
    with pytest.raises(Refusal, match="cannot be opened"):
        read(tmp_path / "s001.tif")
    with pytest.raises(Refusal, match="cannot be opened"):
        read(tmp_path / "absent.tif")

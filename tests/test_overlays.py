"""Drawings of what was found: small files, strokes where they belong, legible without colour."""

import numpy as np
import pytest
from PIL import Image

from reconcile.gather.overlays import MOST_BYTES, WIDTH, draw_picture, draw_trace
from reconcile.measure.measured import Outline, Stroke

RNG = np.random.default_rng(3)


def drawn(path):
    with Image.open(path) as image:
        assert image.width <= WIDTH
        return np.asarray(image.convert("RGB")).astype(int)


def grey(colours):
    return colours @ [0.299, 0.587, 0.114]


def line(*points):
    return np.array(points, dtype=float)


@pytest.mark.parametrize("shape", [(512, 640), (1024, 1280), (1500, 300), (64, 48), (9, 2000)])
def test_the_drawing_of_a_noisy_picture_is_a_small_file(tmp_path, shape):
    noisy = RNG.normal(0.5, 0.1, shape).astype(np.float32)
    outline = Outline((Stroke(line((1, 1), (shape[1] - 2, shape[0] - 2)), "found"),), "radius 183.2 µm ± 0.4 µm")
    path = draw_picture(noisy, outline, tmp_path / "a.b")
    assert path == tmp_path / "a.b.png"
    assert path.stat().st_size <= MOST_BYTES
    assert 100 <= drawn(path).shape[1] <= WIDTH


def test_a_stroke_lies_where_its_points_are(tmp_path):
    # A picture of twice the drawing's size: pixel (400, 300) of it lies at (200, 150) of the drawing.
    outline = Outline((Stroke(line((400, 100), (400, 700)), "found"),), "")
    image = drawn(draw_picture(np.zeros((800, 1280)), outline, tmp_path / "x"))
    assert image.shape[:2] == (400, 640)
    columns = np.flatnonzero(grey(image[200]) > 150)
    assert columns.min() >= 199 and columns.max() <= 201
    rows = np.flatnonzero(grey(image[:, 200]) > 150)
    assert abs(rows.min() - 50) <= 1 and abs(rows.max() - 350) <= 1


def test_a_small_picture_is_enlarged_and_its_strokes_with_it(tmp_path):
    picture = np.zeros((50, 60))
    picture[20, 30] = 1.0
    outline = Outline((Stroke(line((30, 24), (30, 40)), "reference"),), "")
    image = drawn(draw_picture(picture, outline, tmp_path / "x"))
    assert image.shape[:2] == (200, 240)
    pixel = np.flatnonzero(image[81, 120:124].min(axis=1) > 200)
    assert pixel.tolist() == [0, 1, 2, 3]  # one bright pixel, four times as wide
    blue = np.flatnonzero((image[100:120, :, 2] > 200).any(axis=0))
    assert abs(blue.mean() - 121.5) <= 1


@pytest.mark.parametrize("level", [0.0, 0.5, 1.0])
def test_strokes_of_each_role_stand_out_in_grey_on_any_background_and_differ_in_shape(tmp_path, level):
    picture = np.full((200, 400), level)
    picture[0, 0], picture[0, -1] = 0.0, 1.0
    picture[-40:-20, :40], picture[-40:-20, -40:] = 0.0, 1.0  # so that black and white stay what they are
    roles = ("found", "reference", "left-out")
    strokes = tuple(Stroke(line((20, 40 * n), (380, 40 * n)), role) for n, role in enumerate(roles, start=1))
    image = grey(drawn(draw_picture(picture, Outline(strokes, ""), tmp_path / "x")))
    shares = []
    for n in (1, 2, 3):
        rows = image[40 * n - 3 : 40 * n + 4, 30:370]
        assert rows.max() - rows.min() > 110  # of 255, between line and rim or background
        shares.append(float((np.ptp(rows, axis=0) > 110).mean()))
    assert shares[0] == 1.0 > shares[1] > shares[2] > 0.1


def test_points_without_a_number_do_not_stop_a_drawing(tmp_path):
    height = np.tile(np.linspace(-1e-6, 1e-6, 50), (40, 1))
    height[10:20, 10:20] = np.nan
    stroke = Stroke(line((1, 1), (np.nan, 5), (40, 30)), "found")
    image = drawn(draw_picture(height, Outline((stroke,), "depth"), tmp_path / "x"))
    assert (image[60, 60] >= 250).all()
    assert draw_picture(np.full((20, 20), np.nan), Outline((), ""), tmp_path / "y").is_file()


def test_strokes_outside_the_picture_and_many_of_them_do_no_harm(tmp_path):
    angles = np.linspace(0, 2 * np.pi, 40)
    rings = [
        Stroke(np.column_stack((x + 6 * np.cos(angles), y + 6 * np.sin(angles))), "found")
        for x, y in RNG.uniform(-50, 700, (300, 2))
    ]
    path = draw_picture(RNG.normal(0.5, 0.1, (512, 640)), Outline(tuple(rings), "300 particles"), tmp_path / "x")
    assert path.stat().st_size <= MOST_BYTES


def test_a_trace_is_drawn_whole_and_its_first_pulse_enlarged(tmp_path):
    time = np.arange(200_000) * 1e-9
    voltage = RNG.normal(0, 0.01, time.size)
    pulse = (time > 3.4e-6) & (time < 3.6e-6)
    voltage[pulse] += 1.0
    marks = Stroke(line((3.4e-6, 0.0), (150e-6, 0.5)), "found", marks=True)
    found = Stroke(np.column_stack((time[pulse], voltage[pulse])), "found")
    path = draw_trace(time, voltage, Outline((found, marks), "arrival 3.400 µs ± 0.002 µs"), tmp_path / "t")
    assert path.stat().st_size <= MOST_BYTES
    image = drawn(path)
    red = (image[..., 0] > 180) & (image[..., 2] < 90)
    columns = np.flatnonzero(red[200:380].any(axis=0))
    assert columns.max() - columns.min() > 150  # enlarged: 0.2 µs would be less than a pixel of the whole
    upper = np.flatnonzero(red[:190].any(axis=0))
    collapse = 12 + 150 / 200 * (WIDTH - 24)
    assert abs(upper.max() - collapse) < 8
    flat = draw_trace(np.arange(64) * 1e-9, np.zeros(64), Outline((), "nothing"), tmp_path / "f")
    assert flat.is_file()


def test_where_no_drawing_is_wanted_none_is_made(tmp_path):
    assert draw_picture(np.zeros((9, 9)), Outline((), ""), None) is None
    assert draw_trace(np.arange(9.0), np.zeros(9), Outline((), ""), None) is None
    assert list(tmp_path.iterdir()) == []

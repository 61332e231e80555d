"""Micrographs drawn on a finer raster: discs on an uneven film, some touching, some cut by the border."""

import math

import numpy as np
import pytest
from scipy import ndimage

from reconcile.measure.measured import Unmeasurable
from reconcile.measure.micrograph import Particles, measure_micrograph
from reconcile.measure.particles import from_diameters

NM = 1e-9
PITCH = 0.5 * NM
FINER = 4  # samples across a pixel


def scatter(
    rng: np.random.Generator, size: int, number: int, median: float, geometric_sd: float, touching: float = 0.2
) -> np.ndarray:
    """Return (n, 3) columns, rows and radii [px] of discs over the frame and around it, `touching` of them in pairs."""
    margin = 60
    count = rng.poisson(number * (size + 2 * margin) ** 2 / size**2)
    radii = np.sort(0.5 * median * np.exp(math.log(geometric_sd) * rng.normal(size=count)))[
        ::-1
    ]  # the large ones first
    placed: list[tuple[float, float, float]] = []
    for radius in radii:
        while True:
            partner = None
            if placed and rng.random() < 0.55 * touching:
                partner = placed[rng.integers(len(placed))]
                angle, apart = rng.uniform(0, 2 * np.pi), (partner[2] + radius) * rng.uniform(0.9, 1.0)
                x, y = partner[0] + apart * np.cos(angle), partner[1] + apart * np.sin(angle)
            else:
                x, y = rng.uniform(-margin, size + margin, 2)
            if all(np.hypot(x - one[0], y - one[1]) > one[2] + radius + 3 or one is partner for one in placed):
                placed.append((x, y, radius))
                break
    return np.array(placed)


def paint(discs: np.ndarray, size: int, squeeze: float = 1.0) -> np.ndarray:
    """Return the share of each pixel that discs cover; `squeeze` makes ellipses of the same area."""
    covered = np.zeros((size * FINER, size * FINER), dtype=bool)
    for x, y, radius in discs:
        reach = radius * max(squeeze, 1 / squeeze) + 1
        top, bottom = (int(np.clip(edge * FINER, 0, size * FINER)) for edge in (y - reach, y + reach))
        left, right = (int(np.clip(edge * FINER, 0, size * FINER)) for edge in (x - reach, x + reach))
        rows, columns = np.mgrid[top:bottom, left:right]
        across, down = ((columns + 0.5) / FINER - x) * squeeze, ((rows + 0.5) / FINER - y) / squeeze
        covered[top:bottom, left:right] |= np.hypot(across, down) < radius
    return np.asarray(covered.reshape(size, FINER, size, FINER).mean(axis=(1, 3)))


def picture(
    covered: np.ndarray, rng: np.random.Generator, blur: float = 1.2, noise: float = 0.04, contrast: float = 0.6
) -> np.ndarray:
    y, x = np.meshgrid(*[np.linspace(-1, 1, size) for size in covered.shape], indexing="ij")
    film = 0.7 * (1 + 0.12 * x - 0.1 * y + 0.08 * x * y - 0.08 * x**2)
    light = film * (1 - contrast * ndimage.gaussian_filter(covered, blur))
    return np.asarray(np.clip(light + 0.7 * noise * rng.normal(size=covered.shape), 0, 1))


def whole(discs: np.ndarray, size: int) -> np.ndarray:
    x, y, radius = discs.T
    return discs[(np.minimum(x, y) > radius + 1) & (np.maximum(x, y) < size - radius - 1)]


def matched(found: Particles, discs: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return found and true diameters [px] of the particles whose outline lies on a disc."""
    lines = [stroke.points[:-1].mean(axis=0) for stroke in found.outline.strokes if stroke.role == "found"]
    centres = np.array(lines) + 0.5
    pairs = []
    for x, y, radius in discs:
        distance = np.hypot(*(centres - [x, y]).T)
        nearest = int(np.argmin(distance))
        if distance[nearest] < 0.4 * radius:
            pairs.append((found.diameters[nearest] / PITCH, 2 * radius))
    return tuple(np.array(pairs).T)


def test_many_micrographs_give_back_the_distribution_they_were_drawn_from():
    rng, size, median, geometric_sd = np.random.default_rng(31), 400, 18.0, 1.35
    pulls, losses, errors, sizes = [], [], [], []
    for _ in range(16):
        discs = scatter(rng, size, 70, median, geometric_sd)
        found = measure_micrograph(picture(paint(discs, size), rng), PITCH)
        sample = from_diameters(found.diameters, found.weights)
        pulls.append((sample.median / PITCH - median) / (sample.median_u / PITCH))
        inside = whole(discs, size)
        measured, true = matched(found, inside)
        losses.append(1 - measured.size / len(inside))
        errors.append(measured / true - 1)
        sizes.append((found.diameters, found.weights))
    # the standard deviation of sixteen pulls of 1 lies between these 99 times of 100 (χ² of 15)
    assert 0.55 < np.std(pulls) < 1.48
    together = from_diameters(*(np.concatenate(column) for column in zip(*sizes, strict=True)))
    # 2 % is asked for; the particles of sixteen frames leave 0.9 % by their number alone
    assert together.median / PITCH == pytest.approx(median, rel=0.02)
    assert math.log(together.geometric_sd) == pytest.approx(math.log(geometric_sd), rel=0.08)
    each = np.concatenate(errors)
    assert abs(np.median(each)) < 0.002
    assert np.median(np.abs(each)) < 0.005
    assert np.mean(losses) < 0.03


def test_a_third_touching_in_noise_and_blur():
    rng, size = np.random.default_rng(32), 400
    errors, found_of_all = [], []
    for _ in range(5):
        discs = scatter(rng, size, 70, 16.0, 1.4, touching=0.35)
        found = measure_micrograph(picture(paint(discs, size), rng, blur=1.5, noise=0.08, contrast=0.5), PITCH)
        inside = whole(discs, size)
        measured, true = matched(found, inside)
        errors.append(measured / true - 1)
        found_of_all.append(measured.size / len(inside))
    each = np.concatenate(errors)
    assert abs(np.median(each)) < 0.005
    assert np.median(np.abs(each)) < 0.015
    assert np.mean(found_of_all) > 0.93


@pytest.mark.parametrize(
    ("diameter", "blur"),  # none hardly wider than its blur: such a disc has no darkness of its own
    [
        (6, 0.7),
        (6, 1.5),
        (8, 0.7),
        (8, 2.2),
        (12, 0.7),
        (12, 1.5),
        (12, 2.2),
        (20, 1.5),
        (20, 2.2),
        (40, 0.7),
        (40, 2.2),
    ],
)
def test_blur_makes_no_disc_smaller(diameter, blur):
    rng, size = np.random.default_rng(33), 240
    places = np.arange(30, 230, 60)
    discs = np.array([(x + rng.uniform(-1, 1), y + rng.uniform(-1, 1), diameter / 2) for x in places for y in places])
    found = measure_micrograph(picture(paint(discs, size), rng, blur=blur, noise=0.01), PITCH)
    assert found.diameters.size == 16
    assert np.mean(found.diameters) / PITCH == pytest.approx(diameter, rel=0.012)


def test_ellipses_keep_their_area_and_are_not_cut_in_two():
    rng, size = np.random.default_rng(34), 300
    discs = np.array(
        [(x, y, radius) for x, radius in ((60, 8), (150, 12), (235, 20)) for y in (60, 150, 240)], dtype=float
    )
    found = measure_micrograph(picture(paint(discs, size, squeeze=1.25), rng), PITCH)
    measured, true = matched(found, discs)
    assert measured.size == found.diameters.size == 9
    np.testing.assert_allclose(measured, true, rtol=0.012)


def test_the_border_does_not_favour_small_particles():
    rng, size = np.random.default_rng(35), 200
    plain, weighted = [], []
    for _ in range(6):
        discs = scatter(rng, size, 22, 24.0, 1.5, touching=0)
        found = measure_micrograph(picture(paint(discs, size), rng), PITCH)
        assert np.all(found.weights > 1)
        order = np.argsort(found.diameters)
        assert np.all(np.diff(found.weights[order]) > -0.05)
        plain.append(found.diameters)
        weighted.append(found.weights)
    diameters, weights = np.concatenate(plain), np.concatenate(weighted)
    x = diameters / PITCH
    np.testing.assert_allclose(weights, (size / (size - x)) ** 2, rtol=0.05)  # a disc has its centre free in (N − d)²
    assert from_diameters(diameters, weights).median > from_diameters(diameters).median


def test_fainter_particles_beside_dark_ones_are_measured_at_their_own_half_level():
    rng, size = np.random.default_rng(36), 200
    dark = np.array([(50, 50, 10), (150, 50, 10), (50, 150, 10)], dtype=float)
    faint = np.array([(150, 150, 10), (100, 100, 10)], dtype=float)
    found = measure_micrograph(picture(paint(dark, size) + 0.4 * paint(faint, size), rng, noise=0.02), PITCH)
    np.testing.assert_allclose(found.diameters / PITCH, 20, rtol=0.015)
    assert found.diameters.size == 5


def test_a_ragged_cluster_is_left_out_and_told():
    rng, size = np.random.default_rng(37), 240
    discs = np.array([(40, 40, 9), (200, 40, 11), (40, 200, 8), (200, 200, 10)], dtype=float)
    heap = [(120 + rng.normal(0, 14), 120 + rng.normal(0, 14), rng.uniform(2, 4)) for _ in range(90)]
    found = measure_micrograph(picture(paint(np.vstack([discs, heap]), size), rng), PITCH)
    measured, true = matched(found, discs)
    assert measured.size == 4
    np.testing.assert_allclose(measured, true, rtol=0.015)
    assert any("cannot be told apart" in remark for remark in found.remarks)


def test_specks_below_the_least_size_are_counted():
    rng, size = np.random.default_rng(38), 240
    large = [(x, y, 9.0) for x in (60, 180) for y in (60, 180)]
    specks = [(x, 120.0, 2.0) for x in (40, 80, 120, 160, 200)]
    found = measure_micrograph(picture(paint(np.array(large + specks), size), rng, blur=0.8, noise=0.01), PITCH)
    assert found.diameters.size == 4
    assert any("5 particles below" in remark for remark in found.remarks)


def test_contrast_of_thickness_is_told_and_flat_contrast_is_not():
    size, rng = 240, np.random.default_rng(40)
    places, fine = range(40, 240, 80), (np.arange(240 * FINER) + 0.5) / FINER
    chord = np.zeros((size * FINER, size * FINER))
    for x in places:
        for y in places:
            across = (fine[None, :] - x) ** 2 + (fine[:, None] - y) ** 2
            chord = np.maximum(chord, 2 * np.sqrt(np.clip(20.0**2 - across, 0, None)))
    light = np.exp(-0.02 * chord).reshape(size, FINER, size, FINER).mean(axis=(1, 3))  # weakly absorbing spheres
    found = measure_micrograph(ndimage.gaussian_filter(light, 1.0) + 0.01 * rng.normal(size=light.shape), PITCH)
    assert any("too small" in remark for remark in found.remarks)
    flat = paint(np.array([(x, y, 20.0) for x in places for y in places]), size)
    assert measure_micrograph(picture(flat, rng), PITCH).remarks == ()


def test_the_unit_of_brightness_does_not_matter():
    rng, size = np.random.default_rng(39), 200
    frame = picture(paint(scatter(rng, size, 15, 20, 1.3), size), rng)
    one, two = measure_micrograph(frame, PITCH), measure_micrograph(65535 * frame, 2 * PITCH)
    np.testing.assert_allclose(two.diameters, 2 * one.diameters, rtol=1e-9)


@pytest.mark.parametrize(
    ("frame", "told"),
    [
        (0.7 + 0.03 * np.random.default_rng(1).normal(size=(200, 200)), "dark"),
        (np.full((200, 200), 0.5), "dark"),
        (np.zeros((200, 200)), "brightness"),
        (np.ones((8, 8)), "32 by 32"),
        (np.full((64, 64), np.nan), "32 by 32"),
        (picture(paint(np.array([[0.0, 100.0, 30.0]]), 200), np.random.default_rng(2)), "border"),
    ],
    ids=["noise", "even", "black", "tiny", "missing", "cut"],
)
def test_what_cannot_be_measured_says_why(frame, told):
    with pytest.raises(Unmeasurable, match=told):
        measure_micrograph(frame, PITCH)

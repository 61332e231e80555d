"""Particles in pictures whose truth is known apart from this project: discs on a raster, and a freely licensed photograph."""

import numpy as np
import pytest
from skimage import data, draw

from reconcile.measure.micrograph import measure_micrograph


@pytest.mark.parametrize("radius", [5, 8, 13.3, 21, 40.6])
def test_discs_drawn_on_a_raster_have_the_diameter_of_their_pixels_area(radius):
    # Truth: the pixels that skimage.draw.disk sets, d = √(4N/π); the half level of a raster's stairs keeps their area.
    covered, areas = np.zeros((400, 400)), []
    rng = np.random.default_rng(5)
    for row in (60, 150, 240, 340):
        for column in (60, 150, 240, 340):
            pixels = draw.disk((row + rng.uniform(-0.5, 0.5), column + rng.uniform(-0.5, 0.5)), radius)
            covered[pixels] = 1
            areas.append(pixels[0].size)
    found = measure_micrograph(0.8 - 0.5 * covered + 1e-3 * rng.normal(size=covered.shape), 1.0)
    assert found.diameters.size == 16
    truth = np.sqrt(4 * np.array(areas) / np.pi)
    assert np.mean(found.diameters) == pytest.approx(np.mean(truth), rel=0.01)
    assert np.max(np.abs(found.diameters - np.mean(truth))) < 0.5


def test_the_coins_of_a_photograph_are_counted():
    # skimage.data.coins: "Greek coins from Pompeii", Brooklyn Museum, no known copyright restrictions, bundled with
    # scikit-image: 24 coins in four rows of six, by the eye, on an uneven dark ground; turned round here. Their relief is
    # as light as the ground in places, which is no reason to cut a coin in two.
    found = measure_micrograph(280 - data.coins().astype(float), 1.0)
    assert found.diameters.size == 24
    assert found.remarks == ()
    middles = np.array([stroke.points[:-1].mean(axis=0) for stroke in found.outline.strokes if stroke.role == "found"])
    rows = np.sort(middles[:, 1]).reshape(4, 6)
    assert np.all(np.ptp(rows, axis=1) < 20)  # four rows of six
    assert np.all(np.diff(rows.mean(axis=1)) > 50)

"""One error of the pixel pitch is shared by all readings of a table, each as it follows lengths in the picture."""

import numpy as np
import pytest
from campaign_folder import write
from pytest import approx

from reconcile.campaign.kinds import KINDS, TABLE_KINDS
from reconcile.campaign.manifest import load
from reconcile.inference.model import Conditions, reading_factor

NOMINAL, TRUE = 1.85e-6, 1.90e-6  # [m] pitch as stated, and as it is
SAMPLE = ('energy = "Energy (uJ)"', 'energy = "Energy (uJ)", sample = "Sample"')
TABLE = '\n[[readings]]\nkind = "{}"\nname = "one"\nfiles = "x/{}.tif"\npixel_pitch = "1.85 um ± 0.05 um"\n{}\n'


def read_with_the_stated_pitch(kind, size):
    """Return what a picture shows of a body of that size: lengths across are counted in pixels, heights are not."""
    if KINDS[kind].unit == "m3":
        across = size / 1e-6  # a pit of the depth 1 µm: its area [m²]
        return across / TRUE**2 * NOMINAL**2 * 1e-6
    if KINDS[kind].unit == "m" and kind != "crater-depth":
        return size / TRUE * NOMINAL
    return size


@pytest.mark.parametrize(
    ("table_kind", "kind"),
    [(table, kind) for table in ("crater-map", "shadowgraph", "micrograph") for kind in TABLE_KINDS[table]],
)
def test_readings_follow_the_pitch_of_their_own_table(tmp_path, table_kind, kind):
    field = "{sample}" if table_kind == "micrograph" else "{shot}"
    unit = 'height_unit = "um"' if table_kind == "crater-map" else ""
    campaign = load(write(tmp_path, SAMPLE, more=TABLE.format(table_kind, field, unit)))
    inputs = {"pixel_pitch.one": np.array([TRUE, NOMINAL])}
    factor = reading_factor(kind, campaign.tables[-1], Conditions.of(campaign), inputs)
    size = 40e-6
    expected = [read_with_the_stated_pitch(kind, size) / size, 1.0]
    assert np.broadcast_to(factor, 2) == approx(expected, rel=1e-12)
    # Another table's readings know nothing of it.
    assert reading_factor("crater-depth", campaign.tables[0], Conditions.of(campaign), inputs) == approx(1.0)

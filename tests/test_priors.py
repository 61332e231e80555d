"""What is believed before the fit: by material, instrument and manifest."""

from pathlib import Path

import numpy as np
import pytest
from campaign_folder import write

from reconcile.campaign.manifest import load
from reconcile.campaign.materials import optical_constants
from reconcile.inference.priors import believed_inputs

GOLD = 'material = "gold"'
INFRARED = 'wavelength = "1030 nm"'


def believed(folder: Path, *changes: tuple[str, str], more: str = ""):
    return believed_inputs(load(write(folder, *changes, more=more)), ("crater-depth",))


def test_gold_absorbs_several_times_its_cold_share_in_the_infrared_and_no_more_in_the_green(tmp_path: Path) -> None:
    # Cold shares under water from Johnson and Christy 1972: 0.027 at 1030 nm, 0.462 at 515 nm.
    infrared = believed(tmp_path / "a")["absorbed_fraction"].prior
    green = believed(tmp_path / "b", (INFRARED, 'wavelength = "515 nm"'))["absorbed_fraction"].prior
    assert infrared.a == pytest.approx(3.5 * 0.0271, rel=0.02)
    assert green.a == pytest.approx(0.462, rel=0.02)
    assert (infrared.b, green.b) == pytest.approx((0.6, 0.2), rel=0.01)


@pytest.mark.parametrize("metal", ["silver", "copper", "platinum", "titanium", "aluminium", "iron"])
@pytest.mark.parametrize("wavelength", ["515 nm", "800 nm", "1064 nm"])
def test_every_metal_absorbs_little_less_than_when_cold_and_less_than_all(
    tmp_path: Path, metal: str, wavelength: str
) -> None:
    changes = (GOLD, f'material = "{metal}"'), (INFRARED, f'wavelength = "{wavelength}"')
    fraction = believed(tmp_path / "c", *changes)["absorbed_fraction"]
    low, median, high = fraction.density.quantile(np.array([0.025, 0.5, 0.975]))
    index = complex(*optical_constants(metal, float(wavelength.removesuffix(" nm")) * 1e-9))
    cold = 1.0 - abs((1.33 - index) / (1.33 + index)) ** 2  # amplitude reflectance into water at normal incidence
    assert 0.65 * cold < low < median < 0.7
    assert median > 0.99 * cold
    assert high < 1.0


def test_what_the_metal_is_moves_its_own_priors(tmp_path: Path) -> None:
    gold, iron = believed(tmp_path / "a"), believed(tmp_path / "b", (GOLD, 'material = "iron"'))
    for name in ("removal_energy_density", "melt_surface_tension", "melt_viscosity"):
        assert iron[name].prior.a > gold[name].prior.a
    assert gold["removal_energy_density"].prior.a == 6e9


def test_a_stated_prior_goes_before_an_instrument_and_says_so(tmp_path: Path) -> None:
    stated = believed(tmp_path / "c", more='\n[priors]\ndelivery = "beta(8, 2)"\n')["delivery"]
    assert stated.prior.family == "beta"
    assert stated.overruled == "0.82 ± 0.02"


def test_an_exact_instrument_number_is_fixed(tmp_path: Path) -> None:
    changes = ('spot_radius = "21 um ± 1 um"', 'spot_radius = "21 um ± 0"')
    assert believed(tmp_path / "c", changes)["spot_radius"].density.fixed

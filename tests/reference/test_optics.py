"""Cold absorptance of gold against measured and tabulated reflectances."""

from __future__ import annotations

import pytest

from reconcile.campaign.materials import optical_constants
from reconcile.physics.beam import fresnel_absorptance


@pytest.mark.parametrize(("index", "reflectance"), [(1.0, 0.683), (1.336, 0.636)])
def test_gold_reflects_what_was_measured_in_air_and_in_water(index, reflectance):
    # Spellauge et al., Light Sci. Appl. 11, 68 (2022), 528 nm; three digits
    n, k = optical_constants("gold", 528e-9)
    assert 1 - float(fresnel_absorptance(n, k, index)) == pytest.approx(reflectance, abs=1e-3)


@pytest.mark.parametrize(
    ("wavelength", "n", "k", "in_air", "in_water", "liquid_index"),
    [
        (515e-9, 0.7191, 2.0225, 0.5917, 0.5377, 1.336),
        (532e-9, 0.5439, 2.2309, 0.7044, 0.6586, 1.336),
        (800e-9, 0.1535, 4.9077, 0.9758, 0.9689, 1.329),
        (1030e-9, 0.2421, 6.7038, 0.9792, 0.9729, 1.325),
        (1064e-9, 0.2585, 6.9654, 0.9794, 0.9732, 1.324),
    ],
)
def test_gold_has_johnson_and_christys_constants(wavelength, n, k, in_air, in_water, liquid_index):
    # Phys. Rev. B 6, 4370 (1972), straight between their wavelengths; reflectances worked out from them
    got_n, got_k = optical_constants("gold", wavelength)
    assert (got_n, got_k) == pytest.approx((n, k), abs=6e-5)
    assert 1 - float(fresnel_absorptance(got_n, got_k, 1.0)) == pytest.approx(in_air, abs=1e-4)
    # the liquid's index is rounded to 5e-4, 7e-5 in the reflectance
    assert 1 - float(fresnel_absorptance(got_n, got_k, liquid_index)) == pytest.approx(in_water, abs=1.5e-4)


def test_gold_absorbs_a_third_more_infrared_in_water_than_in_air():
    # ratio 1.30 at 1030 nm, whichever table of constants is taken (Olmon et al., Phys. Rev. B 86, 235147, 2012: 1.301)
    johnson = optical_constants("gold", 1030e-9)
    for n, k in (johnson, (0.1531, 6.6540)):
        ratio = float(fresnel_absorptance(n, k, 1.325) / fresnel_absorptance(n, k, 1.0))
        assert ratio == pytest.approx(1.30, abs=0.002)

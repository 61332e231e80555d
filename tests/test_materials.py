"""What is known of metals and liquids, what a manifest may state instead, and what is refused."""

from __future__ import annotations

import dataclasses
import math
from pathlib import Path

import pytest
from iapws import IAPWS95

from reconcile.campaign.campaign import Beam, Campaign, EnergyMeter, Liquid, Prior, Quantity, Table, Target
from reconcile.campaign.inputs import INPUTS
from reconcile.campaign.materials import (
    PRIORS_OF_METAL,
    PROPERTY_NAMES,
    default_prior_texts,
    known_liquids,
    known_materials,
    landmark_energy,
    melting_energies,
    optical_constants,
    properties_of_liquid,
    properties_of_target,
    property_rows,
)
from reconcile.campaign.prior_text import parse_prior
from reconcile.campaign.refusal import Place, Refusal
from reconcile.physics.matter import Fluid, Metal


def q(value: float, unit: str = "1") -> Quantity:
    return Quantity(value, None, unit, f"{value:g} {unit}")


def campaign(
    target: Target | None = None,
    liquid: Liquid | None = None,
    celsius: float = 20.0,
    nm: float = 1030.0,
    priors: tuple[str, ...] = (),
):
    return Campaign(
        name="basin",
        folder=Path("basin"),
        target=target or Target("gold"),
        liquid=liquid or Liquid("water"),
        beam=Beam(q(nm * 1e-9, "m"), q(350e-15, "s"), q(20e-6, "m"), q(0.8)),
        meter=EnergyMeter(q(1.0)),
        log=Table("log", "log", Place("campaign.toml")),
        tables=(),
        ambient_pressure=q(101325.0, "Pa"),
        liquid_temperature=q(celsius + 273.15, "K"),
        priors={name: Prior("fixed", 0.1, 0.0, "fixed(0.1)") for name in priors},
    )


# IAPWS R6-95, R12-08, R1-76(2014) at 101 325 Pa: density, sound, viscosity [mPa s], vapour [kPa], tension [mN/m]
IAPWS_AT_20 = (998.207, 1482.35, 1.0016, 2.3393, 72.736)


def test_water_at_20_degrees_is_iapws():
    water = properties_of_liquid(campaign())
    got = (
        water.density,
        water.sound_speed,
        water.viscosity * 1e3,
        water.vapour_pressure / 1e3,
        water.surface_tension * 1e3,
    )
    assert got == pytest.approx(IAPWS_AT_20, abs=0, rel=1e-9)


@pytest.mark.parametrize("celsius", [5.0, 6.5, 12.2, 17.5, 22.0, 27.5, 34.0, 36.0, 44.0, 47.5, 50.0])
def test_water_between_the_rows_is_iapws_within_a_ten_thousandth(celsius):
    kelvin = celsius + 273.15
    state = IAPWS95(T=kelvin, P=0.101325)
    vapour = IAPWS95(T=kelvin, x=0.0)
    water = properties_of_liquid(campaign(celsius=celsius))
    assert water.density == pytest.approx(state.rho, abs=0, rel=2e-5)
    assert water.sound_speed == pytest.approx(state.w, abs=0, rel=1e-4)
    assert water.viscosity == pytest.approx(state.mu, abs=0, rel=1e-4)
    assert water.vapour_pressure == pytest.approx(vapour.P * 1e6, abs=0, rel=1e-4)
    assert water.surface_tension == pytest.approx(vapour.sigma, abs=0, rel=1e-4)


def test_water_meets_the_releases_own_check_points():
    # IAPWS R6-95 at 300 K and 0.0992 MPa: 996.556 kg/m³, 1501.519 m/s; R12-08 at 298.15 K and 998 kg/m³: 889.7351
    # µPa s, 0.95 kg/m³ denser than at one atmosphere, hence the wider limit; R1-76 at 25 °C: 71.97 mN/m
    warm = properties_of_liquid(campaign(celsius=26.85))
    assert warm.sound_speed == pytest.approx(1501.519, abs=0, rel=1e-4)
    assert warm.density == pytest.approx(996.556, abs=0, rel=1e-5)
    room = properties_of_liquid(campaign(celsius=25.0))
    assert room.viscosity == pytest.approx(889.7351e-6, abs=0, rel=5e-4)
    assert room.surface_tension == pytest.approx(71.97e-3, abs=0, rel=1e-4)


@pytest.mark.parametrize(("nm", "index"), [(515.0, 1.3363), (800.0, 1.3281), (1030.0, 1.3244), (1064.0, 1.3239)])
def test_water_refracts_as_measured(nm, index):
    # Kedenburg et al., Opt. Mater. Express 2, 1588 (2012); four decimals
    assert properties_of_liquid(campaign(nm=nm)).refractive_index == pytest.approx(index, abs=5e-5)


def test_the_model_takes_the_properties_by_their_names():
    names = {field.name for field in dataclasses.fields(properties_of_target(campaign()))}
    assert names == {field.name for field in dataclasses.fields(Metal)} == set(PROPERTY_NAMES["target"])
    names = {field.name for field in dataclasses.fields(properties_of_liquid(campaign()))}
    assert names == set(PROPERTY_NAMES["liquid"])
    assert names == {field.name for field in dataclasses.fields(Fluid)} | {"refractive_index"}


def test_every_row_has_a_source_and_the_unit_that_a_manifest_would_state():
    for table in ("target", "liquid"):
        for row in property_rows(table):
            assert row.source, row
            assert row.unit == PROPERTY_NAMES[table][row.name], row
    assert all(row.source and row.unit for row in property_rows("melting"))
    assert known_materials() == ("gold", "silver", "copper", "platinum", "titanium", "aluminium", "iron")
    assert known_liquids() == ("water", "ethanol", "acetone")


def test_a_stated_property_takes_the_place_of_the_known_one():
    stated = Target("gold", properties={"density": q(18900.0, "kg/m3")})
    gold = properties_of_target(campaign(stated))
    assert (gold.density, gold.sound_speed) == (18900.0, 3060.0)
    liquid = Liquid("water", properties={"refractive_index": q(1.35), "sound_speed": q(1500.0, "m/s")})
    water = properties_of_liquid(campaign(liquid=liquid, nm=355.0))
    assert (water.refractive_index, water.sound_speed, water.density) == (1.35, 1500.0, pytest.approx(998.207))


ZINC = {
    "density": q(7134.0, "kg/m3"),
    "sound_speed": q(3010.0, "m/s"),
    "hugoniot_slope": q(1.58),
    "melt_density": q(6200.0, "kg/m3"),
}


def test_an_unknown_metal_is_taken_when_all_is_stated():
    stated = campaign(Target("zinc", properties=ZINC), priors=PRIORS_OF_METAL)
    assert properties_of_target(stated).melt_density == 6200.0


def test_an_unknown_liquid_is_taken_when_all_is_stated():
    known = dataclasses.asdict(properties_of_liquid(campaign()))
    stated = {name: q(value, PROPERTY_NAMES["liquid"][name]) for name, value in known.items()}
    # nothing of it is looked up: the temperature may lie anywhere
    got = properties_of_liquid(campaign(liquid=Liquid("brine", properties=stated), celsius=80.0))
    assert dataclasses.asdict(got) == known


@pytest.mark.parametrize("missing", PROPERTY_NAMES["target"])
def test_an_unknown_metal_is_refused_with_what_is_missing(missing):
    stated = {name: value for name, value in ZINC.items() if name != missing}
    with pytest.raises(Refusal) as refused:
        properties_of_target(campaign(Target("zinc", properties=stated), priors=PRIORS_OF_METAL))
    assert str(refused.value.place) == "campaign.toml!target.material"
    assert f"target.{missing}" in refused.value.remedy
    assert not any(f"target.{name}" in refused.value.remedy for name in stated)
    assert "priors." not in refused.value.remedy


@pytest.mark.parametrize("missing", PRIORS_OF_METAL)
def test_an_unknown_metal_is_refused_with_the_prior_that_is_missing(missing):
    stated = tuple(name for name in PRIORS_OF_METAL if name != missing)
    with pytest.raises(Refusal) as refused:
        properties_of_target(campaign(Target("zinc", properties=ZINC), priors=stated))
    assert refused.value.remedy.endswith(f"tate priors.{missing}.")


def test_one_refusal_names_every_missing_property_and_prior_of_an_unknown_metal():
    with pytest.raises(Refusal) as refused:
        properties_of_target(campaign(Target("unobtainium")))
    for name in PROPERTY_NAMES["target"]:
        assert f"target.{name}" in refused.value.remedy
    for name in PRIORS_OF_METAL:
        assert f"priors.{name}" in refused.value.remedy
    assert set(PRIORS_OF_METAL) <= set(INPUTS)


@pytest.mark.parametrize("other", ["zinc", "tin", "lead", "nickel"])
def test_another_metal_is_not_taken_for_a_misspelt_one(other):
    with pytest.raises(Refusal) as refused:
        properties_of_target(campaign(Target(other)))
    assert "Did you mean" not in refused.value.remedy


def test_a_misspelt_metal_is_met_with_the_nearest_known():
    with pytest.raises(Refusal, match='Did you mean "gold"'):
        properties_of_target(campaign(Target("glod")))


def test_an_unknown_liquid_is_refused_with_what_is_missing():
    with pytest.raises(Refusal) as refused:
        properties_of_liquid(campaign(liquid=Liquid("toluene", properties={"density": q(867.0, "kg/m3")})))
    assert str(refused.value.place) == "campaign.toml!liquid.material"
    for name in PROPERTY_NAMES["liquid"]:
        assert (f"liquid.{name}" in refused.value.remedy) == (name != "density")


@pytest.mark.parametrize(
    ("made", "place", "word"),
    [
        (campaign(celsius=60.0), "campaign.toml!campaign.liquid_temperature", "5 degC to 50 degC"),
        (
            campaign(celsius=60.0, liquid=Liquid("acetone")),
            "campaign.toml!campaign.liquid_temperature",
            "density of acetone",
        ),
        (campaign(nm=355.0), "campaign.toml!beam.wavelength", "liquid.refractive_index"),
        (
            campaign(liquid=Liquid("water", properties={"density": q(-1.0)})),
            "campaign.toml!liquid.density",
            "above zero",
        ),
        (
            campaign(liquid=Liquid("water", properties={"viscosity": q(float("nan"))})),
            "campaign.toml!liquid.viscosity",
            "above zero",
        ),
    ],
)
def test_a_liquid_that_cannot_be_used_is_refused_at_its_key(made, place, word):
    with pytest.raises(Refusal, match=word) as refused:
        properties_of_liquid(made)
    assert str(refused.value.place) == place


def test_a_melt_lighter_than_the_liquid_is_refused():
    stated = Target("gold", properties={"melt_density": q(900.0, "kg/m3")})
    with pytest.raises(Refusal, match="denser") as refused:
        properties_of_target(campaign(stated))
    assert str(refused.value.place) == "campaign.toml!target.melt_density"


@pytest.mark.parametrize(
    ("material", "nm", "place"),
    [
        ("gold", 400.0, "campaign.toml!beam.wavelength"),
        ("gold", 1300.0, "campaign.toml!beam.wavelength"),
        ("zinc", 1030.0, "campaign.toml!target.material"),
    ],
)
def test_unknown_optical_constants_are_refused_with_the_prior_to_state(material, nm, place):
    with pytest.raises(Refusal, match="priors.absorbed_fraction") as refused:
        optical_constants(material, nm * 1e-9)
    assert str(refused.value.place) == place


def test_optical_constants_reach_both_ends_of_their_range():
    # Johnson and Christy 1972: 495.9 nm 1.04, 1.833; 520.9 nm 0.62, 2.081; 1088 nm 0.27, 7.15; 1216 nm 0.35, 8.145
    assert optical_constants("gold", 500e-9) == pytest.approx(
        (1.04 - 0.42 * 4.1 / 25, 1.833 + 0.248 * 4.1 / 25), abs=0, rel=1e-9
    )
    assert optical_constants("gold", 1100e-9) == pytest.approx(
        (0.27 + 0.08 * 12 / 128, 7.15 + 0.995 * 12 / 128), abs=0, rel=1e-9
    )
    assert optical_constants("gold", 1088e-9) == pytest.approx((0.27, 7.15), abs=0, rel=1e-12)


def test_gold_has_its_own_priors_of_the_hot_melt():
    assert default_prior_texts("gold") == {
        "removal_energy_density": "lognormal(6e9 J/m3, 40 %)",
        "melt_surface_tension": "fixed(0.5 N/m)",
        "melt_viscosity": "fixed(3 mPa s)",
    }
    assert {name: INPUTS[name].default for name in default_prior_texts("gold")} == default_prior_texts("gold")


def test_golds_prior_of_the_removal_energy_is_where_the_handbook_numbers_put_it():
    # exp(0.4) is the 40 % of the lognormal
    assert 6e9 / math.exp(0.4) < landmark_energy("gold") < 6e9 * math.exp(0.4)


@pytest.mark.parametrize("material", known_materials())
def test_every_known_metal_has_priors_of_its_melt_within_their_landmarks(material):
    priors = {name: parse_prior(name, text) for name, text in default_prior_texts(material).items()}
    molten, hot = melting_energies(material)
    removal = priors["removal_energy_density"]
    assert removal.family == "lognormal"
    assert molten < removal.a < hot
    melting = {row.name: row.value for row in property_rows("melting") if row.material == material}
    for name in ("surface_tension", "viscosity"):
        hotter = priors[f"melt_{name}"]
        assert hotter.family == "fixed"
        assert 0.35 * melting[name] < hotter.a < 0.65 * melting[name]  # lower than at melting, above zero


def test_an_unknown_metal_has_no_default_prior():
    assert default_prior_texts("unobtainium") == {}


@pytest.mark.parametrize("nm", [500.0, 515.0, 532.0, 800.0, 1030.0, 1064.0, 1100.0])
@pytest.mark.parametrize("material", known_materials())
def test_every_known_metal_has_optical_constants_at_the_wavelengths_of_lasers(material, nm):
    n, k = optical_constants(material, nm * 1e-9)
    assert 0.02 < n < 4.0
    assert 1.5 < k < 11.0


@pytest.mark.parametrize("celsius", [5.0, 10.0, 20.0, 33.0, 40.0, 50.0])
@pytest.mark.parametrize("material", known_liquids())
@pytest.mark.parametrize("metal", known_materials())
def test_every_known_pair_can_be_used_from_5_to_50_degrees(metal, material, celsius):
    made = campaign(Target(metal), Liquid(material), celsius=celsius)
    assert properties_of_target(made).melt_density > properties_of_liquid(made).contact_density > 0.0

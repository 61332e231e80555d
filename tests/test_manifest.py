"""campaign.toml → Campaign."""

import math

import pytest
from campaign_folder import write
from pytest import approx

from reconcile.campaign.campaign import Campaign
from reconcile.campaign.manifest import load
from reconcile.campaign.prior_text import parse_prior
from reconcile.campaign.refusal import Refusal

PROBE = """
[probe]
standoff = "5.0 mm ± 0.1 mm"
angle = "0 deg ± 5 deg"
aperture = "0.2 mm"
sensitivity = "0.45 V/MPa ± 10 %"
bandwidth = "30 MHz"
trigger_offset = "0 ns ± 20 ns"
identity = "hydrophone 3"
"""
SOUND = """
[[readings]]
kind = "pressure-integral"
file = "sound.csv"
columns = { shot = "Shot", value = "I (Pa2 s)" }
uncertainty = "6 %"
"""


def test_every_quantity_arrives_in_si(tmp_path):
    campaign = load(
        write(
            tmp_path,
            ('name = "small-1"', 'name = "small-1"\ndate = 2026-03-14\noperator = "A"\nambient_pressure = "1 bar"'),
            ('height = "6.0 mm"', 'path = "5 mm"\nwall_distance = "15 mm"'),
            ("[energy_meter]", '[energy_meter]\nshot_jitter = "3 %"\nidentity = "meter 2"'),
            more=PROBE + SOUND,
        )
    )
    assert campaign.date == "2026-03-14"
    assert campaign.about == {"operator": "A"}
    assert campaign.ambient_pressure.value == 1e5
    assert campaign.liquid_temperature.value == 293.15
    assert campaign.liquid.height.value == campaign.liquid.path.value == 5e-3
    assert (campaign.beam.spot_radius.value, campaign.beam.spot_radius.u) == (21e-6, 1e-6)
    assert campaign.meter.shot_jitter.value == 0.03
    assert campaign.meter.about == {"identity": "meter 2"}
    probe = campaign.probe
    assert (probe.sensitivity.value, probe.sensitivity.u) == (approx(0.45e-6), approx(0.045e-6))
    assert probe.bandwidth.value == 30e6
    assert probe.bandwidth.u is None
    assert probe.angle.u == approx(5 * math.pi / 180)
    assert campaign.tables[1].uncertainty.unit == "%"
    assert campaign.tables[1].uncertainty.value == 0.06
    assert campaign.unused_uncertainties == ()


def test_the_file_itself_serves_as_well_as_its_folder_and_a_byte_order_mark_is_passed_over(tmp_path):
    folder = write(tmp_path)
    file = folder / "campaign.toml"
    file.write_bytes(b"\xef\xbb\xbf" + file.read_bytes().replace(b"\n", b"\r\n"))
    assert isinstance(load(file), Campaign)
    assert load(file) == load(folder)
    assert load(str(folder)).name == "small-1"


def test_an_uncertainty_on_what_is_no_input_is_listed(tmp_path):
    campaign = load(
        write(
            tmp_path,
            ('"6.0 mm"', '"6.0 mm ± 0.2 mm"'),
            ('"350 fs"', '"350 fs ± 10 fs"'),
            ('material = "gold"', 'material = "gold"\ndensity = "19300 kg/m3 ± 10 kg/m3"'),
        )
    )
    assert sorted(campaign.unused_uncertainties) == ["beam.pulse_duration", "liquid.height", "target.density"]
    assert campaign.target.properties["density"].value == 19300


def test_an_exact_input_is_stated_by_an_uncertainty_of_zero(tmp_path):
    assert load(write(tmp_path, ("0.82 ± 0.02", "0.82 ± 0"))).beam.delivery.u == 0


def test_tables_of_one_name_share_scale_and_default_names_are_positions(tmp_path):
    more = """name = "profiler"
scale = "1.00 ± 0.02"

[[readings]]
kind = "crater-diameter"
name = "profiler"
file = "craters.csv"
columns = { shot = "Shot", value = "Diameter (um)" }
uncertainty = "0.5 um"

[[readings]]
kind = "bubble-lifetime"
file = "lifetimes.csv"
columns = { shot = "Shot", value = "T (us)", uncertainty = "u" }
"""
    tables = load(write(tmp_path, more=more)).tables
    assert [table.name for table in tables] == ["profiler", "profiler", "3"]
    assert tables[1].scale == tables[0].scale
    assert tables[2].scale is None
    assert tables[1].uncertainty.value == 0.5e-6


@pytest.mark.parametrize(
    ("name", "text", "family", "a", "b"),
    [
        ("absorbed_fraction", "beta(2, 4)", "beta", 2, 4),
        ("heated_depth", "lognormal(100 nm, 45 %)", "lognormal", 100e-9, 0.45),
        ("removal_energy_density", "loguniform(2e9 J/m3, 2e10 J/m3)", "loguniform", 2e9, 2e10),
        ("bubble_gas", "fixed(0.003)", "fixed", 0.003, 0),
        ("scatter.arrival-time", "lognormal(10 ns, 70 %)", "lognormal", 10e-9, 0.7),
        ("heated_depth_exponent", "normal(-0.20, 0.12)", "normal", -0.2, 0.12),
        ("stray_rate", "logitnormal(5 %, 1)", "logitnormal", 0.05, 1),
        ("incubation_exponent", "uniform(0.8, 1)", "uniform", 0.8, 1),
    ],
)
def test_a_prior_is_read_in_the_unit_of_its_input(name, text, family, a, b):
    prior = parse_prior(name, text)
    assert (prior.family, prior.a, prior.b) == (family, approx(a), approx(b))


def test_priors_of_the_manifest_may_have_quoted_or_dotted_names(tmp_path):
    more = '[priors]\n"scatter.crater-depth" = "lognormal(5 %, 70 %)"\nheated_depth = "fixed(90 nm)"\n'
    priors = load(write(tmp_path / "a", more=more)).priors
    assert sorted(priors) == ["heated_depth", "scatter.crater-depth"]
    assert str(priors["heated_depth"].place) == "campaign.toml!line 32!priors.heated_depth"
    dotted = load(write(tmp_path / "b", more=more.replace('"scatter.crater-depth"', "scatter.crater-depth"))).priors
    assert dotted["scatter.crater-depth"].a == 0.05


@pytest.mark.parametrize(
    ("name", "text", "says"),
    [
        ("heated_depth", "lognormal(100 nm)", "lognormal(median, standard deviation of the logarithm)"),
        ("heated_depth", "lognorm(100 nm, 45 %)", "'lognormal'"),
        ("heated_depth", "100 nm", "fixed(100 nm)"),
        ("heated_depth", "lognormal(100, 45 %)", "without a unit"),
        ("heated_depth", "lognormal(100 nJ, 45 %)", "21 um"),
        ("heated_depth", "normal(100 nm, 0 nm)", "fixed(value)"),
        ("heated_depth", "uniform(200 nm, 100 nm)", "lower end first"),
        ("heated_depth", "beta(2, 4)", "may pass 1"),
        ("absorbed_fraction", "fixed(1.5)", "physical range"),
        ("absorbed_fraction", "uniform(2, 3)", "physical range"),
        ("absorbed_fraction", "normal(9, 0.1)", "physical range"),
        ("absorbed_fraction", "beta(0, 4)", "above 0"),
        ("stray_rate", "logitnormal(1, 1)", "between 0 and 1"),
        ("removal_energy_density", "loguniform(0 J/m3, 2e10 J/m3)", "above 0"),
    ],
)
def test_a_prior_that_cannot_be_is_refused(name, text, says):
    with pytest.raises(Refusal) as caught:
        parse_prior(name, text)
    assert says in str(caught.value)


def test_an_open_question_is_asked_in_its_own_words(tmp_path):
    folder = write(
        tmp_path,
        ('"21 um ± 1 um"', '"?"  # Which 1/e² radius had the spot, and how was it measured?'),
        ('"350 fs"', '"?"'),
    )
    with pytest.raises(Refusal) as caught:
        load(folder)
    message = str(caught.value)
    assert "campaign.toml!line 15!beam.pulse_duration" in message
    assert "what is beam.pulse_duration (pulse duration, FWHM)?" in message
    assert "1 more stand open: beam.spot_radius" in message
    (folder / "campaign.toml").write_text(
        (folder / "campaign.toml").read_text(encoding="utf-8").replace('= "?"\n', '= "350 fs"\n'), encoding="utf-8"
    )
    with pytest.raises(Refusal, match="Which 1/e² radius had the spot, and how was it measured"):
        load(folder)


def test_a_property_of_an_unknown_material_can_stand_in_the_manifest(tmp_path):
    from reconcile.campaign.materials import PROPERTY_NAMES

    stated = "\n".join(f'{name} = "9000 {unit}"' for name, unit in PROPERTY_NAMES["target"].items())
    with pytest.raises(Refusal, match="unobtainium"):
        load(write(tmp_path / "a", ('material = "gold"', 'material = "unobtainium"')))
    campaign = load(
        write(
            tmp_path / "b",
            ('material = "gold"', f'material = "unobtainium"\n{stated.replace("9000 1", "1.5")}'),
            more='[priors]\nabsorbed_fraction = "beta(2, 4)"\nheated_depth = "lognormal(90 nm, 50 %)"\n'
            'removal_energy_density = "lognormal(7e9 J/m3, 50 %)"\nmelt_surface_tension = "fixed(0.4 N/m)"\n'
            'melt_viscosity = "fixed(2 mPa s)"\n',
        )
    )
    assert campaign.target.properties["density"].value == 9000.0


@pytest.mark.parametrize(
    ("old", "new", "key"),
    [
        ('spot_radius = "21 um ± 1 um"', 'spot_radius = "21 nm ± 1 nm"', "beam.spot_radius"),
        ('spot_radius = "21 um ± 1 um"', 'spot_radius = "21 m ± 1 m"', "beam.spot_radius"),
        ('wavelength = "1030 nm"', 'wavelength = "1030 um"', "beam.wavelength"),
        ('pulse_duration = "350 fs"', 'pulse_duration = "350 s"', "beam.pulse_duration"),
    ],
)
def test_a_beam_that_no_laboratory_has_is_a_slip_of_a_unit(tmp_path, old, new, key):
    with pytest.raises(Refusal, match=rf"{key}.*Correct the number or its unit"):
        load(write(tmp_path / "c", (old, new)))

"""What is expected of shots not yet fired: against the physics called directly, and against distributions known in closed form."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hand_campaign import INPUTS, NOMINAL_RADIUS, NOMINAL_STANDOFF, SHOTS, campaign
from scipy import stats

from reconcile.campaign.campaign import Prior
from reconcile.campaign.kinds import FITTED
from reconcile.campaign.materials import properties_of_liquid, properties_of_target
from reconcile.campaign.refusal import Refusal
from reconcile.inference.model import Conditions
from reconcile.inference.planning import believed_of, completed, predict, predictable, prior_draws
from reconcile.physics import beam, bubble, contact, fragments, heating, removal, sound
from reconcile.physics.matter import Fluid, Metal

CONDITIONS = Conditions.of(campaign())
ENERGY = 20e-6  # [J]
ENERGIES = np.array([12e-6, ENERGY, 35e-6])
STILL = {name: 0.0 for name in INPUTS if name.startswith("scatter.")} | {"energy_jitter": 0.0}
DRAWS = 4000


def inputs(**changed):
    """Every input as a row of equal draws, nothing scattered, some changed."""
    values = {**INPUTS, **STILL, **changed}
    return {name: np.broadcast_to(np.asarray(value, dtype=float), DRAWS) for name, value in values.items()}


def asked(drawn, energies=ENERGIES, *, pulses=1, kinds=FITTED, seed=1):
    return predict(CONDITIONS, drawn, energies, pulses=pulses, kinds=kinds, seed=seed)


def by_hand(energy):
    """Every quantity of one pulse, by the chain of formulas from energy to reading."""
    p, matter, liquid = INPUTS, properties_of_target(campaign()), properties_of_liquid(campaign())
    metal = Metal(matter.density, matter.sound_speed, matter.hugoniot_slope, matter.melt_density)
    fluid = Fluid(**{name: getattr(liquid, name) for name in Fluid.__dataclass_fields__})
    overpressure, w = 101_325.0 - liquid.vapour_pressure, p["spot_radius"]
    incident = beam.peak_fluence(p["delivery"] * p["meter_calibration"] * energy, w)
    absorbed = beam.absorbed_fluence(incident, p["absorbed_fraction"], p["absorption_exponent"])
    a = p["heated_depth_exponent"]
    threshold = removal.threshold_fluence(p["removal_energy_density"], p["heated_depth"], a)
    excess, depth = removal.log_excess(absorbed, threshold), heating.heated_depth(absorbed, p["heated_depth"], a)
    held = bubble.bubble_energy(absorbed, excess, w, p["bubble_yield"], p["bubble_yield_exponent"])
    largest = bubble.largest_radius(held, overpressure, fluid.surface_tension)
    longer = p["wall_prolongation"] * bubble.boundary_factor(largest, 6e-3)
    collapse = bubble.collapse_time(largest, overpressure, fluid, p["bubble_gas"], longer)
    source = sound.Source(absorbed, excess, depth, a, p["pressure_coefficient"], p["shock_factor"], w)
    pulse = sound.pressure_pulse(source, p["standoff"], p["probe_angle"], metal, fluid)
    velocity = contact.contact_velocity(p["pressure_coefficient"] * absorbed / depth, metal, fluid)
    mach = contact.mach_ratio(velocity, fluid)
    slowing = contact.deceleration(velocity, contact.drag_time(depth, metal, fluid), mach)
    tension, viscosity = p["melt_surface_tension"], p["melt_viscosity"]
    return {
        "incident-fluence": incident,
        "absorbed-fluence": absorbed,
        "crater-depth": removal.crater_depth(excess, depth, a, p["removal_factor"], p["threshold_depth"]),
        "crater-diameter": removal.crater_diameter(excess, w),
        "bubble-radius": largest,
        "bubble-lifetime": collapse + bubble.growth_time(collapse, largest, overpressure, fluid, p["bubble_gas"]),
        "pressure-integral": sound.recorded_integral(pulse, p["probe_response"], p["standoff"], fluid),
        "arrival-time": pulse.arrival_time,
        "median-diameter": fragments.median_diameter(
            p["fragment_factor"], slowing, mach, metal, fluid, tension, viscosity
        ),
        "reflected-fraction": 1.0 - absorbed / incident,
    }


def test_with_nothing_uncertain_the_prediction_is_the_physics():
    prediction = asked(inputs())
    for number, energy in enumerate(ENERGIES):
        for name, value in by_hand(energy).items():
            one = prediction.range_of(name)
            for bound in (one.q025, one.q16, one.median, one.q84, one.q975):
                assert bound[number] == pytest.approx(float(value), rel=1e-9, abs=0), name


def test_a_shots_own_deviation_spreads_its_fluence_as_a_lognormal():
    one = asked(inputs(energy_jitter=0.05), np.array([ENERGY]), kinds=()).range_of("incident-fluence")
    middle = 2.0 * INPUTS["delivery"] * INPUTS["meter_calibration"] * ENERGY / (np.pi * INPUTS["spot_radius"] ** 2)
    # A quantile of 4000 draws is uncertain by 1.3 (median) to 2.5 % of a standard deviation and more; four of them.
    for bound, p in ((one.q025, 0.025), (one.q16, 0.16), (one.median, 0.5), (one.q84, 0.84), (one.q975, 0.975)):
        spread = 0.05 * np.sqrt(p * (1 - p) / DRAWS) / stats.norm.pdf(stats.norm.ppf(p))
        assert np.log(bound[0] / middle) == pytest.approx(0.05 * stats.norm.ppf(p), abs=4 * spread)


@pytest.mark.parametrize(
    ("kind", "spread"), [("crater-depth", "relative"), ("bubble-lifetime", "log"), ("arrival-time", "absolute")]
)
def test_the_scatter_of_a_kind_spreads_it_as_the_fit_takes_it(kind, spread):
    scatter = 2e-8 if spread == "absolute" else 0.1
    one = asked(inputs(**{f"scatter.{kind}": scatter}), np.array([ENERGY]), kinds=(kind,)).range_of(kind)
    middle = float(by_hand(ENERGY)[kind])
    q = stats.norm.ppf(0.84)
    expected = {
        "relative": middle * (1 + scatter * q),
        "log": middle * np.exp(scatter * q),
        "absolute": middle + scatter * q,
    }[spread]
    step = {"relative": middle * scatter, "log": middle * scatter, "absolute": scatter}[spread]
    assert one.q84[0] == pytest.approx(expected, abs=0.1 * step)
    assert one.q84[0] > middle + 0.8 * step


def test_no_more_is_reflected_than_arrives_and_no_depth_is_negative():
    drawn = inputs(**{"scatter.reflected-fraction": 0.5, "scatter.crater-depth": 1.0})
    prediction = asked(drawn)
    assert prediction.range_of("reflected-fraction").q975.max() == 1.0
    assert prediction.range_of("crater-depth").q025.min() == 0.0


def test_a_sample_of_many_shots_does_not_follow_the_deviation_of_one():
    one = asked(inputs(energy_jitter=0.3)).range_of("median-diameter")
    assert one.q975 == pytest.approx(one.q025, rel=1e-12, abs=0)
    assert "many" in one.words


def test_ten_pulses_at_one_place_dig_deeper_and_send_the_sound_of_the_last():
    once, often = asked(inputs()), asked(inputs(), pulses=10)
    assert np.all(often.range_of("crater-depth").median > 10 * once.range_of("crater-depth").median)
    assert often.range_of("bubble-radius").median == pytest.approx(once.range_of("bubble-radius").median, rel=0.3)
    assert often.range_of("absorbed-fluence").median == pytest.approx(once.range_of("absorbed-fluence").median)


def test_the_same_seed_gives_the_same_numbers_whatever_else_is_asked():
    drawn = inputs(energy_jitter=0.05, **{"scatter.crater-depth": 0.1, "scatter.bubble-lifetime": 0.1})
    many = asked(drawn, np.linspace(10e-6, 40e-6, 37))
    alone = asked(drawn, np.linspace(10e-6, 40e-6, 37)[20:21], kinds=("crater-depth",))
    assert alone.range_of("crater-depth").q975[0] == many.range_of("crater-depth").q975[20]
    other = asked(drawn, np.linspace(10e-6, 40e-6, 37), seed=2)
    assert other.range_of("crater-depth").q975[20] != many.range_of("crater-depth").q975[20]


def test_draws_in_which_more_is_absorbed_than_arrives_are_left_out_where_they_do():
    exponent = np.where(np.arange(DRAWS) % 2, 0.4, -0.4)
    drawn = inputs(absorbed_fraction=0.9, absorption_exponent=exponent)
    low, high = 5e-6, 60e-6  # the incident fluence of the first lies below 10 kJ/m², that of the second above
    prediction = asked(drawn, np.array([low, high]), kinds=("reflected-fraction",))
    assert prediction.impossible == 0.5
    incident = prediction.range_of("incident-fluence").median
    for number, power in ((0, 0.4), (1, -0.4)):
        kept = 1.0 - 0.9 * (incident[number] / 1e4) ** power
        assert prediction.range_of("reflected-fraction").q025[number] == pytest.approx(kept, rel=1e-9)


def test_where_no_draw_is_possible_nothing_is_said():
    prediction = asked(inputs(absorbed_fraction=0.9, absorption_exponent=0.4), np.array([60e-6]), kinds=())
    assert np.isnan(prediction.range_of("absorbed-fluence").median[0])
    assert prediction.impossible == 1.0


# -- draws -------------------------------------------------------------------------------------------------------------


def priors(**stated):
    return {name: Prior(family, a, b, "as stated") for name, (family, a, b) in stated.items()}


def test_draws_from_the_priors_absorb_no_more_than_arrives():
    stated = campaign(priors(absorbed_fraction=("uniform", 0.0, 1.0), absorption_exponent=("normal", 0.0, 0.4)))
    drawn = prior_draws(stated, SHOTS, FITTED, seed=1)
    for shot in SHOTS:
        w = drawn["spot_radius"] * (shot.spot_radius or NOMINAL_RADIUS) / NOMINAL_RADIUS
        energy = drawn["delivery"] * drawn["meter_calibration"] * shot.metered_energy * shot.transmission
        share = drawn["absorbed_fraction"] * (2 * energy / (np.pi * w**2) / 1e4) ** drawn["absorption_exponent"]
        assert share.max() <= 1.0 + 1e-12
    assert drawn["absorbed_fraction"].max() > 0.9
    # A large fraction goes with a small or negative exponent only: the cut ties what the priors leave apart.
    assert stats.spearmanr(drawn["absorbed_fraction"], drawn["absorption_exponent"]).statistic < -0.1


def test_priors_that_nothing_cuts_are_drawn_as_they_stand():
    stated = campaign(
        priors(
            absorbed_fraction=("lognormal", 0.05, 0.2),
            absorption_exponent=("normal", 0.0, 0.1),
            bubble_yield=("lognormal", 0.05, 0.2),
            shock_factor=("lognormal", 0.05, 0.2),
        )
    )
    drawn = prior_draws(stated, SHOTS, FITTED, seed=1)
    assert stats.kstest(np.log(drawn["absorbed_fraction"] / 0.05) / 0.2, "norm").pvalue > 1e-3
    assert stats.kstest(np.log(drawn["heated_depth"] / 100e-9) / 0.45, "norm").pvalue > 1e-3
    assert stats.kstest((drawn["standoff"] - NOMINAL_STANDOFF) / 3e-5, "norm").pvalue > 1e-3
    assert drawn["bubble_gas"].tolist() == [0.003]


def test_bubbles_that_would_hold_more_than_half_the_energy_are_drawn_the_less_the_more_they_hold():
    fixed = {
        "absorbed_fraction": 0.3,
        "absorption_exponent": 0.0,
        "delivery": 0.8,
        "meter_calibration": 1.0,
        "spot_radius": NOMINAL_RADIUS,
        "heated_depth": 1e-7,
        "heated_depth_exponent": 0.0,
        "removal_energy_density": 2e9,  # threshold 200 J/m²
        "bubble_yield_exponent": 0.0,
        "shock_factor": 1e-9,
    }
    stated = priors(
        **{name: ("fixed", value, 0.0) for name, value in fixed.items()}, bubble_yield=("uniform", 0.0, 1.0)
    )
    drawn = prior_draws(campaign(stated), SHOTS[:1], (), seed=1)["bubble_yield"]
    absorbed = 0.3 * 2 * 0.8 * 20e-6 / (np.pi * NOMINAL_RADIUS**2)
    held = drawn * (1.0 - 200.0 / absorbed)
    # Flat to a half, then half a normal distribution of standard deviation 0.05.
    below = 0.5 / (0.5 + 0.05 * np.sqrt(np.pi / 2))
    assert np.mean(held < 0.5) == pytest.approx(below, abs=4 * np.sqrt(below * (1 - below) / DRAWS))
    assert held[held > 0.5].mean() == pytest.approx(0.5 + 0.05 * np.sqrt(2 / np.pi), rel=0.02)


@pytest.mark.parametrize(
    ("name", "median", "quantity"),
    [("absorbed_fraction", 0.1, "absorbed-fluence"), ("removal_factor", 1.0, "crater-depth")],
)
def test_a_wider_prior_gives_a_wider_range(name, median, quantity):
    widths = []
    for spread in (0.1, 0.8):
        stated = campaign(priors(**{name: ("lognormal", median, spread)}))
        one = asked(prior_draws(stated, SHOTS, FITTED, seed=1)).range_of(quantity)
        widths.append(np.log(one.q84 / one.q16)[1:])  # the first energy lies near the threshold, where depths end
    assert np.all(widths[1] > 1.2 * widths[0])


def test_priors_that_leave_nothing_possible_are_refused():
    stated = campaign(priors(absorbed_fraction=("fixed", 0.99, 0.0), absorption_exponent=("fixed", 0.8, 0.0)))
    with pytest.raises(Refusal, match="absorb"):
        prior_draws(stated, SHOTS, FITTED, seed=1)


def test_what_a_fit_did_not_hold_comes_from_the_priors_and_is_named():
    believed = believed_of(campaign(), ("crater-depth",))
    held = {"absorbed_fraction": np.arange(9000.0), "heated_depth": np.arange(9000.0) + 0.5}
    drawn, missing = completed(held, {"bubble_gas": 0.004}, believed, seed=1)
    assert set(missing) == set(believed) - {*held, "bubble_gas"}
    assert drawn["bubble_gas"].tolist() == [0.004]
    assert np.array_equal(drawn["heated_depth"], drawn["absorbed_fraction"] + 0.5)  # one draw stays together
    assert len(set(drawn["absorbed_fraction"])) == len(drawn["absorbed_fraction"]) == 4000
    assert stats.kstest((drawn["standoff"] - NOMINAL_STANDOFF) / 3e-5, "norm").pvalue > 1e-3


def test_sound_is_predicted_where_there_is_a_probe():
    assert predictable(campaign()) == FITTED
    silent = predictable(replace(campaign(), probe=None))
    assert set(FITTED) - set(silent) == {"pressure-integral", "arrival-time"}

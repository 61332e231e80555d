"""The two-temperature solutions: what is exact about them, refinement, and what the trade takes for granted."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from reconcile.campaign.inputs import INPUTS
from reconcile.campaign.materials import property_rows
from reconcile.campaign.prior_text import parse_prior
from reconcile.physics.solvers.heated_depths import COARSE, fitted_power_law, gold_variants, spread
from reconcile.physics.solvers.two_temperature import (
    GOLD,
    Cells,
    Mesh,
    Pulse,
    advance,
    edges,
    electron_conductivity,
    electron_coupling,
    energy,
    heated,
    lattice_temperature,
    liquid_fraction,
)

SKIN = 15e-9  # [m]
RISING = replace(GOLD, rising_coupling=True)
USUAL = Pulse(1e3, 350e-15, SKIN)


@pytest.fixture(scope="module")
def usual():
    return heated(GOLD, USUAL)


@pytest.fixture(scope="module")
def laws():
    return {variant.name: fitted_power_law(variant) for variant in gold_variants()}


@pytest.mark.parametrize("conduction", ["lattice", "collisions", "plasma"])
@pytest.mark.parametrize("fluence", [100.0, 10e3])
def test_energy_is_conserved(conduction, fluence):
    metal = replace(RISING, conduction=conduction)
    found = heated(metal, Pulse(fluence, 350e-15, SKIN), COARSE)
    assert abs(found.balance) < 1e-10


def test_one_cell_keeps_its_energy_step_by_step():
    # melting included, by a sum made here; a balance made by the solver's own sum could hide a mistake in it
    width, cells = np.array([2e-9, 3e-9]), Cells(np.array([9e4, 300.0]), np.array([2.49e6 * 300.0] * 2))
    start = (0.5 * 67.6 * cells.electrons**2 + cells.enthalpy) @ width
    molten = False
    for _ in range(400):
        cells = advance(GOLD, width, cells, 50e-15, np.zeros(2))
        molten |= bool(liquid_fraction(GOLD, cells.enthalpy).max() == 1.0)
        assert (0.5 * 67.6 * cells.electrons**2 + cells.enthalpy) @ width == pytest.approx(start, abs=0, rel=1e-12)
    assert molten


def test_electrons_and_lattice_meet_at_the_temperature_of_their_energy():
    # 1/2 gamma T² + Ci T = 1/2 gamma 1e8 + Ci 300 with gamma 67.6, Ci 2.49e6: 1621.7 K
    metal = replace(GOLD, melting_temperature=1e5)
    cells = Cells(np.array([1e4]), np.array([2.49e6 * 300.0]))
    for _ in range(3000):
        cells = advance(metal, np.array([1e-9]), cells, 0.1e-12, np.zeros(1))
    ions, _ = lattice_temperature(metal, cells.enthalpy)
    assert cells.electrons[0] == pytest.approx(1621.7, abs=0.05)
    assert ions[0] == pytest.approx(1621.7, abs=0.05)


def test_electrons_cool_to_a_cold_lattice_in_the_time_of_the_integral():
    # (gamma/G)[4000 + 300 ln(4700/700)] = 14.7151 ps for 5000 → 1000 K, lattice held at 300 K, G 2.1e16
    metal = replace(GOLD, coupling=2.1e16, solid_capacity=1e20, melting_temperature=1e5)
    cells, time, step = Cells(np.array([5000.0]), np.array([3e22])), 0.0, 2e-15
    while cells.electrons[0] > 1000.0:
        before = cells.electrons[0]
        cells, time = advance(metal, np.array([1e-9]), cells, step, np.zeros(1)), time + step
    beyond = (1000.0 - cells.electrons[0]) / (before - cells.electrons[0]) * step
    assert time - beyond == pytest.approx(14.7151e-12, abs=0, rel=2e-4)


def test_heat_spreads_as_in_a_uniform_conductor():
    # conductivity ∝ Te and heat capacity ∝ Te: Te² obeys the linear equation, diffusivity D = kappa0/(gamma Ti). Heat
    # given to the surface at once spreads as exp(-z²/4Dt)/√(pi D t).
    metal = replace(GOLD, conduction="lattice", coupling=0.0)
    border = edges(Mesh(first_cell=4e-9, ratio=1.03, depth=3e-6))
    width, middle = np.diff(border), 0.5 * (border[1:] + border[:-1])
    absorbed = np.zeros(width.size)
    absorbed[0] = 100.0
    cells = Cells(np.full(width.size, 300.0), np.full(width.size, 2.49e6 * 300.0))
    start, spent = energy(metal, cells), 0.0
    for index in range(700):
        step = min(1e-17 * 1.03**index, 10e-15)
        cells = advance(metal, width, cells, step, absorbed if index == 0 else np.zeros(width.size))
        spent += step
    reach = 4 * 317.0 / (67.6 * 300.0) * spent
    exact = 200.0 / math.sqrt(math.pi * reach) * np.exp(-(middle**2) / reach)
    assert energy(metal, cells) - start == pytest.approx(exact, abs=0.01 * exact[0])


@pytest.mark.parametrize(
    ("metal", "depth", "fluence"), [(GOLD, SKIN, 1e3), (RISING, SKIN, 5e3), (RISING, 115e-9, 0.5e3)]
)
def test_a_finer_mesh_changes_the_energy_depth_by_less_than_a_percent(metal, depth, fluence):
    pulse = Pulse(fluence, 350e-15, depth)
    fine = heated(metal, pulse, Mesh(first_cell=1e-9, ratio=1.025, steps_per_pulse=100, longest_step=0.1e-12))
    for mesh in (Mesh(), COARSE):
        assert heated(metal, pulse, mesh).energy_depth == pytest.approx(fine.energy_depth, abs=0, rel=0.01)


@pytest.mark.parametrize(
    ("metal", "source", "fluence", "expected"),
    [
        # energy depth [nm] by an explicit scheme, written and run once apart from this package, whose melt has the
        # solid's heat capacity; up to 1 kJ/m², where that hardly counts
        (RISING, 15e-9, 100.0, 163.0),
        (RISING, 15e-9, 1e3, 75.0),
        (GOLD, 15e-9, 500.0, 162.0),
        (GOLD, 15e-9, 1e3, 143.0),
        (RISING, 115e-9, 1e3, 208.0),
        (replace(GOLD, conduction="lattice"), 15e-9, 1e3, 476.0),
    ],
)
def test_an_explicit_scheme_agrees(metal, source, fluence, expected):
    found = heated(metal, Pulse(fluence, 350e-15, source), COARSE).energy_depth
    assert found == pytest.approx(expected * 1e-9, abs=0, rel=0.015)


def test_each_conductivity_and_coupling_is_the_handbooks_at_room_temperature():
    cold = np.array([300.0])
    for conduction, within in (("lattice", 1e-12), ("collisions", 0.03), ("plasma", 0.03)):
        found = electron_conductivity(replace(GOLD, conduction=conduction), cold, cold)[0]
        assert found == pytest.approx(317.0, abs=0, rel=within)
    assert electron_coupling(RISING, cold, cold)[0] == pytest.approx(2.2e16, abs=0, rel=1e-12)


def test_gold_melts_as_the_packages_own_table_says():
    rows = {row.name: row.value for row in property_rows("melting") if row.material == "gold"}
    density = next(row.value for row in property_rows("target") if (row.material, row.name) == ("gold", "density"))
    amount = density / rows["molar_mass"]
    assert rows["melting_temperature"] == GOLD.melting_temperature
    assert amount * rows["heat_of_fusion"] == pytest.approx(GOLD.fusion, abs=0, rel=1e-6)
    assert amount * rows["liquid_heat_capacity"] == pytest.approx(GOLD.liquid_capacity, abs=0, rel=1e-6)
    # 28.5 kJ/mol to the melting point; a constant heat capacity of the lattice, without the electrons' 2 %, falls short
    to_melting = GOLD.solid_capacity * (GOLD.melting_temperature - 298.15)
    assert amount * rows["heat_to_melting"] == pytest.approx(to_melting, abs=0, rel=0.1)


# Common practice, no source: orders of magnitude that everyone in the trade expects.


def test_common_practice_the_electrons_heat_several_times_the_skin_layer(usual):
    # common practice: a heated zone of the order of 100 nm, five to ten times the skin layer of about 10 nm
    skin = 1030e-9 / (4 * math.pi * 6.7)  # wavelength/(4 pi k), k of gold at 1030 nm: Johnson and Christy 1972
    assert 8e-9 < skin < 16e-9
    for found in (usual, heated(RISING, USUAL)):
        assert 60e-9 < found.energy_depth < 160e-9
        assert 4 < found.energy_depth / skin < 13


def test_common_practice_the_heated_zone_forms_faster_than_sound_crosses_it(usual):
    # common practice; sound in gold: 3.24 km/s along a plane wave
    for found in (usual, heated(RISING, USUAL)):
        for moment in (1e-12, 3e-12):
            grown = float(np.interp(moment, found.time, found.zone)) - SKIN
            assert grown / moment > 3240.0
        assert found.zone.max() > 5 * SKIN


def test_common_practice_heat_passes_slowly_to_the_lattice(usual):
    # common practice: slowly compared with a pulse shorter than a picosecond
    for found in (usual, heated(RISING, USUAL)):
        assert 10 * 350e-15 < found.equilibration_time < 100e-12
    at_end_of_pulse = float(np.interp(350e-15, usual.time, usual.surface_energy))
    assert at_end_of_pulse < 0.1 * usual.peak_energy


def test_common_practice_the_surface_reaches_thousands_of_kelvin():
    # common practice: 5 000 to 10 000 K where metal is driven off
    for metal in (GOLD, RISING):
        found = heated(metal, Pulse(1.5e3, 350e-15, SKIN), COARSE)
        ions, _ = lattice_temperature(metal, np.array([found.peak_energy + metal.solid_capacity * 300.0]))
        assert 3e3 < ions[0] < 10e3
        assert found.melt_depth > 50e-9


def test_pulses_shorter_than_a_picosecond_heat_alike():
    depths = [heated(RISING, replace(USUAL, duration=length), COARSE).energy_depth for length in (50e-15, 1e-12)]
    assert depths[1] / depths[0] == pytest.approx(1.08, abs=0.03)
    long = heated(RISING, replace(USUAL, duration=10e-12), COARSE).energy_depth
    assert long > 1.3 * depths[1]


def test_the_default_prior_of_the_heated_depth_holds_what_gold_has_been_described_as(laws):
    depth = parse_prior("heated_depth", INPUTS["heated_depth"].default)
    exponent = parse_prior("heated_depth_exponent", INPUTS["heated_depth_exponent"].default)

    def distance(law):
        return max(
            abs(math.log(law.depth / depth.a)) / depth.b,
            abs(law.exponent - exponent.a) / exponent.b,
        )

    # conductivity kappa0 Te/Ti makes the zone thirty times the skin layer, which common practice excludes
    limited = {name: law for name, law in laws.items() if "lattice" not in name}
    far = {name: distance(law) for name, law in limited.items() if distance(law) > 2.0}
    assert len(laws) == 16
    assert len(limited) == 12
    # within two standard deviations: 10 of these 12, and none of the 4 excluded
    assert sorted(far) == [
        "conductivity collisions, coupling constant, ballistic source",
        "conductivity plasma, coupling constant, ballistic source",
    ]
    assert max(far.values()) < 2.3
    assert min(distance(law) for name, law in laws.items() if "lattice" in name) > 2.0
    together = spread(list(limited.values()))
    assert abs(math.log(together.depth / depth.a)) < depth.b
    assert abs(together.exponent - exponent.a) < exponent.b
    assert together.depth_spread < depth.b
    assert together.exponent_spread < exponent.b


def test_a_power_law_follows_each_description(laws):
    assert max(law.residual for law in laws.values()) < 0.07
    assert laws["conductivity collisions, coupling constant, optical source"].residual < 0.02

"""How far each reduced formula is from its fuller calculation: the largest error over a stated domain.

`python -m reconcile.physics.solvers.errors` computes the table and writes it as `errors.toml` holds it.
"""

from __future__ import annotations

import math
import sys
import tomllib
from collections.abc import Callable, Iterator
from dataclasses import dataclass, fields, replace
from functools import cache
from importlib import resources

import numpy as np
from scipy.integrate import quad

from reconcile.physics import bubble, contact, fragments
from reconcile.physics.matter import Fluid, Metal
from reconcile.physics.solvers.bubble_motion import BubbleLiquid, collapse, largest_radius, motion
from reconcile.physics.solvers.heated_depths import fitted_power_law, gold_variants
from reconcile.physics.solvers.interface import Interface, fastest, growth_rate
from reconcile.physics.solvers.layer_drag import Slowing, most_amplified_wavelength, released_velocity, slowing

# Water at 20 °C: IAPWS-95, IAPWS R12-08, R1-76(2014); gold: LASL Shock Hugoniot Data (Marsh 1980; from memory)
WATER = Fluid(998.207, 1482.35, 2.0, 3.5, 25e-15, 2339.3, 0.072736, 1.0016e-3, 1200.0, 0.5e-3)
GOLD = Metal(19_300.0, 3060.0, 1.572, 15_000.0)
PRESSURE = 101_325.0  # [Pa]

BUBBLES, INTERFACES, LAYERS = 60, 300, 8  # random cases
FINE = 301  # times of a slowing layer: with fewer, the flat top of the gain over wavelength shifts by some per cent
UPPER = 0.5  # of the largest radius, above which the radius at a time is judged


@dataclass(frozen=True, slots=True)
class ErrorRow:
    """One reduced formula against its fuller calculation."""

    formula: str
    against: str
    domain: str
    error: str  # of what the largest error is a share, or a difference
    bound: float  # [1] stated
    largest: float  # [1] computed


@dataclass(frozen=True, slots=True)
class Check:
    """How one row is computed."""

    formula: str
    against: str
    domain: str
    error: str
    bound: float
    compute: Callable[[], float]

    def row(self) -> ErrorRow:
        """Return the row, computed now."""
        return ErrorRow(self.formula, self.against, self.domain, self.error, self.bound, self.compute())


def liquid_of(fluid: Fluid) -> BubbleLiquid:
    """Return the liquid as the integration of bubbles takes it, at one atmosphere."""
    return BubbleLiquid(
        fluid.density, fluid.sound_speed, PRESSURE, fluid.vapour_pressure, fluid.surface_tension, fluid.viscosity
    )


def collapse_error(most_gas: float) -> float:
    """Return the largest relative error of `bubble.collapse_time`."""
    worst = 0.0
    for radius, fluid, gas in _bubbles((25e-6, 2e-3), (0.03, 0.075), (0.5e-3, 3e-3), most_gas):
        closed = float(bubble.collapse_time(radius, PRESSURE - fluid.vapour_pressure, fluid, gas, 1.0))
        worst = max(worst, abs(closed / collapse(radius, liquid_of(fluid), gas).duration - 1.0))
    return worst


def growth_error() -> float:
    """Return the largest relative error of `bubble.growth_time`, for the exact collapse time."""
    worst = 0.0
    for radius, fluid, gas in _bubbles((25e-6, 1e-3), (0.02, 0.073), (0.3e-3, 3e-3), 0.01):
        moved = motion(radius, liquid_of(fluid), gas)
        over = PRESSURE - fluid.vapour_pressure
        closed = float(bubble.growth_time(moved.collapse_time, radius, over, fluid, gas))
        worst = max(worst, abs(closed / moved.growth_time - 1.0))
    return worst


def radius_error(most_gas: float) -> float:
    """Return the largest error of `bubble.radius_at` over the largest radius, with the closed forms' own times."""
    worst = 0.0
    for radius, fluid, gas in _bubbles((25e-6, 1e-3), (0.02, 0.073), (0.3e-3, 3e-3), most_gas):
        moved = motion(radius, liquid_of(fluid), gas)
        over = PRESSURE - fluid.vapour_pressure
        collapsing = bubble.collapse_time(radius, over, fluid, gas, 1.0)
        growing = bubble.growth_time(collapsing, radius, over, fluid, gas)
        time = np.linspace(0.0, moved.lifetime, 201)[1:-1]
        exact = moved.radius(time)
        off = np.abs(bubble.radius_at(time, radius, growing, collapsing) - exact)
        worst = max(worst, float(off[exact > UPPER * radius].max()) / radius)
    return worst


def largest_radius_error() -> float:
    """Return the largest relative error of `bubble.largest_radius`."""
    worst = 0.0
    liquid = liquid_of(WATER)
    for radius in np.geomspace(25e-6, 2e-3, 9):
        energy = 2.0 * np.pi * radius**2 * (radius * liquid.overpressure / 3.0 + WATER.surface_tension)
        closed = float(bubble.largest_radius(energy, liquid.overpressure, WATER.surface_tension))
        worst = max(worst, abs(closed / largest_radius(float(energy), liquid) - 1.0))
    return worst


def velocity_error(pressure: float) -> float:
    """Return the relative error of `contact.contact_velocity` at a pressure [Pa], gold into water; its sign kept."""
    return float(contact.contact_velocity(pressure, GOLD, WATER)) / released_velocity(pressure, GOLD) - 1.0


def drag_error(velocity: float) -> float:
    """Return the largest error of the law of drag over the starting velocity [m/s] of a layer of gold in water."""
    layer = slowing(velocity, GOLD.density * 90e-9)
    tau, mach = contact.drag_time(90e-9, GOLD, WATER), contact.mach_ratio(velocity, WATER)
    fall = np.exp(-layer.time / tau)
    return float(np.abs(velocity * fall / (1.0 + mach * (1.0 - fall)) - layer.velocity).max()) / velocity


def deceleration_error(velocity: float) -> float:
    """Return the relative error of `contact.deceleration` at a starting velocity [m/s]; its sign kept."""
    tau, mach = contact.drag_time(90e-9, GOLD, WATER), contact.mach_ratio(velocity, WATER)
    start = slowing(velocity, GOLD.density * 90e-9).deceleration[0]
    return float(contact.deceleration(velocity, tau, mach) / start) - 1.0


@cache
def ripple_errors() -> tuple[float, float]:
    """Return the largest relative errors of `fragments.fastest_wavelength` and `fragments.fastest_rate`."""
    worst_length = worst_rate = 0.0
    for slow, metal, fluid, sigma, mu in _interfaces():
        between = Interface(metal.melt_density, fluid.contact_density, mu, fluid.contact_viscosity, sigma)
        length, rate = fastest(slow, between)
        ours = (slow, metal, fluid, sigma, mu)
        worst_length = max(worst_length, abs(float(fragments.fastest_wavelength(*ours)) / length - 1.0))
        worst_rate = max(worst_rate, abs(float(fragments.fastest_rate(*ours)) / rate - 1.0))
    return worst_length, worst_rate


@cache
def grown_errors(tensions: tuple[float, float], viscosities: tuple[float, float]) -> tuple[float, float]:
    """Return the largest relative errors of the most amplified wavelength and of `fragments.log_gain`.

    Parameters
    ----------
    tensions, viscosities : ranges of the hot melt's [N/m], [Pa s].

    """
    worst_length = worst_gain = 0.0
    rng = np.random.default_rng(7)
    for _ in range(LAYERS):
        velocity, depth = rng.uniform(200.0, 2000.0), rng.uniform(60e-9, 120e-9)
        sigma, mu = np.exp(rng.uniform(*np.log(tensions))), np.exp(rng.uniform(*np.log(viscosities)))
        tau, mach = contact.drag_time(depth, GOLD, WATER), contact.mach_ratio(velocity, WATER)
        start = contact.deceleration(velocity, tau, mach)
        closed = float(fragments.median_diameter(1.0, start, mach, GOLD, WATER, sigma, mu))
        between = Interface(GOLD.melt_density, WATER.contact_density, mu, WATER.contact_viscosity, sigma)
        length, gain = _most_grown(slowing(velocity, GOLD.density * depth, points=FINE), between, closed)
        worst_length = max(worst_length, abs(closed / length - 1.0))
        ours = float(fragments.log_gain(start, tau, mach, GOLD, WATER, sigma, mu))
        worst_gain = max(worst_gain, abs(ours / gain - 1.0))
    return worst_length, worst_gain


def power_law_error() -> float:
    """Return the largest residual of the heated depth's power law over the published descriptions of gold."""
    return max(fitted_power_law(variant).residual for variant in gold_variants())


def image_error(nearest: float, *, wall: bool) -> float:
    """Return the largest relative error of `bubble.boundary_factor` from a distance in largest radii on."""
    worst = 0.0
    for distance in nearest * np.geomspace(1.0, 10.0, 7):
        shift = 0.5 / distance if wall else -math.log(2.0) / distance
        limits = {"wall_distance": distance} if wall else {"height": distance}
        worst = max(worst, abs(float(bubble.boundary_factor(1.0, **limits)) / _with_images(shift) - 1.0))
    return worst


def _bubbles(
    radii: tuple[float, float], tensions: tuple[float, float], viscosities: tuple[float, float], most_gas: float
) -> Iterator[tuple[float, Fluid, float]]:
    """Yield random bubbles: largest radius, liquid and gas."""
    rng = np.random.default_rng(20)
    for _ in range(BUBBLES):
        fluid = replace(WATER, surface_tension=rng.uniform(*tensions), viscosity=rng.uniform(*viscosities))
        yield float(np.exp(rng.uniform(*np.log(radii)))), fluid, float(rng.uniform(0.0, most_gas))


def _interfaces() -> Iterator[tuple[float, Metal, Fluid, float, float]]:
    """Yield random melts slowed by random liquids: [m/s²], metal, liquid, [N/m], [Pa s]."""
    rng = np.random.default_rng(61)
    for _ in range(INTERFACES):
        metal = replace(GOLD, melt_density=rng.uniform(4e3, 18e3))
        fluid = replace(
            WATER, contact_density=rng.uniform(500.0, 1400.0), contact_viscosity=10 ** rng.uniform(-4, -2.7)
        )
        yield 10 ** rng.uniform(10.5, 13.0), metal, fluid, 10 ** rng.uniform(-1.0, 0.1), 10 ** rng.uniform(-3.0, -2.2)


def _most_grown(layer: Slowing, between: Interface, near: float) -> tuple[float, float]:
    """Return the wavelength that has grown most while a layer slowed [m], and its gain's logarithm."""
    length = most_amplified_wavelength(layer, lambda k, g: growth_rate(k, g, between), near)
    rates = [growth_rate(2.0 * math.pi / length, float(g), between) for g in layer.deceleration]
    return length, float(np.trapezoid(rates, layer.time))


def _with_images(shift: float) -> float:
    """Return a collapse time over that in free liquid: ∫√((1 + shift x) x³/(1 − x³)) dx over the same without shift.

    `shift` is the potential of the images over that of the bubble of largest radius; x = 1 − s² takes the end's root away.
    """

    def weight(s: float, slowed: float) -> float:
        x = 1.0 - s * s
        return 2.0 * math.sqrt((1.0 + slowed * x) * x**3 / (1.0 + x + x * x))

    return float(quad(weight, 0.0, 1.0, args=(shift,))[0] / quad(weight, 0.0, 1.0, args=(0.0,))[0])


def _largest(error: Callable[[float], float], values: tuple[float, ...]) -> float:
    return max(abs(error(value)) for value in values)


_BUBBLE = "Keller-Miksis motion"
_RELEASE = "release along the metal's shock adiabat into Rice-Walsh water"
_LAYER = "drag of Rice-Walsh water, integrated"
_MODES = "exact root of the viscous normal modes"
_GROWN = "exact roots integrated while a layer of gold, 60 to 120 nm, slows from 0.2 to 2 km/s in Rice-Walsh water"
_HOT: tuple[tuple[float, float], tuple[float, float]] = ((0.3, 0.7), (2e-3, 4e-3))
_ANY: tuple[tuple[float, float], tuple[float, float]] = ((0.1, 1.15), (1e-3, 6e-3))
_HOT_WORDS, _ANY_WORDS = "melt of 0.3 to 0.7 N/m, 2 to 4 mPa s", "melt of 0.1 to 1.15 N/m, 1 to 6 mPa s"
_RIPPLES = "3e10 to 1e13 m/s2, melt of 4000 to 18000 kg/m3, 0.1 to 1.26 N/m, 1 to 6 mPa s"
_GROWING = "25 um to 1 mm, 0.02 to 0.073 N/m, 0.3 to 3 mPa s"
_COLLAPSING = "25 um to 2 mm, 0.03 to 0.075 N/m, 0.5 to 3 mPa s"
_OF_VALUE, _OF_LARGEST, _OF_START = "of the value", "of the largest radius", "of the starting velocity"

CHECKS: tuple[Check, ...] = (
    Check("bubble.largest_radius", "energy of a sphere at rest", "water, 25 um to 2 mm", _OF_VALUE, 1e-5, largest_radius_error),
    Check("bubble.collapse_time", _BUBBLE, f"{_COLLAPSING}, gas to 0.02", _OF_VALUE, 6.3e-4, lambda: collapse_error(0.02)),
    Check("bubble.collapse_time", _BUBBLE, f"{_COLLAPSING}, gas to 0.032", _OF_VALUE, 8e-4, lambda: collapse_error(0.032)),
    Check("bubble.growth_time", _BUBBLE, f"{_GROWING}, gas to 0.01", _OF_VALUE, 1e-3, growth_error),
    Check("bubble.radius_at", _BUBBLE, f"upper half, {_GROWING}, gas to 0.003", _OF_LARGEST, 0.011, lambda: radius_error(3e-3)),
    Check("bubble.radius_at", _BUBBLE, f"upper half, {_GROWING}, gas to 0.01", _OF_LARGEST, 0.017, lambda: radius_error(0.01)),
    Check("bubble.boundary_factor", "integral with the image of a wall", "distance from 1 radius", _OF_VALUE, 2e-3,
          lambda: image_error(1.0, wall=True)),
    Check("bubble.boundary_factor", "integral with all images of a free surface", "height from 5 radii", _OF_VALUE, 1e-3,
          lambda: image_error(5.0, wall=False)),
    Check("contact.contact_velocity", _RELEASE, "gold, 3 to 100 GPa", _OF_VALUE, 0.018,
          lambda: _largest(velocity_error, (3e9, 10e9, 30e9, 60e9, 100e9))),
    Check("contact.contact_velocity", _RELEASE, "gold, 100 to 300 GPa", _OF_VALUE, 0.035,
          lambda: _largest(velocity_error, (100e9, 200e9, 300e9))),
    Check("law of drag (contact)", _LAYER, "gold, 0.05 to 1 km/s", _OF_START, 3e-3,
          lambda: _largest(drag_error, (50.0, 200.0, 500.0, 1000.0))),
    Check("law of drag (contact)", _LAYER, "gold, 1 to 2 km/s", _OF_START, 0.014,
          lambda: _largest(drag_error, (1000.0, 1500.0, 2000.0))),
    Check("contact.deceleration", _LAYER, "gold, 0.05 to 1 km/s", _OF_VALUE, 0.02,
          lambda: _largest(deceleration_error, (50.0, 200.0, 500.0, 1000.0))),
    Check("contact.deceleration", _LAYER, "gold, 1 to 2 km/s", _OF_VALUE, 0.085,
          lambda: _largest(deceleration_error, (1000.0, 1500.0, 2000.0))),
    Check("fragments.fastest_wavelength", _MODES, _RIPPLES, _OF_VALUE, 0.038, lambda: ripple_errors()[0]),
    Check("fragments.fastest_rate", _MODES, _RIPPLES, _OF_VALUE, 0.022, lambda: ripple_errors()[1]),
    Check("fragments.median_diameter", _GROWN, _HOT_WORDS, _OF_VALUE, 0.08, lambda: grown_errors(*_HOT)[0]),
    Check("fragments.log_gain", _GROWN, _HOT_WORDS, _OF_VALUE, 0.12, lambda: grown_errors(*_HOT)[1]),
    Check("fragments.median_diameter", _GROWN, _ANY_WORDS, _OF_VALUE, 0.15, lambda: grown_errors(*_ANY)[0]),
    Check("fragments.log_gain", _GROWN, _ANY_WORDS, _OF_VALUE, 0.15, lambda: grown_errors(*_ANY)[1]),
    Check("heating.heated_depth", "two-temperature solutions of a thick target, each with its own law",
          "gold, 0.5 to 5 kJ/m2 absorbed, 350 fs, 16 published descriptions", _OF_VALUE, 0.07, power_law_error),
)  # fmt: skip


def computed_rows() -> tuple[ErrorRow, ...]:
    """Return the table, computed now; it takes some five seconds."""
    return tuple(check.row() for check in CHECKS)


def stated_rows() -> tuple[ErrorRow, ...]:
    """Return the table as it was computed last, from `errors.toml`."""
    text = resources.files("reconcile.physics.solvers").joinpath("errors.toml").read_text(encoding="utf-8")
    return tuple(ErrorRow(**row) for row in tomllib.loads(text)["row"])


def toml_text(rows: tuple[ErrorRow, ...]) -> str:
    """Return the table as `errors.toml` holds it; largest errors to two digits."""
    head = "# Written by `python -m reconcile.physics.solvers.errors`: reduced formulas against fuller calculations.\n"
    return head + "".join(_toml_row(row) for row in rows)


def _toml_row(row: ErrorRow) -> str:
    lines = ["", "[[row]]"]
    for field in fields(row):
        value = getattr(row, field.name)
        lines.append(f'{field.name} = "{value}"' if isinstance(value, str) else f"{field.name} = {value:.2g}")
    return "\n".join([*lines, ""])


if __name__ == "__main__":
    # A table for whoever changes a formula, not for the users of the package: it needs no verb of the command line.
    sys.stdout.write(toml_text(computed_rows()))

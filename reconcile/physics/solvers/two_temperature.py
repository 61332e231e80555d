"""Electrons and lattice of a thick metal after a short laser pulse: the two-temperature equations with melting.

gamma Te dTe/dt = d/dz(kappa dTe/dz) - G (Te - Ti) + source,  dH/dt = G (Te - Ti)

S. I. Anisimov, B. L. Kapeliovich and T. L. Perel'man, Sov. Phys. JETP 39, 375 (1974). The lattice conducts nothing; its
enthalpy H holds the heat of fusion. This is the fuller calculation behind the power law of `reconcile.physics.heating`.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

import numpy as np
from scipy.linalg import solve_banded
from scipy.special import erf

from reconcile.physics.matter import Array

START = 300.0  # [K] of both, before the pulse
BEFORE = 2.5  # pulse durations from the start of the run to the pulse's peak: 4e-9 of the energy would come earlier
NEWTON_STEPS = 2  # for the implicit electron temperatures; energy is conserved whatever their number

Conductivity = Literal["lattice", "collisions", "plasma"]


@dataclass(frozen=True, slots=True)
class ElectronMetal:
    """A metal's electrons and lattice."""

    heat_coefficient: float  # [J/m³/K²] gamma: electron heat capacity over electron temperature
    coupling: float  # [W/m³/K] electrons to lattice, at 300 K
    conductivity: float  # [W/m/K] at 300 K
    electron_collisions: float  # [1/s/K²] A_ee: rate of collisions among electrons over Te²
    lattice_collisions: float  # [1/s/K] B_ep: rate of collisions with the lattice over Ti
    solid_capacity: float  # [J/m³/K] of the lattice
    liquid_capacity: float  # [J/m³/K] of the molten lattice, per volume of cold solid
    melting_temperature: float  # [K]
    fusion: float  # [J/m³] heat of fusion
    conduction: Conductivity = "collisions"  # lattice: kappa0 Te/Ti; collisions: limited by those among electrons too
    rising_coupling: bool = False  # with both temperatures, as the collision rate does
    fermi_temperature: float = math.inf  # [K] for the conduction "plasma" alone
    plasma_conductivity: float = math.nan  # [W/m/K] for the conduction "plasma" alone
    plasma_ratio: float = math.nan  # [1] for the conduction "plasma" alone


# gamma 67.6, G 2.2e16: Z. Lin, L. V. Zhigilei and V. Celli, Phys. Rev. B 77, 075133 (2008), J. Hohlfeld et al., Chem.
# Phys. 251, 237 (2000); kappa0, Ci = 129 J/kg/K × 19 300 kg/m³: CRC Handbook; A_ee, B_ep: X. Y. Wang et al., Phys. Rev. B
# 50, 8016 (1994); liquid 31.0 J/mol/K: A. T. Dinsdale, CALPHAD 15, 317 (1991); fusion 12.55 kJ/mol: CRC Handbook;
# 353 W/m/K, 0.16 and 6.42e4 K: S. I. Anisimov and B. Rethfeld, Proc. SPIE 3093, 192 (1997). All from memory.
# Melting point: ITS-90.
GOLD = ElectronMetal(
    heat_coefficient=67.6,
    coupling=2.2e16,
    conductivity=317.0,
    electron_collisions=1.2e7,
    lattice_collisions=1.23e11,
    solid_capacity=2.49e6,
    liquid_capacity=31.0 * 19_300.0 / 0.196967,
    melting_temperature=1337.33,
    fusion=12_550.0 * 19_300.0 / 0.196967,
    fermi_temperature=6.42e4,
    plasma_conductivity=353.0,
    plasma_ratio=0.16,
)


@dataclass(frozen=True, slots=True)
class Pulse:
    """What the metal absorbs."""

    fluence: float  # [J/m²] absorbed
    duration: float  # [s] full width at half maximum of a Gaussian
    source_depth: float  # [m] over which the absorbed energy falls by e: optical skin, or with the ballistic range


@dataclass(frozen=True, slots=True)
class Mesh:
    """Cells that widen from the surface on, and steps that widen after the pulse."""

    first_cell: float = 2e-9  # [m]
    ratio: float = 1.05
    depth: float = 4e-6  # [m] at least
    steps_per_pulse: int = 50  # of time, over one pulse duration
    longest_step: float = 0.2e-12  # [s]


@dataclass(frozen=True, slots=True)
class Cells:
    """Temperatures and energies of all cells at one time."""

    electrons: Array  # (cells,) [K]
    enthalpy: Array  # (cells,) [J/m³] of the lattice, over 0 K


@dataclass(frozen=True, slots=True)
class Heated:
    """A target after one pulse."""

    time: Array  # (n,) [s] from the pulse's peak, at the end of each step
    surface_electrons: Array  # (n,) [K] electron temperature of the first cell
    surface_energy: Array  # (n,) [J/m³] of the lattice over its start, in the first cell
    zone: Array  # (n,) [m] depth that holds 1 - 1/e of the energy taken up, electrons and lattice together
    fluence: float  # [J/m²] absorbed
    balance: float  # [1] energy found at the end less energy absorbed, over energy absorbed
    melt_depth: float  # [m] all that was ever molten

    @property
    def peak_energy(self) -> float:
        """Highest lattice energy density at the surface [J/m³]."""
        return float(self.surface_energy.max())

    @property
    def energy_depth(self) -> float:
        """Absorbed fluence over the highest lattice energy density at the surface [m]."""
        return self.fluence / self.peak_energy

    @property
    def equilibration_time(self) -> float:
        """From the pulse's peak until lattice and electrons at the surface are equally hot [s]; infinite if later."""
        highest = int(self.surface_energy.argmax())
        return float(self.time[highest]) if highest + 1 < self.time.size else math.inf


def edges(mesh: Mesh) -> Array:
    """Return the borders of the cells, (cells + 1,) [m], from 0 to at least the mesh's depth."""
    count = math.ceil(math.log1p(mesh.depth / mesh.first_cell * (mesh.ratio - 1.0)) / math.log(mesh.ratio))
    return np.concatenate([[0.0], np.cumsum(mesh.first_cell * mesh.ratio ** np.arange(count))])


def heated(metal: ElectronMetal, pulse: Pulse, mesh: Mesh | None = None, until: float = 80e-12) -> Heated:
    """Follow a thick target through one pulse.

    Parameters
    ----------
    metal, pulse, mesh : see there.
    until : end of the run, after the pulse's peak [s].

    Notes
    -----
    Grid: against cells half as wide and steps half as long, the energy depth of gold changes by less than 1 %.

    """
    mesh = mesh or Mesh()
    border = edges(mesh)
    width = np.diff(border)
    share = -np.diff(np.exp(-border / pulse.source_depth))
    share *= pulse.fluence / share.sum()  # [J/m²] of each cell
    times = _times(pulse.duration, mesh, until)
    arrived = 0.5 * erf(2.0 * math.sqrt(math.log(2.0)) * times / pulse.duration)
    arrived /= arrived[-1] - arrived[0]
    cells = Cells(np.full(width.size, START), np.full(width.size, metal.solid_capacity * START))
    start = energy(metal, cells)
    molten = np.zeros(width.size)
    rows = []
    for before, after, part in zip(times[:-1], times[1:], np.diff(arrived), strict=True):
        cells = advance(metal, width, cells, after - before, share * part)
        molten = np.maximum(molten, liquid_fraction(metal, cells.enthalpy))
        gained = np.cumsum((energy(metal, cells) - start) * width)
        zone = np.interp((1.0 - math.exp(-1.0)) * gained[-1], gained, border[1:])
        lattice = cells.enthalpy[0] - metal.solid_capacity * START
        rows.append((after, cells.electrons[0], lattice, zone))
    found = np.array(rows)
    balance = float(gained[-1]) / pulse.fluence - 1.0
    return Heated(
        time=found[:, 0],
        surface_electrons=found[:, 1],
        surface_energy=found[:, 2],
        zone=found[:, 3],
        fluence=pulse.fluence,
        balance=balance,
        melt_depth=float(molten @ width),
    )


def advance(metal: ElectronMetal, width: Array, cells: Cells, step: float, absorbed: Array) -> Cells:
    """Return the cells one time step later.

    Parameters
    ----------
    width : of the cells [m], (cells,).
    step : of time [s].
    absorbed : by each cell's electrons in this step [J/m²], (cells,).

    Notes
    -----
    Implicit in the electron temperatures, first order in time, no heat through either end. The energies are then moved
    by the very flows and exchange that those temperatures give, so that their sum is kept to rounding.

    """
    ions, slope = lattice_temperature(metal, cells.enthalpy)
    before = 0.5 * metal.heat_coefficient * cells.electrons**2
    start = cells.electrons
    guess = np.sqrt(start**2 + 2.0 * absorbed / (metal.heat_coefficient * width))
    apart = 0.5 * (width[1:] + width[:-1])
    for _ in range(NEWTON_STEPS):
        conductivity = electron_conductivity(metal, guess, ions)
        between = step * 0.5 * (conductivity[1:] + conductivity[:-1]) / apart  # [J/m²/K]
        strength = step * electron_coupling(metal, guess, ions)
        exchange = width * strength / (1.0 + strength * slope)  # [J/m²/K] the lattice warms as it takes up heat
        capacity = metal.heat_coefficient * guess * width
        known = width * before + absorbed + exchange * ions + 0.5 * capacity * guess
        bands = np.zeros((3, width.size))
        bands[0, 1:] = bands[2, :-1] = -between
        bands[1] = capacity + exchange
        bands[1, :-1] += between
        bands[1, 1:] += between
        electrons = solve_banded((1, 1), bands, known, check_finite=False)
        guess = np.maximum(electrons, START / 2.0)
    given = exchange * (electrons - ions)
    flow = between * np.diff(electrons)
    gained = absorbed - given
    gained[:-1] += flow
    gained[1:] -= flow
    after = before + gained / width
    return Cells(np.sqrt(2.0 / metal.heat_coefficient * after), cells.enthalpy + given / width)


def energy(metal: ElectronMetal, cells: Cells) -> Array:
    """Return the energy density of electrons and lattice over 0 K [J/m³], (cells,)."""
    return np.asarray(0.5 * metal.heat_coefficient * cells.electrons**2 + cells.enthalpy)


def lattice_temperature(metal: ElectronMetal, enthalpy: Array) -> tuple[Array, Array]:
    """Return the lattice's temperature [K] and its slope with enthalpy [K m³/J]; that is 0 while it melts."""
    solid_end = metal.solid_capacity * metal.melting_temperature
    liquid_start = solid_end + metal.fusion
    solid, liquid = enthalpy < solid_end, enthalpy > liquid_start
    heated_melt = np.maximum(enthalpy - liquid_start, 0.0) / metal.liquid_capacity
    temperature = np.minimum(enthalpy / metal.solid_capacity, metal.melting_temperature) + heated_melt
    slope = np.where(solid, 1.0 / metal.solid_capacity, np.where(liquid, 1.0 / metal.liquid_capacity, 0.0))
    return temperature, slope


def liquid_fraction(metal: ElectronMetal, enthalpy: Array) -> Array:
    """Return the share of each cell that is molten [1]."""
    return np.clip((enthalpy - metal.solid_capacity * metal.melting_temperature) / metal.fusion, 0.0, 1.0)


def electron_conductivity(metal: ElectronMetal, electrons: Array, ions: Array) -> Array:
    """Return the electrons' heat conductivity [W/m/K] at both temperatures [K].

    Notes
    -----
    lattice: kappa0 Te/Ti. collisions: kappa0 B Te/(A Te² + B Ti), the same with collisions among electrons (X. Y. Wang
    et al. 1994). plasma: K th (th² + 0.16)^(5/4) (th² + 0.44)/((th² + 0.092)^(1/2) (th² + eta th_i)), th = T over the
    Fermi temperature (S. I. Anisimov and B. Rethfeld 1997). Both from memory.

    """
    if metal.conduction == "lattice":
        return np.asarray(metal.conductivity * electrons / ions)
    if metal.conduction == "collisions":
        rate = metal.electron_collisions * electrons**2 + metal.lattice_collisions * ions
        return np.asarray(metal.conductivity * metal.lattice_collisions * electrons / rate)
    hot, cold = electrons / metal.fermi_temperature, ions / metal.fermi_temperature
    square = hot**2
    upper = (square + 0.16) ** 1.25 * (square + 0.44) * hot
    return np.asarray(
        metal.plasma_conductivity * upper / (np.sqrt(square + 0.092) * (square + metal.plasma_ratio * cold))
    )


def electron_coupling(metal: ElectronMetal, electrons: Array, ions: Array) -> Array:
    """Return the coupling of electrons and lattice [W/m³/K] at both temperatures [K].

    Notes
    -----
    Constant, or G0 (1 + A/B (Te + Ti)), here over its value at 300 K (J. K. Chen, W. P. Latham and J. E. Beraun,
    J. Laser Appl. 17, 63, 2005; from memory).

    """
    if not metal.rising_coupling:
        return np.full_like(electrons, metal.coupling)
    share = metal.electron_collisions / metal.lattice_collisions
    return np.asarray(metal.coupling * (1.0 + share * (electrons + ions)) / (1.0 + share * 2.0 * START))


def _times(duration: float, mesh: Mesh, until: float) -> Array:
    """Return the times between steps [s]: even in the pulse, then each step 3 % longer up to the longest."""
    step = duration / mesh.steps_per_pulse
    even = np.arange(-BEFORE * mesh.steps_per_pulse, BEFORE * mesh.steps_per_pulse + 1.0) * step
    growth = 1.0 + 1.5 / mesh.steps_per_pulse
    times = list(even)
    while times[-1] < until:
        step = min(step * growth, max(mesh.longest_step, duration / mesh.steps_per_pulse))
        times.append(times[-1] + step)
    return np.array(times)

"""An invented campaign: which shots are fired, what is read of them, and which of it is wrong."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from reconcile.campaign.kinds import KINDS
from reconcile.invent import nature
from reconcile.invent.truth import BENCH, Truth, draw_truth, strongest_fluence

GEOMETRIC_SD = 1.5  # of the particles of one shot
PARTICLES = 400  # counted of one sample
RASTER_SITES = 500  # like sites in the scan that fills up a sample
DEPTH_LIMIT = 30e-9  # [m] the profiler's detection limit
SOUND_FROM = 0.3  # [1] excess from which the probe's pulse is read
STRAYS, MISREADS = 3, 3
SLIPPED_POINT = 10.0

Style = Literal["plain", "untidy", "files"]  # of a campaign's folder

# How finely the laboratory writes its numbers down [SI]; what is not listed, to three digits.
RESOLUTION = {
    "crater-depth": 1e-9,
    "crater-diameter": 0.1e-6,
    "bubble-radius": 0.1e-6,
    "bubble-lifetime": 0.01e-6,
    "arrival-time": 1e-9,
    "median-diameter": 0.01e-9,
}
# Uncertainties that the laboratory states as a share of what it read.
RELATIVE_U = {"pressure-integral": 0.06}


@dataclass(frozen=True, slots=True)
class InventedShot:
    """One row of the log, and what was true of it."""

    name: str
    logged_energy: float  # [J] as written in the log
    true_energy: float  # [J] of one pulse at the meter
    deviation: float  # [1] the shot's own, x in true energy = calibration × what the meter showed × exp(x)
    misread_factor: float  # [1] logged over what the meter showed; 1: none
    pulses: int
    sites: int
    level: str
    sample: str | None
    incident_fluence: float  # [J/m²] true, on the axis
    absorbed_fluence: float  # [J/m²] true, on the axis
    excess: float  # [1] ln(absorbed fluence / threshold), soft


@dataclass(frozen=True, slots=True)
class InventedReading:
    """One reading as written down, and what was true of it."""

    kind: str
    shot: str | None  # None: belongs to a sample
    sample: str | None
    delay: float | None  # [s]
    value: float | None  # [SI]; None: below the limit
    u: float | None  # [SI]
    limit: float | None  # [SI]; None: it was measured
    true: float  # [SI] of this shot or sample, the kind's scatter included
    stray: bool = False  # planted

    @property
    def below_limit(self) -> bool:
        """Whether it was only seen to lie below the limit."""
        return self.value is None


@dataclass(frozen=True, slots=True)
class Histogram:
    """Particles of a sample, counted between edges."""

    sample: str
    edges: NDArray[np.float64]  # (n + 1,) [m]
    counts: NDArray[np.int64]  # (n,)


@dataclass(frozen=True, slots=True)
class Invented:
    """An invented campaign: what was true and what was written down."""

    truth: Truth
    seed: int
    shots: tuple[InventedShot, ...]
    readings: tuple[InventedReading, ...]
    histograms: tuple[Histogram, ...]

    def of(self, kind: str) -> tuple[InventedReading, ...]:
        """Return the readings of one kind, in the order of the log."""
        return tuple(reading for reading in self.readings if reading.kind == kind)

    def write(self, folder: Path, *, style: Style = "untidy") -> None:
        """Write the campaign folder, and `truth/` in it.

        Parameters
        ----------
        folder : made where it does not exist.
        style : "plain" is tidy CSV; "untidy" is how laboratories keep their folders; "files" is the same with frames,
            traces, height maps and micrographs in place of most numbers.

        Raises
        ------
        Refusal : the folder exists and holds something.
        """
        from reconcile.invent.folder import write  # writers know this type

        write(self, folder, style=style)


@dataclass(frozen=True, slots=True)
class _Planned:
    """A shot before it is fired."""

    shown: float  # [J] what the meter shows
    level: int
    pulses: int
    sample: int | None
    raster: bool


@dataclass(frozen=True, slots=True)
class _Fired:
    """A shot after it was fired."""

    shot: InventedShot
    effects: nature.Shot
    raster: bool


def invent(seed: int, *, shots: int = 72, truth: Truth | None = None) -> Invented:
    """Invent a campaign: gold under 6 mm of water, 350 fs, 1030 nm, a spot of 21 µm.

    One level lies below threshold, seven lie between 1.3 times its energy and the strongest (see
    `strongest_fluence`). Readings are simulated with more physics than the reduced model holds (see
    `reconcile.invent.nature`), each times exp(scatter of its kind), plus the error of the instrument and of the single
    reading. Three strays and three misread energies are planted.

    Parameters
    ----------
    seed : the same seed gives the same campaign.
    shots : rows of the log, 48 or more.
    truth : true values of all inputs; None: drawn.

    Raises
    ------
    ValueError : fewer than 48 shots.
    """
    if shots < 48:
        raise ValueError(f"{shots} shots do not fill eight levels; at least 48 do")
    rng = np.random.default_rng(seed)
    truth = truth or draw_truth(rng)
    fired = _fire(_misread(_plan(truth, shots, rng), truth, rng), truth, rng)
    histograms, medians = _samples(fired, truth, rng)
    readings = _plant(fired, (*_readings(fired, truth, rng), *medians), truth, rng)
    return Invented(truth, seed, tuple(each.shot for each in fired), readings, histograms)


def _plan(truth: Truth, shots: int, rng: np.random.Generator) -> list[_Planned]:
    """Return the shots in the order in which they are fired: level by level, samples on the upper six."""
    threshold = truth.logged_energy(truth["threshold_fluence"])
    strongest = truth.logged_energy(strongest_fluence(truth))
    nominal = [0.75 * threshold, *np.geomspace(1.3 * threshold, strongest, 7)]
    counts = [3, *(len(part) for part in np.array_split(np.arange(shots - 3), 7))]
    planned = []
    for level, (energy, count) in enumerate(zip(nominal, counts, strict=True)):
        pulses = [10 if level and i == 2 else 5 if level and i in (3, 5) else 1 for i in range(count)]
        for i in range(count):
            sampled = level >= 2 and i < 2
            shown = _two_digits(energy) * math.exp(0.01 * float(rng.standard_normal()))
            raster = sampled and i == 1
            planned.append(_Planned(_rounded(shown, 1e-8), level, pulses[i], level - 1 if sampled else None, raster))
    return planned


def _misread(planned: list[_Planned], truth: Truth, rng: np.random.Generator) -> list[tuple[_Planned, float]]:
    """Pair each shot with its misread factor.

    Misread ones are single pulses of no sample that stay well above threshold and below the strongest level.
    """
    threshold = truth.logged_energy(truth["threshold_fluence"])
    strongest = max(each.shown for each in planned)
    factors = [1.0] * len(planned)
    for turn in range(MISREADS):
        factor = float(rng.uniform(1.5, 2.2)) ** (1 if turn % 2 == 0 else -1)
        fit = [
            index
            for index, each in enumerate(planned)
            if each.sample is None and each.pulses == 1 and factors[index] == 1.0
            and 2.0 * threshold < each.shown / factor < strongest and 2.0 * threshold < each.shown
        ]  # fmt: skip
        factors[int(rng.choice(fit))] = factor
    return list(zip(planned, factors, strict=True))


def _fire(planned: list[tuple[_Planned, float]], truth: Truth, rng: np.random.Generator) -> list[_Fired]:
    """Fire the shots: the log holds what was planned; where it is misread, the meter showed something else."""
    fired = []
    for number, (plan, factor) in enumerate(planned, start=1):
        deviation = truth["energy_jitter"] * float(rng.standard_normal())
        energy = truth["meter_calibration"] * plan.shown / factor * math.exp(deviation)
        effects = nature.shoot(truth, energy, plan.pulses)
        shot = InventedShot(
            name=f"s{number:03d}",
            logged_energy=plan.shown,
            true_energy=energy,
            deviation=deviation,
            misread_factor=factor,
            pulses=plan.pulses,
            sites=RASTER_SITES if plan.raster else 1,
            level=f"L{plan.level}",
            sample=None if plan.sample is None else f"C{plan.sample}",
            incident_fluence=effects.incident_fluence,
            absorbed_fluence=effects.absorbed_fluence,
            excess=effects.excess,
        )
        fired.append(_Fired(shot, effects, plan.raster))
    return fired


def _readings(fired: list[_Fired], truth: Truth, rng: np.random.Generator) -> list[InventedReading]:
    """Read everything that belongs to a shot. A misread shot always has depth, diameter, lifetime and sound."""
    readings: list[InventedReading] = []
    for each in fired:
        shot, effects = each.shot, each.effects
        misread = shot.misread_factor != 1.0
        if not each.raster:
            readings.append(_depth(shot.name, effects, truth, rng))
            if shot.level != "L0":
                readings.append(_diameter(shot.name, effects, truth, rng))
        if effects.bubble is None or shot.level == "L0":
            continue
        if not each.raster and rng.random() < 0.5:
            readings.extend(_radii(shot.name, effects.bubble, truth, rng))
        if rng.random() < 0.7 or misread:
            readings.append(_lifetime(shot.name, effects.bubble, truth, rng))
        if effects.excess > SOUND_FROM and (rng.random() < 0.8 or misread):
            readings.extend(_sound(shot.name, effects, truth, rng))
    return readings


def _depth(shot: str, effects: nature.Shot, truth: Truth, rng: np.random.Generator) -> InventedReading:
    kind = "crater-depth"
    true = _scattered(kind, effects.depth, truth, rng)
    u = _rounded(float(rng.uniform(8e-9, 15e-9)), 1e-9)
    value = _as_written(kind, truth["scale.profiler"] * true + u * float(rng.standard_normal()))
    if value < DEPTH_LIMIT:
        return InventedReading(kind, shot, None, None, None, None, DEPTH_LIMIT, true)
    return InventedReading(kind, shot, None, None, value, u, None, true)


def _diameter(shot: str, effects: nature.Shot, truth: Truth, rng: np.random.Generator) -> InventedReading:
    kind, u = "crater-diameter", 0.5e-6
    true = _scattered(kind, effects.diameter, truth, rng)
    value = _as_written(kind, abs(true + u * float(rng.standard_normal())))
    return InventedReading(kind, shot, None, None, value, u, None, true)


def _radii(shot: str, bubble: nature.Bubble, truth: Truth, rng: np.random.Generator) -> list[InventedReading]:
    """Read one or two frames, at delays between an eighth and three quarters of the bubble's life."""
    kind, u = "bubble-radius", 2e-6
    readings: list[InventedReading] = []
    for share in sorted(rng.uniform(0.12, 0.76, size=int(rng.integers(1, 3)))):
        delay = max(_rounded(share * bubble.lifetime, 0.5e-6), 0.5e-6)
        if delay > 0.8 * bubble.lifetime or any(reading.delay == delay for reading in readings):
            continue
        true = _scattered(kind, bubble.radius(delay), truth, rng)
        value = _as_written(kind, true + u * float(rng.standard_normal()))
        readings.append(InventedReading(kind, shot, None, delay, value, u, None, true))
    return readings


def _lifetime(shot: str, bubble: nature.Bubble, truth: Truth, rng: np.random.Generator) -> InventedReading:
    kind, u = "bubble-lifetime", 0.15e-6
    true = _scattered(kind, bubble.lifetime, truth, rng)
    value = _as_written(kind, true + u * float(rng.standard_normal()))
    return InventedReading(kind, shot, None, None, value, u, None, true)


def _sound(shot: str, effects: nature.Shot, truth: Truth, rng: np.random.Generator) -> list[InventedReading]:
    """Read the probe: pressures with the sensitivity that the laboratory believes, times on its recorder's clock."""
    gain = truth["probe_sensitivity"] / BENCH["probe_sensitivity"].value
    true = _scattered("pressure-integral", effects.pressure_integral, truth, rng)
    share = RELATIVE_U["pressure-integral"]
    value = _as_written("pressure-integral", gain**2 * true * (1 + share * float(rng.standard_normal())))
    integral = InventedReading("pressure-integral", shot, None, None, value, share * value, None, true)

    arrived = effects.arrival_time + truth["scatter.arrival-time"] * float(rng.standard_normal())
    late = truth["trigger_offset"] - BENCH["trigger_offset"].value
    clock = _as_written("arrival-time", arrived + late + 3e-9 * float(rng.standard_normal()))
    return [integral, InventedReading("arrival-time", shot, None, None, clock, 3e-9, None, arrived)]


def _samples(
    fired: list[_Fired], truth: Truth, rng: np.random.Generator
) -> tuple[tuple[Histogram, ...], tuple[InventedReading, ...]]:
    """Count particles of every sample: each comes from one of its shots, by how many that shot makes."""
    histograms, readings = [], []
    for name in sorted({each.shot.sample for each in fired if each.shot.sample}):
        mine = [each for each in fired if each.shot.sample == name]
        medians = np.array([nature.particle_diameter(truth, each.effects.absorbed_fluence) for each in mine])
        numbers = [each.shot.sites * each.shot.pulses * each.effects.pulse_volume for each in mine] / medians**3
        shares = numbers / numbers.sum()
        true = float(np.exp(np.sum(shares * np.log(medians))))
        scattered = _scattered("median-diameter", true, truth, rng)
        source = rng.choice(len(mine), size=PARTICLES, p=shares)
        sizes = scattered / true * medians[source] * GEOMETRIC_SD ** rng.standard_normal(PARTICLES)
        step = 1e-9 if scattered < 12e-9 else 2e-9
        edges = step * np.arange(math.floor(sizes.min() / step), math.ceil(sizes.max() / step) + 1)
        counts = np.histogram(sizes, edges)[0]
        histograms.append(Histogram(name, edges, counts))
        value = _as_written("median-diameter", float(np.median(sizes)))
        # of a median of n lognormal sizes: sqrt(pi/2) ln(sd)/sqrt(n) in the logarithm
        u = value * math.sqrt(math.pi / 2) * math.log(GEOMETRIC_SD) / math.sqrt(PARTICLES)
        readings.append(InventedReading("median-diameter", None, name, None, value, u, None, scattered))
    return tuple(histograms), tuple(readings)


def _plant(
    fired: list[_Fired], readings: tuple[InventedReading, ...], truth: Truth, rng: np.random.Generator
) -> tuple[InventedReading, ...]:
    """Make strays: a slipped decimal point in a depth, two wrong factors in other kinds.

    They sit on sound shots well above threshold that have another reading.
    """
    shots = {each.shot.name: each.shot for each in fired}
    planted = list(readings)
    taken: set[str] = set()
    others = rng.permutation(["bubble-lifetime", "crater-diameter", "pressure-integral"])[: STRAYS - 1]
    for kind, slip in (("crater-depth", SLIPPED_POINT), *((str(other), None) for other in others)):
        fit = [
            index
            for index, reading in enumerate(planted)
            if reading.kind == kind and reading.value is not None and reading.shot not in taken
            and _is_fit_for_a_stray(shots[reading.shot or ""], planted)
        ]  # fmt: skip
        index = int(rng.choice(fit))
        chosen = planted[index]
        wrong = _as_written(kind, (slip or _gross_factor(chosen, truth)) * (chosen.value or 0.0))
        u = RELATIVE_U[kind] * wrong if kind in RELATIVE_U else chosen.u
        planted[index] = replace(chosen, value=wrong, u=u, stray=True)
        taken.add(chosen.shot or "")
    return tuple(planted)


def _is_fit_for_a_stray(shot: InventedShot, readings: list[InventedReading]) -> bool:
    others = {reading.kind for reading in readings if reading.shot == shot.name}
    return shot.misread_factor == 1.0 and shot.excess > 0.7 and len(others) > 2


def _gross_factor(reading: InventedReading, truth: Truth) -> float:
    """Return the smallest usual slip that puts a reading at least six predictive standard deviations off.

    Predictive: its own uncertainty, its kind's scatter, and the shot's jitter in full (no kind here rises faster than
    1.6 times energy well above threshold).
    """
    value, u = reading.value or 0.0, reading.u or 0.0
    relative = math.hypot(u / value, truth[f"scatter.{reading.kind}"], 1.6 * truth["energy_jitter"])
    for factor in (1.6, 2.0, 2.5, 3.0, 4.0):
        if (math.log(factor) if KINDS[reading.kind].logarithmic else factor - 1) > 6 * relative:
            return factor
    return SLIPPED_POINT


def _scattered(kind: str, value: float, truth: Truth, rng: np.random.Generator) -> float:
    return value * math.exp(truth[f"scatter.{kind}"] * float(rng.standard_normal()))


def _as_written(kind: str, value: float) -> float:
    """Return a reading's value with the digits that the laboratory gives it."""
    return _rounded(value, RESOLUTION[kind]) if kind in RESOLUTION else _digits(value, 3)


def _rounded(value: float, step: float) -> float:
    """Return a value as it is written down, in whole steps."""
    return float(f"{round(value / step) * step:.12g}")


def _digits(value: float, digits: int) -> float:
    return float(f"{value:.{digits}g}")


def _two_digits(energy: float) -> float:
    return _digits(energy, 2)

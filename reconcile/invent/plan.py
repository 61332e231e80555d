"""Which numbers of an invented campaign lie in frames, traces, maps and micrographs, and what is true of each file."""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from reconcile.invent import nature
from reconcile.invent.campaign import GEOMETRIC_SD, Invented, InventedReading, InventedShot
from reconcile.invent.maps import Crater
from reconcile.invent.pictures import Camera, draw_camera
from reconcile.invent.truth import BENCH, Stated, Truth
from reconcile.invent.untidy import Blemishes, blemishes
from reconcile.invent.waveforms import Probe, Recorder, Sound, first_pulse

FRAMES, MAPS, SAMPLES = 32, 7, 3  # sound files of each, at most
PARTICLES = 160  # laid on one micrograph
LARGEST_BUBBLE = 122.0  # [px]
TYPICAL_PARTICLE = 16.0  # [px]
INTERVAL, BEFORE = 2e-9, 1e-6  # [s] between samples; of the record before the laser pulse
WINDOWS = (12e-6, 16e-6, 20e-6, 24e-6, 32e-6, 40e-6, 50e-6, 64e-6, 100e-6)  # [s]
RANGES = (0.01, 0.02, 0.05, 0.1, 0.2, 0.5, 1.0, 2.0)  # [V]

Fault = Literal["", "truncated", "dark", "clipped", "cut"]
Format = Literal["csv", "wav", "h5", "npz"]


@dataclass(frozen=True, slots=True)
class Shown:
    """One true number that a file shows, instruments' errors not in it."""

    file: str
    kind: str
    shot: str | None
    sample: str | None
    delay: float | None  # [s]
    true: float  # [SI]
    factor: float = 1.0  # [1] by which the file shows it wrong on purpose; 1: as it is


@dataclass(frozen=True, slots=True)
class FrameFile:
    """A frame of the camera."""

    name: str
    shot: str
    delay: float  # [s]
    radius: float | None  # [m]; None: no bubble
    shock_radius: float | None  # [m]; None: outside the frame
    bits: int
    fault: Fault = ""


@dataclass(frozen=True, slots=True)
class TraceFile:
    """A trace of the hydrophone."""

    name: str
    shot: str
    sound: Sound
    recorder: Recorder
    fault: Fault = ""  # cut: the record ends before the collapse


@dataclass(frozen=True, slots=True)
class MapFile:
    """A height map of a crater."""

    name: str
    shot: str
    crater: Crater | None  # None: untouched


@dataclass(frozen=True, slots=True)
class MicrographFile:
    """A micrograph of a sample."""

    name: str
    sample: str
    diameters: NDArray[np.float64]  # (n,) [m] of all that lies on and next to it


@dataclass(frozen=True, slots=True)
class Plan:
    """Every file of the campaign, and what is left to tables."""

    truth: Truth  # with the true pixel pitches
    pitches: dict[str, Stated]  # what the laboratory states of them, by table name
    camera: Camera
    probe: Probe
    odd: Blemishes
    tables: Invented  # the campaign with the readings that stay in tables
    frames: tuple[FrameFile, ...]
    traces: tuple[TraceFile, ...]
    maps: tuple[MapFile, ...]
    micrographs: tuple[MicrographFile, ...]
    shown: tuple[Shown, ...]


@dataclass(frozen=True, slots=True)
class _Effects:
    """What each shot did, with the scatter of single readings where none was written down."""

    invented: Invented
    by_shot: dict[str, nature.Shot]
    rng: np.random.Generator

    def true(self, kind: str, shot: str, otherwise: float) -> float:
        """Return what was true of a shot where it was read, and else a new draw about what the shot does."""
        for reading in self.invented.of(kind):
            if reading.shot == shot:
                return reading.true
        return otherwise * math.exp(self.invented.truth[f"scatter.{kind}"] * float(self.rng.standard_normal()))


def plan(invented: Invented) -> Plan:
    """Choose which readings of a campaign are kept as files, and settle what each file shows.

    Nearly all sound goes to traces, radii to frames, craters of seven shots and an untouched place to maps, particles
    of three samples to micrographs. Shots that the folder's oddities fall on stay in tables.

    Parameters
    ----------
    invented : the same campaign gives the same plan.
    """
    rng = np.random.default_rng([invented.seed, 1])
    odd = blemishes(invented)
    effects = _Effects(
        invented,
        {s.name: nature.shoot(invented.truth, s.true_energy, s.pulses) for s in invented.shots},
        rng,
    )
    radii = [reading for reading in invented.of("bubble-radius") if reading.shot != odd.misspelt]
    samples = _micrograph_samples(invented, rng)
    pitches = {
        "camera-1": _stated(max(reading.true for reading in radii) / LARGEST_BUBBLE, "um", 1e-6),
        "microscope": Stated(0.5e-6, 0.0025e-6, "0.5 um ± 0.5 %"),
        "tem-images": _stated(float(np.median([reading.true for reading in samples])) / TYPICAL_PARTICLE, "nm", 1e-9),
    }
    true_pitches = {
        f"pixel_pitch.{name}": stated.value + stated.u * float(rng.standard_normal())
        for name, stated in pitches.items()
    }
    truth = Truth({**invented.truth.values, **true_pitches})
    camera = draw_camera(rng, truth["pixel_pitch.camera-1"])
    probe = _probe(truth)
    frames = _frames(effects, radii, camera)
    traces = _traces(effects, probe, odd)
    maps = _maps(effects, odd)
    micrographs = _micrographs(samples, rng)
    shown = (*_shown_of_sound(traces, effects), *_shown_of_pictures(frames, maps, samples, effects))
    return Plan(
        truth,
        pitches,
        camera,
        probe,
        odd,
        _left(invented, shown, micrographs),
        frames,
        traces,
        maps,
        micrographs,
        shown,
    )


def _stated(near: float, unit: str, size: float) -> Stated:
    """Return a pitch near a wanted one with two digits, and 1 % of uncertainty."""
    value = float(f"{near / size:.2g}")
    return Stated(value * size, 0.01 * value * size, f"{value:g} {unit} ± 1 %")


def _probe(truth: Truth) -> Probe:
    return Probe(
        truth["probe_sensitivity"],
        truth["probe_response"],
        truth["standoff"],
        truth["trigger_offset"],
        nature.WATER.sound_speed,
        nature.HEIGHT,
        nature.WALL_DISTANCE,
    )


def _sound_shots(invented: Invented) -> list[InventedShot]:
    """Return the shots on which nothing wrong was planted, single pulses first."""
    planted = {reading.shot for reading in invented.readings if reading.stray}
    sound = [shot for shot in invented.shots if shot.misread_factor == 1.0 and shot.name not in planted]
    return sorted(sound, key=lambda shot: shot.pulses)


def _frames(effects: _Effects, radii: list[InventedReading], camera: Camera) -> tuple[FrameFile, ...]:
    """Choose frames: radii that were read, two early ones with the shock still in view, an empty one, two bad ones."""
    order = effects.rng.permutation(len(radii))[: min(FRAMES, len(radii) - 4)]
    levels = {shot.name: shot.level for shot in effects.invented.shots}
    frames = [_frame(radii[i].shot or "", radii[i].delay or 0.0, radii[i].true, None, levels) for i in sorted(order)]
    frames += _early_frames(effects, camera, levels)
    below = next(shot.name for shot in effects.invented.shots if shot.level == "L0")
    frames.append(_frame(below, 3e-6, None, None, levels))
    taken = {frame.shot for frame in frames}
    sound = [shot.name for shot in _sound_shots(effects.invented) if shot.level >= "L2"]
    free = [shot for shot in sound if shot not in taken] or sound
    bad: tuple[tuple[str, Fault], ...] = ((free[0], "truncated"), (free[-1], "dark"))
    frames += [replace(_frame(shot, 2.5e-6, 60e-6, None, levels), fault=fault) for shot, fault in bad]
    return tuple(frames)


def _early_frames(effects: _Effects, camera: Camera, levels: dict[str, str]) -> list[FrameFile]:
    """Return two frames of strong shots so soon after the pulse that the shock has not left the picture."""
    truth, speed = effects.invented.truth, nature.WATER.sound_speed
    strong = [shot.name for shot in _sound_shots(effects.invented) if shot.level >= "L5" and shot.pulses == 1]
    frames = []
    for delay, shot in zip((90e-9, 110e-9), strong, strict=False):
        happened = effects.by_shot[shot]
        if happened.bubble is None:
            continue
        scatter = truth["scatter.bubble-radius"] * float(effects.rng.standard_normal())
        ahead = truth["standoff"] - speed * happened.arrival_time  # [m] won over sound, nearly all of it at once
        shock = speed * delay + 0.9 * ahead
        in_view = shock < 0.45 * camera.width * camera.pitch
        radius = happened.bubble.radius(delay) * math.exp(scatter)
        frames.append(_frame(shot, delay, radius, shock if in_view else None, levels))
    return frames


def _frame(shot: str, delay: float, radius: float | None, shock: float | None, levels: dict[str, str]) -> FrameFile:
    bits = 16 if levels[shot] >= "L6" else 8  # the operator changed the camera's settings
    return FrameFile(f"frames/{shot}_{round(1e9 * delay)}ns.png", shot, delay, radius, shock, bits)


def _traces(effects: _Effects, probe: Probe, odd: Blemishes) -> tuple[TraceFile, ...]:
    """Choose traces: nearly every shot whose sound was read; one clips, a few end before the collapse."""
    invented = effects.invented
    read = [reading.shot or "" for reading in invented.of("pressure-integral")]
    kept = [shot for shot in read if shot not in {odd.hidden, odd.doubled}]
    kept = [shot for index, shot in enumerate(kept) if index % 12 != 5]
    sounds = {shot: _sound(effects, shot) for shot in kept}
    shots = {shot.name: shot for shot in invented.shots}
    stray = {reading.shot for reading in invented.readings if reading.stray}
    written = {reading.shot for reading in invented.of("bubble-lifetime")}
    singles = [s for s in kept if s in written and s not in stray and shots[s].misread_factor == 1.0]
    cut = {reading.shot for reading in invented.of("bubble-lifetime") if reading.stray} | set(singles[3:30:13])
    clipped = next(shot for shot in singles if shots[shot].level >= "L6" and shot not in cut)
    traces = []
    for levels, form, bits in (("L1L2", "csv", 8), ("L3L4L5", "wav", 12), ("L6", "h5", 12), ("L7", "npz", 12)):
        mine = {shot: sounds[shot] for shot in kept if shots[shot].level in levels}
        for shot, sound in mine.items():
            alike = [s for name, s in mine.items() if form == "wav" or shots[name].level == shots[shot].level]
            recorder = _recorder(alike, probe, bits)
            fault: Fault = "cut" if shot in cut else "clipped" if shot == clipped else ""
            if fault == "cut":
                end = BEFORE + 0.6 * (sound.lifetime + probe.standoff / probe.sound_speed)
                recorder = replace(recorder, samples=int(end / INTERVAL))
            elif fault == "clipped":
                recorder = replace(recorder, full_scale=float(f"{0.45 * _peak(sound, probe):.1g}"))
            traces.append(TraceFile(f"traces/{shot}.{form}", shot, sound, recorder, fault))
    return tuple(sorted(traces, key=lambda trace: trace.shot))


def _sound(effects: _Effects, shot: str) -> Sound:
    happened = effects.by_shot[shot]
    integral = next(reading for reading in effects.invented.of("pressure-integral") if reading.shot == shot)
    arrival = next(reading for reading in effects.invented.of("arrival-time") if reading.shot == shot)
    if happened.bubble is None:
        raise ValueError(f"shot {shot} has a sound and no bubble")
    wrong = 1.0
    if integral.stray:
        believed = (effects.invented.truth["probe_sensitivity"] / BENCH["probe_sensitivity"].value) ** 2
        wrong = math.sqrt((integral.value or 0.0) / (believed * integral.true))
    return Sound(
        arrival=arrival.true,
        integral=integral.true,
        duration=happened.pulse_duration,
        lifetime=effects.true("bubble-lifetime", shot, happened.bubble.lifetime),
        collapse_height=float(np.exp(effects.rng.uniform(math.log(0.4), math.log(1.7)))),
        gain=wrong,
    )


def _peak(sound: Sound, probe: Probe) -> float:
    """Return the voltage of the first pulse at its peak."""
    time = sound.arrival + np.linspace(0, sound.duration, 200)
    return sound.gain * probe.sensitivity * float(first_pulse(time, sound, probe.response_time).max())


def _recorder(sounds: Iterable[Sound], probe: Probe, bits: int) -> Recorder:
    """Return the setting at which all these sounds fit the record."""
    sounds = list(sounds)
    latest = max(1.12 * sound.lifetime + probe.standoff / probe.sound_speed for sound in sounds) + 1e-6
    largest = max(max(1.0, sound.collapse_height) * _peak(sound, probe) for sound in sounds)
    window = next(window for window in WINDOWS if window > latest)
    full_scale = next(scale for scale in RANGES if scale > 1.2 * largest)
    return Recorder(INTERVAL, -BEFORE, round((BEFORE + window) / INTERVAL), full_scale, bits)


def _maps(effects: _Effects, odd: Blemishes) -> tuple[MapFile, ...]:
    """Choose seven craters of all levels, deep enough to be measured, and an untouched place below threshold."""
    invented, rng = effects.invented, effects.rng
    across = {reading.shot: reading for reading in invented.of("crater-diameter")}
    deep = {reading.shot: reading for reading in invented.of("crater-depth") if reading.true > 70e-9}
    fit = [
        shot.name for shot in _sound_shots(invented)
        if shot.name in across and shot.name in deep and shot.name != odd.unreadable
    ]  # fmt: skip
    chosen = sorted(rng.choice(len(fit), size=min(MAPS, len(fit)), replace=False))
    maps = []
    for shot in sorted(fit[index] for index in chosen):
        happened = effects.by_shot[shot]
        pulses = next(s.pulses for s in invented.shots if s.name == shot)
        step = invented.truth["threshold_depth"] * -math.expm1(-happened.excess / 0.1)
        depth = deep[shot].true
        crater = Crater(
            depth=depth,
            diameter=across[shot].true,
            excess=happened.excess,
            exponent=invented.truth["heated_depth_exponent"],
            step_share=pulses * step / happened.depth,
            rim=min(float(rng.uniform(0.08, 0.2)) * depth, 150e-9),
        )
        maps.append(MapFile(f"maps/{shot}.tif", shot, crater))
    none = [reading.shot or "" for reading in invented.of("crater-depth") if reading.below_limit]
    maps.extend(MapFile(f"maps/{shot}.tif", shot, None) for shot in none[:1])
    return tuple(maps)


def _micrograph_samples(invented: Invented, rng: np.random.Generator) -> list[InventedReading]:
    """Choose samples next to each other in size, so that one magnification serves."""
    ordered = sorted(invented.of("median-diameter"), key=lambda reading: reading.true)
    first = int(rng.integers(len(ordered) - SAMPLES + 1))
    return ordered[first : first + SAMPLES]


def _micrographs(samples: list[InventedReading], rng: np.random.Generator) -> tuple[MicrographFile, ...]:
    files = []
    for index, reading in enumerate(sorted(samples, key=lambda reading: reading.sample or "")):
        for frame in range(1, 4 if index == 0 else 3):
            diameters = reading.true * GEOMETRIC_SD ** rng.standard_normal(PARTICLES)
            files.append(MicrographFile(f"tem/{reading.sample}_{frame}.tif", reading.sample or "", diameters))
    return tuple(files)


def _shown_of_sound(traces: tuple[TraceFile, ...], effects: _Effects) -> list[Shown]:
    shown = []
    for trace in traces:
        sound, place = trace.sound, (trace.shot, None, None)
        shown.append(Shown(trace.name, "arrival-time", *place, sound.arrival))
        if trace.fault != "clipped":
            shown.append(Shown(trace.name, "pressure-integral", *place, sound.integral, sound.gain**2))
        if trace.fault != "cut":
            shown.append(Shown(trace.name, "bubble-lifetime", *place, sound.lifetime))
    return shown


def _shown_of_pictures(
    frames: tuple[FrameFile, ...], maps: tuple[MapFile, ...], samples: list[InventedReading], effects: _Effects
) -> list[Shown]:
    shown = []
    for frame in frames:
        if not frame.fault:
            shown.append(Shown(frame.name, "bubble-radius", frame.shot, None, frame.delay, frame.radius or 0.0))
        if frame.shock_radius is not None:
            shown.append(Shown(frame.name, "shock-radius", frame.shot, None, frame.delay, frame.shock_radius))
    for crater_map in maps:
        crater, place = crater_map.crater, (crater_map.shot, None, None)
        shown.append(Shown(crater_map.name, "crater-depth", *place, crater.depth if crater else 0.0))
        if crater:
            shown.append(Shown(crater_map.name, "crater-diameter", *place, crater.diameter))
            shown.append(Shown(crater_map.name, "crater-volume", *place, crater.volume))
    for reading in samples:
        pattern = f"tem/{reading.sample}_*.tif"
        shown.append(Shown(pattern, "median-diameter", None, reading.sample, None, reading.true))
    return shown


def _left(invented: Invented, shown: tuple[Shown, ...], micrographs: tuple[MicrographFile, ...]) -> Invented:
    """Return the campaign with what no file shows."""
    in_files = {(one.kind, one.shot, one.sample, one.delay) for one in shown}
    clipped = {one.shot for one in shown if one.kind == "arrival-time"}  # a trace stands for all of a shot's sound
    samples = {file.sample for file in micrographs}
    readings = tuple(
        reading for reading in invented.readings
        if (reading.kind, reading.shot, reading.sample, reading.delay) not in in_files
        and not (reading.kind == "pressure-integral" and reading.shot in clipped)
    )  # fmt: skip
    histograms = tuple(histogram for histogram in invented.histograms if histogram.sample not in samples)
    return replace(invented, readings=readings, histograms=histograms)

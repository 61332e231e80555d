"""Rendered hydrophone traces: pick-up, first pulse, echoes, collapse, and what a recorder does to them."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

ECHO_OF_SURFACE = -0.45  # [1] of the pulse's height; the free surface turns it over
PREAMPLIFIER_NOISE = 0.12e-3  # [V] rms
SCOPE_NOISE = 0.003  # [1] rms over full scale
SECOND_COLLAPSE = 0.55  # [1] life of the rebounded bubble over that of the first


@dataclass(frozen=True, slots=True)
class Probe:
    """The hydrophone as it truly is, and where it hangs."""

    sensitivity: float  # [V/Pa]
    response_time: float  # [s] of its one pole
    standoff: float  # [m]
    trigger_offset: float  # [s] recorded time of the laser pulse
    sound_speed: float  # [m/s]
    height: float  # [m] of the liquid
    wall_distance: float  # [m]


@dataclass(frozen=True, slots=True)
class Sound:
    """What one shot sends to the probe; times after the laser pulse."""

    arrival: float  # [s] of the first pulse's foot
    integral: float  # [Pa² s] of the first pulse as recorded within the probe's bandwidth
    duration: float  # [s] of that pulse's triangle before the probe
    lifetime: float  # [s] of the bubble
    collapse_height: float  # [1] peak of the collapse over that of the first pulse
    gain: float = 1.0  # [1] by which the amplifier was set wrong


@dataclass(frozen=True, slots=True)
class Recorder:
    """How the voltage is recorded."""

    interval: float  # [s] from sample to sample
    start: float  # [s] recorded time of the first sample
    samples: int
    full_scale: float  # [V] recorded voltages lie between minus and plus this
    bits: int

    @property
    def time(self) -> Array:
        """Recorded time of every sample (samples,) [s]."""
        return np.asarray(self.start + self.interval * np.arange(self.samples), dtype=np.float64)


def first_pulse(time: Array, sound: Sound, response_time: float) -> Array:
    """Return the recorded pressure of the first pulse alone (n,) [Pa].

    A triangle that rises at once, through one pole, with the asked integral of its square.

    Parameters
    ----------
    time : (n,) after the laser pulse [s].
    sound : its arrival, integral and duration.
    response_time : of the probe [s].
    """
    fine = np.linspace(0, sound.duration + 20 * response_time, 20_001)
    shape = _triangle_through_pole(fine, sound.duration, response_time)
    square = float(np.sum(shape**2)) * (fine[1] - fine[0])  # the shape starts and ends at zero
    peak = math.sqrt(sound.integral / square)
    return peak * _triangle_through_pole(time - sound.arrival, sound.duration, response_time)


def pressure(time: Array, sound: Sound, probe: Probe, rng: np.random.Generator) -> Array:
    """Return all recorded pressure (n,) [Pa]: first pulse, its echoes, collapse, its echo, second collapse.

    Parameters
    ----------
    time : (n,) after the laser pulse [s].
    rng : strength of the echo from the wall, height and decay of the collapses.
    """
    travel = probe.standoff / probe.sound_speed
    from_surface = 2 * (probe.height - probe.standoff) / probe.sound_speed
    from_wall = math.hypot(2 * probe.wall_distance, probe.standoff) / probe.sound_speed - travel
    first = first_pulse(time, sound, probe.response_time)
    peak = float(first_pulse(sound.arrival + np.linspace(0, sound.duration, 500), sound, probe.response_time).max())
    total = first + ECHO_OF_SURFACE * first_pulse(time - from_surface, sound, probe.response_time)
    total += float(rng.uniform(0.05, 0.14)) * first_pulse(time - from_wall, sound, probe.response_time)
    decay = float(rng.uniform(25e-9, 60e-9))
    height = peak * sound.collapse_height
    for at, share in (
        (sound.lifetime, 1.0),
        (sound.lifetime * (1 + SECOND_COLLAPSE * float(rng.uniform(0.85, 1.1))), float(rng.uniform(0.1, 0.3))),
    ):
        for late, strength in ((0.0, 1.0), (from_surface, ECHO_OF_SURFACE)):
            total += share * strength * height * _collapse(time - at - travel - late, decay, probe.response_time)
    return np.asarray(total)


def trace(sound: Sound, probe: Probe, recorder: Recorder, rng: np.random.Generator) -> NDArray[np.int32]:
    """Return a recorded trace (samples,) in whole steps of the recorder; 2^(bits - 1) steps are full scale.

    Parameters
    ----------
    rng : pick-up, baseline, hum, drift and noise.
    """
    time = recorder.time - probe.trigger_offset
    voltage = sound.gain * probe.sensitivity * pressure(time, sound, probe, rng)
    voltage += _pick_up(time, recorder.full_scale, rng) + _baseline(time, recorder.full_scale, rng)
    noise = math.hypot(PREAMPLIFIER_NOISE, SCOPE_NOISE * recorder.full_scale)
    voltage += noise * rng.standard_normal(recorder.samples)
    top = 2 ** (recorder.bits - 1)
    return np.clip(np.round(voltage / recorder.full_scale * top), -top, top - 1).astype(np.int32)


def volts(steps: NDArray[np.int32], recorder: Recorder) -> Array:
    """Return recorded steps as voltages [V]."""
    return np.asarray(steps * (recorder.full_scale / 2 ** (recorder.bits - 1)))


def _triangle_through_pole(late: Array, duration: float, tau: float) -> Array:
    """Return a triangle of height 1, falling from its front to its end, behind one pole (n,) [1].

    Solution of tau y' + y = 1 - t/duration up to the end, and of tau y' + y = 0 beyond it.
    """
    x = tau / duration
    t = np.clip(late, 0, duration)
    during = (1 + x) * -np.expm1(-t / tau) - t / duration
    beyond = np.exp(-np.maximum(late - duration, 0) / tau)
    return np.where(late > 0, during * beyond, 0.0)


def _collapse(late: Array, decay: float, tau: float) -> Array:
    """Return a collapse of height 1 (n,): a slow rise before it, a steep front, an exponential tail; behind one pole."""
    x = tau / decay
    peak = x ** (x / (1 - x)) if x != 1 else math.exp(-1)
    after = np.maximum(late, 0)
    tail = (np.exp(-after / decay) - np.exp(-after / tau)) / (1 - x) / peak
    before = 0.06 * 0.15e-6 / (0.15e-6 + np.maximum(-late, 0))
    return np.where(late > 0, tail + 0.06 * np.exp(-after / tau), before)


def _pick_up(time: Array, full_scale: float, rng: np.random.Generator) -> Array:
    """Return what the discharge of the laser induces at the pulse itself (n,) [V]: a burst that rings down."""
    after = np.maximum(time, 0)
    ringing = np.sin(2 * np.pi * float(rng.uniform(4e6, 9e6)) * after) * np.exp(
        -after / float(rng.uniform(8e-8, 1.6e-7))
    )
    return np.where(time > 0, full_scale * float(rng.uniform(0.35, 0.8)) * ringing, 0.0)


def _baseline(time: Array, full_scale: float, rng: np.random.Generator) -> Array:
    """Return offset, mains hum, ripple of a supply and the amplifier's recovery from the pick-up (n,) [V]."""
    offset = full_scale * float(rng.uniform(-0.04, 0.04))
    hum = 1.5e-3 * np.sin(2 * np.pi * 50.0 * time + float(rng.uniform(0, 2 * np.pi)))
    ripple = 0.2e-3 * np.sin(2 * np.pi * float(rng.uniform(70e3, 110e3)) * time + float(rng.uniform(0, 2 * np.pi)))
    recovery = (
        full_scale * float(rng.uniform(-0.03, 0.03)) * np.exp(-np.maximum(time, 0) / float(rng.uniform(4e-6, 12e-6)))
    )
    return np.asarray(offset + hum + ripple + np.where(time > 0, recovery, 0.0))

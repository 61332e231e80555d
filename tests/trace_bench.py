"""A simulated probe and recorder for tests: pulses filtered by difference equations on a fine grid of times."""

from dataclasses import dataclass

import numpy as np
from scipy.ndimage import gaussian_filter1d
from scipy.signal import lfilter

from reconcile.measure.trace import ProbeSetup

FINE = 40  # points between two samples


@dataclass(frozen=True)
class Bench:
    """One shot and the bench on which it is recorded; SI."""

    interval: float = 2e-9
    end: float = 45e-6
    before: float = 0.5e-6
    pressure: float = 130e3  # of the jump, at the probe
    duration: float = 25e-9
    form: str = "triangle"
    smear: float = 2.5e-9
    advance: float = 12e-9
    lifetime: float = 24e-6
    collapse: float = 1.2  # over `pressure`; 0: none
    collapse_duration: float = 60e-9
    echo: float = 0.25  # over `pressure`, negative: turned over
    echo_lag: float = 6e-6
    noise: float = 1e-3  # [V]
    bits: int = 12
    range: float = 0.25  # [V]
    hum: float = 3e-3  # [V]
    hum_frequency: float = 100e3
    drift: float = 2e-3  # [V]
    pick_up: float = 0.15  # [V]
    sensitivity: float = 0.45e-6  # [V/Pa]
    standoff: float = 5e-3
    sound_speed: float = 1482.0
    trigger: float = 30e-9
    response: float = 5.3e-9  # as stated
    slower: float = 1.0  # true response time over the stated one

    @property
    def setup(self) -> ProbeSetup:
        return ProbeSetup(self.sensitivity, self.standoff, self.sound_speed, self.trigger, self.response)


@dataclass(frozen=True)
class Truth:
    arrival: float
    integral: float  # of p² as the probe gives it, without recorder
    lifetime: float
    peak: float


def pulse(bench: Bench, duration: float, form: str, time, at: float):
    """Return one pulse of unit height as the probe gives it, its integral of the square, and its peak."""
    lead = 10  # samples ahead of the jump, for the smear
    count = int(np.ceil(14 * (duration + bench.slower * bench.response) / bench.interval)) + lead
    first = int(np.floor((at - time[0]) / bench.interval)) - lead
    fine = bench.interval / FINE
    t = time[0] + first * bench.interval + (np.arange(count * FINE) + 0.5) * fine - at
    shapes = {
        "exponential": lambda: np.exp(-np.maximum(t, 0) / duration),
        "triangle": lambda: np.maximum(1 - np.maximum(t, 0) / duration, 0),
    }
    pressure = np.where(t >= 0, shapes[form](), 0.0)
    if bench.smear:
        pressure = gaussian_filter1d(pressure, bench.smear / fine, mode="constant")
    keep = np.exp(-fine / (bench.slower * bench.response))
    voltage = lfilter([1 - keep], [1, -keep], pressure)
    out = np.zeros(time.size)
    index = first + np.arange(1, count)
    inside = (index >= 0) & (index < time.size)
    out[index[inside]] = voltage[np.arange(1, count) * FINE - 1][inside]
    return out, float(np.sum(voltage**2) * fine), float(voltage.max())


def record(bench: Bench, rng: np.random.Generator):
    """Return times, voltages and the truth of one simulated shot."""
    time = -bench.before + bench.interval * np.arange(round((bench.end + bench.before) / bench.interval))
    travel = bench.standoff / bench.sound_speed
    arrival = travel - bench.advance
    first, integral, peak = pulse(bench, bench.duration, bench.form, time, arrival + bench.trigger)
    pressure = bench.pressure * first
    if bench.echo:
        late = pulse(bench, bench.duration, bench.form, time, arrival + bench.trigger + bench.echo_lag)[0]
        pressure = pressure + bench.echo * bench.pressure * late
    if bench.collapse:
        at = bench.lifetime + travel + bench.trigger
        pressure = (
            pressure
            + bench.collapse * bench.pressure * pulse(bench, bench.collapse_duration, "exponential", time, at)[0]
        )
    since = np.maximum(time - bench.trigger, 0)
    ringing = np.where(time > bench.trigger, bench.pick_up * np.exp(-since / 0.12e-6) * np.cos(7e7 * since), 0)
    slow = bench.hum * np.sin(2 * np.pi * bench.hum_frequency * time + rng.uniform(0, 2 * np.pi))
    slow = slow + bench.drift * np.sin(time / 30e-6 + rng.uniform(0, 6)) + rng.normal(0, 3e-3)
    voltage = bench.sensitivity * pressure + ringing + slow + rng.normal(0, bench.noise, time.size)
    step = 2 * bench.range / 2**bench.bits
    voltage = np.clip(np.round(voltage / step) * step, -bench.range, bench.range - step)
    return time, voltage, Truth(arrival, bench.pressure**2 * integral, bench.lifetime, bench.pressure * peak)

"""A probe's trace → arrival of the first pulse, its ∫p²dt and peak, and the lifetime of the bubble."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from reconcile.campaign.quantity import shown
from reconcile.measure.measured import Array, Finding, Measured, Outline, Stroke, Unmeasurable
from reconcile.measure.trace_later import Event, Original, as_copy, choose, find_events, judge
from reconcile.measure.trace_noise import (
    Baseline,
    Noise,
    background,
    fit_baseline,
    noise_of,
    pick_up,
    recorder_step,
    spread,
    struck,
)
from reconcile.measure.trace_pulse import (
    Flags,
    Front,
    Pulse,
    clipped_samples,
    exponential,
    find_lobe,
    fit_front,
    integrate,
    smear_of_path,
)

Indices = NDArray[np.intp]

RESPONSE_SPREAD = 0.15  # [1] of a response time stated without ± (common practice)

_ABOVE = 5.0  # standard deviations of the filtered noise: among some hundred samples chance gives none in 10 000 traces
_ABOVE_LATER = 6.0  # the same over a whole record
_BESIDE = 0.03  # share of the largest below which nothing is a pulse: what the slow background leaves beside a long one
_WINDOW = 0.15  # share of the travel time by which the arrival may differ: standoff, temperature, the shock's advance
_WINDOW_EDGE = 0.12e-6  # [s] beside that share
_EARLIEST_COLLAPSE = 2e-6  # [s] after the first pulse; a bubble of 10 µm in water lives as long
_QUIET = 3e-6  # [s] of quiet record on either side of a pulse on which its baseline rests


@dataclass(frozen=True, slots=True)
class ProbeSetup:
    """The nominal numbers of the probe at one shot."""

    sensitivity: float  # [V/Pa]; negative: compression lowers the voltage
    standoff: float  # [m] site to probe
    sound_speed: float  # [m/s]
    trigger_offset: float  # [s] what happens at t after the laser pulse is recorded at t + this
    response_time: float  # [s] of the probe's one pole, as stated
    full_scale: float | None = None  # [V] at which the recorder clips; None: not known
    lifetime_hint: float | None = None  # [s] where the collapse is expected, within a factor of two; None: not known
    response_spread: float = RESPONSE_SPREAD  # [1] standard uncertainty of the response time's logarithm; 0: exact

    @property
    def travel(self) -> float:
        """Time [s] from the site to the probe at the speed of sound."""
        return self.standoff / self.sound_speed


@dataclass(frozen=True, slots=True)
class _Record:
    """A trace with compression upwards, and what is quiet in it."""

    time: Array  # [s]
    voltage: Array  # [V]
    smooth: Array  # [V] slow background
    signal: Array  # [V] voltage less background
    filtered: Array  # [V] signal averaged over about one pulse that begins at the sample
    noise: Noise  # first estimate, about the background
    level: float  # [V] standard deviation of `filtered` where it is quiet
    clipped: Flags
    step: float  # [s]
    setup: ProbeSetup


@dataclass(frozen=True, slots=True)
class _First:
    """The first pulse."""

    front: Front  # fitted to the rise
    whole: Front  # fitted to all of it
    pulse: Pulse
    baseline: Baseline
    quiet: Indices  # on which the baseline rests
    pick_up: tuple[int, int] | None
    ends: tuple[int, int]  # of the integral
    integral: tuple[float, float]  # [V² s], u
    clipped: bool


def measure_trace(time: Array, voltage: Array, setup: ProbeSetup) -> Finding:
    """Measure one trace.

    Parameters
    ----------
    time : (n,) [s] even grid, as the recorder counts it
    voltage : (n,) [V]
    setup : the probe's nominal numbers

    Returns
    -------
    `arrival-time` [s] after the laser pulse, of the front; `pressure-integral` [Pa² s] of the first compression;
    `peak-pressure` [Pa]; `bubble-lifetime` [s], where a collapse is in the record. Integral and peak are left out
    where the pulse is clipped. Uncertainties hold the trace's own part alone: noise, baseline, sampling, and what
    the response time's own uncertainty makes of a front; not sensitivity, standoff and trigger, which all traces
    share. Collapse and echo are told apart by
    time, sign, shape and what spreading allows, never by the collapse's being louder.

    Raises
    ------
    Unmeasurable
        The record is flat, does not cover the arrival, or shows no pulse above its noise there.
    """
    record = _prepared(np.asarray(time, dtype=np.float64), np.asarray(voltage, dtype=np.float64), setup)
    first = _first_pulse(record)
    later = _later(record, first)
    chosen = choose(later)
    collapse = None if chosen is None else later[chosen]
    passed = later[:chosen]
    measured, remarks = _of_first(record, first)
    front = None if collapse is None else _collapse_front(record, collapse)
    lifetime, more = _lifetime(record, first, collapse, front, passed)
    measured += lifetime
    outline = _outline(record, first, measured, passed, front)
    return Finding(tuple(measured), outline, tuple(remarks + more))


def _prepared(time: Array, voltage: Array, setup: ProbeSetup) -> _Record:
    if voltage.size < 64 or not np.isfinite(voltage).all() or float(np.ptp(voltage)) == 0.0:
        raise Unmeasurable(
            "a flat or broken record", "a recorded waveform", "Check the probe's cable and the recorder's range."
        )
    step = float(time[-1] - time[0]) / (time.size - 1)
    due = setup.trigger_offset + setup.travel
    if not time[0] < due - setup.response_time or not due + 10 * max(setup.response_time, step) < time[-1]:
        raise Unmeasurable(
            f"a record from {shown(float(time[0]), None, 's')} to {shown(float(time[-1]), None, 's')}",
            f"the first pulse about {shown(due, None, 's')} within it",
            "Check standoff and trigger_offset, and the start of the trace.",
        )
    upright = voltage if setup.sensitivity > 0 else -voltage
    block = math.ceil(max(0.4e-6, 12 * setup.response_time, 32 * step) / step)
    smooth = background(upright, block, struck(upright, setup.response_time / step))
    signal = upright - smooth
    sd = spread(signal)
    quantum = recorder_step(upright)
    noise = noise_of(signal[np.abs(signal) <= 4.0 * max(sd, quantum)], quantum)
    rise = np.arange(math.ceil(6 * setup.response_time / step) + 1, dtype=np.float64) + 0.5
    kernel = exponential(rise * step, 2 * setup.response_time,
                   setup.response_time, 0.1 * step)  # fmt: skip
    kernel = kernel / math.sqrt(float(kernel @ kernel))
    filtered = np.correlate(signal, kernel, mode="full")[kernel.size - 1 :]
    level = max(spread(filtered), math.sqrt(noise.of_sum(kernel)))
    clipped = clipped_samples(upright, quantum, noise.sd, setup.full_scale)
    return _Record(time, upright, smooth, signal, filtered, noise, level, clipped, step, setup)


# --- the first pulse --------------------------------------------------------------------------------------------


def _first_pulse(record: _Record) -> _First:
    setup, time = record.setup, record.time
    due = setup.trigger_offset + setup.travel
    early, late = due - _WINDOW * setup.travel - _WINDOW_EDGE, due + _WINDOW * setup.travel + _WINDOW_EDGE
    loud = pick_up(time, record.signal, 6.0 * record.noise.sd + record.noise.step, setup.trigger_offset, early)
    begin = int(np.searchsorted(time, early))
    if loud is not None and loud[1] >= begin:
        begin = min(loud[1] + 1, int(np.searchsorted(time, due - 0.3 * _WINDOW * setup.travel - 0.3 * _WINDOW_EDGE)))
    end = min(int(np.searchsorted(time, late)), time.size - 1)
    size = np.abs(record.filtered[begin:end])
    above = np.flatnonzero(size > max(_ABOVE * record.level, _BESIDE * float(np.max(size, initial=0.0))))
    if above.size == 0:
        largest = float(np.max(size, initial=0.0)) / record.level
        raise Unmeasurable(
            f"no pulse above the noise in the expected window, {shown(float(time[begin]), None, 's')} to"
            f" {shown(float(time[end]), None, 's')} (largest {largest:.1f} standard deviations,"
            f" {shown(record.noise.sd, None, 'V')} of noise a sample)",
            f"a pulse of at least {_ABOVE:g} standard deviations",
            "Check standoff and trigger_offset; a shot below threshold makes no sound.",
        )
    return _measured_first(record, begin + int(above[0]), loud)


def _measured_first(record: _Record, noticed: int, loud: tuple[int, int] | None) -> _First:
    setup, time, step = record.setup, record.time, record.step
    width = max(1, round(setup.response_time / step))
    reach = math.ceil(12 * setup.response_time / step) + 4
    low = 0.5 * record.noise.sd / math.sqrt(width)
    rough = find_lobe(record.signal, noticed, reach, width, low)
    quiet = _quiet(record, min(noticed, rough.first) - width, loud)
    baseline = fit_baseline(time, record.voltage, np.concatenate((quiet, _quiet_after(record, rough.last))))
    signal = record.voltage - baseline.at(time)
    noise = noise_of(signal[quiet], record.noise.step)
    lobe = find_lobe(signal, noticed, reach, width, 0.5 * noise.sd / math.sqrt(width))
    smear = smear_of_path(setup.standoff)
    pulse = Pulse(time, signal, record.clipped, lobe, noise, setup.response_time, setup.response_spread, smear)
    front = fit_front(pulse)
    if front is None:
        raise Unmeasurable(
            f"a rise at {shown(float(time[lobe.peak]), None, 's')} that is no front",
            "a pulse that rises within the probe's response time",
            "Look at the trace; check bandwidth in the manifest.",
        )
    front = replace(front, u=math.hypot(front.u, _slope_u(front, baseline)))
    whole = fit_front(pulse, whole=True) or front
    value, u, ends = integrate(pulse, whole, baseline.u(front.time))
    clipped = bool(record.clipped[ends[0] : ends[1] + 1].any())
    return _First(front, whole, pulse, baseline, quiet, loud, ends, (value, u), clipped)


def _slope_u(front: Front, baseline: Baseline) -> float:
    """Return the uncertainty [s] of a front's time by that of the baseline: over the steepest slope of its rise."""
    return baseline.u(front.time) / (front.height / front.response)


def _quiet(record: _Record, until: int, loud: tuple[int, int] | None) -> Indices:
    """Return the samples before a pulse that hold neither it nor the pick-up, the nearest stretch of them."""
    begin = 0 if loud is None else loud[1] + 1
    begin = max(begin, until - math.ceil(_QUIET / record.step))
    quiet = np.arange(begin, max(until, begin))
    if quiet.size < 24 and loud is not None:  # the pick-up fills the time of flight: what lies before the laser pulse
        quiet = np.concatenate((np.arange(max(0, loud[0])), quiet))
    if quiet.size < 16:
        raise Unmeasurable(
            f"{quiet.size} quiet samples before the first pulse",
            "a baseline before it",
            "Start the record earlier, or put the probe farther from the site.",
        )
    return quiet


def _quiet_after(record: _Record, last: int) -> Indices:
    """Return samples behind a pulse that hold nothing else: drift and hum under it are then bridged, not extrapolated."""
    step = record.step
    begin = last + math.ceil(max(0.3e-6, 20 * record.setup.response_time) / step)
    stretch = np.arange(min(begin, record.time.size), min(begin + math.ceil(_QUIET / step), record.time.size))
    loud = np.flatnonzero(np.abs(record.filtered[stretch]) > _ABOVE * record.level)
    if loud.size:
        around = math.ceil(max(0.1e-6, 8 * record.setup.response_time) / step)
        stretch = stretch[: max(int(loud[0]) - around, 0)]
    return stretch


def _of_first(record: _Record, first: _First) -> tuple[list[Measured], list[str]]:
    setup = record.setup
    measured = [Measured("arrival-time", first.front.time - setup.trigger_offset, first.front.u)]
    remarks = []
    if first.clipped:
        remarks.append("the first pulse is clipped: no pressure integral and no peak; times are kept")
        return measured, remarks
    gain = abs(setup.sensitivity)
    value, u = first.integral
    if value > 3 * u:
        measured.append(Measured("pressure-integral", value / gain**2, u / gain**2))
    else:
        remarks.append("the first pulse is too weak for its pressure integral")
    height = first.front.top
    measured.append(Measured("peak-pressure", height / gain, _top_u(record, first, height) / gain))
    if first.pulse.lobe.last + 1 >= record.time.size:
        remarks.append("the record ends within the first pulse")
    return measured, remarks


def _top_u(record: _Record, first: _First, height: float) -> float:
    """Return the uncertainty [V] of the fitted height: noise and baseline, how far samples lie off, 1 % for its form."""
    begin, end = first.ends
    fitted = first.front.at(record.time[begin : end + 1])
    share = first.pulse.noise.of_sum(fitted) / max(float(fitted @ fitted), 1e-30) ** 2
    near = slice(max(first.pulse.lobe.peak - 1, 0), first.pulse.lobe.peak + 2)
    off = float(np.mean(first.pulse.signal[near] - first.front.at(record.time[near])))
    return math.hypot(height * math.sqrt(share), first.baseline.u(first.front.time), off, 0.01 * height)


# --- after it ---------------------------------------------------------------------------------------------------


def _later(record: _Record, first: _First) -> list[Event]:
    """Return what follows the first pulse, each with its odds for being the collapse."""
    setup, time = record.setup, record.time
    begin = int(np.searchsorted(time, first.front.time + max(_EARLIEST_COLLAPSE, 20 * setup.response_time)))
    apart = math.ceil(max(0.15e-6, 10 * setup.response_time) / record.step)
    level = max(_ABOVE_LATER * record.level, _BESIDE * float(np.max(np.abs(record.filtered[begin:]), initial=0.0)))
    if record.noise.step > record.noise.sd:
        level = max(level, 1.5 * record.noise.step)
    lobe = first.pulse.lobe
    copied = Original(first.whole, setup.standoff, setup.travel, record.noise.sd, 0.0)
    itself = Event(lobe.first, lobe.peak, lobe.last, float(first.pulse.signal[lobe.peak]))
    copied = replace(copied, misfit=as_copy(itself, first.pulse.signal, time, copied)[1])
    judged = []
    for event in find_events(record.filtered, record.signal, begin, level, apart):
        one = judge(event, record.signal, time, copied)
        if setup.lifetime_hint is not None:
            after_laser = float(time[event.peak]) - setup.trigger_offset - setup.travel
            far = abs(math.log(max(after_laser, record.step) / setup.lifetime_hint))
            one = replace(one, odds=one.odds + 2.0 - 0.5 * (far / 0.25) ** 2)
        judged.append(one)
    return judged


def _collapse_front(record: _Record, event: Event) -> Front | None:
    """Fit the rise of the collapse's pulse over the line through the quiet samples before it."""
    setup, step = record.setup, record.step
    width = max(1, round(setup.response_time / step))
    until = event.first - 4 * width
    before = np.arange(max(0, until - math.ceil(0.6e-6 / step)), max(until, 0))
    before = before[np.abs(record.filtered[before]) < 4.0 * record.level] if before.size else before
    if before.size < 16:
        return None
    baseline = fit_baseline(record.time, record.voltage, before)
    signal = record.voltage - baseline.at(record.time)
    noise = noise_of(signal[before], record.noise.step)
    lobe = find_lobe(
        signal, event.first, event.last - event.first + 12 * width + 4, width, 0.5 * noise.sd / math.sqrt(width)
    )
    smear = smear_of_path(setup.standoff)
    front = fit_front(
        Pulse(record.time, signal, record.clipped, lobe, noise, setup.response_time, setup.response_spread, smear)
    )
    return None if front is None else replace(front, u=math.hypot(front.u, _slope_u(front, baseline)))


def _lifetime(
    record: _Record, first: _First, collapse: Event | None, front: Front | None, passed: list[Event]
) -> tuple[list[Measured], list[str]]:
    setup = record.setup
    remarks = []
    if passed:
        lags = ", ".join(shown(float(record.time[event.peak]) - first.front.time, None, "s") for event in passed[:6])
        remarks.append(f"taken for echoes of the first pulse, by sign, shape and loudness: {lags} after it")
    if collapse is None:
        last = float(record.time[-1]) - setup.trigger_offset - setup.travel
        remarks.append(
            f"no collapse in the record, which ends {shown(last, None, 's')} after the laser pulse, travel time taken off"
        )
        return [], remarks
    if abs(collapse.odds) < 1.5:
        remarks.append("the pulse taken for the collapse could be an echo of the first pulse")
    if front is None:
        remarks.append("the collapse's pulse does not rise as a front: its time is that of its peak")
        at = float(record.time[collapse.peak])
        u = max(record.step, setup.response_time, at - float(record.time[collapse.first]))
    else:
        at, u = front.time, front.u
    return [Measured("bubble-lifetime", at - setup.trigger_offset - setup.travel, u)], remarks


# --- for eyes ---------------------------------------------------------------------------------------------------

_NAMES = {"arrival-time": ("arrival", "s"), "pressure-integral": ("∫p²dt", "Pa2 s"), "peak-pressure": ("peak", "Pa"),
          "bubble-lifetime": ("lifetime", "s")}  # fmt: skip


def _outline(
    record: _Record, first: _First, measured: list[Measured], passed: list[Event], collapse: Front | None
) -> Outline:
    sign = 1.0 if record.setup.sensitivity > 0 else -1.0
    time = record.time

    def curve(begin: int, end: int, values: Array) -> Array:
        every = max(1, (end - begin) // 400)
        return np.stack((time[begin:end:every], sign * values[begin:end:every]), axis=-1)

    under = first.baseline.at(time)
    begin, end = first.ends
    strokes = [
        Stroke(curve(int(first.quiet[0]), end + 1, under), "reference"),
        Stroke(curve(begin, end + 1, record.voltage), "found"),
    ]
    marks = [(first.front.time, float(np.interp(first.front.time, time, under)))]
    if collapse is not None:
        marks.append((collapse.time, float(np.interp(collapse.time, time, record.smooth))))
    strokes.append(Stroke(np.array([(at, sign * value) for at, value in marks]), "found", marks=True))
    if first.pick_up is not None:
        strokes.append(Stroke(curve(first.pick_up[0], first.pick_up[1] + 1, record.voltage), "left-out"))
    if passed:
        tops = np.array([(time[event.peak], sign * record.voltage[event.peak]) for event in passed])
        strokes.append(Stroke(tops, "left-out", marks=True))
    parts = [
        f"{_NAMES[one.kind][0]} {shown(one.value, one.u, _NAMES[one.kind][1])}"
        for one in measured
        if one.value is not None
    ]
    return Outline(tuple(strokes), ", ".join(parts))

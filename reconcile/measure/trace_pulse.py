"""One pulse of a trace: when its front arrived, how long its first compression lasts, its ∫p²dt, whether it was clipped."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import leastsq
from scipy.special import erfcx, ndtr

from reconcile.measure.measured import Array
from reconcile.measure.trace_noise import Noise

ABSORPTION = 25e-15  # [s²/m] of sound in water over the frequency squared (Pinkerton 1949, from memory)
# The front's true shape departs from a jump that decays: share of the response time that stays unknown.
_SHAPE = 0.005
_STARTS = (1.2, 4.0, 12.0)  # decay over response time
Flags = NDArray[np.bool_]
_ROOT_2 = math.sqrt(2.0)


@dataclass(frozen=True, slots=True)
class Front:
    """A fitted pulse: a jump to `height` that decays, smeared, seen through a one-pole probe."""

    time: float  # [s] of the jump, in the record
    u: float  # [s]
    height: float  # [V] of the jump, before the probe's pole
    decay: float  # [s] decay time, or duration
    smear: float  # [s] standard deviation
    response: float  # [s]
    form: Callable[[Array, float, float, float], Array]  # of the decay

    def at(self, time: Array) -> Array:
        """Return the fitted pulse [V] at times (n,) [s]."""
        return self.height * self.form(time - self.time, self.decay, self.response, self.smear)

    @property
    def top(self) -> float:
        """Return the largest voltage [V] of the fitted pulse."""
        reach = 2.0 * (self.decay + 4.0 * self.response) if self.decay < 20 * self.response else 40.0 * self.response
        return float(self.at(self.time + np.linspace(0.0, reach, 2001)).max())


@dataclass(frozen=True, slots=True)
class Lobe:
    """A pulse's first compression as samples."""

    first: int  # sample in which it is first above the noise
    peak: int
    last: int  # before it crosses zero or sinks into the noise


@dataclass(frozen=True, slots=True)
class Pulse:
    """What a front is fitted to."""

    time: Array  # (n,) [s]
    signal: Array  # (n,) [V] positive in compression, baseline taken off
    clipped: Flags  # (n,)
    lobe: Lobe
    noise: Noise
    response: float  # [s] of the probe, as stated
    spread: float  # [1] standard uncertainty of the stated response time's logarithm; 0: exact
    smear: float  # [s] typical one; the fit may depart from it by a factor


def exponential(time: Array, decay: float, response: float, smear: float) -> Array:
    """Return a unit jump with exponential decay through a one-pole probe, smeared by a Gaussian.

    Parameters
    ----------
    time : (n,) [s] from the jump
    decay, response : [s]
    smear : [s] above 0

    Source: convolution of the exponentials, decay/(decay − response)·(e^(−t/decay) − e^(−t/response)), with the Gaussian.
    """
    if abs(decay - response) < 1e-4 * response:
        decay = response * 1.0001
    return decay / (decay - response) * (_smeared(time, decay, smear) - _smeared(time, response, smear))


def triangle(time: Array, duration: float, response: float, smear: float) -> Array:
    """Return a unit jump that falls to zero along a line through a one-pole probe, smeared by a Gaussian.

    Parameters
    ----------
    time : (n,) [s] from the jump
    duration, response : [s]
    smear : [s] above 0

    Source: step less ramp/duration, from `duration` on plus that ramp; each convolved with pole and Gaussian.
    """
    return (
        _step(time, response, smear)
        - (_ramp(time, response, smear) - _ramp(time - duration, response, smear)) / duration
    )


FORMS = (exponential, triangle)


def _smeared(time: Array, decay: float, smear: float) -> Array:
    """Return e^(−t/decay) from t = 0 on, convolved with a Gaussian."""
    late = time > smear**2 / decay + 6.0 * smear
    early = np.where(late, 0.0, time)
    result = 0.5 * np.exp(-0.5 * (early / smear) ** 2) * erfcx((smear / decay - early / smear) / _ROOT_2)
    return np.where(late, np.exp(np.minimum(0.5 * (smear / decay) ** 2 - time / decay, 50.0)), result)


def _step(time: Array, response: float, smear: float) -> Array:
    return ndtr(time / smear) - _smeared(time, response, smear)


def _ramp(time: Array, response: float, smear: float) -> Array:
    rising = time * ndtr(time / smear) + smear * np.exp(-0.5 * (time / smear) ** 2) / math.sqrt(2.0 * math.pi)
    return rising - response * _step(time, response, smear)


def smear_of_path(path: float) -> float:
    """Return the smear [s] that a path [m] through water gives a front by absorption.

    exp(−a f² r) is a Gaussian in frequency; in time its standard deviation is √(2 a r)/2π.
    """
    return math.sqrt(2.0 * ABSORPTION * path) / (2.0 * math.pi)


def find_lobe(signal: Array, start: int, reach: int, width: int, low: float) -> Lobe:
    """Return the compression that begins about sample `start`.

    Parameters
    ----------
    signal : (n,) [V] positive in compression, baseline taken off
    start, reach : where the pulse was noticed, and how many samples on its peak may lie
    width : samples that are averaged where its end is looked for
    low : [V] below which such an average is noise
    """
    begin, stop = max(0, start), min(signal.size, start + reach)
    peak = begin + int(np.argmax(signal[begin:stop]))
    mean = np.convolve(signal[max(0, peak - width) :], np.ones(width) / width, mode="same")[min(peak, width) :]
    under = np.flatnonzero(mean <= low)
    last = min(signal.size - 1, peak + (int(under[0]) if under.size else mean.size - 1))
    ahead = signal[max(0, peak - reach) : peak]
    quiet = np.flatnonzero(ahead <= 2.0 * low)
    first = max(0, peak - reach) + (int(quiet[-1]) + 1 if quiet.size else 0)
    return Lobe(first, peak, max(last, peak))


def fit_front(pulse: Pulse, whole: bool = False) -> Front | None:
    """Fit the rise of a pulse, or the whole of its first compression; clipped samples count as "at least this".

    The response time is fitted too, held by what is stated of it: taken as exact, a wrong one would move the front.

    Returns
    -------
    None where the fit finds no front.
    """
    time, signal, lobe, noise, response = pulse.time, pulse.signal, pulse.lobe, pulse.noise, pulse.response
    step = float(time[1] - time[0])
    before = math.ceil(6.0 * response / step) + 6
    after = lobe.last + 1 if whole else min(lobe.peak + max(math.ceil(1.5 * response / step), 2), lobe.last + 1)
    begin = max(0, lobe.first - before)
    end = min(signal.size, max(after, lobe.peak + 2) + 1)
    while end < signal.size and pulse.clipped[end - 1]:
        end += 1
    t: Array = np.asarray(time[begin:end] - time[lobe.first], dtype=np.float64)
    y, top = signal[begin:end], pulse.clipped[begin:end]
    sd = noise.sd * math.sqrt(noise.excess)
    largest = max(float(signal[lobe.peak]), noise.sd)
    data = (t, y, sd, top)
    scales = (largest, response, pulse.smear, pulse.spread)
    fits = [fit for form in FORMS if (fit := _fitted(data, form, scales)) is not None]
    if not fits:
        return None
    # Both forms of decay count by how well they fit: their difference belongs to the uncertainty.
    weights = np.exp(np.array([fits[0][1] - cost for _, cost in fits]).clip(-700, 700))
    weights /= weights.sum()
    times = np.array([front.time for front, _ in fits])
    mean = float(weights @ times)
    variance = float(weights @ (np.array([front.u for front, _ in fits]) ** 2 + (times - mean) ** 2))
    best = fits[int(np.argmax(weights))][0]
    if not t[0] - 2 * response < mean < t[-1]:
        return None
    u = math.hypot(math.sqrt(variance), _SHAPE * response)
    return replace(best, time=float(time[lobe.first]) + mean, u=u)


def _fitted(
    data: tuple[Array, Array, float, Flags],
    form: Callable[[Array, float, float, float], Array],
    scales: tuple[float, float, float, float],
) -> tuple[Front, float] | None:
    """Fit one form to (times, signal, sd of a sample, which samples were clipped).

    Scales: height, response, smear, spread of the response's logarithm.

    Returns
    -------
    The front, its time counted as `times` are, and half its sum of squares.
    """
    t, y, sd, top = data
    largest, response, smear, spread = scales

    def parts(x: Array) -> tuple[float, float, float, float, float]:
        height, at, decay, blur, pole = x.tolist()
        decay = response * math.exp(min(max(decay, -6.0), 12.0))
        blur = smear * math.exp(min(max(blur, -6.0), 4.0))
        pole = response * math.exp(spread * min(max(pole, -20.0), 20.0))
        return largest * math.exp(min(height, 20.0)), at * response, decay, blur, pole

    def residuals(x: Array) -> Array:
        height, at, decay, blur, pole = parts(x)
        off = (height * form(t - at, decay, pole, blur) - y) / sd
        off[top] = np.minimum(off[top], 0.0)
        return np.concatenate((off, [(x[2] - math.log(4.0)) / 1.5, x[3], x[4], 0.2 * (x[0] - 0.7)]))

    # The sum of squares has more than one minimum: short pulses and long ones are each a start.
    best: tuple[float, Array, Array, Array] | None = None
    for times in _STARTS:
        start = np.array([0.7, -0.3, math.log(times), 0.0, 0.0])
        x, covariance, info, *_ = leastsq(residuals, start, full_output=True, maxfev=400)
        rest = np.asarray(info["fvec"], dtype=np.float64)
        if covariance is None or not np.isfinite(x).all() or not np.isfinite(rest).all():
            continue
        cost = 0.5 * float(rest @ rest)
        if best is None or cost < best[0]:
            best = cost, x, np.asarray(covariance, dtype=np.float64), rest
    if best is None:
        return None
    cost, x, covariance, rest = best
    height, at, decay, blur, pole = parts(x)
    free = max(t.size - 4, 1)
    worse = float(np.sum(rest[: t.size] ** 2)) / free
    if worse < 1.0 + 2.0 * math.sqrt(2.0 / free):  # chance alone scatters so far: the noise is as it was measured
        worse = 1.0
    u = response * math.sqrt(max(float(covariance[1, 1]), 0.0) * worse)
    return Front(at, u, height, decay, blur, pole, form), cost


def integrate(pulse: Pulse, front: Front, baseline_u: float) -> tuple[float, float, tuple[int, int]]:
    """Return ∫V²dt over the first compression, its standard uncertainty [V²·s], and the first and last sample of it.

    The noise's own power is taken off; what lies between samples is added from the fitted pulse.
    """
    time, signal, lobe, noise = pulse.time, pulse.signal, pulse.lobe, pulse.noise
    step = float(time[1] - time[0])
    begin = int(np.searchsorted(time, front.time - 4.0 * front.smear))
    begin, end = min(begin, lobe.peak), max(lobe.last, lobe.peak)
    y = signal[begin : end + 1]
    n = y.size
    total = (float(y @ y) - n * (noise.sd**2 + baseline_u**2)) * step
    own = 4.0 * noise.of_sum(y) + 2.0 * n * float(noise.covariance[0] ** 2 + 2.0 * np.sum(noise.covariance[1:] ** 2))
    between = _between(time[begin : end + 1], front)
    moved = _between(time[begin : end + 1], replace(front, time=front.time + front.u)) - between
    tail = float(y[-1]) ** 2 * min(front.decay, n * step) / 2
    by_baseline = 2.0 * float(y.sum()) * step * baseline_u
    u = math.sqrt(own * step**2 + by_baseline**2 + (0.5 * between) ** 2 + moved**2 + tail**2)
    return float(total + between), u, (begin, end)


def _between(time: Array, front: Front) -> float:
    """Return by how much ∫V²dt [V² s] of the fitted pulse exceeds the sum over samples at (n,) [s]."""
    step = float(time[-1] - time[0]) / max(time.size - 1, 1)
    fine = (np.arange(time.size * 16) + 0.5) / 16 - 0.5
    exact = float(np.sum(front.at(time[0] + fine * step) ** 2)) * step / 16
    return exact - float(np.sum(front.at(time) ** 2)) * step


def clipped_samples(voltage: Array, step: float, noise: float, full_scale: float | None) -> Flags:
    """Return which samples (n,) the recorder clipped.

    They lie at full scale; or at the record's largest or smallest value, three or more in a row, with a jump on
    one side that no rounded top has, or in several separate runs.
    """
    grain = max(step, 1e-9 * float(np.max(np.abs(voltage), initial=0.0)))
    flags = np.zeros(voltage.size, dtype=bool)
    for extreme in (float(voltage.max()), float(voltage.min())):
        at = np.abs(voltage - extreme) <= 0.25 * grain
        if full_scale is not None and abs(extreme) >= full_scale - 1.5 * max(step, 1e-3 * full_scale):
            flags |= at
            continue
        edges = np.flatnonzero(np.diff(np.concatenate(([0], at.view(np.int8), [0]))))
        runs = edges.reshape(-1, 2)
        long = runs[(runs[:, 1] - runs[:, 0]) >= 3]
        separate = runs.shape[0] >= 2 and (runs[:, 1] - runs[:, 0]).max() >= 2 and at.sum() >= 4 and grain < noise
        steep = any(
            max(abs(voltage[max(a - 1, 0)] - extreme), abs(voltage[min(b, voltage.size - 1)] - extreme))
            > max(4.0 * step, 5.0 * noise)
            for a, b in long
        )
        if steep or (separate and long.size):
            flags |= at
    return flags

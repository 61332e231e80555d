"""One pulse of a trace: when its front arrived, how long its first compression lasts, its ∫p²dt, whether it was clipped."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.optimize import least_squares
from scipy.special import erfcx

from reconcile.measure.measured import Array
from reconcile.measure.trace_noise import Noise

ABSORPTION = 25e-15  # [s²/m] of sound in water over the frequency squared (Pinkerton 1949, from memory)
# The front's true shape departs from a jump followed by a decay: share of the response time that stays unknown.
_SHAPE = 0.05


@dataclass(frozen=True, slots=True)
class Front:
    """A fitted pulse: a jump to `height`, decaying over `decay`, smeared and seen through a one-pole probe."""

    time: float  # [s] of the jump, in the record
    u: float  # [s]
    height: float  # [V] of the jump, before the probe's pole
    decay: float  # [s]
    smear: float  # [s] standard deviation
    response: float  # [s]

    def at(self, time: Array) -> Array:
        """Return the fitted pulse [V] at times (n,) [s]."""
        return self.height * shape(time - self.time, self.decay, self.response, self.smear)


@dataclass(frozen=True, slots=True)
class Lobe:
    """A pulse's first compression as samples."""

    first: int  # sample in which it is first above the noise
    peak: int
    last: int  # before it crosses zero or sinks into the noise


def shape(time: Array, decay: float, response: float, smear: float) -> Array:
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


def _smeared(time: Array, decay: float, smear: float) -> Array:
    """Return e^(−t/decay) from t = 0 on, convolved with a Gaussian."""
    late = time > smear**2 / decay + 6.0 * smear
    early = np.where(late, 0.0, time)
    result = 0.5 * np.exp(-0.5 * (early / smear) ** 2) * erfcx((smear / decay - early / smear) / math.sqrt(2.0))
    return np.where(late, np.exp(np.minimum(0.5 * (smear / decay) ** 2 - time / decay, 50.0)), result)


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


def fit_front(  # reason: one set of numbers that belong to one fit
    time: Array, signal: Array, lobe: Lobe, noise: Noise, response: float, smear: float, clipped: Array
) -> Front | None:
    """Fit the rise of a pulse, clipped samples counting as "at least this".

    Parameters
    ----------
    time, signal : (n,) [s], [V] positive in compression, baseline taken off
    lobe : where the pulse is
    noise : of a sample
    response : [s] of the probe
    smear : [s] typical one; the fit may depart from it by a factor
    clipped : (n,) whether a sample was clipped

    Returns
    -------
    None where the fit finds no front.
    """
    step = float(time[1] - time[0])
    before = math.ceil(6.0 * response / step) + 6
    after = max(math.ceil(1.5 * response / step), 2)
    begin = max(0, lobe.first - before)
    end = min(signal.size, max(min(lobe.peak + after, lobe.last + 1), lobe.peak + 2) + 1)
    while end < signal.size and clipped[end - 1]:
        end += 1
    t, y, top = time[begin:end] - time[lobe.first], signal[begin:end], clipped[begin:end]
    sd = noise.sd * math.sqrt(noise.excess)
    largest = max(float(signal[lobe.peak]), noise.sd)

    def parts(x: Array) -> tuple[float, float, float, float]:
        return (
            largest * math.exp(min(x[0], 20.0)),
            x[1] * response,
            response * math.exp(min(x[2], 12.0)),
            smear * math.exp(min(x[3], 4.0)),
        )

    def residuals(x: Array) -> Array:
        height, at, decay, blur = parts(x)
        off = (height * shape(t - at, decay, response, blur) - y) / sd
        off[top] = np.minimum(off[top], 0.0)
        return np.concatenate((off, [(x[2] - math.log(3.0)) / 1.5, x[3], 0.2 * (x[0] - 0.7)]))

    best = None
    for guess in (0.0, -1.0):
        fit = least_squares(residuals, np.array([0.7, guess, math.log(3.0), 0.0]), method="lm", max_nfev=400)
        if best is None or fit.cost < best.cost:
            best = fit
    if best is None or not np.isfinite(best.x).all():
        return None
    height, at, decay, blur = parts(best.x)
    slopes = np.asarray(best.jac, dtype=np.float64)
    covariance = np.linalg.pinv(slopes.T @ slopes)
    worse = max(1.0, float(np.sum(best.fun[: t.size] ** 2)) / max(t.size - 4, 1))
    u = math.hypot(response * math.sqrt(max(float(covariance[1, 1]), 0.0) * worse), _SHAPE * response)
    if not t[0] - 2 * response < at < t[-1] or not math.isfinite(u):
        return None
    return Front(float(time[lobe.first]) + float(at), u, float(height), float(decay), float(blur), response)


def integrate(  # reason: as above
    time: Array, signal: Array, front: Front, lobe: Lobe, noise: Noise, baseline_u: float
) -> tuple[float, float, tuple[int, int]]:
    """Return ∫V²dt over the first compression, its standard uncertainty [V²·s], and the first and last sample of it.

    The noise's own power is taken off; what lies between samples is added from the fitted pulse.
    """
    step = float(time[1] - time[0])
    begin = int(np.searchsorted(time, front.time - 4.0 * front.smear))
    begin, end = min(begin, lobe.peak), max(lobe.last, lobe.peak)
    y = signal[begin : end + 1]
    n = y.size
    total = (float(y @ y) - n * (noise.sd**2 + baseline_u**2)) * step
    own = 4.0 * noise.of_sum(y) + 2.0 * n * float(noise.covariance[0] ** 2 + 2.0 * np.sum(noise.covariance[1:] ** 2))
    fine = (np.arange(n * 16) + 0.5) / 16 - 0.5
    exact = float(np.sum(front.at(time[begin] + fine * step) ** 2)) * step / 16
    between = exact - float(np.sum(front.at(time[begin : end + 1]) ** 2)) * step
    tail = float(y[-1]) ** 2 * min(front.decay, n * step) / 2
    by_baseline = 2.0 * float(y.sum()) * step * baseline_u
    u = math.sqrt(own * step**2 + by_baseline**2 + (0.5 * between) ** 2 + tail**2)
    return float(total + between), u, (begin, end)


def clipped_samples(voltage: Array, step: float, noise: float, full_scale: float | None) -> Array:
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

"""What a trace shows after the first pulse: its echoes, and the collapse of the bubble, told apart."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.ndimage import gaussian_filter1d

from reconcile.measure.measured import Array
from reconcile.measure.trace_noise import Noise

# What is expected of an echo and of a collapse, as densities of three features (common practice, wide on purpose):
# log of the amplitude over the first pulse's; misfit of the first pulse's shape; sign.
_REFLECTED = 0.6  # usual reflectivity of a wall or the surface, seen past the probe's directivity
_ECHO_SPREAD, _COLLAPSE_SPREAD = 0.5, 1.0  # sd of the logarithm
_COLLAPSE_LEVEL = 1.3  # a collapse is about as loud as the first pulse
_ECHO_MISFIT, _COLLAPSE_MISFIT = 0.08, 0.5
_NEGATIVE_COLLAPSE = 0.02  # chance that a collapse is noticed by a tension first


@dataclass(frozen=True, slots=True)
class Event:
    """Something above the noise after the first pulse."""

    first: int  # samples
    peak: int
    last: int
    height: float  # [V] signed, at the peak
    odds: float = 0.0  # logarithm of the odds for a collapse against an echo


@dataclass(frozen=True, slots=True)
class Original:
    """The first pulse, with which echoes are compared."""

    samples: Array  # (m,) [V] baseline taken off
    height: float  # [V] at its peak
    arrival: float  # [s] in the record
    standoff: float  # [m]
    sound_speed: float  # [m/s]


def find_events(filtered: Array, signal: Array, begin: int, level: float, apart: int) -> list[Event]:
    """Return what stands out of the noise from sample `begin` on, in the order of time.

    Parameters
    ----------
    filtered : (n,) [V] signal averaged over about one pulse; `level` [V] is what no noise reaches
    signal : (n,) [V] slow background taken off
    apart : samples; what is nearer belongs together
    """
    loud = begin + np.flatnonzero(np.abs(filtered[begin:]) > level)
    if loud.size == 0:
        return []
    events = []
    for group in np.split(loud, np.flatnonzero(np.diff(loud) > apart) + 1):
        first, last = int(group[0]), int(group[-1])
        # The first lobe gives the sign: a pulse that a probe or a surface has turned over begins with it.
        size = np.abs(filtered[first : last + 1])
        lobe = first + int(np.argmax(size > 0.5 * size.max()))
        sign = 1.0 if filtered[lobe] > 0 else -1.0
        peak = first + int(np.argmax(sign * signal[first : last + 1]))
        events.append(Event(first, peak, last, float(signal[peak])))
    return events


def judge(
    event: Event, signal: Array, step: float, time: Array, original: Original, noise: Noise
) -> Event:  # reason: one pulse
    """Return the event with the odds for a collapse.

    An echo is a scaled copy of the first pulse, at most as loud as spreading over its longer path leaves it; a
    collapse is a compression of its own shape, louder or quieter than the first pulse.
    """
    lag = max(float(time[event.peak]) - original.arrival, step)
    path = original.standoff + original.sound_speed * lag
    spreading = original.standoff / path
    ratio = max(abs(event.height) / original.height, 1e-3)
    misfit, uncertain = _misfit(event, signal, original, noise)
    echo = _normal(math.log(ratio / (_REFLECTED * spreading)), _ECHO_SPREAD)
    own = _normal(math.log(ratio / _COLLAPSE_LEVEL), _COLLAPSE_SPREAD)
    odds = own - echo
    odds += _normal(misfit, math.hypot(_COLLAPSE_MISFIT, uncertain)) - _normal(
        misfit, math.hypot(_ECHO_MISFIT, uncertain)
    )
    odds += math.log(_NEGATIVE_COLLAPSE / 0.5) if event.height < 0 else math.log((1 - _NEGATIVE_COLLAPSE) / 0.5)
    return Event(event.first, event.peak, event.last, event.height, odds)


def _normal(value: float, sd: float) -> float:
    return -0.5 * (value / sd) ** 2 - math.log(sd)


def _misfit(event: Event, signal: Array, original: Original, noise: Noise) -> tuple[float, float]:
    """Return how far the event departs from the best copy of the first pulse (0 none, 1 nothing in common), and its u.

    A copy may be scaled, turned over, shifted by parts of a sample, and smeared by absorption on its way.
    """
    copy = original.samples
    m = copy.size
    lead = int(np.argmax(np.abs(copy)))
    start = event.peak - lead - 2
    piece = signal[max(start, 0) : start + m + 4]
    if piece.size < m + 4:
        return 0.25, 0.25  # cut by the end of the record: its shape says little
    power = max(float(piece @ piece) - piece.size * noise.sd**2, 1e-30)
    floor = piece.size * noise.sd**2 * (1.0 + (event.height / original.height) ** 2)
    best = math.inf
    at = np.arange(m + 4, dtype=np.float64)
    padded = np.concatenate((np.zeros(4), copy, np.zeros(4)))
    for blur in (0.0, 0.7, 1.5, 3.0):
        blurred = gaussian_filter1d(padded, blur) if blur else padded
        for shift in np.arange(-2.5, 2.51, 0.25):
            moved = np.interp(at + 2.0 - shift, np.arange(padded.size), blurred)
            scale = float(moved @ piece) / max(float(moved @ moved), 1e-30)
            best = min(best, float(np.sum((piece - scale * moved) ** 2)))
    left = max(best - floor, 0.0) / power
    return math.sqrt(min(left, 1.0)), math.sqrt(min(0.5 * floor / power, 1.0))

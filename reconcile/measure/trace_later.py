"""What a trace shows after the first pulse: its echoes, and the collapse of the bubble, told apart."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from reconcile.measure.measured import Array
from reconcile.measure.trace_pulse import Front, smear_of_path

# What is expected of an echo and of a collapse, as densities of three features (common practice, wide on purpose):
# log of the amplitude over the first pulse's; misfit of the first pulse's shape; sign.
_REFLECTED = 0.6  # usual reflectivity of a wall or the surface, seen past the probe's directivity
_ECHO_SPREAD, _COLLAPSE_SPREAD = 0.5, 1.0  # sd of the logarithm
_COLLAPSE_LEVEL = 1.3  # a collapse is about as loud as the first pulse
_ECHO_MISFIT, _COLLAPSE_MISFIT = 0.1, 0.5
_NEGATIVE_COLLAPSE = 0.02  # chance that a collapse is noticed by a tension first
_LOUDER_LATER = 3.0  # in log odds, against a collapse that something later outdoes


@dataclass(frozen=True, slots=True)
class Event:
    """Something above the noise after the first pulse."""

    first: int  # samples
    peak: int
    last: int
    height: float  # [V] signed, at the peak
    loudness: float = 0.0  # over the first pulse, signed
    odds: float = 0.0  # logarithm of the odds for a collapse against an echo


@dataclass(frozen=True, slots=True)
class Original:
    """The first pulse, with copies of which later ones are compared."""

    front: Front  # fitted to all of it
    standoff: float  # [m]
    travel: float  # [s] from site to probe
    noise: float  # [V] standard deviation of a sample
    misfit: float  # of the fitted pulse to the first one itself


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


def judge(event: Event, signal: Array, time: Array, original: Original) -> Event:
    """Return the event with the odds for a collapse.

    An echo is a scaled copy of the first pulse, at most as loud as spreading over its longer path leaves it; a
    collapse is a compression of its own shape, louder or quieter than the first pulse.

    Parameters
    ----------
    event : what stands out
    signal, time : (n,) [V] slow background taken off, [s]
    original : the first pulse
    """
    step = float(time[1] - time[0])
    lag = max(float(time[event.peak]) - original.front.time, step)
    spreading = original.travel / (original.travel + lag)
    scale, misfit, uncertain = as_copy(event, signal, time, original, original.standoff * (1.0 / spreading - 1.0))
    misfit = math.sqrt(max(misfit**2 - original.misfit**2, 0.0))
    ratio = max(abs(scale), 1e-3)
    odds = _normal(math.log(ratio / _COLLAPSE_LEVEL), _COLLAPSE_SPREAD)
    odds -= _normal(math.log(ratio / (_REFLECTED * spreading)), _ECHO_SPREAD)
    odds += _normal(misfit, math.hypot(_COLLAPSE_MISFIT, uncertain))
    odds -= _normal(misfit, math.hypot(_ECHO_MISFIT, uncertain))
    odds += math.log((_NEGATIVE_COLLAPSE if scale < 0 else 1 - _NEGATIVE_COLLAPSE) / 0.5)
    return replace(event, odds=odds, loudness=scale)


def choose(events: list[Event]) -> int | None:
    """Return which of the judged events is the first collapse; None where echoes alone explain them.

    What comes before it is an echo of the first pulse; what comes after may be anything, but is hardly louder: a
    rebounding bubble has lost most of its energy.
    """
    best, chosen = 0.0, None
    for at, event in enumerate(events):
        after = events[at + 1 :]
        score = event.odds + sum(float(np.logaddexp(0.0, one.odds)) - math.log(2.0) for one in after)
        if any(abs(one.loudness) > 1.5 * abs(event.loudness) for one in after):
            score -= _LOUDER_LATER
        if score > best:
            best, chosen = score, at
    return chosen


def _normal(value: float, sd: float) -> float:
    return -0.5 * (value / sd) ** 2 - math.log(sd)


def as_copy(
    event: Event, signal: Array, time: Array, original: Original, path: float = 0.0
) -> tuple[float, float, float]:
    """Compare an event with copies of the first pulse: scaled, turned over, shifted, smeared by `path` [m] more of water.

    Returns
    -------
    Scale of the best copy; how far the event departs from it (0 not at all, 1 nothing in common), and the u of that.
    """
    first, sd = original.front, original.noise
    step = float(time[1] - time[0])
    around = math.ceil((4.0 * first.response + first.decay) / step) + 2
    begin, end = max(0, event.first - around), min(signal.size, event.peak + 2 * around)
    piece, t = signal[begin:end] - signal[begin:end].mean(), time[begin:end]
    best, scale = math.inf, 0.0
    for smear in (first.smear, math.hypot(first.smear, smear_of_path(path))):
        copy = replace(first, smear=smear)
        for coarse in np.arange(time[event.first] - 2 * first.response, time[event.peak] + step, 0.2 * first.response):
            moved = copy.at(t - (coarse - first.time))
            moved = moved - moved.mean()  # what is left of drift and hum under the event does not count
            size = float(moved @ piece) / max(float(moved @ moved), 1e-30)
            rest = float(np.sum((piece - size * moved) ** 2))
            if rest < best:
                best, scale = rest, size
    floor = piece.size * sd**2
    power = max(float(piece @ piece) - floor, 0.1 * floor, 1e-30)
    left = max(best - floor, 0.0) / power
    return scale, math.sqrt(min(left, 1.0)), math.sqrt(min(math.sqrt(2.0 * piece.size) * sd**2 / power, 1.0))

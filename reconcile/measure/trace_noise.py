"""The quiet part of a trace: noise, steps of the recorder, drift and hum under a pulse, the electrical pick-up."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from reconcile.measure.measured import Array

_BLOCKS = 150  # mean values to which a quiet stretch is reduced before a smooth baseline is fitted to it
_LAGS = 24  # samples over which noise may hang together
_STEEP = 7.0  # standard deviations of a jump between neighbouring means that only a front makes
_LONGEST = 0.1  # share of a record beyond which what has not fallen to its half is a step, no pulse
_TO_SD = 1.4826  # from the median absolute deviation to the standard deviation of a normal distribution


@dataclass(frozen=True, slots=True)
class Noise:
    """Noise about the baseline."""

    sd: float  # [V] of one sample
    covariance: Array  # (lags,) [V²] between samples 0, 1, 2 … apart
    step: float  # [V] smallest step of the recorder; 0: none seen

    @property
    def excess(self) -> float:
        """Variance of a mean of many samples over that of as many independent ones; at least 1."""
        return max(1.0, float((self.covariance[0] + 2 * self.covariance[1:].sum()) / self.covariance[0]))

    def of_sum(self, weights: Array) -> float:
        """Return the variance [V²] of a weighted sum of neighbouring samples."""
        total = float(self.covariance[0]) * float(weights @ weights)
        for lag in range(1, min(self.covariance.size, weights.size)):
            total += 2.0 * float(self.covariance[lag]) * float(weights[lag:] @ weights[:-lag])
        return max(total, 0.0)


@dataclass(frozen=True, slots=True)
class Baseline:
    """A smooth curve through the quiet stretches beside a pulse."""

    coefficients: Array  # (k,) [V]
    covariance: Array  # (k, k) [V²]
    centre: float  # [s]
    span: float  # [s]
    frequency: float | None  # [Hz] of hum; None: a polynomial alone

    def at(self, time: Array) -> Array:
        """Return the baseline [V] at times (n,) [s]."""
        return self._terms(time) @ self.coefficients

    def u(self, time: float) -> float:
        """Return its standard uncertainty [V] at one time [s]."""
        terms = self._terms(np.array([time]))[0]
        return math.sqrt(max(float(terms @ self.covariance @ terms), 0.0))

    def _terms(self, time: Array) -> Array:
        degree = self.coefficients.size - 1 - (2 if self.frequency else 0)
        return _terms(
            (time - self.centre) / self.span, degree, None if self.frequency is None else self.frequency * self.span
        )


def recorder_step(voltage: Array) -> float:
    """Return the smallest step [V] between the levels of a quantised trace, 0 where levels are not repeated."""
    levels = np.unique(voltage)
    if levels.size < 2 or levels.size > voltage.size / 3:
        return 0.0
    steps = np.diff(levels)
    return float(np.median(steps[steps <= 1.5 * steps[steps > 1e-9 * float(np.ptp(levels))].min()]))


def struck(voltage: Array, response: float) -> NDArray[np.bool_]:
    """Return which samples (n,) lie in a pulse, told by its front: a slow background has none, however strong.

    From the front a pulse is taken to last until, falling on as fast as it fell to its half, it is below the noise.

    Parameters
    ----------
    voltage : (n,) [V]
    response : samples of the probe's response time
    """
    width = max(2, math.ceil(1.5 * response))
    gap = math.ceil(2.0 * response)
    n = voltage.size
    flags = np.zeros(n, dtype=bool)
    mean = np.convolve(voltage, np.ones(width) / width, mode="valid")  # from the sample on
    if mean.size <= 4 * (width + gap):
        return flags
    jump = mean[width + gap :] - mean[: -width - gap]
    noise = spread(jump)
    steep = np.flatnonzero(np.abs(jump - np.median(jump)) > max(_STEEP * noise, 2.0 * recorder_step(voltage)))
    longest, until = round(_LONGEST * n), 0
    for start in steep.tolist():
        front = start + width + gap
        if front < until:  # the fall of a pulse is no front
            continue
        sign = math.copysign(1.0, float(jump[start]))
        above = sign * (mean[front : front + longest] - mean[start])
        peak = int(np.argmax(above[: 4 * (width + gap)]))
        height = float(above[peak])
        fallen = np.flatnonzero(above[peak:] < 0.5 * height)
        if fallen.size == 0:  # a step, which never falls
            until = front + width + gap
            continue
        halves = math.log2(max(height / max(noise, 1e-30), 2.0)) + 1.0
        until = front + peak + width + math.ceil(halves * int(fallen[0]))
        flags[max(front - width - gap, 0) : until] = True
    return flags


def background(voltage: Array, block: int, without: NDArray[np.bool_]) -> Array:
    """Return what changes slowly (n,) [V]: medians of blocks, joined by straight lines, also across what is left out.

    Parameters
    ----------
    voltage : (n,) [V]
    block : samples of a block
    without : (n,) samples left out; of the rest, pulses shorter than half a block drop out
    """
    n = voltage.size
    edges = np.linspace(0, n, max(1, n // block) + 1).astype(int)
    middles, medians = [], []
    for begin, end in zip(edges[:-1], edges[1:], strict=True):
        kept = begin + np.flatnonzero(~without[begin:end])
        if kept.size >= (end - begin) / 3:
            middles.append(float(kept.mean()))
            medians.append(float(np.median(voltage[kept])))
    if not medians:
        return np.full(n, float(np.median(voltage)))
    return np.interp(np.arange(n), middles, medians)


def spread(values: Array) -> float:
    """Return the standard deviation of the bulk of values, outliers left aside."""
    return _TO_SD * float(np.median(np.abs(values - np.median(values))))


def pick_up(time: Array, deviation: Array, level: float, trigger: float, until: float) -> tuple[int, int] | None:
    """Find the electrical pick-up of the laser pulse.

    Parameters
    ----------
    time, deviation : (n,) [s], [V] about the slow background
    level : [V] above which a sample is no noise
    trigger : [s] the laser pulse in the record
    until : [s] where the first sound can arrive

    Returns
    -------
    First and last sample, its decay into the noise included; None where there is none.
    """
    within = np.flatnonzero((time >= trigger - 0.2e-6) & (time < until))
    loud = within[np.abs(deviation[within]) > level]
    if loud.size == 0:
        return None
    first, last = int(loud[0]), int(loud[-1])
    # It decays from its largest value to `level`; three more decay times bury it in the noise.
    largest = first + int(np.argmax(np.abs(deviation[first : last + 1])))
    ratio = max(abs(float(deviation[largest])) / level, 1.5)
    more = 3.0 * (last - largest + 1) / math.log(ratio)
    return max(0, first - 3), min(time.size - 1, last + math.ceil(min(more, 2.0 * (last - first + 5))))


def fit_baseline(time: Array, voltage: Array, quiet: NDArray[np.intp]) -> Baseline:
    """Fit the baseline to the quiet samples: a polynomial, with or without one hum, whichever the data ask for.

    The choice is by the Bayesian information criterion (Schwarz 1978, Ann. Statist. 6, 461).

    Parameters
    ----------
    time, voltage : (n,) [s], [V]
    quiet : (m,) indices of samples, m at least 16
    """
    parts = np.array_split(quiet, min(_BLOCKS, max(8, quiet.size // 4)))
    t = np.array([time[part].mean() for part in parts])
    v = np.array([voltage[part].mean() for part in parts])
    centre, span = float(t.mean()), float(np.ptp(t)) or 1.0
    x = (t - centre) / span
    best: tuple[float, Array, Array, float | None] | None = None
    hum = _hum(x, v)
    for degree, cycles in [(0, None), (1, None), (2, None), (3, None), (4, None), (1, hum), (3, hum)]:
        free = degree + 1 + (4 if cycles else 0)  # a frequency that was looked for counts for two
        if x.size < free + 4:
            continue
        terms = _terms(x, degree, cycles)
        normal = np.linalg.pinv(terms.T @ terms)
        coefficients = normal @ (terms.T @ v)
        square = float(np.sum((v - terms @ coefficients) ** 2)) + 1e-30 * float(np.sum(v**2)) + 1e-300
        score = x.size * math.log(square / x.size) + free * math.log(x.size)
        if best is None or score < best[0]:
            best = (
                score,
                coefficients,
                normal * square / max(x.size - free, 1),
                None if cycles is None else cycles / span,
            )
    assert best is not None, "a mean can be fitted to eight blocks"
    return Baseline(best[1], best[2], centre, span, best[3])


def _terms(x: Array, degree: int, cycles: float | None) -> Array:
    columns = [x**power for power in range(degree + 1)]
    if cycles is not None:
        columns += [np.cos(2 * math.pi * cycles * x), np.sin(2 * math.pi * cycles * x)]
    return np.stack(columns, axis=-1)


def _hum(x: Array, v: Array) -> float | None:
    """Return the cycles over the stretch of the sinusoid that explains most, beside a parabola; None where too short."""
    most = x.size / 8
    if most <= 1.0:
        return None
    grid = np.arange(0.75, most, 0.125)
    terms = np.stack([_terms(x, 2, float(one)) for one in grid])
    right = np.einsum("fnk,n->fk", terms, v)
    normal = np.einsum("fnk,fnl->fkl", terms, terms)
    explained = np.einsum("fk,fk->f", right, np.linalg.solve(normal, right[..., None])[..., 0])
    at = int(np.argmax(explained))
    if not 0 < at < grid.size - 1:
        return float(grid[at])
    a, b, c = explained[at - 1 : at + 2]
    bend = a - 2 * b + c
    return float(grid[at] + (0.125 * 0.5 * (a - c) / bend if bend < 0 else 0.0))


def noise_of(residual: Array, step: float) -> Noise:
    """Return the noise of quiet residuals (m,) [V]; a recorder's step leaves at least that of its rounding."""
    lags = min(_LAGS, residual.size // 8)
    centred = residual - residual.mean()
    covariance = np.array(
        [float(centred[lag:] @ centred[: centred.size - lag]) / centred.size for lag in range(lags + 1)]
    )
    least = step**2 / 12 + 1e-24 * float(np.max(np.abs(residual), initial=0.0)) ** 2 + 1e-300
    if covariance[0] <= least:
        return Noise(math.sqrt(least), np.array([least]), step)
    # What cannot be told from independent noise is taken as independent.
    clear = np.abs(covariance) > 3.0 * covariance[0] / math.sqrt(centred.size)
    end = int(np.argmin(clear)) if not clear.all() else clear.size
    return Noise(math.sqrt(covariance[0]), covariance[: max(end, 1)], step)

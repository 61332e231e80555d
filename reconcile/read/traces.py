"""A trace file → times and voltages on an even grid, or a refusal by name."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np

from reconcile.campaign.quantity import shown
from reconcile.campaign.refusal import Note, Place, Refusal
from reconcile.read.trace_arrays import read_h5, read_npz, read_wav
from reconcile.read.trace_text import read_text_trace
from reconcile.read.trace_types import Array, Columns, Trace, TraceSettings, damaged

__all__ = ["Trace", "TraceSettings", "read_trace"]

LEAST_SAMPLES = 64  # fewer hold no pulse between a baseline and a decay
_ROUNDING = 0.45  # of a sample interval: what times written with few digits may be off the even grid

_READERS: dict[str, Callable[[Path, str, TraceSettings], Columns]] = {
    ".csv": read_text_trace,
    ".txt": read_text_trace,
    ".wav": read_wav,
    ".npz": read_npz,
    ".h5": read_h5,
    ".hdf5": read_h5,
}


def read_trace(path: Path, name: str, settings: TraceSettings) -> Trace:
    """Read one waveform.

    Parameters
    ----------
    path : .csv, .wav, .npz or .h5
    name : its address in messages, with forward slashes
    settings : what the manifest states of it

    Returns
    -------
    The trace in SI; times are put on the even grid that they show within the rounding of their digits.

    Raises
    ------
    Refusal
        The file is missing, damaged, empty or of another type, lacks a column, or its samples are not all there.
    """
    reader = _READERS.get(path.suffix.lower())
    if reader is None:
        raise Refusal(
            Place(name),
            found=f"a file that ends in '{path.suffix}'",
            expected="a trace as .csv, .wav, .npz or .h5",
            remedy="Export it as one of these, or correct the pattern in the manifest.",
        )
    if reader is not read_wav and not settings.columns.get("voltage"):
        raise Refusal(
            Place(name),
            found="no voltage column named",
            expected="the header or array that holds the voltage",
            remedy='Add columns = { voltage = "…" } to this table of the manifest.',
        )
    try:
        columns = reader(path, name, settings)
    except OSError as error:
        raise Refusal(
            Place(name),
            found=f"a file that cannot be opened ({error.strerror or error})",
            expected="a readable file",
            remedy="Check it.",
        ) from None
    return _on_a_grid(columns, name, settings)


def _on_a_grid(columns: Columns, name: str, settings: TraceSettings) -> Trace:
    n = columns.voltage.size
    if n < LEAST_SAMPLES:
        raise damaged(name, f"{n} samples", f"a trace of at least {LEAST_SAMPLES}")
    _finite(columns.voltage, "voltage", name, columns.first_row)
    notes = list(columns.notes)
    time: Array
    if columns.time is not None:
        if columns.time.size != n:
            raise damaged(name, f"{columns.time.size} times and {n} voltages", "as many of both")
        _finite(columns.time, "time", name, columns.first_row)
        time, interval = _even(columns.time, name, columns.first_row)
        if settings.sample_interval is not None and abs(interval / settings.sample_interval - 1) > 1e-3:
            notes.append(Note(name, f"the times are {shown(interval, None, 's')} apart, not as sample_interval states"))
    else:
        stated = settings.sample_interval if settings.sample_interval is not None else columns.interval
        if stated is None or not stated > 0:
            raise Refusal(
                Place(name),
                found="no times",
                expected="a time column or the time between samples",
                remedy='Add columns = { time = "…" } or sample_interval = "2 ns" (yours) to this table of the manifest.',
            )
        time = settings.start + stated * np.arange(n, dtype=np.float64)
    return Trace(time, columns.voltage, settings.full_scale, tuple(notes))


def _at(name: str, index: int, first_row: int | None) -> Place:
    """Return the place of a sample: its line where a file has lines (blank ones among the samples are not counted)."""
    return Place(name) if first_row is None else Place(name, line=first_row + index)


def _finite(values: Array, what: str, name: str, first_row: int | None) -> None:
    bad = ~np.isfinite(values)
    if bad.any():
        first = int(np.argmax(bad))
        raise Refusal(
            _at(name, first, first_row),
            found=f"{int(bad.sum())} of {values.size} samples without a {what}, the first at sample {first + 1}",
            expected=f"a {what} in every sample",
            remedy="Export the trace again; a gap cannot be filled.",
        )


def _even(time: Array, name: str, first_row: int | None) -> tuple[Array, float]:
    """Return the even grid [s] that times follow, and its step [s]."""
    steps = np.diff(time)
    if not (steps > 0).all():
        first = int(np.argmax(steps <= 0))
        how = "repeat" if steps[first] == 0 else "go back"
        raise Refusal(
            _at(name, first + 1, first_row),
            found=f"times that {how} at sample {first + 2}",
            expected="times that rise from sample to sample",
            remedy="Export with more digits of time, or leave the time column out and state sample_interval and start.",
        )
    usual = float(np.median(steps))
    gaps = np.flatnonzero(steps > 1.6 * usual)
    index = np.arange(time.size)
    if gaps.size:
        lost = int(np.rint(steps[gaps] / usual - 1).sum())
        if 0 < lost < 0.2 * time.size or gaps.size == 1:
            raise Refusal(
                _at(name, int(gaps[0]) + 1, first_row),
                found=f"about {lost} dropped samples, the first after sample {int(gaps[0]) + 1}",
                expected="every sample of the record",
                remedy="Export the trace again; a gap cannot be filled.",
            )
    step, start = (float(one) for one in np.polyfit(index, time - time[0], 1))
    if not gaps.size and np.abs(time - time[0] - start - step * index).max() <= _ROUNDING * step:
        return time[0] + start + step * index, step
    raise Refusal(
        Place(name),
        found=f"times that are not evenly spaced ({shown(float(steps.min()), None, 's')} to {shown(float(steps.max()), None, 's')} apart)",
        expected="samples at one rate",
        remedy="Export the record at one sampling rate.",
    )

"""One file of an image, trace or map → what was measured on it; runs in any process."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Iterator, Mapping
from dataclasses import dataclass, replace
from functools import lru_cache, partial
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from reconcile.campaign.files import sha256_of
from reconcile.campaign.refusal import Note, Place, Refusal
from reconcile.gather.overlays import draw_picture, draw_trace
from reconcile.measure.bubble import Side, measure_frame
from reconcile.measure.crater import measure_map
from reconcile.measure.measured import Measured, Unmeasurable
from reconcile.measure.micrograph import measure_micrograph
from reconcile.measure.trace import ProbeSetup, measure_trace
from reconcile.read.images import Frames, read_frames
from reconcile.read.surfaces import read_surface
from reconcile.read.traces import TraceSettings, read_trace

Array = NDArray[np.float64]

FAULT = "This is a fault of the program: please report it with the file."


@dataclass(frozen=True, slots=True)
class Settings:
    """What all files of one table share; each kind of table uses its own part."""

    kind: str  # of the table
    pixel_pitch: float = math.nan  # [m] nominal
    target_edge: Side = "bottom"
    background: tuple[str, str] | None = None  # path of the empty frame, and its address in messages
    frame_interval: float | None = None  # [s] from page to page; None: one page
    height_unit: float = math.nan  # [m]
    trace: TraceSettings | None = None
    probe: ProbeSetup | None = None
    decimal: str | None = None
    delimiter: str | None = None
    encoding: str | None = None


@dataclass(frozen=True, slots=True)
class Job:
    """One file to measure: a path and plain settings, as a process takes them."""

    name: str  # its address in messages
    path: Path
    settings: Settings
    delay: float | None = None  # [s] of its first page; None: the kind has none
    standoff: float | None = None  # [m] of this shot; None: that of the settings
    overlay: Path | None = None  # path without ending of the drawings; None: none are wanted


@dataclass(frozen=True, slots=True)
class Part:
    """What one picture or trace gave; a file of several pages has a part for each."""

    place: Place
    measured: tuple[Measured, ...] = ()
    particles: tuple[tuple[float, float], ...] | None = None  # of a micrograph: diameter [m], weight; None: it is none
    delay: float | None = None  # [s]
    notes: tuple[Note, ...] = ()
    refusal: Refusal | None = None
    overlay: Path | None = None


@dataclass(frozen=True, slots=True)
class Result:
    """What one file gave."""

    name: str
    sha256: str | None  # None: the file could not be read at all
    parts: tuple[Part, ...]


def measure_file(job: Job) -> Result:
    """Read and measure one file; every trouble with it becomes a refusal by name.

    Raises
    ------
    OSError
        A drawing cannot be written.
    """
    place = Place(job.name)
    try:
        sha256 = sha256_of(job.path)
    except OSError as error:
        return Result(job.name, None, (Part(place, refusal=_unreadable(job.name, error)),))
    parts: list[Part] = []
    try:
        for part in _MEASURERS[job.settings.kind](job):
            parts.append(part)
    except Refusal as refusal:
        parts.append(Part(place, refusal=refusal))
    except MemoryError:
        parts.append(Part(place, refusal=_too_large(place)))
    return Result(job.name, sha256, tuple(parts))


def lost_file(job: Job) -> Result:
    """Return the result of a file on which its process died."""
    refusal = Refusal(
        Place(job.name),
        found="a file on which the measuring process died",
        expected="a file that can be read and measured in the memory at hand",
        remedy="Export it again, smaller where it is large.",
    )
    return Result(job.name, None, (Part(Place(job.name), refusal=refusal),))


def _unreadable(name: str, error: OSError) -> Refusal:
    return Refusal(
        Place(name),
        found=f"a file that cannot be read ({error.strerror or error})",
        expected="a readable file",
        remedy="Check the file.",
    )


def _too_large(place: Place) -> Refusal:
    return Refusal(
        place,
        found="more than fits into memory",
        expected="a file that can be measured in the memory at hand",
        remedy="Export it smaller.",
    )


def _attempt(place: Place, measure: Callable[[], Part]) -> Part:
    """Return what measuring gave, or the refusal of this one picture or trace."""
    try:
        return measure()
    except Refusal as refusal:
        return Part(place, refusal=refusal)
    except Unmeasurable as trouble:
        found, expected, remedy = trouble.found, trouble.expected, trouble.remedy
    except MemoryError:
        return Part(place, refusal=_too_large(place))
    except (ArithmeticError, LookupError, ValueError) as fault:
        # Numbers that nobody foresaw. They must not end the work on thousands of other files, and are not hidden.
        found = f"numbers on which the measuring failed ({type(fault).__name__}: {fault})"
        expected, remedy = "a result", FAULT
    return Part(place, refusal=Refusal(place, found=found, expected=expected, remedy=remedy))


def _notes(place: Place, remarks: Iterable[str]) -> tuple[Note, ...]:
    return tuple(Note(str(place), remark) for remark in remarks)


def _pages(frames: Frames, job: Job) -> Iterator[tuple[int, Place, Path | None]]:
    """Yield number, place and path of the drawing of each page; a file of one page is its own place."""
    for number in range(len(frames)):
        place = Place(job.name, key=f"page {number + 1}" if len(frames) > 1 else None)
        yield number, place, _drawing(job, number)


def _frames(job: Job) -> Iterator[Part]:
    """Measure every page of a shadowgraph file."""
    frames = read_frames(job.path, job.name)
    if len(frames) > 1 and job.settings.frame_interval is None:
        raise Refusal(
            Place(job.name),
            found=f"{len(frames)} pages in one file",
            expected="one page, or the time from page to page",
            remedy='Add frame_interval = "1 us" (yours) to this table of the manifest.',
        )
    for number, place, overlay in _pages(frames, job):
        yield _attempt(place, partial(_frame, frames, number, place, job, overlay))


def _numbers(frame: NDArray[np.float32]) -> Array:
    return np.asarray(frame, dtype=np.float64)


def _frame(frames: Frames, number: int, place: Place, job: Job, overlay: Path | None) -> Part:
    settings, frame = job.settings, _numbers(frames[number])
    background = _background_for(frame, place, settings)
    finding = measure_frame(frame, settings.pixel_pitch, settings.target_edge, background, frames.saturated)
    delay = (job.delay or 0.0) + number * (settings.frame_interval or 0.0)
    notes = _notes(place, (*(frames.notes if number == 0 else ()), *finding.remarks))
    drawn = draw_picture(frame, finding.outline, overlay)
    return Part(place, finding.measured, None, delay, notes, None, drawn)


@lru_cache(maxsize=1)
def read_background(path: str, name: str) -> Array:
    """Return the empty frame of a table, the mean of its pages; raises Refusal.

    It is read once in each process, as long as the table is at work.
    """
    frames = read_frames(Path(path), name)
    total = np.zeros(frames[0].shape, dtype=np.float64)
    for frame in frames:
        if frame.shape != total.shape:
            raise Refusal(
                Place(name),
                found="pages of different sizes",
                expected="frames of the empty liquid, all of one size",
                remedy="Give a background of one page.",
            )
        total += frame
    mean: Array = total / len(frames)
    mean.setflags(write=False)  # it is shared by all frames
    return mean


def _background_for(frame: Array, place: Place, settings: Settings) -> Array | None:
    if settings.background is None:
        return None
    background = read_background(*settings.background)
    if background.shape != frame.shape:
        raise Refusal(
            place,
            found=f"a frame of {frame.shape[1]} x {frame.shape[0]} pixels",
            expected=f"{background.shape[1]} x {background.shape[0]}, the size of the background '{settings.background[1]}'",
            remedy="Export it in full, or give frames of another size a table of their own.",
        )
    return background


def _trace(job: Job) -> Iterator[Part]:
    """Measure a trace of the probe."""
    settings, place, setup = job.settings, Place(job.name), job.settings.probe
    assert settings.trace is not None and setup is not None
    trace = read_trace(job.path, job.name, settings.trace)
    standoff = setup.standoff if job.standoff is None else job.standoff
    setup = replace(setup, standoff=standoff, full_scale=trace.full_scale)

    def measure() -> Part:
        finding = measure_trace(trace.time, trace.voltage, setup)
        drawn = draw_trace(trace.time, trace.voltage, finding.outline, _drawing(job, 0))
        return Part(place, finding.measured, None, None, trace.notes + _notes(place, finding.remarks), None, drawn)

    yield _attempt(place, measure)


def _map(job: Job) -> Iterator[Part]:
    """Measure a height map."""
    settings, place = job.settings, Place(job.name)
    surface = read_surface(
        job.path,
        job.name,
        settings.height_unit,
        delimiter=settings.delimiter,
        decimal=settings.decimal,
        encoding=settings.encoding,
    )

    def measure() -> Part:
        finding = measure_map(surface.height, settings.pixel_pitch)
        drawn = draw_picture(surface.height, finding.outline, _drawing(job, 0))
        return Part(place, finding.measured, None, None, surface.notes + _notes(place, finding.remarks), None, drawn)

    yield _attempt(place, measure)


def _micrograph(job: Job) -> Iterator[Part]:
    """Find the particles on every page of a micrograph file."""
    frames = read_frames(job.path, job.name)
    for number, place, overlay in _pages(frames, job):
        yield _attempt(place, partial(_particles, frames, number, place, job, overlay))


def _particles(frames: Frames, number: int, place: Place, job: Job, overlay: Path | None) -> Part:
    frame = _numbers(frames[number])
    particles = measure_micrograph(frame, job.settings.pixel_pitch)
    notes = _notes(place, (*(frames.notes if number == 0 else ()), *particles.remarks))
    drawn = draw_picture(frame, particles.outline, overlay)
    found = zip(particles.diameters.tolist(), particles.weights.tolist(), strict=True)
    return Part(place, (), tuple(found), None, notes, None, drawn)


def _drawing(job: Job, number: int) -> Path | None:
    """Return the path without ending of a page's drawing."""
    return None if job.overlay is None else job.overlay.with_name(f"{job.overlay.name}-{number + 1}")


_MEASURERS: Mapping[str, Callable[[Job], Iterator[Part]]] = {
    "shadowgraph": _frames,
    "probe-trace": _trace,
    "crater-map": _map,
    "micrograph": _micrograph,
}

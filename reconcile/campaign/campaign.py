"""What a manifest says, as data: every quantity in SI with its standard uncertainty."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Literal

from reconcile.campaign.refusal import Place


@dataclass(frozen=True, slots=True)
class Quantity:
    """A value with its standard uncertainty (k = 1) in SI."""

    value: float
    u: float | None  # None: none was stated; 0: exact
    unit: str  # the SI unit of value and u
    text: str  # as written


@dataclass(frozen=True, slots=True)
class Prior:
    """A stated or default prior of one input, before it is cut to the input's physical range.

    ``a`` and ``b`` by family: normal (mean, sd); lognormal (median, sd of the logarithm); beta (a, b);
    uniform and loguniform (low, high); logitnormal (median, sd of the logit); fixed (value, unused 0). SI.
    """

    family: Literal["normal", "lognormal", "beta", "uniform", "loguniform", "logitnormal", "fixed"]
    a: float
    b: float
    text: str  # as written, or as the default is written
    place: Place | None = None  # None: the package's default


@dataclass(frozen=True, slots=True)
class Target:
    """The solid that is ablated."""

    material: str
    thickness: Quantity | None = None
    properties: Mapping[str, Quantity] = field(default_factory=dict)  # stated in place of the package's


@dataclass(frozen=True, slots=True)
class Liquid:
    """The liquid above the target."""

    material: str
    path: Quantity | None = None  # along the beam
    height: Quantity | None = None  # to the free surface; default path
    wall_distance: Quantity | None = None
    properties: Mapping[str, Quantity] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class Beam:
    """The laser beam at the target."""

    wavelength: Quantity
    pulse_duration: Quantity  # FWHM
    spot_radius: Quantity  # 1/e² intensity radius at the target
    delivery: Quantity
    repetition_rate: Quantity | None = None
    entry_radius: Quantity | None = None


@dataclass(frozen=True, slots=True)
class EnergyMeter:
    """The meter whose readings the log holds."""

    calibration: Quantity
    shot_jitter: Quantity | None = None
    about: Mapping[str, str] = field(default_factory=dict)  # identity, certificate, note


@dataclass(frozen=True, slots=True)
class Probe:
    """The hydrophone; what the kinds present do not use may be None."""

    standoff: Quantity | None = None
    angle: Quantity | None = None
    aperture: Quantity | None = None
    sensitivity: Quantity | None = None  # [V/Pa]
    bandwidth: Quantity | None = None  # [Hz]
    trigger_offset: Quantity | None = None
    sensitivity_file: Mapping[str, Any] | None = None
    sensitivity_uncertainty: Quantity | None = None
    about: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class Table:
    """One [[readings]] entry, or the log: which file, which columns, and what its readings share."""

    kind: str  # a table kind; "log" for the log
    name: str
    place: Place  # of the entry in the manifest
    file: str | None = None  # spreadsheet; may hold *
    files: str | None = None  # pattern of images or traces
    listed: Mapping[str, Any] | None = None  # the `list` entry
    sheets: tuple[str, ...] = ()  # empty: the first
    only: Mapping[str, str] = field(default_factory=dict)
    columns: Mapping[str, str] = field(default_factory=dict)
    units: Mapping[str, str] = field(default_factory=dict)
    # for all rows, or blank cells of an uncertainty column; unit "%" is a share of the value
    uncertainty: Quantity | None = None
    detection_limit: Quantity | None = None
    not_detected: tuple[str, ...] = ()
    scale: Quantity | None = None  # None: exactly 1
    pixel_pitch: Quantity | None = None
    decimal: str | None = None
    delimiter: str | None = None
    encoding: str | None = None
    options: Mapping[str, Any] = field(default_factory=dict)  # the rest, by key: target_edge, background, first_delay …
    about: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class Campaign:
    """The whole manifest."""

    name: str
    folder: Path
    target: Target
    liquid: Liquid
    beam: Beam
    meter: EnergyMeter
    log: Table
    tables: tuple[Table, ...]
    ambient_pressure: Quantity
    liquid_temperature: Quantity
    probe: Probe | None = None
    priors: Mapping[str, Prior] = field(default_factory=dict)  # stated ones, by input name
    title: str | None = None
    date: str | None = None
    about: Mapping[str, str] = field(default_factory=dict)  # laboratory, operator, place, note
    unused_uncertainties: tuple[str, ...] = ()  # keys whose ± is accepted but not propagated

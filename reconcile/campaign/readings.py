"""Shots, readings, and what was gathered of a campaign."""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path

from reconcile.campaign.campaign import Campaign
from reconcile.campaign.refusal import Note, Place, Refused


@dataclass(frozen=True, slots=True)
class Shot:
    """One row of the log."""

    name: str
    metered_energy: float  # [J] of one pulse, as logged, where the meter sits
    place: Place
    pulses: int = 1  # that one place receives
    sites: int = 1  # like sites exposed under this row
    level: str | None = None
    sample: str | None = None
    standoff: float | None = None  # [m] nominal, of this shot; None: the manifest's
    spot_radius: float | None = None  # [m] nominal, of this shot; None: the manifest's
    transmission: float = 1.0  # of a filter after the meter; multiplies delivery
    delay: float | None = None  # [s] of this shot's frame; None: not logged
    time: str | None = None  # as written
    note: str | None = None
    set_aside: str | None = None  # why a person took it out of the fit; None: in the fit
    kept: str | None = None  # why a person vouches for it; None: nobody did


@dataclass(frozen=True, slots=True)
class Reading:
    """One measured number with its own standard uncertainty and the place it was read from."""

    kind: str
    shot: str | None  # None: belongs to a sample
    sample: str | None  # None: belongs to a shot
    table: str  # name of its [[readings]] table, which names its instruments: scale.<table>, pixel_pitch.<table>
    place: Place
    delay: float | None = None  # [s] after the pulse; None: this kind has none
    value: float | None = None  # [SI]; None: below the limit
    u: float | None = None  # [SI] the reading's own part only; None: below the limit
    limit: float | None = None  # [SI] the reading lies below this; None: it was measured
    set_aside: str | None = None  # why a person took it out of the fit
    kept: str | None = None  # why a person vouches for it
    table_kind: str | None = None  # of that table; None: the reading's kind. Tables of one name may be of several kinds


@dataclass(frozen=True, slots=True)
class FileRead:
    """An input file as it was read."""

    path: str  # relative to the campaign folder, forward slashes
    sha256: str


@dataclass(frozen=True, slots=True)
class Decision:
    """One line of decisions.csv that holds (the last for its target)."""

    shot: str | None
    sample: str | None
    kind: str | None  # None: all kinds
    source: str | None  # None: all sources
    decision: str  # "set-aside", "keep" or "undecided"
    reason: str
    by: str
    on: str
    place: Place


@dataclass(frozen=True, slots=True)
class Gathered:
    """Everything read of a campaign, in one fixed order: the log's, then the manifest's."""

    campaign: Campaign
    shots: tuple[Shot, ...]
    readings: tuple[Reading, ...]
    refused: tuple[Refused, ...] = ()
    notes: tuple[Note, ...] = ()
    decisions: tuple[Decision, ...] = ()
    files: tuple[FileRead, ...] = ()
    unasked: tuple[str, ...] = ()  # files in the folder that no table asked for
    # drawings by the source of their readings, in the folder handed in
    overlays: dict[str, Path] = field(default_factory=dict)

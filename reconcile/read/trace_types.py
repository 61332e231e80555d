"""What is stated of trace files and what reading one gives; refusals that every format shares."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from reconcile.campaign.quantity import EXAMPLES, UnknownUnit, parse_unit
from reconcile.campaign.refusal import Note, Place, Refusal, nearest

Array = NDArray[np.float64]
UNITS = {"time": "s", "voltage": "V"}  # of the two columns that a trace may have
LARGEST = 1024**3  # bytes that one trace may say it holds: thousands of times what a shot needs


@dataclass(frozen=True, slots=True)
class TraceSettings:
    """What the manifest states of a table of traces."""

    columns: Mapping[str, str] = field(default_factory=dict)  # time, voltage: a header, or the name of an array
    units: Mapping[str, str] = field(default_factory=dict)  # of time and voltage, where the file does not say
    sample_interval: float | None = None  # [s]; None: there is a time column, or the file states its rate
    start: float = 0.0  # [s] time of the first sample where there is no time column
    full_scale: float | None = None  # [V] at the recorder's largest number; None: not known
    decimal: str | None = None
    delimiter: str | None = None
    encoding: str | None = None


@dataclass(frozen=True, slots=True)
class Trace:
    """One recorded waveform on an even grid of times."""

    time: Array  # (n,) [s] as the recorder counts it
    voltage: Array  # (n,) [V]
    full_scale: float | None = None  # [V]; None: not known
    notes: tuple[Note, ...] = ()


@dataclass(frozen=True, slots=True)
class Columns:
    """What a file holds before its times are looked at."""

    voltage: Array  # (n,) [V]
    time: Array | None = None  # (n,) [s]; None: there is no time column
    interval: float | None = None  # [s] between samples as the file's head states it
    first_row: int | None = None  # line of the first sample; None: the file has no lines
    notes: tuple[Note, ...] = ()


def damaged(name: str, what: str, expected: str) -> Refusal:
    """Return the refusal of a file that is broken."""
    return Refusal(Place(name), found=what, expected=expected, remedy="Export or copy the trace again.")


def too_large(name: str, what: str, size: int) -> Refusal:
    """Return the refusal of a file that says it holds more than a trace can."""
    return Refusal(
        Place(name),
        found=f"{what} of {size / 1024**3:.3g} GiB",
        expected="a trace of at most 1 GiB",
        remedy="Export only the stretch from before the laser pulse to after the collapse.",
    )


def no_column(name: str, wanted: str, known: Iterable[str], what: str) -> Refusal:
    """Return the refusal of a file without the column, array or dataset that the manifest names."""
    listed = sorted(known)
    near = nearest(wanted, listed)
    shown = ", ".join(listed[:12]) + (", …" if len(listed) > 12 else "")
    return Refusal(
        Place(name),
        found=f"no {what} '{wanted}' (it holds {shown or 'none'})",
        expected=f"the {what} that the manifest names",
        remedy=f"Write '{near}' in the manifest if that is meant." if near else "Correct columns in the manifest.",
    )


def column_unit(name: str, key: str, header: str, stated: str | None) -> float:
    """Return the size in SI of an array's unit: as stated, else in the brackets of its name.

    Raises
    ------
    Refusal
        There is none, or it is no unit of that quantity.
    """
    text = stated or _bracketed(header)
    known: str | None = None
    if text is not None:
        try:
            unit = parse_unit(text)
        except UnknownUnit as unknown:
            known = unknown.known
        else:
            if unit.dimension == parse_unit(UNITS[key]).dimension and not unit.level:
                return unit.size
    example = EXAMPLES[UNITS[key]].partition(" ")[2]
    raise Refusal(
        Place(name),
        found=f"'{header}' " + (f"with the unit '{text}'" if text else "without a unit"),
        expected=f"a unit of {key} such as {example}",
        remedy=f"Write '{known}' if that is meant."
        if known
        else f'Add units = {{ {key} = "…" }} to this table of the manifest.',
    )


def _bracketed(header: str) -> str | None:
    for opening, closing in ("()", "[]"):
        if header.rstrip().endswith(closing) and opening in header:
            return header.rstrip()[header.rindex(opening) + 1 : -1].strip() or None
    return None

"""What each kind of reading measures: one table, one row a kind."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal


@dataclass(frozen=True, slots=True)
class Kind:
    """One kind of reading."""

    name: str
    words: str  # as a person writes it in a sentence
    unit: str  # SI
    target: Literal["shot", "sample"]
    has_delay: bool = False  # read at a delay after the pulse
    fitted: bool = True  # False: measured for information, never fitted
    logarithmic: bool = False  # residuals are taken in the logarithm
    scatter: str | None = None  # default prior of scatter.<kind>; None: not fitted
    sound: bool = False  # read by the probe


KINDS: dict[str, Kind] = {
    kind.name: kind
    for kind in (
        Kind("crater-depth", "crater depth", "m", "shot", scatter="lognormal(5 %, 70 %)"),
        Kind("crater-diameter", "crater diameter", "m", "shot", scatter="lognormal(5 %, 70 %)"),
        Kind("bubble-radius", "bubble radius", "m", "shot", has_delay=True, scatter="lognormal(5 %, 70 %)"),
        Kind("bubble-lifetime", "bubble lifetime", "s", "shot", logarithmic=True, scatter="lognormal(2 %, 70 %)"),
        Kind("pressure-integral", "pressure integral", "Pa2 s", "shot", logarithmic=True, sound=True, scatter="lognormal(5 %, 70 %)"),
        Kind("arrival-time", "arrival time", "s", "shot", sound=True, scatter="lognormal(10 ns, 70 %)"),
        Kind("median-diameter", "median particle diameter", "m", "sample", logarithmic=True, scatter="lognormal(5 %, 70 %)"),
        Kind("reflected-fraction", "reflected fraction", "1", "shot", scatter="lognormal(1 %, 70 %)"),
        Kind("crater-volume", "crater volume", "m3", "shot", fitted=False),
        Kind("peak-pressure", "peak pressure", "Pa", "shot", fitted=False, sound=True),
        Kind("shock-radius", "shock front radius", "m", "shot", has_delay=True, fitted=False),
        Kind("geometric-sd", "geometric standard deviation of the sizes", "1", "sample", fitted=False),
    )
}

FITTED: tuple[str, ...] = tuple(name for name, kind in KINDS.items() if kind.fitted)

# Table kinds beyond the kinds themselves, and the kinds that each yields.
TABLE_KINDS: dict[str, tuple[str, ...]] = {
    "crater-map": ("crater-depth", "crater-diameter", "crater-volume"),
    "shadowgraph": ("bubble-radius", "shock-radius"),
    "probe-trace": ("arrival-time", "pressure-integral", "bubble-lifetime", "peak-pressure"),
    "size-counts": ("median-diameter", "geometric-sd"),
    "particle-list": ("median-diameter", "geometric-sd"),
    "micrograph": ("median-diameter", "geometric-sd"),
}


def yields(table_kind: str) -> tuple[str, ...]:
    """Return the kinds of reading that a table of this kind yields."""
    return TABLE_KINDS.get(table_kind, (table_kind,))

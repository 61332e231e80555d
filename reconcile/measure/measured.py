"""What measuring a file gives: numbers with their own uncertainty, and what to draw over the picture to judge them by."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


class Unmeasurable(Exception):
    """A picture or trace that cannot be measured: what was found, what was expected, what to do; parts of sentences."""

    def __init__(self, found: str, expected: str, remedy: str) -> None:
        self.found, self.expected, self.remedy = found, expected, remedy
        super().__init__(f"found {found}; expected {expected}. {remedy}")

    def __reduce__(self) -> tuple[type[Unmeasurable], tuple[str, str, str]]:
        """Survive the way back from a worker process."""
        return Unmeasurable, (self.found, self.expected, self.remedy)


@dataclass(frozen=True, slots=True)
class Measured:
    """One number from one picture or trace, in SI with the nominal instrument numbers.

    The uncertainty is the reading's own part: what would differ on measuring again. What all readings of a table share
    (pixel pitch, sensitivity, trigger) is left out.
    """

    kind: str
    value: float | None  # None: below the limit
    u: float | None  # None: below the limit
    limit: float | None = None  # None: it was measured
    delay: float | None = None  # [s]; of a kind with a delay


@dataclass(frozen=True, slots=True)
class Stroke:
    """One line or set of marks to draw, in the picture's own coordinates: (column, row) [px], or (time [s], value [V])."""

    points: Array  # (n, 2)
    role: Literal["found", "reference", "left-out"]  # the answer; a baseline or edge it rests on; what was passed over
    marks: bool = False  # single marks in place of a line


@dataclass(frozen=True, slots=True)
class Outline:
    """What was found in one picture or trace."""

    strokes: tuple[Stroke, ...]
    caption: str  # the numbers, as a person reads them


@dataclass(frozen=True, slots=True)
class Finding:
    """The outcome of measuring one picture or trace."""

    measured: tuple[Measured, ...]
    outline: Outline
    remarks: tuple[
        str, ...
    ] = ()  # what a person should know: a kind refused, two routes that differ, a departure from the shape

"""The invented example campaign: a laboratory's folder, and the true numbers beside it."""

from __future__ import annotations

from pathlib import Path

from reconcile.invent.campaign import Histogram, Invented, InventedReading, InventedShot, invent
from reconcile.invent.truth import BENCH, Truth

__all__ = ["BENCH", "Histogram", "Invented", "InventedReading", "InventedShot", "Truth", "invent", "write_example"]

SEED = 4  # of the example campaign


def write_example(folder: Path) -> None:
    """Write the example campaign: 72 shots of an invented laboratory, its tables, pictures and traces, untidy as they are.

    Parameters
    ----------
    folder : made where it does not exist. The same files are written every time.

    Raises
    ------
    Refusal : the folder exists and holds something.
    """
    invent(SEED).write(folder, style="files")

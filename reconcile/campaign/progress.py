"""How long work is followed: a callable handed down, with a silent twin."""

from __future__ import annotations

from typing import Protocol


class Progress(Protocol):
    """Called as work goes on; the library itself never prints."""

    def __call__(self, stage: str, done: int, total: int) -> None:
        """Say how far a stage has come.

        Parameters
        ----------
        stage : str
            What is being done, as a person reads it: "reading", "sampling".
        done, total : int
            So many parts of so many; `total` 0 where nobody knows yet.

        """


def silent(stage: str, done: int, total: int) -> None:
    """Say nothing."""

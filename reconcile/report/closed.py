"""A close-out read back from its folder: the numbers of results.json, the draws of posterior.nc."""

from __future__ import annotations

import json
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from reconcile.campaign.refusal import Refusal
from reconcile.inference.outcome import Posterior

RESULTS, POSTERIOR = "results.json", "posterior.nc"


@dataclass(frozen=True, slots=True)
class Closed:
    """What a close-out wrote for programs."""

    folder: Path
    results: dict[str, Any]  # results.json
    posterior: Posterior

    @property
    def fixed(self) -> dict[str, float]:
        """Values of the inputs that were held, SI."""
        return {
            name: float(numbers["median"])
            for name, numbers in self.results["inputs"].items()
            if name not in self.posterior.names and numbers["median"] is not None
        }


def read_closed(folder: Path) -> Closed | None:
    """Return the close-out that lies in a folder, or None where none does.

    Raises
    ------
    Refusal
        A file of it cannot be read.
    """
    if not (folder / RESULTS).is_file() or not (folder / POSTERIOR).is_file():
        return None
    results = _results(folder / RESULTS)
    return Closed(folder, results, _posterior(folder / POSTERIOR))


def _results(path: Path) -> dict[str, Any]:
    try:
        results = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError):
        results = None
    if not isinstance(results, dict) or not {"campaign", "inputs", "shots", "readings"} <= results.keys():
        raise _unreadable(path, "results of a close-out")
    if results.get("contract") != 1:
        raise _unreadable(path, "results of contract 1")
    return results


def _posterior(path: Path) -> Posterior:
    import h5netcdf  # only here: it is slow to load

    try:
        with h5netcdf.File(path, "r") as file:
            group = file["posterior"]
            variables = [variable for name, variable in group.variables.items() if name not in ("chain", "draw")]
            names = tuple(str(variable.attrs["long_name"]) for variable in variables)
            draws = np.stack([np.asarray(variable[...], dtype=float) for variable in variables], axis=-1)
            log_prob = np.asarray(file["sample_stats"]["lp"][...], dtype=float)
    except (OSError, KeyError, ValueError):
        raise _unreadable(path, "the draws of a close-out") from None
    return Posterior(names, draws, log_prob)


def _unreadable(path: Path, expected: str) -> Refusal:
    return Refusal(
        path.as_posix(),
        found="a file that cannot be read as such",
        expected=expected,
        remedy="Run `reconcile closeout` again, or give the folder of a close-out with --out.",
    )

"""An interrupted fit on disk: whole or absent, and of no use to other data, another seed or another version."""

from __future__ import annotations

import hashlib
import os
import struct
import tempfile
import zipfile
import zlib
from collections.abc import Iterator
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from reconcile import __version__
from reconcile.campaign.readings import Gathered
from reconcile.campaign.refusal import Refusal
from reconcile.inference.lattice import Index
from reconcile.inference.model import Array
from reconcile.inference.proposal import Mixture, Proposal, Warp
from reconcile.inference.sampling import Ensemble

# What numpy and zipfile raise on files that are damaged, or are no archive of arrays at all.
_DAMAGED = (
    ValueError,
    KeyError,
    EOFError,
    TypeError,
    AttributeError,
    NotImplementedError,
    RuntimeError,
    MemoryError,
    zipfile.BadZipFile,
    zlib.error,
    struct.error,
)

_ENSEMBLE_ARRAYS = ("position", "chain", "log_prob")
_WARP_ARRAYS = ("location", "scale", "skew", "tail")


@dataclass(frozen=True, slots=True)
class Stored:
    """What an interrupted fit needs to go on exactly as it would have."""

    mode: Array
    covariance: Array
    log_prob: float
    reach: tuple[Array, Array]  # mean and covariance of the priors on the coordinates
    late: tuple[int, ...]  # rows of radii left out as read after the collapse
    points: dict[int, Index] | None  # of the lattice, by shot; None: no reading belongs to a shot
    step: float  # of the lattice
    ensembles: list[Ensemble]


def fingerprint(gathered: Gathered, *options: object) -> str:
    """Return what a checkpoint must share with the fit that takes it up: data, options and version."""
    campaign = replace(gathered.campaign, folder=Path())
    told = (__version__, np.__version__, campaign, gathered.shots, gathered.readings, options)
    return hashlib.sha256(repr(told).encode()).hexdigest()


class Checkpoint:
    """Where a fit is kept while it runs.

    Parameters
    ----------
    path : the file; None: nothing is kept
    mark : from `fingerprint`
    resume : take up what is there
    """

    def __init__(self, path: Path | None, mark: str, *, resume: bool) -> None:
        self.path, self.mark, self.resume = path, mark, resume

    def load(self) -> Stored | None:
        """Return the interrupted fit, or None where there is none or a new one is wanted.

        Raises
        ------
        Refusal : it belongs to other data, another seed or another version, or cannot be read.
        """
        if self.path is None or not self.resume or not self.path.exists():
            return None
        try:
            with self.path.open("rb") as file, np.load(file, allow_pickle=False) as arrays:
                if str(arrays["mark"]) == self.mark:
                    return _unpacked(dict(arrays))
        except _DAMAGED:
            self._refuse("a file that is no interrupted fit")
        self._refuse("an interrupted fit of other files, another seed, other options or another version")
        return None

    def _refuse(self, found: str) -> None:
        raise Refusal(
            str(self.path),
            found=found,
            expected="one that this campaign and these options began",
            remedy="Run again without --resume to begin anew, or with the files and options of that time.",
        )

    def save(self, stored: Stored) -> None:
        """Write the fit as it stands; the file is replaced as a whole."""
        if self.path is None:
            return
        self.path.parent.mkdir(parents=True, exist_ok=True)
        handle, name = tempfile.mkstemp(dir=self.path.parent, prefix=f"{self.path.name}-")
        try:
            with os.fdopen(handle, "wb") as file:
                np.savez(file, mark=np.array(self.mark), **_packed(stored))
            Path(name).replace(self.path)
        finally:
            Path(name).unlink(missing_ok=True)

    def discard(self) -> None:
        """Remove the file once the close-out is written."""
        if self.path is not None:
            self.path.unlink(missing_ok=True)


def _packed(stored: Stored) -> dict[str, Any]:
    arrays: dict[str, Any] = {
        "mode": stored.mode,
        "covariance": stored.covariance,
        "reach_mean": stored.reach[0],
        "reach_covariance": stored.reach[1],
        "log_prob_at_mode": np.array(stored.log_prob),
        "late": np.array(stored.late, dtype=np.intp),
        "step": np.array(stored.step),
        "ensembles": np.array(len(stored.ensembles)),
    }
    if stored.points is not None:
        arrays["shots"] = np.array(list(stored.points), dtype=np.intp)
        arrays |= {f"points{shot}": points for shot, points in stored.points.items()}
    for number, ensemble in enumerate(stored.ensembles):
        arrays |= {f"e{number}.{name}": getattr(ensemble, name) for name in _ENSEMBLE_ARRAYS}
        kind, keys, at, has_gauss, gauss = ensemble.random_state
        arrays[f"e{number}.keys"] = keys
        arrays[f"e{number}.state"] = np.array([at, has_gauss], dtype=np.int64)
        arrays[f"e{number}.numbers"] = np.array([gauss, ensemble.accepted, float(ensemble.evaluations)])
        arrays[f"e{number}.generator"] = np.array(kind)
        arrays[f"e{number}.shares"] = np.array(ensemble.proposal.shares)
        for place, part in enumerate(ensemble.proposal.parts):
            arrays |= dict(_packed_proposal(f"e{number}.part{place}", part))
    return arrays


def _packed_proposal(prefix: str, proposal: Proposal) -> Iterator[tuple[str, Array]]:
    for name in _WARP_ARRAYS:
        yield f"{prefix}.{name}", getattr(proposal.warp, name)
    yield f"{prefix}.mean", proposal.mean
    yield f"{prefix}.root", proposal.root
    yield f"{prefix}.freedom", np.array(proposal.freedom)


def _unpacked(arrays: dict[str, Any]) -> Stored:
    points = None
    if "shots" in arrays:
        points = {int(shot): arrays[f"points{shot}"] for shot in arrays["shots"]}
    ensembles = []
    for number in range(int(arrays["ensembles"])):
        shares = tuple(float(share) for share in arrays[f"e{number}.shares"])
        parts = tuple(_unpacked_proposal(f"e{number}.part{place}", arrays) for place in range(len(shares)))
        at, has_gauss = (int(value) for value in arrays[f"e{number}.state"])
        gauss, accepted, evaluations = (float(value) for value in arrays[f"e{number}.numbers"])
        state = (str(arrays[f"e{number}.generator"]), arrays[f"e{number}.keys"], at, has_gauss, gauss)
        position, chain, log_prob = (arrays[f"e{number}.{name}"] for name in _ENSEMBLE_ARRAYS)
        ensembles.append(Ensemble(Mixture(parts, shares), position, state, chain, log_prob, int(evaluations), accepted))
    step = float(arrays["step"])
    late = tuple(int(row) for row in arrays["late"])
    reach = arrays["reach_mean"], arrays["reach_covariance"]
    return Stored(
        arrays["mode"], arrays["covariance"], float(arrays["log_prob_at_mode"]), reach, late, points, step, ensembles
    )


def _unpacked_proposal(prefix: str, arrays: dict[str, Any]) -> Proposal:
    warp = Warp(*(arrays[f"{prefix}.{name}"] for name in _WARP_ARRAYS))
    freedom = float(arrays[f"{prefix}.freedom"])
    return Proposal(warp, arrays[f"{prefix}.mean"], arrays[f"{prefix}.root"], freedom)

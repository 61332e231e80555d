"""A campaign from Python: `reconcile.open("folder")`."""

from __future__ import annotations

from collections.abc import Iterable
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from reconcile.campaign.energies import parse_energy
from reconcile.campaign.manifest import load
from reconcile.campaign.refusal import Refusal, nearest
from reconcile.closeout import closeout
from reconcile.inference.model import Array
from reconcile.inference.outcome import CloseOut
from reconcile.predict import out_folder, predict_shots
from reconcile.report.closed import Closed, read_closed
from reconcile.report.prediction import COLUMNS, rows

_SHOT_UNITS = {
    "metered_energy": "J",
    "absorbed_fluence": "J/m2",
    "incident_fluence": "J/m2",
    "energy_ratio": "1",
    "p_misread": "1",
}


class OpenCampaign:
    """A campaign folder and the close-out that lies, or will lie, in its output folder.

    Frames are in SI; `frame.attrs["units"]` holds the unit of each column that has one. They are read anew each time.

    Parameters
    ----------
    folder : a campaign folder, or its campaign.toml
    out : the output folder; default reports/<campaign name> under the current folder

    Raises
    ------
    Refusal : the manifest cannot be used.
    """

    def __init__(self, folder: str | Path, out: str | Path | None = None) -> None:
        self.path = Path(folder).absolute()  # it stays the same wherever Python goes
        self.name = load(self.path).name
        self.out = out_folder(self.name, None if out is None else Path(out)).absolute()

    def __repr__(self) -> str:
        """Return campaign and output folder."""
        return f"<campaign {self.name}, close-out in {self.out.as_posix()}>"

    def closeout(self, **options: Any) -> CloseOut:
        """Do the whole job and write it into the output folder.

        Parameters
        ----------
        options : seed, workers, effort, without, resume, progress, as `reconcile.closeout.closeout` takes them

        Raises
        ------
        Refusal : something handed in cannot be used, or the output folder would be harmed.
        """
        answer, written, _ = closeout(self.path, out=self.out, **options)
        self.out = written.absolute()  # beside it, where an earlier one could not be replaced
        return answer

    def shots(self) -> pd.DataFrame:
        """Every shot of the last close-out: energy, fluences with their uncertainties, verdict; raises Refusal without one."""
        shots = [_flat(shot) for shot in self._closed().results["shots"]]
        frame = pd.DataFrame(shots)
        return _with_units(frame, {column: _unit_of(column) for column in frame.columns})

    def readings(self) -> pd.DataFrame:
        """Every reading of the last close-out beside what is expected of it, its unit in a column; raises Refusal without one."""
        return _with_units(pd.DataFrame(self._closed().results["readings"]), {"delay": "s"})

    def inputs(self) -> pd.DataFrame:
        """Every input after the last close-out, by name, its unit in a column; raises Refusal without one."""
        frame = pd.DataFrame.from_dict(self._closed().results["inputs"], orient="index")
        return frame.rename_axis("input")

    def draws(self, name: str) -> Array:
        """All draws (n,) of one input, in SI, derived ones included; those of one row of inputs belong together.

        Raises
        ------
        Refusal : there is no close-out, or it holds no input of that name.
        """
        closed = self._closed()
        if name in closed.posterior.names:
            return np.asarray(closed.posterior[name])
        if name in closed.fixed:
            return np.full(closed.posterior.log_prob.size, closed.fixed[name])
        near = nearest(name, [*closed.posterior.names, *closed.fixed])
        raise Refusal(
            closed.folder.as_posix(),
            found=f"no input '{name}'",
            expected="one of those that .inputs() lists",
            remedy=f"Write '{near}' if that is meant." if near else "Look them up there.",
        )

    def predict(self, energies: float | str | Iterable[float | str], pulses: int = 1, seed: int = 1) -> pd.DataFrame:
        """Say what shots not yet fired should show; nothing is written.

        Parameters
        ----------
        energies : one or several, each [J] or as text with its unit, such as "20 uJ"
        pulses : that one place receives

        Returns
        -------
        One row an energy and quantity, SI; `attrs["notes"]` says where the numbers come from.

        Raises
        ------
        Refusal : an energy is none, or the manifest or the close-out cannot be used.
        """
        several = [energies] if isinstance(energies, float | int | str) else list(energies)
        asked = np.array([_energy(energy) for energy in several])
        predicted = predict_shots(self.path, asked, pulses=pulses, out=self.out, seed=seed, write=False)
        frame = pd.DataFrame(rows(predicted.prediction, predicted.source), columns=list(COLUMNS))
        frame.attrs["notes"] = predicted.notes
        return frame

    def _closed(self) -> Closed:
        closed = read_closed(self.out)
        if closed is None:
            raise Refusal(
                self.out.as_posix(),
                found="no close-out",
                expected="the folder that a close-out of this campaign wrote",
                remedy="Call .closeout() first, or open the campaign with out= that folder.",
            )
        return closed


def open_campaign(folder: str | Path, out: str | Path | None = None) -> OpenCampaign:
    """Open a campaign folder; see `OpenCampaign`."""
    return OpenCampaign(folder, out)


def _energy(energy: float | str) -> float:
    return parse_energy(energy if isinstance(energy, str) else f"{float(energy)!r} J", "energies")


def _flat(shot: dict[str, Any]) -> dict[str, Any]:
    """Return a shot with its distributions spread over columns: absorbed_fluence is the mean, absorbed_fluence_sd …"""
    flat: dict[str, Any] = {}
    for key, value in shot.items():
        if isinstance(value, dict):
            flat |= {key if part == "mean" else f"{key}_{part}": number for part, number in value.items()}
        else:
            flat[key] = value
    return flat


def _unit_of(column: str) -> str | None:
    return next((unit for name, unit in _SHOT_UNITS.items() if column == name or column.startswith(f"{name}_")), None)


def _with_units(frame: pd.DataFrame, units: dict[str, str | None]) -> pd.DataFrame:
    frame.attrs["units"] = {column: unit for column, unit in units.items() if unit is not None}
    return frame

"""What the model expects of shots not yet fired: from the last close-out, or from the priors where there is none."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np

from reconcile.campaign.campaign import Campaign
from reconcile.campaign.files import changed_inputs, keep_apart, verify
from reconcile.campaign.kinds import KINDS, yields
from reconcile.campaign.manifest import load
from reconcile.campaign.refusal import Refusal
from reconcile.gather.collected import Collected
from reconcile.gather.log import read_log
from reconcile.inference.coordinates import Inputs
from reconcile.inference.model import Array, Conditions
from reconcile.inference.planning import Prediction, believed_of, completed, predict, predictable, prior_draws
from reconcile.report.closed import Closed, read_closed
from reconcile.report.prediction import write_prediction

_MOST_NAMED = 5


@dataclass(frozen=True, slots=True)
class Predicted:
    """A prediction, and what a person should know of it."""

    prediction: Prediction
    source: str  # "fit" or "prior"
    notes: tuple[str, ...]
    files: tuple[Path, ...]


def out_folder(name: str, out: Path | None) -> Path:
    """Return where the close-out of the campaign of this name lies, or will lie."""
    return out if out is not None else Path("reports") / name


def predict_shots(
    path: Path, energies: Array, *, pulses: int = 1, out: Path | None = None, seed: int = 1, write: bool = True
) -> Predicted:
    """Say what shots at these energies should show, and write it beside the close-out.

    Parameters
    ----------
    path : a campaign folder, or its campaign.toml
    energies : (m,) [J] as the meter would log them
    pulses : that one place receives
    out : folder of the close-out; default reports/<campaign name> under the current folder
    write : False writes no file

    Raises
    ------
    Refusal : the manifest or the log cannot be used, the close-out cannot be read, or `out` lies in the campaign folder.
    OSError : a file cannot be written.
    """
    campaign = load(path)
    folder = out_folder(campaign.name, out)
    if write:
        keep_apart(folder, campaign.folder)
    kinds = predictable(campaign)
    closed = read_closed(folder)
    if closed is None:
        source, (inputs, fired, notes) = "prior", _from_priors(campaign, folder, kinds, seed)
    else:
        source, (inputs, fired, notes) = "fit", _from_fit(campaign, closed, kinds, seed)
    asked = np.asarray(energies, dtype=float)
    # Not the seed of the draws: the shots' deviations must not follow the inputs.
    prediction = predict(Conditions.of(campaign), inputs, asked, pulses=pulses, kinds=kinds, seed=seed + 1)
    notes += _on_range(prediction, fired) + _on_kinds(campaign, kinds)
    files: tuple[Path, ...] = ()
    if write:
        title = f"{campaign.name}: expected of the next shot, {'after the fit' if closed else 'before any fit'}"
        files = write_prediction(prediction, source, title, folder.parent, f"{campaign.name}-prediction")
    return Predicted(prediction, source, tuple(notes), files)


def _from_priors(
    campaign: Campaign, folder: Path, kinds: tuple[str, ...], seed: int
) -> tuple[Inputs, Array, list[str]]:
    shots = tuple(read_log(campaign, Collected()).shots.values())
    inputs = prior_draws(campaign, shots, kinds, seed=seed)
    note = f"There is no close-out in {folder.as_posix()}: this is what is believed before any fit, from the priors."
    return inputs, np.array([shot.metered_energy * shot.transmission for shot in shots]), [note]


def _from_fit(campaign: Campaign, closed: Closed, kinds: tuple[str, ...], seed: int) -> tuple[Inputs, Array, list[str]]:
    believed = believed_of(campaign, kinds)
    draws = {name: closed.posterior[name] for name in closed.posterior.names if name in believed}
    fixed = {name: value for name, value in closed.fixed.items() if name in believed}
    inputs, missing = completed(draws, fixed, believed, seed)
    notes = [f"From the fit in {closed.folder.as_posix()}.", *_on_close_out(campaign, closed)]
    unexpected = [name for name in missing if not name.startswith("scatter.")]
    if unexpected:
        notes.append(f"That close-out does not hold {_listed(unexpected)}: taken from the priors.")
    fired = np.array([shot["metered_energy"] for shot in closed.results["shots"]], dtype=float)
    return inputs, fired, notes


def _on_close_out(campaign: Campaign, closed: Closed) -> list[str]:
    """Say where the close-out is another campaign's, provisional, changed, or older than its input files."""
    notes = []
    if closed.results["campaign"] != campaign.name:
        notes.append(f"That close-out is of the campaign {closed.results['campaign']}, not of {campaign.name}.")
    if closed.results.get("status") == "provisional":
        notes.append("That close-out is provisional.")
    try:
        changed, older = verify(closed.folder), changed_inputs(closed.folder, campaign.folder)
    except Refusal as refusal:  # its draws can be used all the same
        return [*notes, f"Whether that close-out was changed cannot be told: {refusal.found} in {refusal.place}."]
    if changed:
        notes.append(f"That close-out is not as it was written: {_listed([str(one) for one in changed])}.")
    if older:
        notes.append(f"Input files are not those of that close-out: {_listed([str(one) for one in older])}.")
    return notes


def _on_range(prediction: Prediction, fired: Array) -> list[str]:
    notes = []
    low, high = prediction.energies.min(), prediction.energies.max()
    if len(fired) and (low < 0.9 * fired.min() or high > 1.1 * fired.max()):
        notes.append(
            "Some of these energies lie outside those of the log: the model is carried on beyond its readings."
        )
    if prediction.impossible > 0.0:
        share = f"{100 * prediction.impossible:.2g} %"
        notes.append(f"Left out: up to {share} of the draws, in which more would be absorbed than arrives.")
    return notes


def _on_kinds(campaign: Campaign, kinds: tuple[str, ...]) -> list[str]:
    read = {kind for table in campaign.tables for kind in yields(table.kind)}
    unread = [KINDS[kind].words for kind in kinds if kind not in read]
    return [f"No table of this campaign reads {_listed(unread)}: there the priors speak most."] if unread else []


def _listed(names: list[str]) -> str:
    more = f" and {len(names) - _MOST_NAMED} more" if len(names) > _MOST_NAMED else ""
    return ", ".join(names[:_MOST_NAMED]) + more

"""The whole job: a campaign folder in, a close-out out."""

from __future__ import annotations

from pathlib import Path
from tempfile import TemporaryDirectory

from reconcile.campaign.files import check_output, whole_folder
from reconcile.campaign.manifest import load
from reconcile.campaign.progress import Progress, silent
from reconcile.gather import gather
from reconcile.inference.checkpoint import Checkpoint, fingerprint
from reconcile.inference.conclude import conclude
from reconcile.inference.fit import EFFORTS, fit
from reconcile.inference.outcome import CloseOut
from reconcile.report.write import write


def closeout(  # reason: the options of one verb
    path: Path,
    *,
    out: Path | None = None,
    seed: int = 1,
    workers: int = 1,
    effort: str = "normal",
    without: tuple[str, ...] = (),
    resume: bool = False,
    progress: Progress = silent,
) -> tuple[CloseOut, Path, str]:
    """Read, fit, judge and report a campaign.

    Parameters
    ----------
    path : a campaign folder, or its campaign.toml
    out : where the close-out is to lie; default reports/<campaign name> under the current folder
    seed, effort, without, resume : see the command line
    workers : processes; never changes a number
    progress : told how far it has come

    Returns
    -------
    close_out : the answer
    folder : where it was written
    message : what a person should know of how it was written; may be empty

    Raises
    ------
    Refusal : something handed in cannot be used, or `out` would be harmed.
    """
    campaign = load(path)
    folder = out if out is not None else Path("reports") / campaign.name
    check_output(folder, campaign.folder)
    with TemporaryDirectory(prefix="reconcile-", ignore_cleanup_errors=True) as drawings:
        gathered = gather(campaign, workers=workers, progress=progress, overlays=Path(drawings))
        target = EFFORTS[effort]
        mark = fingerprint(gathered, seed, target, without)
        checkpoint = Checkpoint(folder.with_name(f"{folder.name}.unfinished.npz"), mark, resume=resume)
        fitted = fit(
            gathered,
            seed=seed,
            target=target,
            workers=workers,
            without=without,
            progress=progress,
            checkpoint=checkpoint,
        )
        progress("judging", 0, 0)
        close_out = conclude(fitted, gathered, seed=seed, target=target, workers=workers)
        progress("writing", 0, 0)
        place = whole_folder(folder)
        with place as staging:
            write(close_out, staging)
        checkpoint.discard()
    assert place.final is not None
    return close_out, place.final, place.message

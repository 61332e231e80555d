"""All that a report may know of a close-out: numbers in SI, sentences, and the draws."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Literal, TypeAlias

from reconcile.campaign.campaign import Prior
from reconcile.campaign.inputs import Input
from reconcile.campaign.readings import Gathered, Reading, Shot

if TYPE_CHECKING:
    import numpy as np

ShotVerdict: TypeAlias = Literal["set-aside", "kept", "misread", "stray"]
ReadingVerdict: TypeAlias = Literal["set-aside", "stray", "below-limit", "used", "information"]


@dataclass(frozen=True, slots=True)
class Summary:
    """A posterior distribution in seven numbers, SI."""

    mean: float
    sd: float
    q025: float
    q16: float
    median: float
    q84: float
    q975: float


@dataclass(frozen=True, slots=True)
class InputResult:
    """What is known of one input after the fit."""

    entry: Input
    summary: Summary
    prior: Prior | None  # None: derived
    prior_mean: float
    prior_sd: float
    informed: float | None  # 1 − (posterior sd / prior sd)², floored at 0; None: the prior has no spread
    fixed: bool
    scale_mean: float  # mean and sd on entry.scale: ln for "log", logit for "logit"
    scale_sd: float
    overruled: str | None = None  # where [priors] went before an instrument table, that table's word for it


@dataclass(frozen=True, slots=True)
class ShotResult:
    """What is known of one shot after the fit."""

    shot: Shot
    absorbed_fluence: Summary  # [J/m²]
    incident_fluence: Summary  # [J/m²]
    energy_ratio: float
    energy_ratio_sd: float
    p_misread: float
    verdict: ShotVerdict
    reasons: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class ReadingResult:
    """One reading beside what the fit expects of it."""

    reading: Reading
    predicted: float | None  # [unit of the kind]; None: not fitted
    predicted_sd: float | None  # of what such a reading should be, its own uncertainty left out
    p_stray: float | None
    verdict: ReadingVerdict


@dataclass(frozen=True, slots=True)
class KindResult:
    """Does one kind agree with what the others predict?"""

    kind: str
    n: int
    p_value: float | None
    agrees: bool | None
    sentence: str


@dataclass(frozen=True, slots=True)
class Strained:
    """An input whose posterior mean lies where its prior holds next to nothing."""

    input: str
    prior_tail: float
    sentence: str


@dataclass(frozen=True, slots=True)
class Share:
    """A part of a variance and where it comes from."""

    source: str  # an input whose prior brings it, or "readings"
    share: float


@dataclass(frozen=True, slots=True)
class Warned:
    """A limit of validity that was passed, or could not be checked."""

    where: str  # a shot, a sample, or "campaign"
    what: str
    value: float | None
    limit: float | None
    unit: str
    advice: str


@dataclass(frozen=True, slots=True)
class Sampling:
    """How the draws were made and whether they can be trusted."""

    min_ess: float  # smallest bulk or tail effective sample size
    max_rhat: float
    draws: int
    seconds: float
    converged: bool
    target_ess: int
    integral_error: float  # [nat] largest error of the log-likelihood's integration, from a dense check
    evaluations: int


@dataclass(frozen=True, slots=True)
class Posterior:
    """Named draws in SI: `posterior["heated_depth"]` has shape (chains × steps,)."""

    names: tuple[str, ...]  # free inputs, then derived ones
    draws: np.ndarray  # (chains, steps, names)
    log_prob: np.ndarray  # (chains, steps)

    def __getitem__(self, name: str) -> np.ndarray:
        """Return all draws of one input, shape (chains × steps,)."""
        return self.draws[:, :, self.names.index(name)].ravel()


@dataclass(frozen=True, slots=True)
class Band:
    """What the model expects of one kind over the range of a campaign: for figures."""

    kind: str
    delay: float | None  # [s]; of a kind with a delay
    logged_energy: np.ndarray  # (m,) [J]
    absorbed_fluence: np.ndarray  # (m,) [J/m²] posterior median
    low: np.ndarray  # (m,) 2.5 % quantile of the expected value, scatter included
    median: np.ndarray
    high: np.ndarray


@dataclass(frozen=True, slots=True)
class CloseOut:
    """The answer."""

    gathered: Gathered
    seed: int
    status: Literal["final", "provisional"]
    status_reasons: tuple[str, ...]
    inputs: tuple[InputResult, ...]
    correlation: tuple[tuple[str, ...], np.ndarray]  # natural values, free inputs: names, matrix
    scale_correlation: tuple[tuple[str, ...], np.ndarray]  # the same on each input's scale
    budget: dict[str, tuple[Share, ...]]  # by input; the shares of one add up to 1
    shots: tuple[ShotResult, ...]
    readings: tuple[ReadingResult, ...]
    kinds: tuple[KindResult, ...]
    strained: tuple[Strained, ...]
    warnings: tuple[Warned, ...]
    could_not_tell: tuple[str, ...]  # sentences: what these data do not know
    sampling: Sampling
    posterior: Posterior
    bands: tuple[Band, ...] = ()
    reading_log_likelihood: dict[str, np.ndarray] = field(default_factory=dict)

    def input(self, name: str) -> InputResult:
        """Return the result of one input; raises KeyError where the campaign has none of that name."""
        for result in self.inputs:
            if result.entry.name == name:
                return result
        raise KeyError(name)

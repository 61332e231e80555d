"""The report's figures, as files: readings against energy, energy ratio in firing order, prior to posterior, corner plot."""

from __future__ import annotations

import logging
import math
import warnings
from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import Any, cast

import matplotlib
import numpy as np
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator

from reconcile.campaign.kinds import KINDS
from reconcile.inference.outcome import CloseOut, InputResult
from reconcile.report.blocks import Drawing
from reconcile.report.figures_kinds import draw_kind
from reconcile.report.lines import count, scale_of
from reconcile.report.style import BLACK, BLUE, GREY, MANY_MARKS, STYLE, VERMILION, marks, readable_ticks, save

MOST_CORNERS = 6
MOST_BARS = 30
# An input counts as informed here where its variance fell by at least a tenth.
LEAST_INFORMED = 0.1


def draw(close_out: CloseOut, folder: Path) -> tuple[Drawing, ...]:
    """Draw every figure that this close-out has the numbers for into `folder`; return them in the report's order."""
    folder.mkdir(parents=True, exist_ok=True)
    drawings: list[Drawing] = []
    with matplotlib.rc_context(cast(Any, STYLE)):
        for kind in KINDS:
            drawings += draw_kind(close_out, kind, folder)
        drawings += _energy_ratios(close_out, folder)
        informed = _informed(close_out)
        drawings += _prior_to_posterior(informed, folder)
        drawings += _corner(close_out, informed, folder)
    return tuple(drawings)


def _energy_ratios(close_out: CloseOut, folder: Path) -> Iterable[Drawing]:
    """Draw the energy ratio of each shot in the log's order."""
    shots = [(i + 1, result) for i, result in enumerate(close_out.shots) if np.isfinite(result.energy_ratio)]
    if not shots:
        return
    many = len(shots) > MANY_MARKS
    figure = Figure(figsize=(6.6, 2.7), layout="constrained")
    axes = figure.subplots()
    axes.axhline(1, color=BLACK, linewidth=0.8)
    looks = {
        "kept": ("o", BLUE, BLUE, "kept"),
        "stray": ("D", BLUE, "white", "with a stray reading"),
        "misread": ("X", VERMILION, VERMILION, "misread energy"),
        "set-aside": ("s", GREY, "white", "set aside (from the log alone)"),
    }
    for verdict, look in looks.items():
        chosen = [
            (at, result.energy_ratio, result.energy_ratio_sd) for at, result in shots if result.verdict == verdict
        ]
        if chosen:
            x, y, bars = (np.array(column, dtype=float) for column in zip(*chosen, strict=True))
            marks(axes, x, y, np.nan_to_num(bars), look, many)
    axes.set_xlabel("order in the log")
    axes.set_ylabel("energy ratio")
    axes.xaxis.set_major_locator(MaxNLocator(integer=True))
    ratios = [result.energy_ratio for _, result in shots]
    if min(ratios) > 0 and max(ratios) > 8 * min(ratios):
        axes.set_yscale("log")
        readable_ticks(axes.yaxis, max(ratios) / min(ratios))
    figure.legend(loc="outside upper center", ncols=4)
    raster, vector = save(figure, folder, "energy-ratio")
    worst = [result.shot.name for _, result in shots if result.verdict == "misread"]
    alternative = (
        f"Energy ratio of {count(len(shots), 'shot')} in the order of the log, from {min(ratios):.3g} to "
        f"{max(ratios):.3g}; "
        f"misread energy: {', '.join(worst[:20]) or 'none'}."
    )
    caption = (
        "Energy that a shot's readings show over the logged one, in the log's order. Bars: one standard uncertainty."
    )
    yield Drawing("energies", caption, alternative, raster, vector)


def _informed(close_out: CloseOut) -> list[InputResult]:
    """Return the free inputs on which the readings had a say, the best informed first."""
    found = [
        result
        for result in close_out.inputs
        if not result.fixed
        and not result.entry.derived
        and result.informed is not None
        and result.informed >= LEAST_INFORMED
        and 0 < result.prior_sd < math.inf
    ]
    return sorted(found, key=lambda result: -(result.informed or 0))


def _prior_to_posterior(informed: Sequence[InputResult], folder: Path) -> Iterable[Drawing]:
    """Draw prior and posterior of each informed input on one axis, in prior standard deviations from the prior mean."""
    informed = informed[:MOST_BARS]
    if not informed:
        return
    figure = Figure(figsize=(6.6, 0.9 + 0.3 * len(informed)), layout="constrained")
    axes = figure.subplots()
    for row, result in enumerate(informed):
        summary, centre, spread = result.summary, result.prior_mean, result.prior_sd
        low, first, middle, third, high = (
            (value - centre) / spread
            for value in (summary.q025, summary.q16, summary.median, summary.q84, summary.q975)
        )
        axes.plot(
            [-1, 1],
            [row, row],
            color="#cfcfcf",
            linewidth=9,
            solid_capstyle="butt",
            label="prior, ± 1 sd" if row == 0 else None,
        )
        axes.plot([low, high], [row, row], color=BLUE, linewidth=1.2, label="posterior, 95 %" if row == 0 else None)
        axes.plot(
            [first, third],
            [row, row],
            color=BLUE,
            linewidth=4,
            solid_capstyle="butt",
            label="posterior, 68 %" if row == 0 else None,
        )
        axes.plot(
            middle,
            row,
            "o",
            color="white",
            markeredgecolor=BLACK,
            markersize=4.5,
            label="posterior median" if row == 0 else None,
        )
    axes.axvline(0, color=GREY, linewidth=0.7, zorder=0)
    axes.set_yticks(range(len(informed)), [result.entry.name for result in informed])
    axes.set_ylim(len(informed) - 0.4, -0.6)
    axes.set_xlabel("distance from the prior mean (prior standard deviations)")
    figure.legend(loc="outside upper center", ncols=4)
    raster, vector = save(figure, folder, "prior-to-posterior")
    names = ", ".join(f"{result.entry.name} ({100 * (result.informed or 0):.0f} %)" for result in informed)
    caption = "Prior and posterior of the inputs on which the readings had a say, the best informed first."
    yield Drawing(
        "inputs", caption, f"Bars of prior and posterior for each informed input; informed: {names}.", raster, vector
    )


def _corner(close_out: CloseOut, informed: Sequence[InputResult], folder: Path) -> Iterable[Drawing]:
    """Draw the joint posterior of at most six informed inputs, the material's and the instruments' first."""
    posterior = close_out.posterior
    candidates = sorted(informed, key=lambda result: result.entry.belongs_to == "c")
    chosen = [result for result in candidates if result.entry.name in posterior.names and result.summary.sd > 0][
        :MOST_CORNERS
    ]
    if len(chosen) < 2:
        return
    import corner  # only here: it is slow to load

    scales = [scale_of(result.summary, result.entry.unit, result.entry.name) for result in chosen]
    draws = np.stack(
        [posterior[result.entry.name] / scale.size for result, scale in zip(chosen, scales, strict=True)], axis=-1
    )
    draws = draws[np.isfinite(draws).all(axis=1)]
    if len(draws) <= len(chosen):
        return
    labels = [scale.heading(result.entry.name.replace("_", "\n")) for result, scale in zip(chosen, scales, strict=True)]
    figure = Figure(figsize=(1.15 * len(chosen) + 0.9, 1.15 * len(chosen) + 0.9))
    with warnings.catch_warnings():
        # Few draws leave contour levels that coincide: the plot is then coarse, which is no fault to report.
        warnings.simplefilter("ignore")
        logging.disable(logging.WARNING)  # corner says so on the root logger as well
        corner.corner(
            draws,
            fig=figure,
            labels=labels,
            bins=24,
            color=BLUE,
            quantiles=(0.025, 0.5, 0.975),
            max_n_ticks=3,
            label_kwargs={"fontsize": 7},
            plot_datapoints=False,
            fill_contours=True,
            labelpad=0.12,
        )
        logging.disable(logging.NOTSET)
    for axes in figure.axes:
        axes.tick_params(labelsize=6)
    raster, _ = save(figure, folder, "corner", vector=False)
    names = ", ".join(result.entry.name for result in chosen)
    caption = (
        "Joint posterior of the best informed inputs: the diagonal holds each one's distribution with its 2.5 %, 50 % "
        "and 97.5 % quantiles, the rest their pairs."
    )
    yield Drawing("inputs", caption, f"Corner plot of {names}; the correlations stand in results.json.", raster, None)

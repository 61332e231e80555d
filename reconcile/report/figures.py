"""The report's figures, as files: readings against energy, energy ratio in firing order, prior to posterior, corner plot."""

from __future__ import annotations

import warnings
from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import matplotlib
import numpy as np
from matplotlib.figure import Figure

from reconcile.campaign.kinds import KINDS
from reconcile.inference.outcome import Band, CloseOut, InputResult, ReadingResult
from reconcile.report.blocks import Drawing
from reconcile.report.lines import Scale, count, scale_for

if TYPE_CHECKING:
    from matplotlib.axes import Axes

# Colours after Okabe and Ito (2008), https://jfly.uni-koeln.de/color/: told apart by colour-blind readers; marker shapes carry the same in grey.
BLUE, VERMILION, GREY, BLACK, SKY = "#0072B2", "#D55E00", "#8a8a8a", "#222222", "#56B4E9"

STYLE: dict[str, Any] = {
    "font.family": "DejaVu Sans",
    "font.size": 8.5,
    "axes.labelsize": 9,
    "axes.titlesize": 9,
    "axes.linewidth": 0.7,
    "axes.edgecolor": BLACK,
    "axes.labelcolor": BLACK,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "xtick.color": BLACK,
    "ytick.color": BLACK,
    "xtick.direction": "out",
    "ytick.direction": "out",
    "legend.frameon": False,
    "legend.fontsize": 8,
    "lines.linewidth": 1.2,
    "lines.markersize": 4,
    "figure.facecolor": "white",
    "axes.facecolor": "white",
    "svg.fonttype": "path",
    "svg.hashsalt": "reconcile",
    "path.simplify": True,
}

DPI = 150
# Beyond so many marks in a figure they are drawn as one picture inside the SVG: thousands of vector marks open slowly.
MANY_MARKS = 600
MOST_DELAYS = 6
MOST_CORNERS = 6
# An input counts as informed here where its variance fell by at least a tenth.
LEAST_INFORMED = 0.1

# How each verdict is drawn: marker, edge, face, words for the legend.
MARKS = {
    "used": ("o", BLUE, BLUE, "used"),
    "below-limit": ("v", BLUE, "white", "below the limit (drawn at it)"),
    "stray": ("X", VERMILION, VERMILION, "stray"),
    "set-aside": ("s", GREY, "white", "set aside"),
}


def draw(close_out: CloseOut, folder: Path) -> tuple[Drawing, ...]:
    """Draw every figure that this close-out has the numbers for into `folder`; return them in the report's order."""
    folder.mkdir(parents=True, exist_ok=True)
    drawings: list[Drawing] = []
    with matplotlib.rc_context(STYLE):
        for kind in KINDS:
            drawings += _kind(close_out, kind, folder)
        drawings += _energy_ratios(close_out, folder)
        informed = _informed(close_out)
        drawings += _prior_to_posterior(informed, folder)
        drawings += _corner(close_out, informed, folder)
    return tuple(drawings)


def _save(figure: Figure, folder: Path, name: str, *, vector: bool = True) -> tuple[str, str | None]:
    """Write the figure and return the names of its PNG and, if any, its SVG; the same figure gives the same bytes."""
    # The corner plot's labels reach beyond its canvas: there, and only there, the page is cut to what is drawn.
    figure.savefig(folder / f"{name}.png", dpi=DPI, metadata={"Software": None}, bbox_inches=None if vector else "tight")
    if not vector:
        return f"{name}.png", None
    figure.savefig(folder / f"{name}.svg", dpi=2 * DPI, metadata={"Date": None, "Creator": None})
    return f"{name}.png", f"{name}.svg"


def _shot_energies(close_out: CloseOut) -> tuple[dict[str, float], dict[str, float]]:
    """Return the logged energy after any filter [J], by shot and, as geometric mean weighted by sites, by sample."""
    by_shot = {result.shot.name: result.shot.metered_energy * result.shot.transmission for result in close_out.shots}
    logarithms: dict[str, list[tuple[float, float]]] = {}
    for result in close_out.shots:
        if result.shot.sample is not None:
            logarithms.setdefault(result.shot.sample, []).append((np.log(by_shot[result.shot.name]), result.shot.sites))
    by_sample = {
        sample: float(np.exp(np.average([pair[0] for pair in pairs], weights=[pair[1] for pair in pairs])))
        for sample, pairs in logarithms.items()
    }
    return by_shot, by_sample


def _kind(close_out: CloseOut, kind: str, folder: Path) -> Iterable[Drawing]:
    """Draw the readings of one kind against logged energy with the model's band, and below it their ratio to what is expected."""
    readings = [result for result in close_out.readings if result.reading.kind == kind and result.verdict in MARKS]
    by_shot, by_sample = _shot_energies(close_out)
    energies = [
        by_shot.get(result.reading.shot or "") if result.reading.shot is not None else by_sample.get(result.reading.sample or "")
        for result in readings
    ]
    placed = [(energy, result) for energy, result in zip(energies, readings, strict=True) if energy is not None]
    if not placed:
        return
    panels = _panels(placed, [band for band in close_out.bands if band.kind == kind])
    misread = {result.shot.name for result in close_out.shots if result.verdict == "misread"}
    many = len(placed) > MANY_MARKS
    wide = min(3, len(panels))
    deep = -(-len(panels) // wide)
    figure = Figure(figsize=(6.6 if wide > 1 else 5.6, 3.9 * deep), layout="constrained")
    energy = scale_for("J", [item[0] for item in placed])
    axes = figure.subplots(2 * deep, wide, squeeze=False, sharex=True, gridspec_kw={"height_ratios": [2.3, 1] * deep})
    value = scale_for(KINDS[kind].unit, [result.reading.value for _, result in placed])
    for position in range(wide * deep):
        top, bottom = axes[2 * (position // wide), position % wide], axes[2 * (position // wide) + 1, position % wide]
        if position >= len(panels):
            top.set_axis_off()
            bottom.set_axis_off()
            continue
        title, items, band = panels[position]
        _readings_panel(top, items, band, energy, value, misread, many)
        _ratio_panel(bottom, items, energy, misread, many)
        top.set_title(title)
        if position % wide == 0:
            top.set_ylabel(value.heading(KINDS[kind].words))
            bottom.set_ylabel("reading /\nexpected")
        bottom.set_xlabel(energy.heading("logged energy"))
    handles = {label: handle for axis in axes.ravel() for handle, label in zip(*axis.get_legend_handles_labels(), strict=True)}
    figure.legend(handles.values(), handles.keys(), loc="outside upper center", ncols=3)
    raster, vector = _save(figure, folder, f"readings-{kind}")
    yield Drawing("kinds", _kind_caption(kind, bool(close_out.bands)), _kind_words(kind, placed), raster, vector)


def _kind_caption(kind: str, banded: bool) -> str:
    band = " Band: 95 % of what the model expects of a sound reading of one pulse, scatter included; line: its median." if banded else ""
    return (
        f"{KINDS[kind].words.capitalize()} against logged energy (after any filter).{band} Below: reading over what the fit expects of that "
        "very shot. A ring marks a shot with a misread energy."
    )


def _kind_words(kind: str, placed: Sequence[tuple[float, ReadingResult]]) -> str:
    found = {verdict: sum(1 for _, result in placed if result.verdict == verdict) for verdict in MARKS}
    energies = [item[0] for item in placed]
    scale = scale_for("J", energies)
    return (
        f"Scatter plot of {count(len(placed), 'reading')} of {KINDS[kind].words} against logged energy from {min(energies) / scale.size:.3g} to "
        f"{max(energies) / scale.size:.3g} {scale.label}, with the band that the model expects: {found['used']} used, "
        f"{found['below-limit']} below the limit, {found['stray']} stray, {found['set-aside']} set aside."
    )


def _panels(
    placed: Sequence[tuple[float, ReadingResult]], bands: Sequence[Band]
) -> list[tuple[str, list[tuple[float, ReadingResult]], Band | None]]:
    """Return title, readings and band of each panel: one in all, or one a delay for which there is a band."""
    delays = sorted({band.delay for band in bands if band.delay is not None})
    if not delays:
        return [("", list(placed), bands[0] if bands else None)]
    chosen = delays if len(delays) <= MOST_DELAYS else [delays[i] for i in np.linspace(0, len(delays) - 1, MOST_DELAYS).round().astype(int)]
    scale = scale_for("s", chosen)
    groups: dict[float, list[tuple[float, ReadingResult]]] = {delay: [] for delay in chosen}
    for energy, result in placed:
        delay = result.reading.delay if result.reading.delay is not None else chosen[0]
        groups[min(chosen, key=lambda candidate: abs(candidate - delay))].append((energy, result))
    panels = []
    for delay, items in groups.items():
        near = "" if all(result.reading.delay == delay for _, result in items) else "about "
        band = next(band for band in bands if band.delay == delay)
        panels.append((f"{near}{delay / scale.size:.4g} {scale.label}", items, band))
    return panels


def _readings_panel(
    axes: Axes,
    items: Sequence[tuple[float, ReadingResult]],
    band: Band | None,
    energy: Scale,
    value: Scale,
    misread: set[str],
    many: bool,
) -> None:
    if band is not None:
        across = band.logged_energy / energy.size
        axes.fill_between(across, band.low / value.size, band.high / value.size, color=SKY, alpha=0.3, linewidth=0, label="model, 95 %")
        axes.plot(across, band.median / value.size, color=BLACK, label="model, median")
    shown: list[float] = []
    for verdict, (marker, edge, face, words) in MARKS.items():
        chosen = [(at, result.reading) for at, result in items if result.verdict == verdict]
        points = [(at, reading.value if reading.value is not None else reading.limit, reading.u or 0.0) for at, reading in chosen]
        kept = [point for point in points if point[1] is not None]
        if not kept:
            continue
        across, up, bars = (np.array(column, dtype=float) for column in zip(*kept, strict=True))
        shown += list(up)
        _marks(axes, across / energy.size, up / value.size, bars / value.size, (marker, edge, face, words), many)
    rings = [(at, result.reading.value) for at, result in items if result.reading.shot in misread and result.reading.value is not None]
    _rings(axes, [(at / energy.size, up / value.size) for at, up in rings])
    _logarithmic(axes, [item[0] for item in items], shown)


def _marks(axes: Axes, x: np.ndarray, y: np.ndarray, bars: np.ndarray, look: tuple[str, str, str, str], many: bool) -> None:
    marker, edge, face, words = look
    axes.errorbar(
        x,
        y,
        yerr=bars if bars.any() else None,
        fmt=marker,
        color=edge,
        markeredgecolor=edge,
        markerfacecolor=face,
        markersize=2.2 if many and marker == "o" else 4.2,
        elinewidth=0.5 if many else 0.8,
        label=words,
        rasterized=many,
        zorder=3 if marker == "X" else 2,
    )


def _rings(axes: Axes, points: Sequence[tuple[float, float]]) -> None:
    if points:
        x, y = zip(*points, strict=True)
        axes.plot(x, y, "o", markersize=10, markerfacecolor="none", markeredgecolor=VERMILION, markeredgewidth=1, label="misread energy", zorder=4)


def _logarithmic(axes: Axes, across: Sequence[float], up: Sequence[float]) -> None:
    """Make an axis logarithmic where its numbers are positive and span more than a factor of 4 (energy) or 8 (reading)."""
    if across and min(across) > 0 and max(across) > 4 * min(across):
        axes.set_xscale("log")
        _readable_ticks(axes.xaxis, max(across) / min(across))
    if up and min(up) > 0 and max(up) > 8 * min(up):
        axes.set_yscale("log")
        _readable_ticks(axes.yaxis, max(up) / min(up))


def _readable_ticks(axis: Any, ratio: float) -> None:
    from matplotlib.ticker import FuncFormatter, LogLocator, NullFormatter

    steps = (1.0, 2.0, 5.0) if ratio < 200 else (1.0,)
    axis.set_major_locator(LogLocator(base=10, subs=steps))
    axis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
    axis.set_minor_formatter(NullFormatter())


def _ratio_panel(axes: Axes, items: Sequence[tuple[float, ReadingResult]], energy: Scale, misread: set[str], many: bool) -> None:
    axes.axhline(1, color=BLACK, linewidth=0.8)
    ratios: list[float] = []
    for verdict, (marker, edge, face, _) in MARKS.items():
        points = []
        for at, result in items:
            value, expected = result.reading.value, result.predicted
            if result.verdict == verdict and value is not None and expected is not None and expected > 0:
                points.append((at / energy.size, value / expected, (result.reading.u or 0.0) / expected))
        if points:
            x, y, bars = (np.array(column) for column in zip(*points, strict=True))
            ratios += list(y)
            _marks(axes, x, y, bars, (marker, edge, face, "_"), many)
    if ratios:
        # A slip of a thousand must not flatten the rest: what lies beyond a factor of two is cut off, and stands in the tables.
        reach = min(1.0, max(0.2, 1.15 * float(np.max(np.abs(np.array(ratios) - 1)))))
        axes.set_ylim(1 - reach, 1 + reach)
    if items and max(item[0] for item in items) > 4 * min(item[0] for item in items):
        axes.set_xscale("log")
        _readable_ticks(axes.xaxis, max(item[0] for item in items) / min(item[0] for item in items))


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
        chosen = [(at, result.energy_ratio, result.energy_ratio_sd) for at, result in shots if result.verdict == verdict]
        if chosen:
            x, y, bars = (np.array(column, dtype=float) for column in zip(*chosen, strict=True))
            _marks(axes, x, y, np.nan_to_num(bars), look, many)
    axes.set_xlabel("order in the log")
    axes.set_ylabel("energy ratio")
    axes.xaxis.get_major_locator().set_params(integer=True)
    ratios = [result.energy_ratio for _, result in shots]
    if min(ratios) > 0 and max(ratios) > 8 * min(ratios):
        axes.set_yscale("log")
        _readable_ticks(axes.yaxis, max(ratios) / min(ratios))
    figure.legend(loc="outside upper center", ncols=4)
    raster, vector = _save(figure, folder, "energy-ratio")
    worst = [result.shot.name for _, result in shots if result.verdict == "misread"]
    alternative = (
        f"Energy ratio of {count(len(shots), 'shot')} in the order of the log, from {min(ratios):.3g} to {max(ratios):.3g}; "
        f"misread energy: {', '.join(worst[:20]) or 'none'}."
    )
    caption = "Energy that a shot's readings show over the logged one, in the log's order. Bars: one standard uncertainty."
    yield Drawing("energies", caption, alternative, raster, vector)


def _informed(close_out: CloseOut) -> list[InputResult]:
    """Return the free inputs on which the readings had a say, the best informed first."""
    found = [
        result
        for result in close_out.inputs
        if not result.fixed and not result.entry.derived and result.informed is not None and result.informed >= LEAST_INFORMED
    ]
    return sorted(found, key=lambda result: -(result.informed or 0))


def _prior_to_posterior(informed: Sequence[InputResult], folder: Path) -> Iterable[Drawing]:
    """Draw prior and posterior of each informed input on one axis, in prior standard deviations from the prior mean."""
    if not informed:
        return
    figure = Figure(figsize=(6.6, 0.9 + 0.3 * len(informed)), layout="constrained")
    axes = figure.subplots()
    for row, result in enumerate(informed):
        summary, centre, spread = result.summary, result.prior_mean, result.prior_sd
        low, first, middle, third, high = (
            (value - centre) / spread for value in (summary.q025, summary.q16, summary.median, summary.q84, summary.q975)
        )
        axes.plot([-1, 1], [row, row], color="#cfcfcf", linewidth=9, solid_capstyle="butt", label="prior, ± 1 sd" if row == 0 else None)
        axes.plot([low, high], [row, row], color=BLUE, linewidth=1.2, label="posterior, 95 %" if row == 0 else None)
        axes.plot([first, third], [row, row], color=BLUE, linewidth=4, solid_capstyle="butt", label="posterior, 68 %" if row == 0 else None)
        axes.plot(middle, row, "o", color="white", markeredgecolor=BLACK, markersize=4.5, label="posterior median" if row == 0 else None)
    axes.axvline(0, color=GREY, linewidth=0.7, zorder=0)
    axes.set_yticks(range(len(informed)), [result.entry.name for result in informed])
    axes.set_ylim(len(informed) - 0.4, -0.6)
    axes.set_xlabel("distance from the prior mean (prior standard deviations)")
    figure.legend(loc="outside upper center", ncols=4)
    raster, vector = _save(figure, folder, "prior-to-posterior")
    names = ", ".join(f"{result.entry.name} ({100 * (result.informed or 0):.0f} %)" for result in informed)
    caption = "Prior and posterior of the inputs on which the readings had a say, the best informed first."
    yield Drawing("inputs", caption, f"Bars of prior and posterior for each informed input; informed: {names}.", raster, vector)


def _corner(close_out: CloseOut, informed: Sequence[InputResult], folder: Path) -> Iterable[Drawing]:
    """Draw the joint posterior of at most six informed inputs, the material's and the instruments' first."""
    posterior = close_out.posterior
    candidates = sorted(informed, key=lambda result: result.entry.belongs_to == "c")
    chosen = [result for result in candidates if result.entry.name in posterior.names and result.summary.sd > 0][:MOST_CORNERS]
    if len(chosen) < 2:
        return
    import corner

    scales = [scale_for(result.entry.unit, [result.summary.median], result.entry.name) for result in chosen]
    draws = np.stack([posterior[result.entry.name] / scale.size for result, scale in zip(chosen, scales, strict=True)], axis=-1)
    draws = draws[np.isfinite(draws).all(axis=1)]
    if len(draws) <= len(chosen):
        return
    labels = [scale.heading(result.entry.name.replace("_", "\n")) for result, scale in zip(chosen, scales, strict=True)]
    figure = Figure(figsize=(1.15 * len(chosen) + 0.9, 1.15 * len(chosen) + 0.9))
    with warnings.catch_warnings():
        # Few draws leave contour levels that coincide: the plot is then coarse, which is no fault to report.
        warnings.simplefilter("ignore")
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
    for axes in figure.axes:
        axes.tick_params(labelsize=6)
    raster, _ = _save(figure, folder, "corner", vector=False)
    names = ", ".join(result.entry.name for result in chosen)
    caption = "Joint posterior of the best informed inputs: the diagonal holds each one's distribution with its 2.5 %, 50 % and 97.5 % quantiles, the rest their pairs."
    yield Drawing("inputs", caption, f"Corner plot of {names}; the correlations stand in results.json.", raster, None)

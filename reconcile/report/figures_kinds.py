"""The figures of the readings: each kind against logged energy with the model's band, and its ratio to what is expected."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from matplotlib.figure import Figure

from reconcile.campaign.kinds import KINDS
from reconcile.inference.outcome import Band, CloseOut, ReadingResult
from reconcile.report.blocks import Drawing
from reconcile.report.lines import Scale, count, scale_for
from reconcile.report.style import BLACK, MANY_MARKS, MARKS, SKY, VERMILION, marks, readable_ticks, save

if TYPE_CHECKING:
    from matplotlib.axes import Axes

MOST_DELAYS = 6


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


def draw_kind(close_out: CloseOut, kind: str, folder: Path) -> Iterable[Drawing]:
    """Draw the readings of one kind against logged energy with the model's band, and below it their ratio to what is expected."""
    readings = [result for result in close_out.readings if result.reading.kind == kind and result.verdict in MARKS]
    by_shot, by_sample = _shot_energies(close_out)
    energies = [
        by_shot.get(result.reading.shot or "")
        if result.reading.shot is not None
        else by_sample.get(result.reading.sample or "")
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
    handles = {
        label: handle for axis in axes.ravel() for handle, label in zip(*axis.get_legend_handles_labels(), strict=True)
    }
    figure.legend(handles.values(), handles.keys(), loc="outside upper center", ncols=3)
    raster, vector = save(figure, folder, f"readings-{kind}")
    yield Drawing("kinds", _kind_caption(kind, bool(close_out.bands)), _kind_words(kind, placed), raster, vector)


def _kind_caption(kind: str, banded: bool) -> str:
    band = (
        " Band: 95 % of what the model expects of a sound reading of one pulse, scatter included; line: its median."
        if banded
        else ""
    )
    return (
        f"{KINDS[kind].words.capitalize()} against logged energy (after any filter).{band} Below: reading "
        "over what the fit expects of that "
        "very shot. A ring marks a shot with a misread energy."
    )


def _kind_words(kind: str, placed: Sequence[tuple[float, ReadingResult]]) -> str:
    found = {verdict: sum(1 for _, result in placed if result.verdict == verdict) for verdict in MARKS}
    energies = [item[0] for item in placed]
    scale = scale_for("J", energies)
    return (
        f"Scatter plot of {count(len(placed), 'reading')} of {KINDS[kind].words} against logged energy from "
        f"{min(energies) / scale.size:.3g} to "
        f"{max(energies) / scale.size:.3g} {scale.label}, with the band that the model expects: "
        f"{found['used']} used, "
        f"{found['below-limit']} below the limit, {found['stray']} stray, {found['set-aside']} set aside."
    )


def _panels(
    placed: Sequence[tuple[float, ReadingResult]], bands: Sequence[Band]
) -> list[tuple[str, list[tuple[float, ReadingResult]], Band | None]]:
    """Return title, readings and band of each panel: one in all, or one a delay for which there is a band."""
    delays = sorted({band.delay for band in bands if band.delay is not None})
    if not delays:
        return [("", list(placed), bands[0] if bands else None)]
    chosen = (
        delays
        if len(delays) <= MOST_DELAYS
        else [delays[i] for i in np.linspace(0, len(delays) - 1, MOST_DELAYS).round().astype(int)]
    )
    scale = scale_for("s", chosen)
    groups: dict[float, list[tuple[float, ReadingResult]]] = {delay: [] for delay in chosen}
    for energy, result in placed:
        delay = result.reading.delay if result.reading.delay is not None else chosen[0]
        groups[min(chosen, key=lambda candidate: abs(candidate - delay))].append((energy, result))
    panels: list[tuple[str, list[tuple[float, ReadingResult]], Band | None]] = []
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
        axes.fill_between(
            across,
            band.low / value.size,
            band.high / value.size,
            color=SKY,
            alpha=0.3,
            linewidth=0,
            label="model, 95 %",
        )
        axes.plot(across, band.median / value.size, color=BLACK, label="model, median")
    shown: list[float] = []
    for verdict, (marker, edge, face, words) in MARKS.items():
        chosen = [(at, result.reading) for at, result in items if result.verdict == verdict]
        points = [
            (at, reading.value if reading.value is not None else reading.limit, reading.u or 0.0)
            for at, reading in chosen
        ]
        kept = [point for point in points if point[1] is not None]
        if not kept:
            continue
        across, up, bars = (np.array(column, dtype=float) for column in zip(*kept, strict=True))
        shown += list(up)
        marks(axes, across / energy.size, up / value.size, bars / value.size, (marker, edge, face, words), many)
    rings = [
        (at, result.reading.value)
        for at, result in items
        if result.reading.shot in misread and result.reading.value is not None
    ]
    _rings(axes, [(at / energy.size, up / value.size) for at, up in rings])
    _logarithmic(axes, [item[0] for item in items], shown)


def _rings(axes: Axes, points: Sequence[tuple[float, float]]) -> None:
    if points:
        x, y = zip(*points, strict=True)
        axes.plot(
            x,
            y,
            "o",
            markersize=10,
            markerfacecolor="none",
            markeredgecolor=VERMILION,
            markeredgewidth=1,
            label="misread energy",
            zorder=4,
        )


def _logarithmic(axes: Axes, across: Sequence[float], up: Sequence[float]) -> None:
    """Make an axis logarithmic where its numbers are positive and span more than a factor of 4 (energy) or 8 (reading)."""
    if across and min(across) > 0 and max(across) > 4 * min(across):
        axes.set_xscale("log")
        readable_ticks(axes.xaxis, max(across) / min(across))
    if up and min(up) > 0 and max(up) > 8 * min(up):
        axes.set_yscale("log")
        readable_ticks(axes.yaxis, max(up) / min(up))


def _ratio_panel(
    axes: Axes, items: Sequence[tuple[float, ReadingResult]], energy: Scale, misread: set[str], many: bool
) -> None:
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
            marks(axes, x, y, bars, (marker, edge, face, "_"), many)
    if ratios:
        # A slip of a thousand must not flatten the rest: what lies beyond a factor of two is cut off, and stands in the tables.
        reach = min(1.0, max(0.2, 1.15 * float(np.max(np.abs(np.array(ratios) - 1)))))
        axes.set_ylim(1 - reach, 1 + reach)
    if items and max(item[0] for item in items) > 4 * min(item[0] for item in items):
        axes.set_xscale("log")
        readable_ticks(axes.xaxis, max(item[0] for item in items) / min(item[0] for item in items))

"""What is expected of shots not yet fired, for people and programs: lines, a table in CSV, a figure."""

from __future__ import annotations

import csv
import io
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any, cast

import numpy as np

from reconcile.inference.planning import Prediction, Range
from reconcile.report import lines

if TYPE_CHECKING:
    from matplotlib.axes import Axes

COLUMNS = ("energy_J", "pulses", "quantity", "unit", "median", "q16", "q84", "q025", "q975", "from")
# A figure's first line: how a later run knows it for its own.
_FIRST_OF_FIGURE = '<?xml version="1.0" encoding="utf-8" standalone="no"?><!-- reconcile prediction, contract 1 -->'
_ACROSS = 3  # panels
_WIDE, _WIDEST = 20.0, 1000.0  # ratio of the highest to the lowest bound between which an axis is logarithmic


def rows(prediction: Prediction, source: str) -> list[tuple[float | int | str | None, ...]]:
    """Return the table, one row an energy and quantity, in the order of COLUMNS; SI, None where nothing can be said."""
    table: list[tuple[float | int | str | None, ...]] = []
    for at, energy in enumerate(prediction.energies):
        for one in prediction.ranges:
            numbers = (float(value[at]) for value in (one.median, one.q16, one.q84, one.q025, one.q975))
            known = [number if np.isfinite(number) else None for number in numbers]
            table.append((float(energy), prediction.pulses, one.name, one.unit, *known, source))
    return table


def prediction_lines(prediction: Prediction) -> list[str]:
    """Return the table for eyes: with one energy a row a quantity, else a block a quantity."""
    if len(prediction.energies) == 1:
        shown = [(one.words, *_numbers(one, 0, _scale(one, 0))) for one in prediction.ranges]
        return _aligned(("", "median", "68 %", "95 %"), shown)
    energy = lines.scale_for("J", prediction.energies.tolist())
    text: list[str] = []
    for one in prediction.ranges:
        scale = _scale(one, None)
        table = [
            (lines.alone(float(at), energy), *_numbers(one, number, lines.Scale("", scale.size)))
            for number, at in enumerate(prediction.energies)
        ]
        text += ["", scale.heading(one.words), *_aligned((energy.heading("energy"), "median", "68 %", "95 %"), table)]
    return text[1:]


def _scale(one: Range, at: int | None) -> lines.Scale:
    values = one.median if at is None else one.median[at : at + 1]
    return lines.scale_for(one.unit, [float(value) for value in values])


def _numbers(one: Range, at: int, scale: lines.Scale) -> tuple[str, str, str]:
    """Median and ranges as text, to the place that two digits of half the 68 % range reach."""
    median, q16, q84, q025, q975 = (float(value[at]) for value in (one.median, one.q16, one.q84, one.q025, one.q975))
    if not np.isfinite(median):
        return lines.ABSENT, lines.ABSENT, lines.ABSENT
    spread = 0.5 * (q84 - q16)
    middle = lines.span(median, median, spread, scale).partition(" to ")[0]
    texts = (middle, lines.span(q16, q84, spread, scale), lines.span(q025, q975, spread, scale))
    return cast(tuple[str, str, str], tuple(scale.with_unit(text) for text in texts))


def _aligned(header: tuple[str, ...], table: Sequence[tuple[str, ...]]) -> list[str]:
    widths = [max(len(row[column]) for row in [header, *table]) for column in range(len(header))]
    return [
        "  " + "  ".join(cell.ljust(width) for cell, width in zip(row, widths, strict=True)).rstrip()
        for row in [header, *table]
    ]


# ---------------------------------------------------------------------------------------------------------------------
# Files


def write_prediction(prediction: Prediction, source: str, title: str, folder: Path, name: str) -> tuple[Path, Path]:
    """Write `<name>.csv` and `<name>.svg`, or under the next free name where one of these is not a prediction's own.

    Parameters
    ----------
    source : "fit" or "prior"
    title : stands over the figure
    folder : made where it is missing

    Raises
    ------
    OSError
        A file cannot be written.
    """
    table, figure = _table(prediction, source), _figure(prediction, title)
    folder.mkdir(parents=True, exist_ok=True)
    number, stem = 1, name
    while not (_ours(folder / f"{stem}.csv", ",".join(COLUMNS)) and _ours(folder / f"{stem}.svg", _FIRST_OF_FIGURE)):
        number += 1
        stem = f"{name}-{number}"
    paths = folder / f"{stem}.csv", folder / f"{stem}.svg"
    for path, text in zip(paths, (table, figure), strict=True):
        path.write_text(text, encoding="utf-8", newline="\n")
    return paths


def _ours(path: Path, first: str) -> bool:
    """Whether a path is free, or holds what an earlier prediction wrote."""
    if not path.exists() and not path.is_symlink():
        return True
    if not path.is_file():
        return False
    with path.open(encoding="utf-8", errors="replace") as stream:
        return stream.readline(len(first) + 2).rstrip("\n") == first


def _table(prediction: Prediction, source: str) -> str:
    stream = io.StringIO()
    writer = csv.writer(stream, lineterminator="\n")
    writer.writerow(COLUMNS)
    for row in rows(prediction, source):
        writer.writerow("" if cell is None else cell if isinstance(cell, str) else repr(cell) for cell in row)
    return stream.getvalue()


def _figure(prediction: Prediction, title: str) -> str:
    """Return the figure as SVG: a panel a quantity, median and both ranges over energy, or bars of one energy."""
    import matplotlib
    from matplotlib.figure import Figure

    from reconcile.report.style import STYLE

    shown = [one for one in prediction.ranges if np.isfinite(one.median).any()]
    deep = max(1, -(-len(shown) // _ACROSS))
    with matplotlib.rc_context(cast(Any, STYLE)):
        figure = Figure(figsize=(2.6 * _ACROSS, 0.6 + 2.1 * deep), layout="constrained")
        panels = figure.subplots(deep, _ACROSS, squeeze=False).ravel()
        for axes, one in zip(panels, shown, strict=False):
            _panel(axes, one, prediction.energies)
        for axes in panels[len(shown) :]:
            axes.set_axis_off()
        handles, labels = panels[0].get_legend_handles_labels()
        figure.suptitle(title, fontsize=9)
        figure.legend(handles, labels, loc="outside lower center", ncols=3)
        drawn = io.StringIO()
        figure.savefig(drawn, format="svg", metadata={"Date": None, "Creator": None})
    return _FIRST_OF_FIGURE + "\n" + drawn.getvalue().partition("?>")[2].lstrip("\n")


def _panel(axes: Axes, one: Range, energies: np.ndarray) -> None:
    from reconcile.report.style import BLACK, BLUE, SKY, readable_ticks

    energy, scale = lines.scale_for("J", energies.tolist()), _scale(one, None)
    x = energies / energy.size
    if len(x) == 1:
        x = x * np.array([0.98, 1.02])  # a bar in place of a band
    for low, high, alpha, words in ((one.q025, one.q975, 0.3, "95 %"), (one.q16, one.q84, 0.6, "68 %")):
        bottom, top = (np.broadcast_to(bound / scale.size, x.shape) for bound in (low, high))
        axes.fill_between(x, bottom, top, color=SKY, alpha=alpha, linewidth=0, label=words)
    axes.plot(x, np.broadcast_to(one.median / scale.size, x.shape), color=BLUE, label="median")
    ratio = float(np.nanmax(one.q975) / np.nanmin(one.q025)) if np.nanmin(one.q025) > 0 else np.inf
    if _WIDE < ratio < _WIDEST:  # beyond that the lower bound is as good as none
        axes.set_yscale("log")
        readable_ticks(axes.yaxis, ratio)
    axes.set_title(scale.heading(one.words.replace(" of a sample", "\nof a sample")), fontsize=7.5, color=BLACK)
    axes.set_xlabel(energy.heading("logged energy"))
    if len(energies) == 1:
        axes.set_xticks([float(energies[0] / energy.size)])

"""How the report's figures look, and how they become files."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from matplotlib.figure import Figure
from matplotlib.ticker import FuncFormatter, LogLocator, NullFormatter

if TYPE_CHECKING:
    from matplotlib.axes import Axes

# Colours after Okabe and Ito (2008), https://jfly.uni-koeln.de/color/: told apart by colour-blind readers.
# Marker shapes carry the same in grey.
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

# How each verdict is drawn: marker, edge, face, words for the legend.
MARKS = {
    "used": ("o", BLUE, BLUE, "used"),
    "below-limit": ("v", BLUE, "white", "below the limit (drawn at it)"),
    "stray": ("X", VERMILION, VERMILION, "stray"),
    "set-aside": ("s", GREY, "white", "set aside"),
}


def save(figure: Figure, folder: Path, name: str, *, vector: bool = True) -> tuple[str, str | None]:
    """Write the figure and return the names of its PNG and, if any, its SVG; the same figure gives the same bytes."""
    # The corner plot's labels reach beyond its canvas: there, and only there, the page is cut to what is drawn.
    figure.savefig(
        folder / f"{name}.png", dpi=DPI, metadata={"Software": None}, bbox_inches=None if vector else "tight"
    )
    if not vector:
        return f"{name}.png", None
    figure.savefig(folder / f"{name}.svg", dpi=2 * DPI, metadata={"Date": None, "Creator": None})
    return f"{name}.png", f"{name}.svg"


def marks(
    axes: Axes, x: np.ndarray, y: np.ndarray, bars: np.ndarray, look: tuple[str, str, str, str], many: bool
) -> None:
    """Draw readings with their standard uncertainties; `look` is marker, edge, face and words for the legend."""
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


def readable_ticks(axis: Any, ratio: float) -> None:
    """Label a logarithmic axis that spans a factor `ratio` with plain numbers."""
    steps = (1.0, 2.0, 5.0) if ratio < 200 else (1.0,)
    axis.set_major_locator(LogLocator(base=10, subs=steps))
    axis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
    axis.set_minor_formatter(NullFormatter())

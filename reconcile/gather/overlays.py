"""What was found, drawn over the picture or trace it was found in: a small PNG for a person to judge by."""

from __future__ import annotations

import math
import textwrap
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cache
from importlib.util import find_spec
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from PIL import Image, ImageDraw, ImageFont

from reconcile.measure.measured import Outline, Stroke

Array = NDArray[np.float64]
Numbers = NDArray[np.floating[Any]]
Points = list[tuple[float, float]]
Colour = tuple[int, int, int]

WIDTH, HEIGHT = 640, 560  # px at most, the caption not counted
MOST_BYTES = 60_000
NARROWEST = 160  # px
MOST_ENLARGED = 4.0
_TEXT = 13  # px
_INK, _PAPER = (25, 25, 25), (255, 255, 255)
_MISSING = 255  # grey of points without a number

# Colours that people with any common colour blindness tell apart (Okabe and Ito 2008, Color Universal Design, from
# memory). What each role means shows in the shape of its line too: drawn through, dashed, dotted.
_DASHES: dict[str, tuple[int, int]] = {"found": (1, 0), "reference": (9, 6), "left-out": (2, 5)}
_ON_GREY: dict[str, Colour] = {"found": (240, 228, 66), "reference": (86, 180, 233), "left-out": (230, 159, 0)}
_ON_PAPER: dict[str, Colour] = {"found": (213, 94, 0), "reference": (0, 114, 178), "left-out": (120, 120, 120)}


def draw_picture(picture: Numbers, outline: Outline, stem: Path | None) -> Path | None:
    """Draw what was found over a frame, a micrograph or a height map.

    Parameters
    ----------
    picture : (rows, columns) grey levels or heights; NaN where there is none, drawn white
    outline : strokes at (column, row), whole numbers at the middle of a pixel
    stem : path without ending; None: nothing is drawn

    Returns
    -------
    Path | None
        The file written, at most 60 kB.

    Raises
    ------
    OSError
        It cannot be written.
    """
    if stem is None:
        return None
    scale = min(WIDTH / picture.shape[1], HEIGHT / picture.shape[0])
    if scale > 1:  # a small picture is enlarged by a whole number, so that its pixels stay even
        scale = min(float(math.floor(scale)), MOST_ENLARGED)
    grey = _grey(picture)
    for levels in (48, 24, 12):
        canvas = _on_grey(grey, scale, levels, outline)
        if _written(canvas, outline.caption, stem) <= MOST_BYTES:
            return _path(stem)
    while scale * picture.shape[1] > NARROWEST:
        scale *= 0.75
        canvas = _on_grey(grey, scale, 12, outline)
        if _written(canvas, outline.caption, stem) <= MOST_BYTES:
            break
    return _path(stem)


def draw_trace(time: Array, voltage: Array, outline: Outline, stem: Path | None) -> Path | None:
    """Draw what was found over a trace: the whole of it, and the first pulse enlarged.

    Parameters
    ----------
    time, voltage : (n,) [s], [V]
    outline : strokes at (time [s], voltage [V])
    stem : path without ending; None: nothing is drawn

    Returns
    -------
    Path | None
        The file written, at most 60 kB.

    Raises
    ------
    OSError
        It cannot be written.
    """
    if stem is None:
        return None
    canvas = Image.new("RGB", (WIDTH, 2 * _Panel.height), _PAPER)
    draw = ImageDraw.Draw(canvas)
    _Panel(0, float(time[0]), float(time[-1])).draw(draw, time, voltage, outline.strokes)
    first, last = _enlarged(time, outline.strokes)
    _Panel(_Panel.height, first, last).draw(draw, time, voltage, outline.strokes)
    _written(canvas, outline.caption, stem)
    return _path(stem)


# ---- pictures ----


def _grey(picture: Numbers) -> NDArray[np.uint8]:
    """Return grey levels between the darkest and the brightest two in a thousand."""
    known = picture[np.isfinite(picture)]
    if known.size == 0:
        return np.full(picture.shape, _MISSING, dtype=np.uint8)
    low, high = np.percentile(known[:: max(1, known.size // 200_000)], (0.2, 99.8))
    span = float(high - low) or 1.0
    shown = np.clip((np.nan_to_num(picture, nan=float(low)) - low) / span, 0.0, 1.0) * 250
    grey = shown.astype(np.uint8)
    grey[~np.isfinite(picture)] = _MISSING
    return grey


def _on_grey(grey: NDArray[np.uint8], scale: float, levels: int, outline: Outline) -> Image.Image:
    """Return the picture in so many grey levels, which keeps its file small, with the strokes over it."""
    rows, columns = grey.shape
    size = (max(1, round(columns * scale)), max(1, round(rows * scale)))
    image = Image.fromarray(grey)
    if size != image.size:
        image = image.resize(size, Image.Resampling.BOX if scale < 1 else Image.Resampling.NEAREST)
    step = 256 // levels
    canvas = image.point([min(255, level // step * step + step // 2) for level in range(256)]).convert("RGB")
    draw = ImageDraw.Draw(canvas)
    across, down = size[0] / columns, size[1] / rows
    for stroke in outline.strokes:
        # The middle of pixel 0 lies half a pixel inside the picture.
        points = [((x + 0.5) * across - 0.5, (y + 0.5) * down - 0.5) for x, y in _finite(stroke)]
        _stroke(draw, points, stroke, _ON_GREY[stroke.role], halo=(0, 0, 0))
    return canvas


def _finite(stroke: Stroke) -> Array:
    points = np.asarray(stroke.points, dtype=float).reshape(-1, 2)
    return points[np.isfinite(points).all(axis=1)]


def _stroke(draw: ImageDraw.ImageDraw, points: Points, stroke: Stroke, colour: Colour, halo: Colour) -> None:
    """Draw one line or set of marks with a rim around it, which shows on any background."""
    if stroke.marks:
        for x, y in points:
            draw.line([(x - 5, y - 5), (x + 5, y + 5)], fill=halo, width=4)
            draw.line([(x - 5, y + 5), (x + 5, y - 5)], fill=halo, width=4)
        for x, y in points:
            draw.line([(x - 4, y - 4), (x + 4, y + 4)], fill=colour, width=2)
            draw.line([(x - 4, y + 4), (x + 4, y - 4)], fill=colour, width=2)
        return
    pieces = _dashed(points, *_DASHES[stroke.role])
    for piece in pieces:
        draw.line(piece, fill=halo, width=4, joint="curve")
    for piece in pieces:
        draw.line(piece, fill=colour, width=2, joint="curve")


def _dashed(points: Points, on: float, off: float) -> list[Points]:
    """Cut a line into dashes [px]."""
    if off == 0 or len(points) < 2:
        return [points] if len(points) > 1 else []
    line = np.asarray(points)
    along = np.concatenate(([0.0], np.cumsum(np.hypot(*np.diff(line, axis=0).T))))
    pieces = []
    for start in np.arange(0.0, along[-1], on + off):
        ends = np.array([start, min(start + on, along[-1])])
        inside = (along > ends[0]) & (along < ends[1])
        where = np.concatenate((ends[:1], along[inside], ends[1:]))
        x, y = (np.interp(where, along, line[:, axis]) for axis in (0, 1))
        pieces.append(list(zip(x.tolist(), y.tolist(), strict=True)))
    return pieces


# ---- traces ----


def _enlarged(time: Array, strokes: Sequence[Stroke]) -> tuple[float, float]:
    """Return the stretch of time [s] around the first thing found and what lies close behind it."""
    found = [_finite(stroke)[:, 0] for stroke in strokes if stroke.role == "found"]
    times = np.sort(np.concatenate(found)) if found else np.empty(0)
    whole, step = float(time[-1] - time[0]), float(time[1] - time[0])
    if times.size == 0:
        return float(time[0]), float(time[-1])
    near = times[times <= times[0] + 0.05 * whole]
    span = max(float(near[-1] - near[0]), 20 * step)
    return max(float(time[0]), float(near[0]) - span), min(float(time[-1]), float(near[-1]) + span)


@dataclass(frozen=True, slots=True)
class _Panel:
    """One stretch of a trace, drawn below `top`."""

    top: int  # px
    start: float  # [s]
    end: float  # [s]

    height = 200  # px
    left, right, above, below = 12, 12, 8, 22  # px around the curve

    def draw(self, draw: ImageDraw.ImageDraw, time: Array, voltage: Array, strokes: Sequence[Stroke]) -> None:
        """Draw frame, curve, strokes and scale."""
        shown = (time >= self.start) & (time <= self.end)
        inside = voltage[shown] if shown.any() else voltage
        low, high = float(inside.min()), float(inside.max())
        margin = 0.06 * (high - low) or 1.0
        low, high = low - margin, high + margin
        x0, x1 = self.left, WIDTH - self.right
        y0, y1 = self.top + self.above, self.top + self.height - self.below

        def place(points: Array) -> Points:
            x = x0 + (points[:, 0] - self.start) / (self.end - self.start) * (x1 - x0)
            y = y1 - (points[:, 1] - low) / (high - low) * (y1 - y0)
            return list(zip(x.tolist(), np.clip(y, y0, y1).tolist(), strict=True))

        draw.rectangle([x0, y0, x1, y1], outline=(170, 170, 170))
        draw.line(place(_envelope(time[shown], inside, x1 - x0)), fill=(95, 95, 95), width=1)
        for stroke in strokes:
            points = _finite(stroke)
            points = points[(points[:, 0] >= self.start) & (points[:, 0] <= self.end)]
            _stroke(draw, place(points), stroke, _ON_PAPER[stroke.role], halo=_PAPER)
        unit, size = _unit_of_time(self.end - self.start)
        texts = (f"{self.start / size:.5g} {unit}", f"{low:.3g} to {high:.3g} V", f"{self.end / size:.5g} {unit}")
        for text, at, anchor in zip(texts, (x0, (x0 + x1) / 2, x1), ("la", "ma", "ra"), strict=True):
            draw.text((at, y1 + 4), text, fill=_INK, font=_font(), anchor=anchor if _anchors() else None)


def _envelope(time: Array, voltage: Array, columns: int) -> Array:
    """Return a trace's points, or the lowest and highest in each column of the picture where there are many more."""
    size = time.size // columns
    if size < 4:
        return np.column_stack((time, voltage))
    n = time.size // size * size
    parts = voltage[:n].reshape(-1, size)
    at = time[:n].reshape(-1, size)[:, size // 2]
    return np.column_stack((np.repeat(at, 2), np.column_stack((parts.min(axis=1), parts.max(axis=1))).ravel()))


def _unit_of_time(span: float) -> tuple[str, float]:
    return next(
        ((unit, size) for unit, size in (("s", 1.0), ("ms", 1e-3), ("µs", 1e-6)) if span >= 2 * size), ("ns", 1e-9)
    )


# ---- writing ----


def _written(canvas: Image.Image, caption: str, stem: Path) -> int:
    """Write a canvas with its caption below it; returns the size [bytes]."""
    letters = max(20, int(canvas.width / (0.56 * _TEXT)))
    lines = [line for part in caption.splitlines() for line in textwrap.wrap(part, letters)]
    below = (_TEXT + 4) * len(lines) + 8 if lines else 0
    whole = Image.new("RGB", (canvas.width, canvas.height + below), _PAPER)
    whole.paste(canvas, (0, 0))
    draw = ImageDraw.Draw(whole)
    for number, line in enumerate(lines):
        draw.text((6, canvas.height + 4 + number * (_TEXT + 4)), line, fill=_INK, font=_font())
    path = _path(stem)
    whole.quantize(128, method=Image.Quantize.FASTOCTREE, dither=Image.Dither.NONE).save(path, "PNG", compress_level=6)
    return path.stat().st_size


def _path(stem: Path) -> Path:
    return stem.with_name(f"{stem.name}.png")


@cache
def _font() -> ImageFont.FreeTypeFont | ImageFont.ImageFont:
    """Return a font that has Greek and the sign ±: the one that comes with matplotlib, else Pillow's own."""
    found = find_spec("matplotlib")  # found, not loaded
    if found is not None and found.origin is not None:
        path = Path(found.origin).parent / "mpl-data" / "fonts" / "ttf" / "DejaVuSans.ttf"
        if path.is_file():
            return ImageFont.truetype(str(path), _TEXT)
    return ImageFont.load_default(_TEXT)


def _anchors() -> bool:
    return isinstance(_font(), ImageFont.FreeTypeFont)

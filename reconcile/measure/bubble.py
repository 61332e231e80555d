"""A shadowgraph frame → the radius of the bubble on the target.

The bubble is a dark cap under even or uneven light, the target a dark band along one side of the frame. A coarse look
in blocks takes the light out and finds both; profiles across the target's edge and across the bubble's outline give
their places to a part of a pixel; a circle through these, robust against dust and rings, gives the radius.
"""

from __future__ import annotations

from typing import Literal

import numpy as np

from reconcile.measure.cap import Arc, Contact, Mask, fit_arc, radius_from_area, refine_contact
from reconcile.measure.measured import Array, Finding, Measured, Outline, Stroke, Unmeasurable
from reconcile.measure.scene import Cap, Scene, look, standing
from reconcile.measure.shock import shock_ring

Side = Literal["bottom", "top", "left", "right"]

_DEPTH = 0.35  # of the target's own darkness: what is darker than this is a bubble, with noise below a tenth of it
_FAINT = 0.08
_RAGGED = 0.12  # of the radius: scatter of a bubble's outline as blocks show it
_BLURRED = 0.3  # of the radius: an outline broader than this is no outline
_AGREEMENT = 0.02  # of the radius: how well outline and area agree on a clean frame


def measure_frame(
    frame: Array,
    pixel_pitch: float,
    target_edge: Side,
    background: Array | None = None,
    saturated: float | None = None,
) -> Finding:
    """Measure the bubble in one frame.

    Parameters
    ----------
    frame : array (rows, columns), any scale
    pixel_pitch : nominal [m]
    target_edge : the side of the frame on which the target lies
    background : array (rows, columns), the same light without a bubble, with or without the target
    saturated : level from which on a pixel holds no more; None: unknown

    Returns
    -------
    Finding
        `bubble-radius` [m], of the circle through the outline; a limit where the frame is sharp and empty;
        `shock-radius` where a ring about the site is clear.

    Raises
    ------
    Unmeasurable
        The frame is blank, blurred, saturated, or shows no target or no circular outline.
    """
    upright = _turned(np.asarray(frame, dtype=np.float32), target_edge)
    if min(upright.shape) < 48:
        raise Unmeasurable(
            f"a frame of {frame.shape[1]} x {frame.shape[0]} pixels",
            "at least 48 x 48",
            "Cut it less closely.",
        )
    scene = look(upright, None if background is None else _turned(np.asarray(background, np.float32), target_edge))
    full = _full(upright, saturated)
    if full is not None and np.mean(full[scene.flat > 0.5 * (1.0 + scene.band)]) > 0.5:
        raise Unmeasurable(
            "light that is saturated over most of the frame",
            "light below saturation beside the bubble",
            "Lower the light or the gain for the next shots.",
        )
    cap = _found(scene)
    contact = refine_contact(scene, cap)
    if cap is None:
        return _empty(contact, pixel_pitch, target_edge, frame.shape)
    arc = fit_arc(contact, cap, full)
    if arc.width > _BLURRED * arc.radius:
        raise Unmeasurable(
            f"an outline blurred over {2 * arc.width:.1f} px, of a bubble of {arc.radius:.1f} px",
            "an outline sharper than a third of the radius",
            "Focus on the site, or shorten the exposure.",
        )
    if arc.contrast < 2.0 * scene.noise:
        raise Unmeasurable(
            f"an outline whose step is {arc.contrast / scene.noise:.1f} times the noise of a pixel",
            "a step of at least twice the noise",
            "Raise the light, or average several frames.",
        )
    return _finding(contact, arc, pixel_pitch, target_edge, frame.shape)


def _turned(frame: Array, side: Side) -> Array:
    """Return the frame with the target at its lower side."""
    if side in ("left", "right"):
        frame = frame.T
    return frame[::-1] if side in ("top", "left") else frame


def _back(points: Array, side: Side, shape: tuple[int, ...]) -> Array:
    """Return points (column, row) of a turned frame in the frame as it was."""
    columns, rows = points[:, 0], points[:, 1]
    if side == "bottom":
        return points
    if side == "top":
        return np.column_stack([columns, shape[0] - 1 - rows])
    return np.column_stack([shape[1] - 1 - rows if side == "left" else rows, columns])


def _full(frame: Array, saturated: float | None) -> Mask | None:
    """Return the pixels that hold no more light.

    Recorders of 10, 12 or 14 bits fill a 16-bit number from below or from above; a frame whose largest value is
    exactly theirs, many times over, is saturated there.
    """
    if saturated is None:
        return None
    top = float(frame.max())
    levels = [saturated]
    for bits in (10, 12, 14):
        for fill in (0, 16 - bits):
            levels.append(saturated * (2**bits - 1) * 2**fill / 65535.0)
    for level in levels:
        if abs(top - level) < 2e-6 * level:
            mask = frame >= level * (1.0 - 2e-6)
            return np.asarray(mask) if mask.mean() > 5e-4 else None
    return None


def _found(scene: Scene) -> Cap | None:
    """Return the bubble as blocks show it, looked for in ever finer ones."""
    block = scene.block
    while True:
        depth = max(_DEPTH * (1.0 - scene.band), 4.5 * scene.noise / block)
        caps = standing(scene, block, depth)[0] if depth < 0.9 * (1.0 - scene.band) else []
        caps = [cap for cap in caps if cap.radius > 2.0 * block]
        round_ones = [cap for cap in caps if cap.ragged < max(_RAGGED * cap.radius, 0.7 * block)]
        if caps:
            return (round_ones or caps)[0]
        if block < 4:
            return None
        block //= 2


def _smallest(scene: Scene) -> int:
    """Return the side of the finest blocks in which a bubble was looked for."""
    block = scene.block
    while block >= 4:
        block //= 2
    return block


def _empty(contact: Contact, pitch: float, side: Side, shape: tuple[int, ...]) -> Finding:
    """Return the limit of a frame without a bubble.

    Raises
    ------
    Unmeasurable
        It is not sharp, or something faint stands on the target.
    """
    scene = contact.scene
    if contact.width > 4.0:
        raise Unmeasurable(
            f"no bubble, and a target's edge blurred over {2 * contact.width:.1f} px",
            "a sharp edge, before a frame counts as empty",
            "Focus on the site.",
        )
    block = _smallest(scene)
    if scene.noise / block > 0.08 * (1.0 - scene.band):
        raise Unmeasurable(
            "no bubble, and noise that could hide one",
            "a target that stands out of the noise by ten times at least",
            "Raise the light.",
        )
    limit = max(5.0 * block, 8.0, 4.0 * contact.width)
    depth = max(_FAINT * (1.0 - scene.band), 5.0 * scene.noise / scene.block)
    area = standing(scene, scene.block, depth, 2.5 * contact.width)[1]
    if area > 0.5 * np.pi * max(limit, 3.0 * scene.block) ** 2:
        raise Unmeasurable(
            "something on the target that is no clear bubble: faint, or without a circular outline",
            "a dark bubble, or nothing",
            "Look at the frame.",
        )
    outline = Outline((_edge_stroke(scene, side, shape),), f"no bubble; below {limit * pitch * 1e6:.3g} µm")
    return Finding((Measured("bubble-radius", None, None, limit=limit * pitch),), outline)


def _finding(contact: Contact, arc: Arc, pitch: float, side: Side, shape: tuple[int, ...]) -> Finding:
    scene = contact.scene
    margin = max(3.0, 2.5 * contact.width)
    by_area = radius_from_area(scene, arc, margin) + arc.radius - arc.half_level
    remarks = _remarks(arc, by_area, scene.noise, pitch)
    strokes = [
        Stroke(_back(_above(scene, arc.centre, arc.radius), side, shape), "found"),
        _edge_stroke(scene, side, shape),
    ]
    if (~arc.used).any():
        strokes.append(Stroke(_back(arc.points[~arc.used], side, shape), "left-out", marks=True))
    value, u = arc.radius * pitch, arc.u * pitch
    caption = f"bubble radius {value * 1e6:.5g} µm ± {u * 1e6:.2g} µm, arc {arc.coverage:.0f}°, blur {arc.width:.1f} px"
    measured = [Measured("bubble-radius", value, u)]
    site = np.array([arc.centre[0], float(scene.row_of_edge(arc.centre[0]))])
    inner = 1.1 * arc.radius + 4.0 * arc.width + 8.0  # clear of the bubble's own fringes
    ring = shock_ring(scene.flat, site, scene.slope, inner, margin)
    if ring is not None:
        measured.append(Measured("shock-radius", ring[0] * pitch, ring[1] * pitch))
        strokes.append(Stroke(_back(_above(scene, site, ring[0]), side, shape), "found"))
        caption += f"; shock radius {ring[0] * pitch * 1e6:.4g} µm"
    return Finding(tuple(measured), Outline(tuple(strokes), caption), remarks)


def _above(scene: Scene, centre: Array, radius: float) -> Array:
    """Return the part of a circle above the target's edge and within the frame, as one line of points."""
    turned = np.linspace(0.0, 2.0 * np.pi, 361)
    circle = centre + radius * np.column_stack([np.cos(turned), np.sin(turned)])
    high, wide = scene.flat.shape
    inside = (circle >= -0.5).all(axis=1) & (circle[:, 0] < wide) & (circle[:, 1] < high)
    circle = circle[inside & (scene.above(circle[:, 0], circle[:, 1]) >= -1.0)]
    if len(circle) < 2:
        return circle
    first = np.argmax(np.hypot(*np.diff(circle, axis=0, append=circle[:1]).T)) + 1
    return np.roll(circle, -int(first), axis=0)  # the widest gap belongs at the ends


def _edge_stroke(scene: Scene, side: Side, shape: tuple[int, ...]) -> Stroke:
    ends = np.array([0.0, scene.flat.shape[1] - 1.0])
    return Stroke(_back(np.column_stack([ends, scene.row_of_edge(ends)]), side, shape), "reference")


def _remarks(arc: Arc, by_area: float, noise: float, pitch: float) -> tuple[str, ...]:
    """Say what a person should know about an outline that was measured."""
    found: list[str] = []
    apart = by_area - arc.radius
    if abs(apart) > max(_AGREEMENT * arc.radius, 0.5, 4.0 * arc.u):
        found.append(
            f"the outline gives a radius of {arc.radius * pitch * 1e6:.4g} um, the dark area one of "
            f"{by_area * pitch * 1e6:.4g} um; on a clean frame they agree within {100 * _AGREEMENT:.0f} %"
        )
    part = arc.height / arc.radius
    if abs(arc.height) > 3.0 * arc.u_height and abs(part) > 0.03:
        found.append(
            f"the cap is no hemisphere: the centre of its circle lies {100 * abs(part):.0f} % of the radius "
            f"{'above' if part > 0 else 'below'} the target's edge"
        )
    if arc.coverage < 100.0:
        found.append(f"only {arc.coverage:.0f}° of the outline carry the fit")
    if arc.saturated > 0.0:
        found.append(f"{100 * arc.saturated:.0f} % of the outline lie before saturated light and were left out")
    if arc.contrast < 5.0 * noise:
        found.append(f"the outline's step is only {arc.contrast / noise:.1f} times the noise of a pixel")
    if arc.radius < 12.0:
        found.append(f"a radius of only {arc.radius:.1f} pixels")
    if not arc.used.all() and np.mean(~arc.used) > 0.15:
        found.append(f"{100 * np.mean(~arc.used):.0f} % of the outline departs from the circle and was left out")
    return tuple(found)

"""Shadowgraphs drawn by counting fine points inside the shapes: a route of its own, for the tests of measuring them."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy.ndimage import gaussian_filter, uniform_filter1d

_FINE = 4  # points along one side of a pixel


@dataclass(frozen=True, slots=True)
class Bench:
    """What a shadowgraph shows; lengths in pixels, the target below."""

    radius: float = 50.0
    column: float = 160.3
    contact: float = 205.4  # row of the target's edge at the bubble's column
    lift: float = 0.0  # of the circle's centre above the target
    tilt: float = 0.0  # degrees
    shape: tuple[int, int] = (256, 320)
    bubble: float = 0.12  # levels, 1 being the light
    target: float = 0.05
    blur: float = 1.2
    uneven: float = 0.2
    electrons: float = 4000.0  # per pixel in the light
    read_noise: float = 6.0
    dust: int = 0
    spot: float = 0.0  # brightness of the middle
    fringes: float = 0.0
    shock: float = 0.0  # radius
    moved: int = 0  # pixels of motion along the rows during the exposure
    bits: int = 12
    empty: bool = False


def draw(bench: Bench, seed: int) -> np.ndarray:
    """Return the frame, 0 to 1."""
    rng = np.random.default_rng(seed)
    rows, columns = bench.shape
    y = (np.arange(rows * _FINE) + 0.5) / _FINE - 0.5
    x = (np.arange(columns * _FINE) + 0.5) / _FINE - 0.5
    slope = np.tan(np.radians(bench.tilt))
    height = (bench.contact + slope * (x[None, :] - bench.column) - y[:, None]) * np.cos(np.radians(bench.tilt))
    centre = np.array([bench.column, bench.contact]) + bench.lift * np.array([slope, -1.0]) / np.hypot(1, slope)
    distance = np.hypot(x[None, :] - centre[0], y[:, None] - centre[1])
    level = np.ones_like(distance)
    if bench.shock:
        gone = (distance - bench.shock) / 1.5
        level += 0.15 * gone * np.exp(-0.5 * gone**2)
    if not bench.empty:
        if bench.fringes:
            out = np.clip(distance - bench.radius, 0, None)
            level += bench.fringes * np.sin(2 * np.pi * out / 5.0) * np.exp(-out / 6.0)
        inside = distance < bench.radius
        glow = bench.spot * np.exp(-0.5 * (distance / (0.15 * bench.radius)) ** 2)
        level = np.where(inside, bench.bubble + glow, level)
    level = np.where(height < 0, bench.target, level)
    level = level.reshape(rows, _FINE, columns, _FINE).mean(axis=(1, 3))
    level = gaussian_filter(level, bench.blur)
    if bench.moved:
        level = uniform_filter1d(level, bench.moved, axis=0)
    v, u = np.meshgrid(np.linspace(-1, 1, rows), np.linspace(-1, 1, columns), indexing="ij")
    a, b, c = rng.uniform(-1, 1, 3)
    light = 0.7 * (1 + bench.uneven * (0.6 * a * u + 0.6 * b * v - 0.4 * (u - 0.3 * c) ** 2 - 0.3 * v**2))
    light = np.clip(light, 0.1, None)
    for _ in range(bench.dust):
        place, size = rng.uniform((0, 0), (columns, rows)), rng.uniform(1.0, 4.0)
        away = np.hypot(np.arange(columns)[None, :] - place[0], np.arange(rows)[:, None] - place[1])
        light = light * (1 - rng.uniform(0.2, 0.8) * np.exp(-((away / size) ** 4)))
    electrons = rng.poisson(level * light * bench.electrons) + rng.normal(0, bench.read_noise, bench.shape)
    largest = 2**bench.bits - 1
    return np.clip(np.round(electrons / bench.electrons * largest), 0, largest) / largest


DIFFICULTIES: dict[str, Bench] = {
    "plain": Bench(),
    "uneven": Bench(uneven=0.6),
    "dust": Bench(dust=25),
    "noisy": Bench(electrons=120, read_noise=4),
    "spot": Bench(spot=0.8),
    "fringes": Bench(fringes=0.15),
    "shock": Bench(shock=110.0),
    "moved": Bench(moved=4),
    "defocus": Bench(blur=3.0),
    "tilted": Bench(tilt=2.5),
    "8-bit": Bench(bits=8),
    "cap": Bench(lift=-8.0),
}


def some(name: str, seed: int) -> tuple[Bench, np.ndarray]:
    """Return a frame of one difficulty, with a radius and place of its own."""
    rng = np.random.default_rng([seed, 7])
    radius = float(np.exp(rng.uniform(np.log(15), np.log(100))))
    bench = replace(DIFFICULTIES[name], radius=radius, column=float(rng.uniform(125, 195)))
    if name != "tilted":
        bench = replace(bench, tilt=float(rng.uniform(-1, 1)))
    if name == "cap":
        bench = replace(bench, lift=float(rng.uniform(-0.2, 0.2)) * radius)
    if name == "shock":
        bench = replace(bench, shock=radius * 1.4 + 10)
    if name == "defocus":
        bench = replace(bench, blur=min(3.0, 0.12 * radius))
    return bench, draw(bench, seed)

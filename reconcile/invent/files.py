"""An invented campaign's folder in which most numbers still have to be measured: frames, traces, maps, micrographs."""

from __future__ import annotations

import zlib
from dataclasses import replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from reconcile.invent.campaign import Invented
from reconcile.invent.folder import manifest_head, number, save_csv, save_text, write_truth
from reconcile.invent.maps import height_map
from reconcile.invent.pictures import (
    Picture,
    Scene,
    background,
    dark_frame,
    micrograph,
    scatter_particles,
    shadowgraph,
)
from reconcile.invent.plan import FrameFile, MapFile, MicrographFile, Plan, TraceFile, plan
from reconcile.invent.storage import save_png, save_tiff, save_trace
from reconcile.invent.untidy import NAME, TABLES, TITLE, write_tables
from reconcile.invent.waveforms import trace

BACKGROUND = "frames/background.png"


def write_files(invented: Invented, folder: Path) -> None:
    """Write the tables that are left, every rendered file, the manifest, a README and the truth.

    Parameters
    ----------
    folder : exists and is empty.
    """
    planned = plan(invented)
    for name in ("frames", "traces", "maps", "tem"):
        (folder / name).mkdir()
    write_tables(planned.tables, folder, planned.odd, "Camera 1: radii taken by hand, frames not kept")
    write_frames(planned, folder)
    for trace_file in planned.traces:
        save_trace(folder / trace_file.name, rendered_trace(planned, trace_file), trace_file.recorder)
    for map_file in planned.maps:
        save_tiff(folder / map_file.name, rendered_map(planned, map_file))
    for micrograph_file in planned.micrographs:
        save_tiff(folder / micrograph_file.name, rendered_micrograph(planned, micrograph_file))
    save_text(folder / "README.txt", _README)
    save_text(folder / "campaign.toml", manifest_head(NAME, TITLE) + TABLES + _file_tables(planned))
    write_truth(replace(invented, truth=planned.truth), folder / "truth")
    _write_shown(planned, folder / "truth" / "truth_files.csv")


def write_frames(planned: Plan, folder: Path) -> None:
    """Write the frames, the one without a bubble among them, and the frame of the bare target."""
    for frame in planned.frames:
        path = folder / frame.name
        save_png(path, rendered_frame(planned, frame))
        if frame.fault == "truncated":
            whole = path.read_bytes()
            path.write_bytes(whole[: len(whole) * 3 // 5])
    save_png(folder / BACKGROUND, background(planned.camera, _rng(planned, BACKGROUND), bits=16))


def rendered_frame(planned: Plan, frame: FrameFile) -> Picture:
    """Return a frame; a truncated one as it was before that."""
    rng = _rng(planned, frame.name)
    if frame.fault == "dark":
        return dark_frame(planned.camera, rng, bits=frame.bits)
    return shadowgraph(planned.camera, Scene(frame.radius, frame.shock_radius, frame.bits), rng)


def rendered_trace(planned: Plan, file: TraceFile) -> NDArray[np.int32]:
    """Return a trace (samples,) in steps of its recorder."""
    return trace(file.sound, planned.probe, file.recorder, _rng(planned, file.name))


def rendered_map(planned: Plan, file: MapFile) -> NDArray[np.float32]:
    """Return a height map (rows, columns) in micrometres."""
    heights = height_map(file.crater, planned.truth["pixel_pitch.microscope"], _rng(planned, file.name))
    return (1e6 * heights).astype(np.float32)


def rendered_micrograph(planned: Plan, file: MicrographFile) -> NDArray[np.uint8]:
    """Return a micrograph (rows, columns)."""
    rng, pitch = _rng(planned, file.name), planned.truth["pixel_pitch.tem-images"]
    return micrograph(scatter_particles(rng, file.diameters, pitch), pitch, rng)


def _rng(planned: Plan, name: str) -> np.random.Generator:
    """Return the randomness of one file: no other file moves it."""
    return np.random.default_rng([planned.tables.seed, zlib.crc32(name.encode("utf-8"))])


def _write_shown(planned: Plan, path: Path) -> None:
    """Write what is true of each number that has to be measured, and the files that are bad on purpose."""
    rows = [
        (
            one.file, one.kind, one.shot, one.sample, number(None if one.delay is None else 1e9 * one.delay),
            number(one.true, 6), number(one.factor, 4), "",
        )
        for one in planned.shown
    ]  # fmt: skip
    faults = [(file.name, file.shot, file.fault) for file in planned.frames]
    faults += [(file.name, file.shot, file.fault) for file in planned.traces]
    rows += [(name, "", shot, None, "", "", "", fault) for name, shot, fault in faults if fault]
    columns = ("file", "kind", "shot", "sample", "delay (ns)", "true (SI)", "shown wrong by a factor of", "fault")
    save_csv(path, columns, rows)


def _file_tables(planned: Plan) -> str:
    """Return the manifest's tables of files."""
    pitches = {name: stated.text for name, stated in planned.pitches.items()}
    wav = next(file.recorder for file in planned.traces if file.name.endswith(".wav"))
    timing = f'sample_interval = "{1e9 * wav.interval:g} ns"\nstart = "{1e6 * wav.start:g} us"\n'
    return f'''
[[readings]]
kind = "shadowgraph"
name = "camera-1"
files = "frames/{{shot}}_{{delay}}ns.png"
pixel_pitch = "{pitches["camera-1"]}"
target_edge = "bottom"
background = "{BACKGROUND}"

[[readings]]
kind = "probe-trace"
name = "recorder-2"
files = "traces/{{shot}}.csv"
columns = {{ time = "t (us)", voltage = "probe (mV)" }}

[[readings]]
kind = "probe-trace"
name = "recorder-1"
files = "traces/{{shot}}.wav"
full_scale = "{wav.full_scale:g} V"
{timing}
[[readings]]
kind = "probe-trace"
name = "recorder-1-h5"
files = "traces/{{shot}}.h5"
columns = {{ time = "t (us)", voltage = "probe (V)" }}

[[readings]]
kind = "probe-trace"
name = "recorder-1-npz"
files = "traces/{{shot}}.npz"
columns = {{ voltage = "probe (V)" }}
{timing}
[[readings]]
kind = "crater-map"
name = "microscope"
files = "maps/{{shot}}.tif"
pixel_pitch = "{pitches["microscope"]}"
height_unit = "um"

[[readings]]
kind = "micrograph"
name = "tem-images"
files = "tem/{{sample}}_{{frame}}.tif"
pixel_pitch = "{pitches["tem-images"]}"
'''


_README = """This folder is invented. A laboratory that does not exist fires 72 shots at a gold plate under 6 mm of water and keeps
what it records of them: frames of the bubble (frames/), traces of a hydrophone (traces/), height maps of craters (maps/),
electron micrographs of the colloid (tem/), and tables of what was read without such files. The folder is as untidy as
such folders are: titles above the headers, units in three places, a table with decimal commas, a shot struck through, a
row hidden, a formula that was never computed, traces in four formats, a frame cut short in copying, one that stayed dark,
a trace that clips, records that end too early, notes that nobody asked for. campaign.toml says what is what.

Readings and files were simulated with more physics than the close-out's own model holds, from true numbers that truth/
lists, those of every picture and trace among them. Three readings were made grossly wrong on purpose, and three energies
in the log are wrong by a factor between 1.5 and 2.2; truth/ says which. Close the campaign out first, then look there to
see how well it did.
"""

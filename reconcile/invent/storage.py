"""Pictures, maps and traces as files, the same bytes every time."""

from __future__ import annotations

import wave
from pathlib import Path
from typing import Any

import h5py
import numpy as np
from numpy.typing import NDArray
from PIL import Image

from reconcile.invent.folder import save_text
from reconcile.invent.pictures import Picture
from reconcile.invent.waveforms import Recorder, volts

Array = NDArray[np.float64]


def save_png(path: Path, picture: Picture) -> None:
    """Write a grey PNG of 8 or 16 bits."""
    Image.fromarray(picture).save(path, format="PNG")


def save_tiff(path: Path, picture: NDArray[np.uint8] | NDArray[np.float32]) -> None:
    """Write a grey TIFF: compressed where it is of 8 bits, plain where it holds 32-bit floats."""
    compression = "tiff_adobe_deflate" if picture.dtype == np.uint8 else None
    Image.fromarray(picture).save(path, format="TIFF", compression=compression)


def save_trace(path: Path, steps: NDArray[np.int32], recorder: Recorder) -> None:
    """Write a trace in the format that its name ends in: .csv, .wav, .h5 or .npz.

    Parameters
    ----------
    steps : (samples,) as recorded.
    recorder : how.
    """
    _SAVERS[path.suffix](path, steps, recorder)


def _save_csv(path: Path, steps: NDArray[np.int32], recorder: Recorder) -> None:
    """Write microseconds and millivolts below what the recorder says of itself."""
    head = [
        f"Recorder 2,{recorder.bits} bit",
        f"Range,+-{1e3 * recorder.full_scale:g} mV",
        f"Samples,{recorder.samples}",
        f"Interval,{1e9 * recorder.interval:g} ns",
        "",
        "t (us),probe (mV)",
    ]
    values = zip(1e6 * recorder.time, 1e3 * volts(steps, recorder), strict=True)
    lines = [f"{time:.3f},{voltage:.5g}" for time, voltage in values]
    save_text(path, "\n".join([*head, *lines, ""]))


def _save_wav(path: Path, steps: NDArray[np.int32], recorder: Recorder) -> None:
    """Write 16-bit samples; the recorder's steps fill the upper bits."""
    with wave.open(str(path), "wb") as file:
        file.setnchannels(1)
        file.setsampwidth(2)
        file.setframerate(round(1 / recorder.interval))
        file.writeframes((steps << (16 - recorder.bits)).astype("<i2").tobytes())


def _save_h5(path: Path, steps: NDArray[np.int32], recorder: Recorder) -> None:
    with h5py.File(path, "w") as file:
        for name, values in (("t (us)", 1e6 * recorder.time), ("probe (V)", volts(steps, recorder))):
            stored = np.round(values, 9).astype("<f8")
            file.create_dataset(
                name, data=stored, compression="gzip", compression_opts=9, shuffle=True, track_times=False
            )


def _save_npz(path: Path, steps: NDArray[np.int32], recorder: Recorder) -> None:
    arrays: dict[str, Any] = {"probe (V)": volts(steps, recorder).astype("<f4")}
    np.savez_compressed(path, **arrays)


_SAVERS = {".csv": _save_csv, ".wav": _save_wav, ".h5": _save_h5, ".npz": _save_npz}

"""Traces in .wav, .npz and .h5 files → their columns; nothing is unpacked before its declared size is known."""

from __future__ import annotations

import struct
import warnings
import zipfile
import zlib
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np

from reconcile.campaign.refusal import Note, Place, Refusal
from reconcile.read.trace_types import (
    LARGEST,
    Array,
    Columns,
    TraceSettings,
    column_unit,
    damaged,
    no_column,
    too_large,
)

# --- .wav -------------------------------------------------------------------------------------------------------


def read_wav(path: Path, name: str, settings: TraceSettings) -> Columns:
    """Return the samples of a .wav file: 8, 16, 24 or 32-bit integers, or floats of which 1 is full scale.

    Raises
    ------
    Refusal
        No wave file, one cut short, or without a stated full scale.
    """
    from scipy.io import wavfile

    if settings.full_scale is None:
        raise Refusal(
            Place(name),
            found="samples without a voltage",
            expected="the voltage at full scale",
            remedy='Add full_scale = "1 V" (yours) to this table of the manifest.',
        )
    _check_wav(path, name)
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", wavfile.WavFileWarning)  # chunks of other programs' remarks
            rate, samples = wavfile.read(path)
    except (ValueError, struct.error, EOFError) as error:
        raise damaged(name, f"a .wav file that cannot be read ({error})", "uncompressed samples") from None
    samples = _channel(np.asarray(samples), name, settings)
    voltage = _of_full_scale(samples, name) * settings.full_scale
    notes: tuple[Note, ...] = ()
    if settings.sample_interval is not None and abs(settings.sample_interval * rate - 1) > 1e-3:
        stated = f"the file states {rate:g} samples a second; the manifest's sample_interval is taken"
        notes = (Note(name, stated),)
    return Columns(voltage, interval=1.0 / rate if rate else None, notes=notes)


def _of_full_scale(samples: np.ndarray, name: str) -> Array:
    """Return samples as shares of full scale; 24-bit ones come left-justified in 32 bits."""
    if samples.dtype == np.uint8:
        return (samples.astype(np.float64) - 128.0) / 128.0
    if samples.dtype.kind == "i":
        return samples.astype(np.float64) / 2.0 ** (8 * samples.dtype.itemsize - 1)
    if samples.dtype.kind == "f":
        return samples.astype(np.float64)
    raise damaged(name, f"samples of the type {samples.dtype}", "integers or floats")


def _channel(samples: np.ndarray, name: str, settings: TraceSettings) -> np.ndarray:
    if samples.ndim == 1:
        return samples
    channels = samples.shape[1]
    wanted = settings.columns.get("voltage")
    if wanted is None or not wanted.isdigit() or not 1 <= int(wanted) <= channels:
        raise Refusal(
            Place(name),
            found=f"{channels} channels" + (f" and voltage = '{wanted}'" if wanted else ""),
            expected="one channel, or its number",
            remedy='Name it in the manifest: columns = { voltage = "1" }.',
        )
    chosen: np.ndarray = samples[:, int(wanted) - 1]
    return chosen


def _check_wav(path: Path, name: str) -> None:
    """Walk over the chunks: a wave file, its samples whole and of a size that a trace can have."""
    length = path.stat().st_size
    with path.open("rb") as file:
        head = file.read(12)
        if len(head) < 12 or head[:4] not in (b"RIFF", b"RIFX") or head[8:12] != b"WAVE":
            raise damaged(name, "an empty file" if not head else "no wave file", "a .wav file")
        order = "<" if head[:4] == b"RIFF" else ">"
        while len(chunk := file.read(8)) == 8:
            size = struct.unpack(f"{order}I", chunk[4:])[0]
            if chunk[:4] == b"data":
                if size > LARGEST:
                    raise too_large(name, "samples", size)
                missing = size - (length - file.tell())
                if missing > 0:
                    raise damaged(name, f"a file cut short: {missing} bytes of its samples are missing", "a whole file")
                if size == 0:
                    raise damaged(name, "no samples", "a trace")
                return
            file.seek(size + size % 2, 1)
    raise damaged(name, "a wave file without samples", "a whole file")


# --- .npz -------------------------------------------------------------------------------------------------------


def read_npz(path: Path, name: str, settings: TraceSettings) -> Columns:
    """Return the named arrays of a .npz file, in SI; pickled objects are never unpacked.

    Raises
    ------
    Refusal
        No such archive, no such array, or one that is no column of numbers.
    """
    expected = "a .npz file as numpy.savez writes it"
    try:
        with zipfile.ZipFile(path) as archive:
            known = [member.removesuffix(".npy") for member in archive.namelist() if member.endswith(".npy")]
            return _columns(name, settings, known, "array", lambda wanted: (_npy(archive, name, wanted), None))
    except zipfile.BadZipFile as error:
        what = "an empty file" if path.stat().st_size == 0 else f"no whole .npz file ({error})"
        raise damaged(name, what, expected) from None
    except (EOFError, zlib.error, ValueError, NotImplementedError, RuntimeError) as error:
        raise damaged(name, f"an array that cannot be read ({str(error)[:120]})", expected) from None


def _npy(archive: zipfile.ZipFile, name: str, wanted: str) -> np.ndarray:
    with archive.open(f"{wanted}.npy") as member:
        version = np.lib.format.read_magic(member)
        reader = np.lib.format.read_array_header_1_0 if version == (1, 0) else np.lib.format.read_array_header_2_0
        shape, _, dtype = reader(member)
    if dtype.hasobject:
        raise Refusal(
            Place(name),
            found=f"'{wanted}', which is pickled Python objects",
            expected="an array of plain numbers",
            remedy="Save it again as numbers: numpy.asarray(x, dtype=float).",
        )
    declared = max(int(np.prod(shape, dtype=object)) * dtype.itemsize, archive.getinfo(f"{wanted}.npy").file_size)
    if declared > LARGEST:
        raise too_large(name, f"an array '{wanted}'", declared)
    with archive.open(f"{wanted}.npy") as member:
        return np.asarray(np.lib.format.read_array(member, allow_pickle=False))


# --- .h5 --------------------------------------------------------------------------------------------------------


def read_h5(path: Path, name: str, settings: TraceSettings) -> Columns:
    """Return the named datasets of a .h5 file, in SI; links that lead out of the file are not followed.

    A unit may stand in the dataset's attribute `units` or `unit`.

    Raises
    ------
    Refusal
        No such file, no such dataset, or one that is no column of numbers.
    """
    import h5py

    expected = "an HDF5 file"
    if path.stat().st_size == 0:
        raise damaged(name, "an empty file", expected)
    try:
        with h5py.File(path, "r") as file:
            known: list[str] = []
            file.visititems(lambda key, item: known.append(key) if isinstance(item, h5py.Dataset) else None)
            return _columns(name, settings, known, "dataset", lambda wanted: _dataset(file[wanted], name, wanted))
    except (OSError, KeyError, RuntimeError, ValueError, TypeError) as error:
        raise damaged(name, f"no whole HDF5 file ({str(error)[:120]})", expected) from None


def _dataset(dataset: Any, name: str, wanted: str) -> tuple[np.ndarray, str | None]:
    if dataset.external or dataset.is_virtual:
        raise damaged(name, f"'{wanted}', whose numbers lie in another file", "a file that holds its own numbers")
    if dataset.dtype.kind not in "iuf":
        raise damaged(name, f"'{wanted}' of the type {dataset.dtype}", "a column of numbers")
    samples = int(np.prod(dataset.shape or (0,), dtype=object))
    chunk = int(np.prod(dataset.chunks or (0,), dtype=object))
    declared = max(samples, chunk) * max(dataset.dtype.itemsize, 8)
    if declared > LARGEST:
        raise too_large(name, f"a dataset '{wanted}'", declared)
    unit = dataset.attrs.get("units", dataset.attrs.get("unit"))
    if isinstance(unit, bytes):
        unit = unit.decode("utf-8", errors="replace")
    return np.asarray(dataset[()]), unit if isinstance(unit, str) else None


# --- both -------------------------------------------------------------------------------------------------------


def _columns(
    name: str,
    settings: TraceSettings,
    known: list[str],
    what: str,
    load: Callable[[str], tuple[np.ndarray, str | None]],
) -> Columns:
    found: dict[str, Array] = {}
    for key in ("voltage", "time"):
        wanted = settings.columns.get(key, "").strip("/")
        if not wanted:
            continue
        if wanted not in known:
            raise no_column(name, wanted, known, what)
        values, unit = load(wanted)
        if values.dtype.kind not in "iuf":
            raise damaged(name, f"'{wanted}' of the type {values.dtype}", "a column of numbers")
        column = values.reshape(-1) if values.size == max(values.shape, default=0) else None
        if column is None:
            shape = " × ".join(map(str, values.shape)) or "a single number"
            raise damaged(name, f"'{wanted}' of the shape {shape}", "one column of numbers")
        size = column_unit(name, key, wanted, settings.units.get(key) or unit)
        found[key] = column.astype(np.float64) * size
    return Columns(found["voltage"], found.get("time"))

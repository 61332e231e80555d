"""Trace files of every format are read into SI, and each damaged one is refused by name."""

import io
import struct
import wave
import zipfile

import h5py
import numpy as np
import pytest
from scipy.io import wavfile

from reconcile.campaign.refusal import Refusal
from reconcile.read.traces import TraceSettings, read_trace

NAME = "traces/s012.csv"
N = 500
TIME = -0.1e-6 + 2e-9 * np.arange(N)  # s
VOLTAGE = 0.05 * np.sin(np.arange(N) / 20.0) * np.exp(-np.arange(N) / 200.0)  # V
NAMED = {"time": "t (us)", "voltage": "probe (mV)"}


def rows(delimiter=",", decimal=".", time=TIME, voltage=VOLTAGE, digits=6):
    lines = (f"{t * 1e6:.{digits}f}{delimiter}{v * 1e3:.{digits}f}" for t, v in zip(time, voltage, strict=True))
    return [line.replace(".", decimal) for line in lines]


def text_file(tmp_path, lines, encoding="utf-8", end="\n"):
    path = tmp_path / "s012.csv"
    path.write_bytes((end.join(lines) + end).encode(encoding))
    return path


def read(path, **settings):
    return read_trace(path, NAME, TraceSettings(**{"columns": NAMED, **settings}))


def refused(path, **settings) -> Refusal:
    with pytest.raises(Refusal) as caught:
        read(path, **settings)
    assert str(caught.value.place).startswith(NAME)
    assert caught.value.expected
    assert caught.value.remedy
    return caught.value


def same(trace):
    np.testing.assert_allclose(trace.time, TIME, rtol=0, atol=1e-13)
    np.testing.assert_allclose(trace.voltage, VOLTAGE, rtol=0, atol=1e-9)
    assert trace.time.dtype == trace.voltage.dtype == np.float64


# --- what is read -----------------------------------------------------------------------------------------------


def test_units_come_from_the_headers(tmp_path):
    same(read(text_file(tmp_path, ["t (us),probe (mV)", *rows()])))


def test_headers_stand_below_the_recorder_s_settings_and_above_a_row_of_units(tmp_path):
    block = ["Recorder,model 7", "Record Length,500,points", "", '"Note","two, parts"', "t,probe", "(us),(mV)"]
    same(read(text_file(tmp_path, [*block, *rows()]), columns={"time": "t", "voltage": "Probe"}))


def test_semicolons_and_decimal_commas_are_found(tmp_path):
    same(read(text_file(tmp_path, ["t (µs);probe (mV)", *rows(";", ",")], "cp1252", "\r\n")))


def test_tabs_a_stated_delimiter_and_utf_16_are_read(tmp_path):
    same(read(text_file(tmp_path, ["t (us)\tprobe (mV)", *rows("\t")], "utf-16")))
    same(read(text_file(tmp_path, ["t (us)|probe (mV)", *rows("|")]), delimiter="|"))
    same(read(text_file(tmp_path, ["sep=;", "t (us);probe (mV)", *rows(";")])))


def test_other_columns_may_hold_anything(tmp_path):
    lines = [f"x{i},{row},?" for i, row in enumerate(rows())]
    same(read(text_file(tmp_path, ["id,t (us),probe (mV),note", *lines])))


def test_without_a_time_column_the_grid_is_the_manifest_s(tmp_path):
    lines = ["U (mV)", *(f"{v * 1e3:.6f}" for v in VOLTAGE)]
    trace = read(text_file(tmp_path, lines), columns={"voltage": "U (mV)"}, sample_interval=2e-9, start=-0.1e-6)
    same(trace)


def test_times_of_few_digits_are_put_on_their_even_grid(tmp_path):
    time = TIME + 0.35e-9  # printed to 1 ns: off the grid by up to half of that
    trace = read(text_file(tmp_path, ["t (us),probe (mV)", *rows(time=time, digits=3)]))
    np.testing.assert_allclose(np.diff(trace.time), 2e-9, rtol=1e-4)
    assert abs(trace.time[0] - time[0]) < 1e-9


@pytest.mark.parametrize(("width", "quantum"), [(1, 2**-7), (2, 2**-15), (3, 2**-23), (4, 2**-31)])
def test_wave_files_of_every_width_are_shares_of_full_scale(tmp_path, width, quantum):
    path = tmp_path / "a.wav"
    counts = np.round(VOLTAGE / 0.1 / quantum).astype(np.int64)
    counts[0] = -(2 ** (8 * width - 1))
    raw = b"".join(int(c + 128 if width == 1 else c).to_bytes(width, "little", signed=width > 1) for c in counts)
    with wave.open(str(path), "wb") as file:  # the standard library writes, scipy reads
        file.setnchannels(1)
        file.setsampwidth(width)
        file.setframerate(500_000_000)
        file.writeframes(raw)
    trace = read(path, columns={}, full_scale=0.1, start=-0.1e-6)
    np.testing.assert_allclose(trace.voltage, counts * quantum * 0.1, rtol=0, atol=1e-15)
    assert trace.voltage[0] == pytest.approx(-0.1)
    np.testing.assert_allclose(trace.time, TIME, rtol=0, atol=1e-15)
    assert trace.full_scale == 0.1


def test_a_channel_of_a_wave_file_is_named_by_its_number(tmp_path):
    path = tmp_path / "a.wav"
    wavfile.write(path, 192_000, np.stack((np.zeros(N), VOLTAGE), axis=1).astype(np.float32))
    trace = read(path, columns={"voltage": "2"}, full_scale=1.0, sample_interval=2e-9, start=-0.1e-6)
    np.testing.assert_allclose(trace.voltage, VOLTAGE, rtol=1e-6, atol=1e-9)
    assert any("192000 samples a second" in note.note for note in trace.notes)
    assert "2 channels" in refused(path, columns={}, full_scale=1.0).found


def test_arrays_and_datasets_are_read_by_name(tmp_path):
    np.savez_compressed(tmp_path / "a.npz", **{"t (us)": TIME * 1e6, "u": VOLTAGE[:, None] * 1e3})
    same(read(tmp_path / "a.npz", columns={"time": "t (us)", "voltage": "u"}, units={"voltage": "mV"}))
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["run/time"] = TIME
        file["run/time"].attrs["units"] = "s"
        file.create_dataset("run/probe", data=np.round(VOLTAGE * 1e6).astype(np.int32), compression="gzip")
    columns = {"time": "run/time", "voltage": "/run/probe"}
    trace = read(tmp_path / "a.h5", columns=columns, units={"voltage": "uV"})
    np.testing.assert_allclose(trace.voltage, VOLTAGE, rtol=0, atol=0.51e-6)
    np.testing.assert_allclose(trace.time, TIME, rtol=0, atol=1e-15)


# --- what is refused --------------------------------------------------------------------------------------------


def test_a_file_that_is_missing_or_a_folder_is_refused(tmp_path):
    assert "cannot be opened" in refused(tmp_path / "none.csv").found
    (tmp_path / "b.npz").mkdir()
    assert "cannot be opened" in refused(tmp_path / "b.npz").found


@pytest.mark.parametrize("ending", [".csv", ".wav", ".npz", ".h5"])
def test_an_empty_file_is_refused(tmp_path, ending):
    path = tmp_path / f"a{ending}"
    path.write_bytes(b"")
    assert refused(path, full_scale=1.0).found == "an empty file"


@pytest.mark.parametrize("ending", [".csv", ".wav", ".npz", ".h5"])
def test_a_file_of_another_type_is_refused(tmp_path, ending):
    path = tmp_path / f"a{ending}"
    path.write_bytes(b"\x89PNG\r\n\x1a\n\0\0\0\rIHDR" + bytes(200))
    assert "no " in refused(path, full_scale=1.0).found


def test_an_unknown_ending_is_refused(tmp_path):
    assert "'.trc'" in refused(tmp_path / "a.trc").found


TEXTS = {
    "a number of words": (["t (us),probe (mV)", *rows()[:90], "0.9,overload", *rows()[90:]], "'overload'", "line 92"),
    "a gap of voltages": (["t (us),probe (mV)", *rows()[:90], *(r.split(",")[0] + "," for r in rows()[90:120]), *rows()[120:]],
                          "30 of 500 samples without a voltage, the first at sample 91", "line 92"),
    "an overflowed voltage": (["t (us),probe (mV)", *rows()[:90], "0.08,inf", *rows()[91:]], "1 of 500 samples", "line 92"),
    "a last row cut short": (["t (us),probe (mV)", *rows()[:-1], rows()[-1].split(",")[0]], "the file breaks off", "line 501"),
    "dropped samples": (["t (us),probe (mV)", *rows()[:200], *rows()[207:]], "7 dropped samples, the first after sample 200", "line 202"),
    "times that go back": (["t (us),probe (mV)", *rows()[:200], *rows()[150:]], "times that go back at sample 201", "line 202"),
    "times that repeat": (["t (us),probe (mV)", *rows()[:200], *rows()[199:]], "times that repeat at sample 201", "line 202"),
    "two sampling rates": (["t (us),probe (mV)", *rows()[:250:1], *rows()[250::2]], "not evenly spaced", ""),
    "too few samples": (["t (us),probe (mV)", *rows()[:20]], "20 samples", ""),
    "no sample at all": (["t (us),probe (mV)"], "no sample below them", ""),
    "another header": (["t (us),porbe (mV)", *rows()], "no header 'probe (mV)'", ""),
    "no unit": (["t (us),probe", *rows()], "no header 'probe (mV)'", ""),
    "one header twice": (["t (us),probe (mV),probe (mV)", *(f"{row},1" for row in rows())], "2 columns with the header", "line 1"),
}  # fmt: skip


@pytest.mark.parametrize(("lines", "found", "where"), TEXTS.values(), ids=TEXTS.keys())
def test_a_damaged_text_file_is_refused_by_line(tmp_path, lines, found, where):
    refusal = refused(text_file(tmp_path, lines))
    assert found in refusal.found
    assert where in str(refusal.place)


def test_the_nearest_known_header_is_named(tmp_path):
    assert "'porbe (mV)'" in refused(text_file(tmp_path, ["t (us),porbe (mV)", *rows()])).remedy


def test_missing_settings_are_asked_for(tmp_path):
    path = text_file(tmp_path, ["t,U", *rows()])
    assert "units = { voltage" in refused(path, columns={"time": "t", "voltage": "U"}, units={"time": "us"}).remedy
    no_time = refused(path, columns={"voltage": "U"}, units={"voltage": "mV"})
    assert "sample_interval" in no_time.remedy
    assert "columns" in refused(path, columns={}).remedy
    assert (
        "unit of time"
        in refused(path, columns={"time": "t", "voltage": "U"}, units={"time": "V", "voltage": "V"}).expected
    )


def test_an_undecided_decimal_sign_is_asked_for(tmp_path):
    lines = ["t (us);probe (mV)", *(f"{i};{1 + i % 3},234" for i in range(N))]
    assert "decimal" in refused(text_file(tmp_path, lines)).remedy
    trace = read(text_file(tmp_path, lines), decimal=",")
    assert trace.voltage[1] == pytest.approx(2.234e-3)


def wav_bytes(data_size=None, body=b"\0" * 1000, code=1):
    size = len(body) if data_size is None else data_size
    form = struct.pack("<4sIHHIIHH", b"fmt ", 16, code, 1, 1_000_000, 2_000_000, 2, 16)
    return b"RIFF" + struct.pack("<I", 36 + len(body)) + b"WAVE" + form + b"data" + struct.pack("<I", size) + body


WAVES = {
    "cut short": (wav_bytes(4000), "3000 bytes of its samples are missing"),
    "an oversized header": (wav_bytes(2**31), "samples of 2 GiB"),
    "no samples": (wav_bytes(body=b""), "no samples"),
    "only a head": (wav_bytes()[:36], "a wave file without samples"),
    "compressed samples": (wav_bytes(code=85), "cannot be read"),
}


@pytest.mark.parametrize(("raw", "found"), WAVES.values(), ids=WAVES.keys())
def test_a_damaged_wave_file_is_refused(tmp_path, raw, found):
    path = tmp_path / "a.wav"
    path.write_bytes(raw)
    assert found in refused(path, columns={}, full_scale=1.0).found


def test_a_wave_file_without_its_full_scale_is_refused(tmp_path):
    path = tmp_path / "a.wav"
    path.write_bytes(wav_bytes())
    assert "full_scale" in refused(path, columns={}).remedy


UV = {"time": "t", "voltage": "u"}
SI = {"time": "s", "voltage": "V"}


def npz_bytes(**arrays):
    buffer = io.BytesIO()
    np.savez_compressed(buffer, **arrays)
    return buffer.getvalue()


def huge_npy() -> bytes:
    """An archive whose array declares 8 TB and holds nothing."""
    header = io.BytesIO()
    np.lib.format.write_array_header_1_0(header, {"descr": "<f8", "fortran_order": False, "shape": (10**12,)})
    buffer = io.BytesIO()
    with zipfile.ZipFile(buffer, "w") as archive:
        archive.writestr("u.npy", header.getvalue())
    return buffer.getvalue()


ARCHIVES = {
    "pickled objects": (npz_bytes(u=np.array([{"a": 1}] * 100, dtype=object)), "pickled Python objects"),
    "another name": (npz_bytes(U_probe=VOLTAGE), "no array 'u'"),
    "a picture": (npz_bytes(u=np.zeros((50, 60))), "of the shape 50 × 60"),
    "words": (npz_bytes(u=np.array(["a"] * 100)), "of the type <U1"),
    "complex numbers": (npz_bytes(u=VOLTAGE + 1j), "of the type complex128"),
    "as many times": (npz_bytes(u=VOLTAGE, t=TIME[:-5]), "495 times and 500 voltages"),
    "an oversized header": (huge_npy(), "GiB"),
    "cut short": (npz_bytes(u=VOLTAGE, t=TIME)[:-200], "no whole .npz file"),
    "a flipped byte": (bytes(b ^ (0xFF if i == 900 else 0) for i, b in enumerate(npz_bytes(u=VOLTAGE))), "read"),
    "a block of NaN": (npz_bytes(u=np.where(np.arange(N) // 50 == 3, np.nan, VOLTAGE)), "50 of 500 samples without a voltage"),
}  # fmt: skip


@pytest.mark.parametrize(("raw", "found"), ARCHIVES.values(), ids=ARCHIVES.keys())
def test_a_damaged_archive_is_refused(tmp_path, raw, found):
    path = tmp_path / "a.npz"
    path.write_bytes(raw)
    columns = UV if "times" in found else {"voltage": "u"}
    refusal = refused(path, columns=columns, units=SI, sample_interval=None if "times" in found else 2e-9)
    assert found in refusal.found or "CRC" in refusal.found


def test_a_damaged_hdf5_file_is_refused(tmp_path):
    path = tmp_path / "a.h5"
    with h5py.File(path, "w") as file:
        file["probe"] = VOLTAGE
        file["words"] = ["a", "b"]
        file.create_dataset("huge", shape=(2**40,), dtype="f8", chunks=(1024,))
        file.create_dataset("elsewhere", shape=(N,), dtype="f8", external=[("elsewhere.raw", 0, 8 * N)])
        file["away"] = h5py.ExternalLink("other.h5", "/u")
    given = {"units": SI, "sample_interval": 2e-9}
    assert read(path, columns={"voltage": "probe"}, **given).voltage.size == N
    assert "'probe'" in refused(path, columns={"voltage": "prob"}, **given).remedy
    assert "of the type" in refused(path, columns={"voltage": "words"}, **given).found
    assert "8.19e+03 GiB" in refused(path, columns={"voltage": "huge"}, **given).found
    assert "another file" in refused(path, columns={"voltage": "elsewhere"}, **given).found
    assert "no dataset 'away'" in refused(path, columns={"voltage": "away"}, **given).found
    short = tmp_path / "b.h5"
    short.write_bytes(path.read_bytes()[:1500])
    assert "no whole HDF5 file" in refused(short, columns={"voltage": "probe"}, **given).found

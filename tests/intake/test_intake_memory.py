"""Large recordings pass through memory block by block, and what is put aside on the way changes nothing."""

from __future__ import annotations

import os
import struct
import subprocess
import sys
from pathlib import Path

import h5py
import nptdms
import numpy as np
import pytest
from test_intake_layouts import WRITERS, assert_same

from meseta import intake
from meseta.errors import InputError
from meseta.intake import open_recording, room, traces_from
from meseta.intake.readers import (
    file_array,
    hdf5_samples,
    numpy_files,
    shared_blocks,
    spool,
    tdms_places,
    text,
    text_stream,
)
from meseta.intake.readers.shared_blocks import SharedBlocks
from meseta.recipe import Recipe
from meseta.work import Work

TEXTS = [write for write in WRITERS if not write.__name__.startswith(("hdf5", "numpy", "mat", "tdms", "siemens"))]
PERIOD = 100_000


@pytest.mark.parametrize("write", TEXTS, ids=lambda write: write.__name__)
def test_a_text_that_is_put_aside_reads_like_one_in_memory(write, tmp_path, monkeypatch):
    path = write(tmp_path)
    whole = intake.read(path)
    monkeypatch.setattr(text, "LARGE_BYTE", 100)
    for block_byte in (301, 4096):  # cuts fall into rows, headings and separators
        monkeypatch.setattr(text_stream, "BLOCK_BYTE", block_byte)
        aside = intake.read(path)
        assert_same(aside, 0.0)
        np.testing.assert_array_equal(aside.conductance, whole.conductance)
        assert aside.notes == whole.notes
        assert aside.key == whole.key


def test_a_bad_cell_deep_in_a_large_text_is_named_with_its_line(tmp_path, monkeypatch):
    monkeypatch.setattr(text, "LARGE_BYTE", 100)
    monkeypatch.setattr(text_stream, "BLOCK_BYTE", 500)
    rows = [f"{0.01 * n:.2f},{2.0 / (n + 1):.6g}" for n in range(400)]
    rows[299] = "2.99,oops"
    (tmp_path / "a.csv").write_text("displacement_nm,conductance_G0\n" + "\n".join(rows) + "\n")
    with pytest.raises(intake.opening.InputError, match="'oops' is not a number") as raised:
        intake.read(tmp_path / "a.csv")
    assert raised.value.where.endswith("line 301")


@pytest.mark.parametrize("order", ["C", "F"])
def test_large_arrays_stay_in_their_file(order, tmp_path, monkeypatch):
    rows = np.random.default_rng(1).normal(size=(40, 300)).astype(">f4")
    np.save(tmp_path / "conductance_G0.npy", np.asarray(rows, order=order))
    np.savez(tmp_path / "stored.npz", conductance_G0=np.asarray(rows, order=order))
    monkeypatch.setattr(numpy_files, "LARGE_BYTE", 100)
    monkeypatch.setattr(file_array, "BLOCK_BYTE", 5000)
    monkeypatch.setattr(file_array, "LONG_ROW_BYTE", 900)
    monkeypatch.setattr(hdf5_samples, "CACHED_BYTE", 100)
    monkeypatch.setattr(spool, "TURN_BYTE", 7000)
    for name in ("conductance_G0.npy", "stored.npz"):
        for layout, expected in (("rows", rows), ("columns", rows.T)):
            traces = intake.read(tmp_path / name, Recipe.build({"intake": {"layout": layout}}))
            assert traces.traces == len(expected)
            np.testing.assert_array_equal(traces.conductance, expected.ravel().astype("f4"))


def test_tdms_chunks_of_any_size_and_order_are_found_in_their_places(tmp_path, monkeypatch):
    """Numbers read from their places agree with the library's own, also where the file was cut off in a chunk."""
    rng, path = np.random.default_rng(2), tmp_path / "a.tdms"
    with nptdms.TdmsWriter(path) as writer:
        for part in range(7):
            channels = [nptdms.ChannelObject("g", "conductance", rng.normal(size=100), {"unit_string": "G0"})]
            channels.append(nptdms.ChannelObject("g", "force", rng.normal(size=100 + part).astype("f4")))
            writer.write_segment(channels[::-1] if part > 4 else channels)
    for cut in (0, 500):
        shorter = tmp_path / f"cut{cut}.tdms"
        shorter.write_bytes(path.read_bytes()[: -cut or None])
        file = nptdms.TdmsFile.open(str(shorter))
        for channel in file["g"].channels():
            whole = channel[:]
            for start, stop in ((0, len(whole)), (95, 210), (len(whole) - 3, len(whole))):
                places = tdms_places.places_of(file, channel, SharedBlocks(shorter))
                np.testing.assert_array_equal(places.read(start, stop), whole[start:stop])
        file.close()


def test_channels_that_take_turns_share_the_blocks_that_are_read(tmp_path, monkeypatch):
    """Any part of any channel from several threads is that of NumPy's own; side by side the file is read once."""
    rows = np.random.default_rng(4).integers(-30000, 30000, (50_000, 3)).astype(">i2")
    path = tmp_path / "a.dat"
    path.write_bytes(b"head!" + rows.tobytes())
    monkeypatch.setattr(shared_blocks, "BLOCK_BYTE", 10_007)
    monkeypatch.setattr(shared_blocks, "SMALL_BYTE", 100)
    taken = []
    monkeypatch.setattr(shared_blocks, "InFile", lambda path: _Counted(file_array.InFile(path), taken))
    chosen = {"reader": "binary", "binary_type": "int16", "binary_order": "big", "binary_header_byte": 5}
    chosen |= {"binary_channels": ["a", "b", "c"]}
    with open_recording(path, Recipe.build({"intake": chosen})) as recording:
        for start in range(0, 50_000, 10_000):
            for column, channel in enumerate(recording.channels):
                np.testing.assert_array_equal(
                    channel.samples.read(start, start + 10_000), rows[start : start + 10_000, column]
                )
        assert sum(taken) == path.stat().st_size
        spans = [(low, low + size) for low in range(0, 49_000, 977) for size in (0, 1, 15, 900)]

        def same(span: tuple[int, int]) -> bool:
            low, high = span
            read = [channel.samples.read(low, high) for channel in recording.channels]
            return np.array_equal(np.stack(read, axis=1), rows[low:high])

        assert all(Work(threads=4).each(same, spans, "comparing"))
    with open_recording(path, Recipe.build({"intake": chosen})) as recording:
        path.write_bytes(path.read_bytes()[:-60_000])
        with pytest.raises(InputError, match="became shorter"):
            recording.channels[0].samples.read(45_000, 50_000)


class _Counted:
    """Numbers in a file that note how many bytes are taken."""

    def __init__(self, numbers, taken):
        self.numbers, self.taken = numbers, taken

    def read(self, place, count, dtype):
        self.taken.append(count * dtype.itemsize)
        return self.numbers.read(place, count, dtype)


@pytest.mark.parametrize("chunk", [4, 500])
@pytest.mark.parametrize(("order", "interleaved"), [("<", False), ("<", True), (">", True)])
@pytest.mark.parametrize("cut", [0, 8, 700])
def test_tdms_numbers_that_take_turns_or_are_scaled_are_found(tmp_path, monkeypatch, chunk, order, interleaved, cut):
    """Against the library's own: two channels of 16 and 64 bits, chunk by chunk, the first one scaled."""
    path, rng = tmp_path / "a.tdms", np.random.default_rng(3)
    path.write_bytes(_tdms(rng, chunk, order, interleaved)[: -cut or None])
    monkeypatch.setattr(tdms_places, "BLOCK_BYTE", 600)
    monkeypatch.setattr(tdms_places, "LONG_CHUNK_BYTE", 1000)
    file = nptdms.TdmsFile.open(str(path))
    for channel in file["g"].channels():
        whole, places = channel[:], tdms_places.places_of(file, channel, SharedBlocks(path))
        assert len(whole) >= 1500
        for start, stop in ((0, len(whole)), (3, 5), (95, 1210), (len(whole) - 3, len(whole))):
            np.testing.assert_array_equal(places.read(start, stop), whole[start:stop])
    file.close()


def _tdms(rng, chunk: int, order: str, interleaved: bool) -> bytes:
    """Return one segment of 2000 numbers a channel, put together by the format's public description."""

    def text(word: str) -> bytes:
        return struct.pack(order + "I", len(word)) + word.encode()

    scale = "NI_Scale[0]_"
    scaling = [
        ("NI_Number_Of_Scales", 3, "I", 1),
        (f"{scale}Linear_Slope", 10, "d", 0.5),
        (f"{scale}Linear_Y_Intercept", 10, "d", -1.0),
        (f"{scale}Linear_Input_Source", 3, "I", 0xFFFFFFFF),
        (f"{scale}Scale_Type", 0x20, "", "Linear"),
    ]
    about = struct.pack(order + "I", 2)
    for name, kind, properties in (("a", 2, scaling), ("b", 10, [])):
        about += text(f"/'g'/'{name}'") + struct.pack(order + "IIIQ", 20, kind, 1, chunk)
        about += struct.pack(order + "I", len(properties))
        for key, code, form, value in properties:
            packed = text(value) if code == 0x20 else struct.pack(order + form, value)
            about += text(key) + struct.pack(order + "I", {3: 7}.get(code, code)) + packed
    kinds = np.dtype([("a", order + "i2"), ("b", order + "f8")])
    rows = np.empty(2000, kinds)
    rows["a"], rows["b"] = rng.integers(-9999, 9999, 2000), rng.normal(size=2000)
    parts = np.split(rows, 2000 // chunk)
    body = rows.tobytes() if interleaved else b"".join(p["a"].tobytes() + p["b"].tobytes() for p in parts)
    contents = 2 | 4 | 8 | (32 if interleaved else 0) | (64 if order == ">" else 0)
    lead = b"TDSm" + struct.pack("<I", contents) + struct.pack(order + "IQQ", 4713, len(about) + len(body), len(about))
    return lead + about + body


def _record(path: Path, samples: int) -> None:
    """Write a continuous recording of triangular piezo volts and amplifier volts, as counts."""
    with h5py.File(path, "w") as file:
        size = {"shape": (samples,), "dtype": "<i2", "chunks": (1 << 17,), "compression": "gzip", "shuffle": True}
        piezo, amplifier = file.create_dataset("piezo", **size), file.create_dataset("amplifier", **size)
        piezo.attrs.update(unit="V", scale=1e-3)
        amplifier.attrs.update(unit="V", scale=1e-4)
        file.attrs.update(bias_volt=0.1, gain_volt_per_ampere=1e5, nm_per_volt=0.5, sampling_hertz=2e4)
        for start in range(0, samples, 1 << 20):
            stop = min(start + (1 << 20), samples)
            phase = np.arange(start, stop) % PERIOD / PERIOD
            up = 1 - np.abs(2 * phase - 1)
            piezo[start:stop] = 8000 * up
            amplifier[start:stop] = 20000 * 10.0 ** np.maximum(-0.4 - 6 * up, -3.3)


def test_streamed_traces_are_those_in_memory(tmp_path):
    _record(tmp_path / "a.h5", 1_200_000)
    recipe = Recipe.build({"calibration": {"full_scale_volt": 0.79, "series_resistance_ohm": 100.0}})
    whole = intake.read(tmp_path / "a.h5", recipe)
    with open_recording(tmp_path / "a.h5", recipe) as recording:
        streamed = traces_from([recording], recipe, Work(block_samples=20_000), stream=True)
        assert streamed.key == whole.key
        np.testing.assert_array_equal(streamed.offsets, whole.offsets)
        np.testing.assert_array_equal(streamed.conductance, whole.conductance)
        np.testing.assert_array_equal(streamed.drive_values(0, whole.traces), whole.drive_values(0, whole.traces))
        assert whole.quality is not None
        assert streamed.quality is not None
        np.testing.assert_array_equal(streamed.quality.read(0, whole.samples), whole.quality.read(0, whole.samples))
        assert streamed.notes == whole.notes


_GATHER = """
import resource, sys
from meseta import intake, study
from meseta.work import Work
import hdf5plugin, numba, pyarrow.csv, scipy.stats
small, large, into = sys.argv[1:]
study.gather([small], into + ".small")
intake.describe([small])
used = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
study.gather([large], into)
intake.describe([large])
print(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - used)
"""


@pytest.mark.skipif(not Path("/proc").exists(), reason="peak memory is counted in kB on Linux only")
def test_gathering_and_checking_a_long_record_takes_no_memory_for_it(tmp_path):
    """12 million samples are 48 MB a channel as float32 and 96 MB as float64; none of it is ever held whole."""
    _record(tmp_path / "small.h5", 4_100_000)
    _record(tmp_path / "large.h5", 12_000_000)
    arguments = [sys.executable, "-c", _GATHER, *(str(tmp_path / name) for name in ("small.h5", "large.h5", "s.h5"))]
    done = subprocess.run(arguments, capture_output=True, text=True, check=False, env={**os.environ})
    assert done.returncode == 0, done.stderr
    assert int(done.stdout.split()[-1]) < 40_000


def _write_group(path: Path, samples: int) -> Path:
    with h5py.File(path, "w") as file:
        made = file.create_dataset("trace_0/conductance", data=np.geomspace(5.0, 1e-5, samples).astype(np.float32))
        made.attrs["unit"] = "G0"
        file.create_dataset("trace_0/displacement", data=np.linspace(0.0, 2.0, samples)).attrs["unit"] = "nm"
    return path


def test_what_is_larger_than_memory_is_refused_with_the_way_round_it(tmp_path, monkeypatch):
    path = _write_group(tmp_path / "one.h5", 1000)
    monkeypatch.setattr(room, "machine_byte", lambda: 4000)
    with pytest.raises(InputError, match="GB of memory") as refused:
        intake.read(path)
    assert "gather" in refused.value.remedy
    with open_recording(path, Recipe()) as recording:
        assert traces_from([recording], stream=True).samples == 1000
    monkeypatch.setattr(room, "machine_byte", lambda: None)
    assert intake.read(path).samples == 1000


def test_files_that_are_together_larger_than_memory_are_refused(tmp_path, monkeypatch):
    paths = [_write_group(tmp_path / f"{name}.h5", 1000) for name in "abc"]
    monkeypatch.setattr(room, "machine_byte", lambda: 9000 * 2.5 / room.MOST_SHARE)
    with pytest.raises(InputError, match="of 3 files"):
        intake.read(paths)
    assert intake.read(paths[:2]).samples == 2000

"""Large files of every format stay on disk while they are read: the same numbers come out, and memory stays small.

Recordings are written by scipy, numpy and zipfile; Igor waves byte by byte after the format's technical note TN003, and
read by igor2 as well.
"""

from __future__ import annotations

import bz2
import gzip
import lzma
import os
import struct
import subprocess
import sys
import zipfile
import zlib
from pathlib import Path

import numpy as np
import pytest
import scipy.io
from test_intake_igor import old_wave, wave

from meseta import intake
from meseta.errors import InputError
from meseta.intake.readers import file_array, hdf5_samples, igor, mat, numpy_files, spool
from meseta.recipe import Recipe

ROWS = np.random.default_rng(1).normal(size=(40, 300))


@pytest.fixture
def everything_is_large(monkeypatch):
    """Let small files be treated like large ones: numbers stay in the file, blocks are short."""
    for module in (mat, igor, numpy_files):
        monkeypatch.setattr(module, "LARGE_BYTE", 100)
    monkeypatch.setattr(mat, "SMALL_BYTE", 8)
    monkeypatch.setattr(numpy_files, "BLOCK_BYTE", 777)
    monkeypatch.setattr(file_array, "BLOCK_BYTE", 5000)
    monkeypatch.setattr(file_array, "LONG_ROW_BYTE", 900)
    monkeypatch.setattr(hdf5_samples, "CACHED_BYTE", 100)
    monkeypatch.setattr(spool, "TURN_BYTE", 7000)


def mat_4(folder: Path) -> Path:
    scipy.io.savemat(folder / "a.mat", {"bias_V": 0.1, "conductance_G0": ROWS}, format="4")
    return folder / "a.mat"


def mat_5(folder: Path) -> Path:
    scipy.io.savemat(folder / "a.mat", {"bias_V": 0.1, "conductance_G0": ROWS})
    return folder / "a.mat"


def mat_5_packed(folder: Path) -> Path:
    scipy.io.savemat(folder / "a.mat", {"bias_V": 0.1, "conductance_G0": ROWS}, do_compression=True)
    return folder / "a.mat"


def mat_5_structure(folder: Path) -> Path:
    content = {"run": {"bias_V": 0.1, "data": {"conductance_G0": ROWS}}, "note": "a text"}
    scipy.io.savemat(folder / "a.mat", content, do_compression=True)
    return folder / "a.mat"


def npz_packed(folder: Path) -> Path:
    np.savez_compressed(folder / "a.npz", bias_V=0.1, conductance_G0=np.asfortranarray(ROWS))
    return folder / "a.npz"


def npz_stored(folder: Path) -> Path:
    np.savez(folder / "a.npz", bias_V=0.1, conductance_G0=ROWS.astype(">f8"))
    return folder / "a.npz"


def npy_in_gzip(folder: Path) -> Path:
    np.save(folder / "conductance_G0.npy", ROWS)
    packed = folder / "conductance_G0.npy.gz"
    packed.write_bytes(gzip.compress((folder / "conductance_G0.npy").read_bytes()))
    return packed


def npy_in_xz(folder: Path) -> Path:
    np.save(folder / "conductance_G0.npy", np.asfortranarray(ROWS))
    packed = folder / "conductance_G0.npy.xz"
    packed.write_bytes(lzma.compress((folder / "conductance_G0.npy").read_bytes()))
    return packed


def npy_in_bzip2(folder: Path) -> Path:
    np.save(folder / "conductance_G0.npy", ROWS.astype("f4"))
    packed = folder / "conductance_G0.npy.bz2"
    packed.write_bytes(bz2.compress((folder / "conductance_G0.npy").read_bytes()))
    return packed


def igor_5(folder: Path) -> Path:
    (folder / "a.ibw").write_bytes(wave(ROWS, unit="G0", name="conductance", note="bias_V = 0.1"))
    return folder / "a.ibw"


WRITERS = [
    mat_4, mat_5, mat_5_packed, mat_5_structure, npz_packed, npz_stored, npy_in_gzip, npy_in_xz, npy_in_bzip2, igor_5,
]  # fmt: skip


@pytest.mark.parametrize("write", WRITERS, ids=lambda write: write.__name__)
@pytest.mark.parametrize("layout", ["rows", "columns"])
def test_arrays_that_stay_on_disk_give_the_same_traces(write, layout, tmp_path, request):
    path = write(tmp_path)
    recipe = Recipe.build({"intake": {"layout": layout}})
    small = intake.read(path, recipe)
    request.getfixturevalue("everything_is_large")
    large = intake.read(path, recipe)
    expected = (ROWS if layout == "rows" else ROWS.T).ravel().astype(np.float32)
    for traces in (small, large):
        np.testing.assert_array_equal(traces.conductance, expected)
        assert traces.traces == len(ROWS if layout == "rows" else ROWS.T)
    assert large.key == small.key
    if "npy" not in write.__name__:
        np.testing.assert_allclose(large.table["bias_volt"], 0.1)


def test_any_part_of_an_array_on_disk_is_that_of_the_array(tmp_path, monkeypatch):
    """Against numpy's own indexing, for every order, number of axes and kind of key."""
    rng = np.random.default_rng(5)
    cube = rng.integers(-999, 999, (6, 7, 9)).astype(">i2")
    for long_row, order in ((1, "C"), (1 << 20, "C"), (1, "F"), (1 << 20, "F")):
        monkeypatch.setattr(file_array, "LONG_ROW_BYTE", long_row)
        monkeypatch.setattr(file_array, "BLOCK_BYTE", 100)
        (tmp_path / "cube").write_bytes(b"head" + cube.tobytes(order))
        numbers = file_array.InFile(tmp_path / "cube")
        kinds = (cube.dtype, np.dtype("f8"))
        array = file_array.FileArray(numbers, tmp_path / "cube", cube.shape, *kinds, 4, order == "F")
        for key in (
            (), 2, slice(1, 4), (slice(None), 3), (slice(None), slice(2, 5), 1), (5, slice(0, 0)), (0, 1, 2),
            (slice(2, 3), slice(None), slice(4, 100)), (slice(9, 99),), (slice(None), slice(None), 8),
        ):  # fmt: skip
            np.testing.assert_array_equal(array[key], cube[key])
            assert array[key].dtype == np.float64
            np.testing.assert_array_equal(array.transposed[()], cube.T)


def test_texts_cells_and_structures_of_a_large_file_are_read_alike(tmp_path, request):
    cells = np.empty(3, object)
    cells[:] = [np.linspace(2, 1, 20 + n) for n in range(3)]
    path = tmp_path / "a.mat"
    scipy.io.savemat(path, {"conductance_G0": cells, "specimen": "ä 7", "meta": {"bias_mV": 90}}, do_compression=True)
    small = intake.read(path)
    request.getfixturevalue("everything_is_large")
    large = intake.read(path)
    assert small.lengths.tolist() == large.lengths.tolist() == [20, 21, 22]
    assert set(small.table["specimen"]) == set(large.table["specimen"]) == {"ä 7"}
    np.testing.assert_allclose(large.table["bias_volt"], 0.09)


def test_mat_files_of_version_4_come_back(tmp_path):
    path = tmp_path / "a.mat"
    drive = np.linspace(0, 1, 50, dtype=np.float32)
    scipy.io.savemat(
        path, {"displacement_nm": drive, "conductance_G0": np.linspace(2, 1, 50), "specimen": "B2"}, format="4"
    )
    traces = intake.read(path)
    assert traces.sources[0].reader == "MAT"
    np.testing.assert_array_equal(traces.conductance, np.linspace(2, 1, 50).astype(np.float32))
    np.testing.assert_allclose(traces.trace_drive(0), drive, rtol=1e-6)
    assert set(traces.table["specimen"]) == {"B2"}


@pytest.mark.parametrize("form", ["4", "5"])
def test_complex_and_sparse_variables_are_refused_by_name(tmp_path, form):
    path = tmp_path / "a.mat"
    odd = {"z": np.array([1 + 1j, 2]), "s": scipy.sparse.csc_array(np.eye(3))}
    scipy.io.savemat(path, {"conductance_G0": np.linspace(2, 1, 50), **odd}, format=form)
    with intake.open_recording(path) as recording:
        said = " ".join(recording.doubts)
    assert "/z" in said
    assert "/s" in said
    assert "complex" in said


# -- waves against another reader -------------------------------------------------------------------------------------


@pytest.mark.parametrize("version", [2, 3, 5])
@pytest.mark.parametrize("order", ["<", ">"])
@pytest.mark.parametrize("kind", ["f4", "f8", "i1", "i2", "i4", "u1", "u2", "u4"])
def test_waves_of_every_version_and_type_are_those_of_another_reader(tmp_path, version, order, kind):
    """igor2 reads the same numbers, name, unit and note."""
    from igor2 import binarywave

    values = np.geomspace(100, 1, 40).round().astype(kind)
    note = "bias_V = 0.1\rspecimen = A3"
    made = (
        wave(values, unit="nA", step=5e-5, axis="s", note=note, order=order, name="current")
        if version == 5
        else old_wave(version, values, order, unit="nA", step=5e-5, axis="s", note=note, name="current")
    )
    path = tmp_path / "a.ibw"
    path.write_bytes(made)
    other = binarywave.load(str(path))["wave"]
    with intake.open_recording(path) as recording:
        channel = recording.channels[0]
        np.testing.assert_array_equal(recording.stored(channel, 0, 40), other["wData"])
        assert channel.dtype == np.dtype(kind)
        assert (channel.name, channel.unit) == ("current", "nA")
        assert other["wave_header"]["bname"] == b"current"
        assert other["note"].decode() == note
        assert recording.metadata["specimen"] == "A3"
    assert set(intake.read(path).table["sample_interval_second"]) == {5e-5}


# -- memory -----------------------------------------------------------------------------------------------------------

_MEASURE = """
import resource, sys
import numpy as np
from meseta import intake
from meseta.intake import traces_from
from meseta.intake.readers import hdf5_samples, igor, mat, numpy_files, spool
import hdf5plugin, numba, scipy.stats, zipfile, lzma, nptdms

for module in (mat, igor, numpy_files):
    module.LARGE_BYTE = 1 << 20
hdf5_samples.CACHED_BYTE, spool.TURN_BYTE = 1 << 20, 8 << 20

def walk(path, samples):
    with intake.open_recording(path) as recording:
        traces = traces_from([recording], stream=True)
        assert traces.samples == samples, traces.samples
        row = traces.channels["conductance"].samples
        total = sum(float(row.read(at, min(at + 500_000, samples)).sum()) for at in range(0, samples, 500_000))
        assert abs(total / samples - 1) < 0.01, total

small, large = (paths.split("|") for paths in sys.argv[1:])
for path in small:
    walk(path, 200_000)
for path in large:
    used = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    walk(path, 8_000_000)
    print(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - used)
"""


def _packed_variables(plain: bytes) -> bytes:
    """Return a MAT 5 file with each variable packed (type 15), quickly."""
    found, at = plain[:128], 128
    while at < len(plain):
        end = at + 8 + int.from_bytes(plain[at + 4 : at + 8], "little")
        packed = zlib.compress(plain[at:end], 1)
        found += struct.pack("<II", 15, len(packed)) + packed
        at = end
    return found


def _written_in_every_form(folder: Path, traces: int) -> list[str]:
    """Write 2000 x ``traces`` numbers around 1, openings that fall from 2 to 0; return the paths."""
    fall = np.linspace(2, 0, 2000)
    rows = np.round(fall + 0.01 * np.random.default_rng(1).normal(size=(traces, 2000)), 2)
    folder.mkdir()
    scipy.io.savemat(folder / "four.mat", {"conductance_G0": rows.T}, format="4")
    scipy.io.savemat(folder / "five.mat", {"conductance_G0": rows.T})
    (folder / "packed.mat").write_bytes(_packed_variables((folder / "five.mat").read_bytes()))
    np.save(folder / "conductance_G0.npy", rows)
    with zipfile.ZipFile(folder / "packed.npz", "w", zipfile.ZIP_DEFLATED, compresslevel=1) as archive:
        archive.write(folder / "conductance_G0.npy", "conductance_G0.npy")
    np.save(folder / "turned_conductance_G0.npy", rows.T)
    with gzip.open(folder / "conductance_G0.npy.gz", "wb", compresslevel=1) as file:
        np.save(file, rows)
    (folder / "wave.ibw").write_bytes(wave(rows.T, unit="G0", name="conductance"))
    return [str(path) for path in sorted(folder.iterdir())]


@pytest.mark.skipif(not Path("/proc").exists(), reason="peak memory is counted in kB on Linux only")
def test_walking_through_a_large_array_takes_no_memory_for_it(tmp_path):
    """8 million samples are 64 MB as they are stored, and none of it is ever held whole, whatever the format."""
    paths = [_written_in_every_form(tmp_path / word, traces) for word, traces in (("small", 100), ("large", 4000))]
    arguments = [sys.executable, "-c", _MEASURE, *("|".join(names) for names in paths)]
    done = subprocess.run(arguments, capture_output=True, text=True, check=False, env={**os.environ})
    assert done.returncode == 0, done.stderr
    grown = {Path(path).name: int(line) for path, line in zip(paths[1], done.stdout.split(), strict=True)}
    assert len(grown) == 8
    assert sum(grown.values()) < 40_000, grown


# -- no room, gone, grown -----------------------------------------------------------------------------------------


@pytest.mark.parametrize("write", [mat_5_packed, npz_packed, npy_in_gzip], ids=lambda write: write.__name__)
@pytest.mark.usefixtures("everything_is_large")
def test_no_room_to_unpack_is_said(write, tmp_path, monkeypatch):
    path = write(tmp_path)

    monkeypatch.setattr(spool.tempfile, "TemporaryFile", lambda **_: _FullFile())
    with pytest.raises(InputError, match="is full") as raised:
        intake.read(path)
    assert "TMPDIR" in raised.value.remedy


class _FullFile:
    def seek(self, _):
        return 0

    def write(self, _):
        raise OSError(28, "No space left on device")

    def close(self):
        """Close nothing."""


def test_numbered_arrays_of_nothing_known_do_not_stand_in_for_what_is_known(tmp_path):
    cells = np.empty(2, object)
    cells[:] = [np.arange(64.0), np.arange(9.0)]
    path = tmp_path / "a.mat"
    scipy.io.savemat(path, {"conductance_G0": ROWS, "remarks": cells})
    traces = intake.read(path, Recipe.build({"intake": {"layout": "rows"}}))
    assert traces.traces == len(ROWS)


def test_tables_of_a_zip_beyond_the_limit_are_put_aside_and_read_the_same(tmp_path, monkeypatch):
    """What is held in memory is the first of them; each trace is the one that was written."""
    rng = np.random.default_rng(8)
    written = [10.0 ** -rng.uniform(0, 5, 300) for _ in range(6)]
    with zipfile.ZipFile(tmp_path / "night.zip", "w") as archive:
        for number, values in enumerate(written):
            rows = "".join(f"{0.01 * place:.2f},{value!r}\n" for place, value in enumerate(values.tolist()))
            archive.writestr(f"trace {number}.csv", f"displacement (nm),conductance (G0)\n{rows}")
    held = traces_of(tmp_path / "night.zip")
    monkeypatch.setattr("meseta.intake.readers.text.LARGE_BYTE", 3 * 300 * 8)
    with intake.open_recording(tmp_path / "night.zip") as recording:
        kept = recording.channel("conductance").samples
        assert sum(isinstance(part, spool.SpooledRow) for part in kept.parts) == 5
    aside = traces_of(tmp_path / "night.zip")
    np.testing.assert_array_equal(aside, held)
    np.testing.assert_allclose(aside, np.concatenate(written), rtol=1e-6)


def traces_of(path):
    traces = intake.read(path)
    assert traces.traces == 6
    return traces.conductance
